"""Elements dissolved in liquid iron, and the heats of oxidation that come out of the data.

Checks from outside: heat contents and heats per kg of element at 1600 °C as computed by an
independent hand from the NASA data and the heats of solution of Sigworth & Elliott (Metal
Science 8 (1974) 298, from memory): the "anchors" below, given to two or three figures.
JANAF tables where said. The rest are contract checks.
"""

from __future__ import annotations

import numpy as np
import pytest

from converter_calc.basis import dual as ad
from converter_calc.basis.elements import molar_mass
from converter_calc.basis.errors import DataError
from converter_calc.data.tables import read_csv_rows
from converter_calc.thermo.enthalpy import Phase, enthalpy_J_kg, known_species
from converter_calc.thermo.metal import MetalEnthalpy
from converter_calc.thermo.slag import SlagEnthalpy
from tests.thermo_references import janaf_enthalpy

TAP_K = 1873.15


def dissolved_MJ_kg(element: str, T_K: float) -> float:
    return float(MetalEnthalpy([element]).evaluate_dual(T_K)[element]) * 1e-6


def heat_of_oxidation(element: str, oxide: str, atoms: int = 1, phase: Phase = "stable") -> float:
    """MJ per kg of element dissolved in iron at 1600 °C, oxygen at 25 °C (its H is zero)."""
    kg_oxide = molar_mass(oxide) / (atoms * molar_mass(element))
    return dissolved_MJ_kg(element, TAP_K) - kg_oxide * enthalpy_J_kg(oxide, TAP_K, phase) * 1e-6


@pytest.mark.parametrize(
    ("element", "oxide", "atoms", "anchor"),
    [
        ("C", "CO", 1, 9.4),
        ("C", "CO2", 1, 30.4),
        ("Si", "SiO2", 1, 26.8),
        ("Fe", "FeO", 1, 4.1),
        ("Fe", "Fe2O3", 2, 6.7),
    ],
)
def test_heat_of_oxidation(element: str, oxide: str, atoms: int, anchor: float) -> None:
    """Anchors, to the figures given (half a unit of the last)."""
    assert heat_of_oxidation(element, oxide, atoms) == pytest.approx(anchor, abs=0.05)


def slag_heat_MJ_kg(element: str, oxide: str, lime_mol: float, lime_from_K: float) -> float:
    """MJ per kg of element into slag at 1600 °C with lime charged at `lime_from_K`, no fusion."""
    moles = {oxide: 1.0, "CaO": lime_mol}
    kg = {name: n * molar_mass(name) * 1e-3 for name, n in moles.items() if n}
    slag = SlagEnthalpy(tuple(kg))
    fusion = 205e3 * sum(kg.values())  # the constant of the slag model, J/kg
    atoms = {"P2O5": 2}.get(oxide, 1)
    out = float(slag.enthalpy_J(kg, TAP_K)) - fusion
    out -= kg.get("CaO", 0.0) * enthalpy_J_kg("CaO", lime_from_K)
    return dissolved_MJ_kg(element, TAP_K) - out * 1e-6 / (atoms * molar_mass(element) * 1e-3)


def test_silicon_to_dicalcium_silicate() -> None:
    """Anchor 25.4, its lime heated from 25 °C, solid silicate.

    0.09 for the rounded corner: at exactly 2 CaO to 1 SiO2 the slag leaves 2 % of 118.8
    kJ/mol = 0.085 MJ/kg unformed.
    """
    heat = slag_heat_MJ_kg("Si", "SiO2", 2.0, 298.15)
    assert heat == pytest.approx(25.4, abs=0.05 + 0.09)
    assert slag_heat_MJ_kg("Si", "SiO2", 4.0, 298.15) < heat  # lime in excess is heated too


def test_phosphorus_to_phosphate() -> None:
    """Anchor "about 30": reached with the lime already hot in the slag (29.7).

    With its lime heated from 25 °C as well the data give 25.6: the anchor does not say that,
    and the difference of 4.1 is just that heat.
    """
    assert slag_heat_MJ_kg("P", "P2O5", 3.0, TAP_K) == pytest.approx(30.0, abs=0.6)
    assert slag_heat_MJ_kg("P", "P2O5", 3.0, 298.15) == pytest.approx(25.6, abs=0.3)


def test_manganese_to_oxide() -> None:
    """Anchor "about 6.2" differs: the data give 6.95 to solid MnO, 5.96 to its pure liquid.

    The anchor lies between, where a slag lies too: 6.68 with the fusion heat of slag. Asserted
    is this order; the anchor is 0.5 below the slag value and 0.25 above the liquid.
    """
    solid = heat_of_oxidation("Mn", "MnO", phase="s")
    liquid = heat_of_oxidation("Mn", "MnO", phase="l")
    assert liquid < 6.2 < solid
    assert liquid == pytest.approx(6.2, abs=0.3)


def test_steel_heat_content() -> None:
    """Anchor: 1.355 MJ/kg above 25 °C at 1600 °C, to its last figure; and JANAF table Fe-003."""
    assert dissolved_MJ_kg("Fe", TAP_K) == pytest.approx(1.355, abs=0.0015)
    T, H = janaf_enthalpy("Fe-003")
    (first, second), (H1, H2) = T[T > 1809.0][:2], H[T > 1809.0][:2]  # a straight line
    expected = (H1 + (H2 - H1) * (TAP_K - first) / (second - first)) / molar_mass("Fe")
    assert dissolved_MJ_kg("Fe", TAP_K) == pytest.approx(expected, rel=0.003)


def test_hot_metal_heat_content() -> None:
    """Hot metal with 4.5 % C at 1350 °C.

    From JANAF (tables Fe-006, liquid iron below its melting point, and C-002) plus the heat of
    solution of carbon, 22.59 kJ/mol: 1.275 MJ/kg; ours within 0.4 %. The anchor is 1.264,
    1.2 % less; which of its terms differs is not known.
    """
    T = 1623.15
    liquid, graphite = janaf_enthalpy("Fe-006"), janaf_enthalpy("C-002")
    iron = np.interp(T, *liquid) / molar_mass("Fe")
    carbon = (np.interp(T, *graphite) + 22.59) / molar_mass("C")
    ours = 0.955 * dissolved_MJ_kg("Fe", T) + 0.045 * dissolved_MJ_kg("C", T)
    assert ours == pytest.approx(0.955 * iron + 0.045 * carbon, rel=0.004)
    assert ours == pytest.approx(1.264, rel=0.0125)


def test_dissolved_oxygen_and_sulphur_follow_the_gas() -> None:
    """JANAF: H(O2), H(S2) at 1800 K, half a molecule, plus Sigworth & Elliott's heats."""
    for element, table, heat in (("O", "O-029", -117.15), ("S", "S-012", -135.06)):
        T, H = janaf_enthalpy(table)
        expected = (0.5 * H[np.flatnonzero(T == 1800.0)[0]] + heat) / molar_mass(element)
        assert dissolved_MJ_kg(element, 1800.0) == pytest.approx(expected, abs=0.5 / 16.0)


def test_elements_without_a_heat_of_solution() -> None:
    """Contract: zero heat on the liquid; 3 R per mole without data; both are named."""
    metal = MetalEnthalpy(["Fe", "C", "Sb", "Ce"])
    assert metal.approximate == ("Sb", "Ce")
    h = metal.evaluate_dual(TAP_K)
    assert float(h["Sb"]) == enthalpy_J_kg("Sb", TAP_K, "l")
    assert float(h["Ce"]) * 0.140116 == pytest.approx(3 * 8.3145 * (TAP_K - 298.15), rel=1e-4)


def test_shapes_and_derivatives() -> None:
    """Contract: numbers, arrays, Dual, NaN, empty."""
    metal = MetalEnthalpy(["Fe", "C", "Mn", "P", "Ce"])
    T = np.array([1600.0, np.nan, 1900.0])
    plain, dual = metal.evaluate_dual(T), metal.evaluate_dual(ad.seed(T, "T"))
    ahead = metal.evaluate_dual(T + 0.5)
    behind = metal.evaluate_dual(T - 0.5)
    for element in metal.elements:
        np.testing.assert_array_equal(plain[element], dual[element].v)
        assert np.isnan(plain[element]).tolist() == [False, True, False]
        np.testing.assert_allclose(
            np.broadcast_to(dual[element].d["T"], 3)[[0, 2]],
            (ahead[element] - behind[element])[[0, 2]],
            rtol=1e-5,
        )
        assert float(metal.evaluate_dual(1900.0)[element]) == pytest.approx(plain[element][2])
        assert metal.evaluate_dual(np.array([]))[element].shape == (0,)


def test_only_elements_without_data() -> None:
    """Contract: also with none in the data, and with none at all."""
    h = MetalEnthalpy(["Ce"]).evaluate_dual(np.array([1800.0, 1900.0]))["Ce"]
    assert h.shape == (2,)
    assert MetalEnthalpy([]).evaluate_dual(1800.0) == {}


def test_unknown_element_is_refused() -> None:
    """Contract."""
    with pytest.raises(DataError, match="element 'Xx'"):
        MetalEnthalpy(["Fe", "Xx"])


def test_table_guards() -> None:
    """Guard: unique elements, a source on each row, references that exist, atoms that fit."""
    rows = read_csv_rows("solution_heats.csv")
    names = [row["element"] for row in rows]
    assert len(names) == len(set(names))
    for row in rows:
        assert row["source"]
        assert row["reference"] in known_species()
        atoms = float(row["reference_per_atom"]) * molar_mass(row["reference"])
        assert atoms == pytest.approx(molar_mass(row["element"]))
