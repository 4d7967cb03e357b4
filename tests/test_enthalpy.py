"""Enthalpies of pure species.

Checks from outside:
- NIST-JANAF tables (4th ed., 1998; package `janaf`), over the range of each species, within
  0.3 % or 0.5 kJ/mol, whichever is larger. Where it does not hold, `REASONS` says by how much
  and why.
- NASA polynomials (TM-4513, 1993; package `cantera`). Most coefficients of the package were
  converted from these, so for them this checks the conversion only (to 1e-5: the report has
  R = 8.31451, cantera 8.314463 J/(mol K)).
- Heats of formation of what neither holds: named beside each.
Table guards and contract checks say so.
"""

from __future__ import annotations

from collections.abc import Callable

import numpy as np
import pytest

from converter_calc.basis import dual as ad
from converter_calc.basis.elements import molar_mass, parse_formula
from converter_calc.basis.errors import DataError
from converter_calc.data.tables import read_csv_rows
from converter_calc.thermo.enthalpy import (
    EnthalpySet,
    enthalpy_J_kg,
    enthalpy_J_mol,
    formation_enthalpy_J_mol,
    known_species,
    segments_of,
)
from tests.thermo_references import JANAF_TABLES, NASA_NAMES, janaf_enthalpy, nasa_species

HOTTEST_K = 3000.0
#: Species -> from T [K], largest difference to JANAF [kJ/mol], why.
REASONS = {
    "Fe": (1050.0, 0.7, "the NASA fit rounds off the magnetic peak just above 1042 K"),
    "Ti": (1600.0, 1.5, "NASA takes CODATA (1989), JANAF is of 1979"),
    "Ca": (850.0, 2.1, "NASA takes a revision of 1993"),
    "Ba": (450.0, 4.2, "NASA takes a revision of 1993"),
    "Na2O": (1023.0, 1.8, "NASA joins the transitions at 1023 and 1243 K in one"),
    "H2O": (2300.0, 1.1, "NASA takes a revision of 1989, JANAF is of 1979"),
}
#: Elements that boil below 3000 K: JANAF goes on with the gas.
BOILS_K = {
    *("Al", "Cu", "Cr", "Mg", "Ca", "Ba", "Na", "K", "Zn", "Pb", "S", "P", "Mn", "H2O_liquid"),
}


@pytest.mark.parametrize("species", sorted(JANAF_TABLES))
def test_against_janaf(species: str) -> None:
    T, expected = janaf_enthalpy(JANAF_TABLES[species])
    parts = segments_of(species)
    inside = (parts[0].T_low_K <= T) & (min(parts[-1].T_high_K, HOTTEST_K) >= T)
    T, expected = T[inside], expected[inside]
    assert T.size >= 2
    assert T[-1] > 0.8 * min(parts[-1].T_high_K, HOTTEST_K) or species in BOILS_K
    allowed = np.maximum(0.003 * np.abs(expected), 0.5)
    if species in REASONS:
        start, largest, _ = REASONS[species]
        allowed = np.where(start <= T, largest, allowed)
    difference = np.abs(enthalpy_J_mol(species, T) * 1e-3 - expected)
    assert np.all(difference <= allowed), list(zip(T, difference, allowed, strict=True))


@pytest.mark.parametrize("species", sorted(REASONS))
def test_reason_is_needed(species: str) -> None:
    """A stated exception that no longer is one must go."""
    T, expected = janaf_enthalpy(JANAF_TABLES[species])
    start, largest, _ = REASONS[species]
    inside = (start <= T) & (min(segments_of(species)[-1].T_high_K, HOTTEST_K) >= T)
    difference = np.abs(enthalpy_J_mol(species, T[inside]) * 1e-3 - expected[inside])
    assert np.any(difference > np.maximum(0.003 * np.abs(expected[inside]), 0.5))
    assert difference.max() > 0.8 * largest


@pytest.mark.parametrize("species", sorted(NASA_NAMES))
def test_against_nasa(species: str) -> None:
    for name in NASA_NAMES[species]:
        thermo = nasa_species(name).thermo
        low, high = thermo.min_temp, min(thermo.max_temp, segments_of(species)[-1].T_high_K)
        T = np.linspace(max(low, segments_of(species)[0].T_low_K), high, 30)[1:-1]
        expected = np.array([thermo.h(x) for x in T]) * 1e-3
        # 5 J/mol: elements are shifted to be exactly zero at 298.15 K
        np.testing.assert_allclose(enthalpy_J_mol(species, T), expected, rtol=1e-5, atol=5.0)


def _reaction_kJ(
    T: float,
    left: dict[str, float],
    right: dict[str, float],
    h: Callable[[str, float], float],
) -> float:
    return sum(n * h(s, T) for s, n in right.items()) - sum(n * h(s, T) for s, n in left.items())


def _ours(species: str, T: float) -> float:
    return float(enthalpy_J_mol(species, T)) * 1e-3


def _janaf(species: str, T: float) -> float:
    temps, H = janaf_enthalpy(JANAF_TABLES[species])
    return float(H[np.flatnonzero(temps == T)[0]])


def _nasa(species: str, T: float) -> float:
    for name in NASA_NAMES[species]:
        thermo = nasa_species(name).thermo
        if thermo.min_temp <= T <= thermo.max_temp:
            return float(thermo.h(T)) * 1e-6
    raise KeyError(species, T)


REACTIONS = {
    "C to CO": ({"C": 1, "O2": 0.5}, {"CO": 1}),
    "CO to CO2": ({"CO": 1, "O2": 0.5}, {"CO2": 1}),
    "Si to SiO2": ({"Si": 1, "O2": 1}, {"SiO2": 1}),
    "Fe to FeO": ({"Fe": 1, "O2": 0.5}, {"FeO": 1}),
    "Fe to Fe2O3": ({"Fe": 2, "O2": 1.5}, {"Fe2O3": 1}),
    "V to V2O3": ({"V": 2, "O2": 1.5}, {"V2O3": 1}),
    "Cr to Cr2O3": ({"Cr": 2, "O2": 1.5}, {"Cr2O3": 1}),
    "Al to Al2O3": ({"Al": 2, "O2": 1.5}, {"Al2O3": 1}),
    "P2 to P4O10": ({"P2": 2, "O2": 5}, {"P4O10": 1}),
    "hydrogen to steam": ({"H2": 1, "O2": 0.5}, {"H2O": 1}),
}


@pytest.mark.parametrize("reaction", sorted(REACTIONS))
@pytest.mark.parametrize("T", [600.0, 1000.0, 1400.0])
def test_reaction_heat_against_both_packages(reaction: str, T: float) -> None:
    """Heat of reaction within 0.3 % or 0.5 kJ/mol of the JANAF and of the NASA data."""
    left, right = REACTIONS[reaction]
    ours = _reaction_kJ(T, left, right, _ours)
    for reference in (_janaf, _nasa):
        expected = _reaction_kJ(T, left, right, reference)
        assert ours == pytest.approx(expected, rel=0.003, abs=0.5), reference.__name__


@pytest.mark.parametrize(
    ("species", "low_kJ", "high_kJ"),
    [
        # Robie & Hemingway, USGS Bulletin 2131 (1995), from memory
        ("MnO", -385.4, -385.0),
        ("CaSiO3", -1636.0, -1633.5),
        # the forms of dicalcium silicate: larnite to calcio-olivine (Barin 1989, from memory)
        ("Ca2SiO4", -2328.0, -2306.0),
        # Wagman et al., NBS tables (1982), from memory
        ("Ca3(PO4)2", -4122.0, -4119.0),
        # CODATA Key Values (1989), from memory
        ("ZnO", -350.9, -350.1),
        ("CaO", -636.0, -634.0),
        ("H2O", -241.87, -241.78),
        ("CO2", -393.64, -393.38),
    ],
)
def test_formation_heat(species: str, low_kJ: float, high_kJ: float) -> None:
    assert low_kJ <= formation_enthalpy_J_mol(species) * 1e-3 <= high_kJ


@pytest.mark.parametrize(
    ("carbonate", "oxide", "gas", "MJ_per_kg"),
    [("CaCO3", "CaO", "CO2", 1.78), ("Ca(OH)2", "CaO", "H2O", 1.47)],
)
def test_heat_to_take_carbonates_apart(
    carbonate: str, oxide: str, gas: str, MJ_per_kg: float
) -> None:
    """Heats of calcining at 25 °C, MJ per kg: figures of the lime trade (common practice)."""
    heat = sum(formation_enthalpy_J_mol(s) for s in (oxide, gas)) - formation_enthalpy_J_mol(
        carbonate
    )
    per_kg = heat / molar_mass(carbonate) * 1e-3
    assert per_kg == pytest.approx(MJ_per_kg, rel=0.01)


# ---- table guards -------------------------------------------------------------------------

ELEMENTS_IN_TABLE = (
    *("O2", "N2", "Ar", "H2", "C", "Si", "Fe", "Cr", "V", "Ti", "Al", "Ni", "Cu", "Mo", "Nb"),
    *("Mg", "Ca", "Ba", "Na", "K", "B", "Zn", "Pb", "S", "P", "Mn", "Co", "W", "Sn", "As", "Sb"),
)


@pytest.mark.parametrize("element", ELEMENTS_IN_TABLE)
def test_element_is_zero_at_reference(element: str) -> None:
    """Guard: by definition of the zero of enthalpy, to 1 J/mol."""
    assert abs(formation_enthalpy_J_mol(element)) < 1.0


@pytest.mark.parametrize("species", known_species())
def test_heat_capacity_is_positive_and_derivative_of_enthalpy(species: str) -> None:
    """Guard, and property: cp = dH/dT by central difference inside each segment."""
    one = EnthalpySet([(species, "stable")])
    for part in segments_of(species):
        T = np.linspace(part.T_low_K, part.T_high_K, 42)[1:-1]
        _, cp = one.evaluate(T)
        assert np.all(cp > 0.0)
        step = 1e-4 * (part.T_high_K - part.T_low_K)
        difference = (one.evaluate(T + step)[0] - one.evaluate(T - step)[0]) / (2.0 * step)
        np.testing.assert_allclose(cp, difference, rtol=2e-4)


@pytest.mark.parametrize("species", known_species())
def test_segments_join(species: str) -> None:
    """Guard: ranges follow each other; H jumps only where form or phase changes, and upwards.

    13 J/mol are left at 1000 K in the NASA polynomials of FeO. No substance takes up more than
    35 J/K per mole of atoms on melting (silicon, among the most, takes 30).
    """
    rows = [row for row in read_csv_rows("species.csv") if row["species"] == species]
    parts = segments_of(species)
    for row, other, part, following in zip(rows, rows[1:], parts, parts[1:], strict=False):
        assert part.T_high_K == following.T_low_K
        T = part.T_high_K
        below = part.straight_from(T).h @ _line(T)
        above = following.straight_from(T).h @ _line(T)
        if (row["phase"], row["crystal"]) == (other["phase"], other["crystal"]):
            assert above == pytest.approx(below, abs=15.0)
        else:
            assert above >= below - 1.0
            atoms = sum(parse_formula(row["formula"]).values())
            assert above - below < 35.0 * T * atoms


def _line(T: float) -> np.ndarray:
    line = np.zeros(11)
    line[:2] = 1.0, T / 1000.0
    return line


def test_rows_have_a_source_that_the_head_explains() -> None:
    """Guard."""
    from importlib.resources import files

    text = files("converter_calc.data").joinpath("species.csv").read_text(encoding="utf-8")
    head = [line for line in text.splitlines() if line.startswith("#")]
    named = {line.removeprefix("# ").split(":")[0] for line in head if ": " in line}
    for row in read_csv_rows("species.csv"):
        assert set(row["source"].split("+")) <= named, row["species"]
        assert float(row["T_low_K"]) < float(row["T_high_K"])
        assert row["phase"] in {"s", "l", "g"}


def test_segment_is_unique() -> None:
    """Guard: no two rows of a species start at the same temperature."""
    keys = [(row["species"], row["T_low_K"]) for row in read_csv_rows("species.csv")]
    assert len(keys) == len(set(keys))


@pytest.mark.parametrize("gas", ["O2", "N2", "Ar", "H2", "CO", "CO2", "H2O", "SO2"])
def test_gases_reach_off_gas_temperatures(gas: str) -> None:
    """Contract: no extrapolation for gases between 298 and 3000 K."""
    assert segments_of(gas)[0].T_low_K <= 298.15
    assert segments_of(gas)[-1].T_high_K >= 3000.0


# ---- contract ------------------------------------------------------------------------------


def test_scalar_list_array_nan_empty() -> None:
    """Contract: shapes; the array equals the loop; NaN stays where it is."""
    T = [250.0, 298.15, 1000.0, 1500.0, 1900.0, 7000.0]
    loop = [enthalpy_J_kg("Fe", x) for x in T]
    assert all(isinstance(x, float) for x in loop)
    np.testing.assert_allclose(enthalpy_J_kg("Fe", T), loop, rtol=1e-13, atol=1e-6)
    np.testing.assert_allclose(enthalpy_J_kg("Fe", np.array(T)), loop, rtol=1e-13, atol=1e-6)
    with_nan = enthalpy_J_kg("Fe", np.array([1000.0, np.nan, 1900.0]))
    assert np.isnan(with_nan).tolist() == [False, True, False]
    assert np.isnan(enthalpy_J_kg("Fe", float("nan")))
    assert enthalpy_J_kg("Fe", np.array([])).shape == (0,)
    h, cp = EnthalpySet([("Fe", "stable"), ("CO", "stable")]).evaluate(np.array(T))
    assert h.shape == cp.shape == (2, 6)
    h, cp = EnthalpySet([("Fe", "stable")]).evaluate(1900.0)
    assert h.shape == cp.shape == (1,)


def test_long_table_equals_short_ones() -> None:
    """Property: each row of a long table is what it is alone."""
    T = np.linspace(300.0, 2500.0, 20_011)
    gases = EnthalpySet([(gas, "stable") for gas in ("CO", "CO2", "H2", "H2O", "N2", "Fe")])
    h, cp = gases.evaluate(T)
    for start in (0, 5000, 20_000):
        part = slice(start, start + 11)
        short, short_cp = gases.evaluate(T[part])
        np.testing.assert_allclose(h[:, part], short, rtol=1e-12)
        np.testing.assert_allclose(cp[:, part], short_cp, rtol=1e-12)


@pytest.mark.parametrize("T", [150.0, -40.0, 1e5])
def test_beyond_the_data_heat_capacity_is_constant(T: float) -> None:
    """Contract: a straight line from the end of the range, at any temperature."""
    one = EnthalpySet([("CaCO3", "stable"), ("MnO", "stable"), ("Cr", "stable")])
    (h, cp), (h1, cp1) = one.evaluate(T), one.evaluate(T + 1.0)
    np.testing.assert_allclose(h1 - h, cp, rtol=1e-6)
    np.testing.assert_allclose(cp1, cp, rtol=1e-12)


def test_phase_can_be_fixed() -> None:
    """Contract: liquid iron below its melting point, solid lime above its own, joined on."""
    T = 1809.0
    assert enthalpy_J_mol("Fe", T - 200.0, "l") == pytest.approx(
        enthalpy_J_mol("Fe", T, "l") - 200.0 * 46.024, rel=1e-4
    )  # 46.024 J/(mol K): JANAF table Fe-006
    assert enthalpy_J_mol("CaO", 3500.0, "s") < enthalpy_J_mol("CaO", 3500.0)
    assert enthalpy_J_mol("Fe", 1700.0, "s") == pytest.approx(enthalpy_J_mol("Fe", 1700.0))


def test_derivative_is_carried() -> None:
    """Contract: a Dual temperature gives cp as the derivative, chained."""
    T = ad.seed(np.array([500.0, 1500.0, 1900.0]), "x") * 2.0
    one = EnthalpySet([("Fe", "stable"), ("CO2", "stable")])
    h, cp = one.evaluate(T.v)
    for row, value in enumerate(one.evaluate_dual(T)):
        np.testing.assert_array_equal(value.v, h[row])
        np.testing.assert_allclose(value.d["x"], 2.0 * cp[row])


@pytest.mark.parametrize(
    ("species", "phase", "said"),
    [
        ("Fe203", "stable", "no enthalpy data for species 'Fe203'; did you mean Fe2O3"),
        ("unobtainium", "stable", "no enthalpy data for species 'unobtainium'"),
        ("CaCO3", "l", r"no enthalpy data for CaCO3 in phase 'l' \(there is: s\)"),
        ("CaCO3", "liquid", "phase 'liquid' of CaCO3 is not one of stable, s, l, g"),
    ],
)
def test_unknown_is_refused(species: str, phase: str, said: str) -> None:
    """Contract."""
    with pytest.raises(DataError, match=said):
        enthalpy_J_mol(species, 1000.0, phase)  # type: ignore[arg-type]
