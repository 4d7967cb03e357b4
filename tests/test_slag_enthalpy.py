"""Enthalpy of molten slag.

Checks from outside, each named beside the test: heats of formation and of melting of
silicates (NASA/JANAF data, Barin), and measured heats of solution of oxides in a slag, where
the differences are stated. Properties: proportional to mass, exact derivatives, no jumps.
"""

from __future__ import annotations

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from converter_calc.basis import dual as ad
from converter_calc.basis.elements import molar_mass, parse_formula
from converter_calc.basis.errors import DataError
from converter_calc.data.tables import read_csv_rows
from converter_calc.thermo.enthalpy import enthalpy_J_kg, enthalpy_J_mol, formation_enthalpy_J_mol
from converter_calc.thermo.slag import (
    STANDS_FOR,
    SlagEnthalpy,
    partial_enthalpies_kJ_mol,
    slag_enthalpy_J,
)
from converter_calc.thermo.slag_compounds import compound_heat_J

OXIDES = (
    *("CaO", "SiO2", "MgO", "Al2O3", "FeO", "Fe2O3", "MnO", "P2O5", "TiO2", "V2O3", "V2O5"),
    *("Cr2O3", "CaF2", "CaS", "Na2O", "K2O"),
)
#: An ordinary end-of-blow slag, mass % (invented).
ORDINARY = {
    "CaO": 46.0,
    "SiO2": 13.5,
    "MgO": 8.0,
    "Al2O3": 1.5,
    "FeO": 17.0,
    "Fe2O3": 6.0,
    "MnO": 4.5,
    "P2O5": 2.2,
    "TiO2": 0.5,
    "V2O3": 0.3,
    "CaS": 0.2,
    "CaF2": 0.3,
}
masses = st.dictionaries(
    st.sampled_from(OXIDES), st.floats(0.0, 1e4).map(lambda kg: round(kg, 6)), min_size=1
)


# ---- against published heats ---------------------------------------------------------------


@pytest.mark.parametrize(
    ("compound", "published_kJ"),
    [
        # from the oxides at 298 K: Ca2SiO4 -126.6 (Kubaschewski, Alcock, Spencer 1993, from
        # memory), phosphate between -690 and -710 (several, from memory)
        ("Ca2SiO4", (-126.6, 8.0)),
        ("Ca3(PO4)2", (-700.0, 11.0)),
        # Robie & Hemingway (1995) and NASA data, by difference: next test
    ],
)
def test_compound_heat(compound: str, published_kJ: tuple[float, float]) -> None:
    """The table against other published values; the bounds span what is published.

    Ca2SiO4: -118.8 (Turkdogan), the value used, differs by 7.8 from -126.6.
    """
    row = next(row for row in read_csv_rows("slag_compounds.csv") if row["compound"] == compound)
    value, bound = published_kJ
    assert float(row["heat_kJ_mol"]) == pytest.approx(value, abs=bound)


def test_forsterite_from_its_oxides() -> None:
    """NASA data (JANAF 1967): Mg2SiO4 - 2 MgO - SiO2 at 298 K is -63.6; the table has -67.2."""
    janaf = formation_enthalpy_J_mol("Mg2SiO4") - 2 * formation_enthalpy_J_mol("MgO")
    janaf -= formation_enthalpy_J_mol("SiO2")
    row = next(r for r in read_csv_rows("slag_compounds.csv") if r["compound"] == "Mg2SiO4")
    assert float(row["heat_kJ_mol"]) == pytest.approx(janaf * 1e-3, abs=4.0)


@pytest.mark.parametrize(
    ("compound", "oxides", "T_K", "difference_kJ"),
    [
        ("CaSiO3", {"CaO": 1, "SiO2": 1}, 1823.0, 0.0),
        ("MgSiO3", {"MgO": 1, "SiO2": 1}, 1873.0, -47.0),
        ("Mg2SiO4", {"MgO": 2, "SiO2": 1}, 2173.0, -52.0),
    ],
)
def test_molten_silicate_from_solid_oxides(
    compound: str, oxides: dict[str, int], T_K: float, difference_kJ: float
) -> None:
    """Melting a silicate's oxides together against its tabulated liquid (NASA; KUB1993).

    Lime silicate agrees within 12 kJ/mol (0.1 MJ/kg). For pure magnesium silicates the model
    gives 47 and 52 kJ/mol too much heat: they melt with 0.5 to 0.75 MJ/kg, and the model has
    0.205 for all slags. A converter slag of 8 % MgO holds 0.2 kmol of it per 100 kg; if all
    of it were so, 5 MJ per 100 kg of slag.
    """
    kg = {name: n * molar_mass(name) * 1e-3 for name, n in oxides.items()}
    model = float(SlagEnthalpy(tuple(kg)).enthalpy_J(kg, T_K)) * 1e-3
    table = enthalpy_J_mol(compound, T_K, "l") * 1e-3
    bound = 12.0 if difference_kJ == 0.0 else 1.0
    assert model - table == pytest.approx(difference_kJ, abs=bound)


#: Measured heats of solution of solid oxides, 1450 °C, slag of mol % CaO 45.9, SiO2 35.1,
#: Al2O3 8.3, MgO 10.7: measured, its uncertainty, and the model's value; kJ/mol. Source:
#: "High-Temperature Calorimetric Study of Oxide Component Dissolution in a
#: CaO-MgO-Al2O3-SiO2 Slag at 1450 °C" (abstract).
MEASURED = {
    "CaO": (-4.0, 2.0, -47.7),
    "SiO2": (-20.0, 4.0, 12.1),
    "Al2O3": (42.0, 11.0, 20.9),
    "MgO": (57.0, 9.0, -25.3),
    "Fe2O3": (279.0, 21.0, -20.3),
}
MEASURED_SLAG_MOL_PCT = {"CaO": 45.9, "SiO2": 35.1, "Al2O3": 8.3, "MgO": 10.7, "Fe2O3": 0.0}


def _measured_slag_kg() -> dict[str, float]:
    return {name: n * molar_mass(name) * 1e-3 for name, n in MEASURED_SLAG_MOL_PCT.items()}


def test_partial_heats_of_solution_differ_from_measured() -> None:
    """The model does not reproduce these; what is asserted is the stated difference.

    A blast-furnace type slag (CaO/SiO2 1.2) lies outside converter slags: lime is short, so
    the model gives each mole of lime half a dicalcium silicate (-47.7 against -4). Alumina
    alone has the measured sign and size within two uncertainties. Fe2O3 took up 279 kJ/mol,
    more than reduction to FeO needs heat of melting; the model does not let it lose oxygen.
    """
    found = partial_enthalpies_kJ_mol(_measured_slag_kg())
    for oxide, (_, _, model) in MEASURED.items():
        assert found[oxide] == pytest.approx(model, abs=0.1)
    measured, uncertainty, _ = MEASURED["Al2O3"]
    assert found["Al2O3"] == pytest.approx(measured, abs=2 * uncertainty)


def test_whole_heat_of_that_slag() -> None:
    """All oxides together: the model agrees with CaSiO3, the sum of the measured ones does not.

    Mole-weighted sum of partial heats = heat of making the slag from solid oxides (Euler):
    measured +0.7 kJ/mol of oxides, model -18.6. Tabulated for liquid CaSiO3 at 1550 °C:
    -20 to -14 per mole of oxides (KUB1993, from memory), which the model's value lies in.
    """
    found = partial_enthalpies_kJ_mol(_measured_slag_kg())
    share = {name: n * 1e-2 for name, n in MEASURED_SLAG_MOL_PCT.items()}
    measured = sum(share[name] * values[0] for name, values in MEASURED.items())
    assert measured == pytest.approx(0.73, abs=0.01)
    T = 1823.0
    liquid = enthalpy_J_mol("CaSiO3", T, "l") - enthalpy_J_mol("CaO", T)
    tabulated = (liquid - enthalpy_J_mol("SiO2", T, "s")) * 0.5e-3
    model = sum(share[name] * found[name] for name in share)
    assert model == pytest.approx(tabulated, abs=6.0)


def test_steelmaking_slag_takes_lime_without_heat() -> None:
    """Property of a lime-rich slag: lime that is left over only melts (205 kJ/kg)."""
    found = partial_enthalpies_kJ_mol({**ORDINARY, "CaO": 60.0})
    assert found["CaO"] == pytest.approx(0.205 * molar_mass("CaO"), abs=1.0)
    assert found["SiO2"] < -90.0
    assert found["P2O5"] < -600.0


# ---- properties ----------------------------------------------------------------------------


@settings(max_examples=60, deadline=None)
@given(kg=masses, factor=st.floats(0.01, 100.0), T_K=st.floats(1500.0, 2200.0))
def test_proportional_to_mass(kg: dict[str, float], factor: float, T_K: float) -> None:
    slag = SlagEnthalpy(OXIDES)
    one = slag.enthalpy_J(kg, T_K)
    many = slag.enthalpy_J({name: x * factor for name, x in kg.items()}, T_K)
    scale = sum(kg.values()) * factor * 1e7
    assert many == pytest.approx(one * factor, rel=1e-9, abs=1e-9 * scale + 1e-2)


def _dual(kg: dict[str, float]) -> dict[str, ad.Dual]:
    return {name: ad.seed(np.array([x]), name) for name, x in kg.items()}


@settings(max_examples=40, deadline=None)
@given(kg=masses, T_K=st.floats(1500.0, 2200.0))
def test_sum_of_partials_is_the_whole(kg: dict[str, float], T_K: float) -> None:
    """Euler's theorem for a function proportional to the masses: checks all slopes at once."""
    slag = SlagEnthalpy(OXIDES)
    whole = slag.enthalpy_J(_dual(kg), ad.seed(np.array([T_K]), "T"))
    total = sum(float(whole.d[name][0]) * x for name, x in kg.items())
    assert all(np.isfinite(slope).all() for slope in whole.d.values())
    assert total == pytest.approx(float(whole.v[0]), rel=1e-8, abs=1.0)


@pytest.mark.parametrize(
    "kg",
    [
        ORDINARY,
        {**ORDINARY, "CaO": 25.2},  # about what silica takes: on the rounded corner
        {**ORDINARY, "CaO": 5.0},
        {**ORDINARY, "SiO2": 40.0, "FeO": 10.0},
        {"CaO": 40.0, "SiO2": 40.0, "MgO": 8.0},
        {"FeO": 70.0, "SiO2": 30.0},
    ],
)
def test_derivatives_against_differences(kg: dict[str, float]) -> None:
    slag, T_K = SlagEnthalpy(tuple(kg)), 1923.0
    whole = slag.enthalpy_J(_dual(kg), ad.seed(np.array([T_K]), "T"))
    for name, x in kg.items():
        step = 1e-5 * x
        up = slag.enthalpy_J({**kg, name: x + step}, T_K)
        down = slag.enthalpy_J({**kg, name: x - step}, T_K)
        found = float(whole.d[name][0])
        assert found == pytest.approx((up - down) / (2 * step), rel=1e-5, abs=50.0)
    by_T = (slag.enthalpy_J(kg, T_K + 0.1) - slag.enthalpy_J(kg, T_K - 0.1)) / 0.2
    assert float(whole.d["T"][0]) == pytest.approx(by_T, rel=1e-6)


def test_chained_derivatives() -> None:
    """Contract: masses and temperature that depend on one quantity, numbers among them."""
    slag = SlagEnthalpy(("CaO", "SiO2", "FeO", "Al2O3"))

    def at(x: float) -> dict[str, float]:
        return {"CaO": 40.0 + 2.0 * x, "SiO2": 15.0 - x, "FeO": 3.0 * x, "Al2O3": 2.0}

    x = ad.seed(np.array([5.0]), "x")
    kg = {"CaO": 40.0 + x * 2.0, "SiO2": 15.0 - x, "FeO": x * 3.0, "Al2O3": 2.0}
    found = slag.enthalpy_J(kg, x * 10.0 + 1850.0).d["x"][0]
    up = slag.enthalpy_J(at(5.001), 1900.01)
    down = slag.enthalpy_J(at(4.999), 1899.99)
    assert found == pytest.approx((up - down) / 0.002, rel=1e-6)


def test_zero_is_absent() -> None:
    """Contract: an oxide at zero counts as none and leaves finite slopes."""
    slag = SlagEnthalpy(OXIDES)
    none = dict.fromkeys(OXIDES, 0.0)
    full = slag.enthalpy_J({**none, **ORDINARY}, 1900.0)
    assert full == pytest.approx(float(slag.enthalpy_J(ORDINARY, 1900.0)), rel=1e-12)
    assert slag.enthalpy_J(none, 1900.0) == pytest.approx(0.0, abs=1e-2)
    empty = slag.enthalpy_J(_dual(none), ad.seed(np.array([1900.0]), "T"))
    assert all(np.isfinite(slope).all() for slope in empty.d.values())
    assert slag.enthalpy_J({"CaF2": 1.0}, 1900.0) == pytest.approx(
        enthalpy_J_kg("CaF2", 1900.0, "s") + 205e3
    )


def _steepest_step(n: int) -> float:
    """Largest change of the slope by lime [J/kg] between neighbours of a lime sweep."""
    kg = {name: ad.Dual(np.full(n, x), {}) for name, x in ORDINARY.items()}
    kg["CaO"] = ad.Dual(np.linspace(0.5, 70.0, n), {"CaO": np.ones(n)})
    slope = SlagEnthalpy(tuple(kg)).enthalpy_J(kg, np.full(n, 1900.0)).d["CaO"]
    return float(np.abs(np.diff(slope)).max())


def test_lime_sweep_has_no_jump() -> None:
    """Property: ten times finer steps change the slope ten times less; a jump would stay."""
    assert _steepest_step(40_000) < 0.15 * _steepest_step(4_000)


# ---- contract ------------------------------------------------------------------------------


def test_the_two_ways_agree() -> None:
    """Contract: the class equals the plain function on solid oxides, Dual or not."""
    T_K = np.array([1800.0, 1900.0, 2000.0])
    h = {
        name: enthalpy_J_kg(STANDS_FOR.get(name, name), ad.seed(T_K, "T"), "s") for name in ORDINARY
    }
    kg = {name: ad.Dual(np.full(3, x), {"x": np.full(3, x)}) for name, x in ORDINARY.items()}
    plain = slag_enthalpy_J(kg, h)
    slag = SlagEnthalpy(tuple(ORDINARY)).enthalpy_J(kg, ad.seed(T_K, "T"))
    np.testing.assert_allclose(slag.v, plain.v, rtol=1e-12)
    for key in ("x", "T"):
        np.testing.assert_allclose(slag.d[key], plain.d[key], rtol=1e-9)


def test_formation_is_the_whole_at_25_C_without_fusion() -> None:
    """Contract. Solid forms at 25 °C; by hand for one slag of CaO and SiO2."""
    kg = {"CaO": 80.0, "SiO2": 20.0}
    by_hand = sum(x * formation_enthalpy_J_mol(n) / molar_mass(n) * 1e3 for n, x in kg.items())
    by_hand -= 118.8e3 * 20.0 / molar_mass("SiO2") * 1e3
    assert SlagEnthalpy(tuple(kg)).formation_J(kg) == pytest.approx(by_hand, rel=2e-4)


def test_phosphate_oxide_stands_for_half_its_double() -> None:
    """Contract: one kg of P2O5 is one kg of P4O10."""
    slag = SlagEnthalpy(("P2O5",))
    assert slag.formation_J({"P2O5": 1.0}) == pytest.approx(enthalpy_J_kg("P4O10", 298.15))


def test_scalar_array_nan_empty() -> None:
    """Contract: the array equals the loop."""
    slag = SlagEnthalpy(tuple(ORDINARY))
    T_K = np.array([1800.0, np.nan, 2000.0])
    many = slag.enthalpy_J({n: np.full(3, x) for n, x in ORDINARY.items()}, T_K)
    assert np.isnan(many).tolist() == [False, True, False]
    assert float(slag.enthalpy_J(ORDINARY, 1800.0)) == pytest.approx(many[0], rel=1e-13)
    np.testing.assert_allclose(slag.enthalpy_J(ORDINARY, T_K), many, rtol=1e-13)
    nothing = slag.enthalpy_J({n: np.array([]) for n in ORDINARY}, np.array([]))
    assert nothing.shape == (0,)
    mixed = slag.enthalpy_J({**ORDINARY, "FeO": np.array([10.0, 20.0])}, 1800.0)
    assert mixed.shape == (2,)


def test_results_do_not_share_memory() -> None:
    """Contract: a later call leaves an earlier result alone (work arrays are used again)."""
    slag = SlagEnthalpy(tuple(ORDINARY))
    first = slag.enthalpy_J(_dual(ORDINARY), ad.seed(np.array([1800.0]), "T"))
    kept = {key: np.array(slope) for key, slope in first.d.items()}
    slag.enthalpy_J(_dual({**ORDINARY, "CaO": 10.0}), ad.seed(np.array([2000.0]), "T"))
    for key, slope in kept.items():
        np.testing.assert_array_equal(first.d[key], slope)


def test_unknown_oxide_is_refused() -> None:
    """Contract."""
    with pytest.raises(DataError, match="slag oxide ZnO is not among those set up: CaO, SiO2"):
        SlagEnthalpy(("CaO", "SiO2")).enthalpy_J({"ZnO": 1.0}, 1900.0)
    with pytest.raises(DataError, match="no enthalpy data for species 'CaO2'"):
        SlagEnthalpy(("CaO2",))


def test_table_guards() -> None:
    """Guard: sources, negative heats, compounds that hold their oxides, orders once each."""
    rows = read_csv_rows("slag_compounds.csv")
    orders = [row["order"] for row in rows if row["order"] != "rest"]
    assert sorted(orders) == ["1", "2", "3", "4"]
    for row in rows:
        assert row["source"]
        assert float(row["heat_kJ_mol"]) < 0.0
        total: dict[str, float] = {}
        for oxide, moles in ((row["base"], row["base_moles"]), (row["acid"], row["acid_moles"])):
            for element, atoms in parse_formula(oxide).items():
                total[element] = total.get(element, 0.0) + atoms * float(moles)
        assert total == parse_formula(row["compound"])
    assert all(row["source"] for row in read_csv_rows("slag_constants.csv"))


def test_compound_heat_is_never_positive() -> None:
    """Property: compounds form only if they give heat."""
    for lime in (0.0, 5.0, 25.0, 60.0):
        assert compound_heat_J({**ORDINARY, "CaO": lime}) < 0.0
