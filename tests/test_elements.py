"""Atomic weights and formulas.

Checks from outside: the package `periodictable` (its own IUPAC table) for weights and for
molar masses. The rest are contract checks on what is refused, and table guards.
"""

from __future__ import annotations

import periodictable
import pytest

from converter_calc.basis.elements import (
    atomic_weight,
    known_elements,
    mass_fractions,
    molar_mass,
    parse_formula,
)
from converter_calc.basis.errors import DataError
from converter_calc.data.tables import read_csv_rows

#: IUPAC abridged values carry 4 to 5 figures; the two tables may round the last differently.
ROUNDING = 1e-5


@pytest.mark.parametrize("symbol", known_elements())
def test_atomic_weight_against_periodictable(symbol: str) -> None:
    expected = periodictable.elements.symbol(symbol).mass
    assert atomic_weight(symbol) == pytest.approx(expected, rel=ROUNDING)


@pytest.mark.parametrize(
    "formula", ["CaO", "Ca3(PO4)2", "Fe2O3", "Mg(OH)2", "C16H34", "P4O10", "Ca2SiO4", "FeOOH"]
)
def test_molar_mass_against_periodictable(formula: str) -> None:
    assert molar_mass(formula) == pytest.approx(periodictable.formula(formula).mass, rel=ROUNDING)


def test_iron_in_hematite_is_seventy_percent() -> None:
    """Common practice: hematite holds 70 % iron by mass."""
    assert mass_fractions("Fe2O3")["Fe"] == pytest.approx(0.70, abs=0.005)


@pytest.mark.parametrize(
    ("formula", "atoms"),
    [
        ("Ca3(PO4)2", {"Ca": 3.0, "P": 2.0, "O": 8.0}),
        ("Fe0.947O", {"Fe": 0.947, "O": 1.0}),
        ("FeOOH", {"Fe": 1.0, "O": 2.0, "H": 1.0}),
        ("Ca(Mg(CO3)2)1.5", {"Ca": 1.0, "Mg": 1.5, "C": 3.0, "O": 9.0}),
        ("CO", {"C": 1.0, "O": 1.0}),
        ("Co", {"Co": 1.0}),
    ],
)
def test_formula_is_read(formula: str, atoms: dict[str, float]) -> None:
    """Property: counted by hand."""
    assert parse_formula(formula) == pytest.approx(atoms)


@pytest.mark.parametrize("formula", ["Ca3(PO4)2", "Fe0.947O", "C16H34", "CaF2"])
def test_mass_fractions_sum_to_one(formula: str) -> None:
    """Closure."""
    assert sum(mass_fractions(formula).values()) == pytest.approx(1.0, rel=1e-14)


def test_result_can_be_changed_without_harm() -> None:
    """Contract: the cache is not handed out."""
    parse_formula("CaO")["Ca"] = 99.0
    mass_fractions("CaO")["Ca"] = 99.0
    assert parse_formula("CaO")["Ca"] == 1.0
    assert mass_fractions("CaO")["Ca"] < 1.0


@pytest.mark.parametrize(
    ("formula", "said"),
    [
        ("", "is empty"),
        ("cao", "'c' at position 1"),
        ("Ca O", "position 3"),
        ("Ca(OH", "not closed"),
        ("CaO)", "no opening one"),
        ("Ca()2", "bracket is empty"),
        ("(2CaO)", "'2' at position 2|a number follows"),
        ("Fe0O", "zero times"),
        ("Xx2O3", "no atomic weight for element 'Xx'"),
        ("H2O_liquid", "'_' at position 4"),
        ("Ca2+", "position 4"),
    ],
)
def test_wrong_formula_is_refused(formula: str, said: str) -> None:
    """Contract: the error names what is wrong."""
    with pytest.raises(DataError, match=said):
        parse_formula(formula)


def test_unknown_element_names_the_nearest() -> None:
    """Contract."""
    with pytest.raises(DataError, match="'fe'; did you mean Fe"):
        atomic_weight("fe")


def test_table_guards() -> None:
    """Guard: symbols are unique, weights positive and rising enough, every row has a source."""
    rows = read_csv_rows("elements.csv")
    symbols = [row["symbol"] for row in rows]
    assert len(symbols) == len(set(symbols))
    assert all(float(row["atomic_weight"]) > 1.0 for row in rows)
    assert all(row["source"] for row in rows)
