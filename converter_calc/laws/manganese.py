"""Manganese partition between slag and metal; numbers in data/manganese.toml."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass
from functools import cache
from typing import Any

from converter_calc.basis import dual as ad
from converter_calc.basis.dual import LN10, Num
from converter_calc.basis.elements import molar_mass
from converter_calc.data.tables import read_toml
from converter_calc.laws.catalogue import LawNote, Outside, find_outside, pick, read_note
from converter_calc.laws.slag_measures import measure, share_of, weighted_sum


@dataclass(frozen=True)
class _Law:
    """Coefficients times ln 10; factor brings k to (%Mn)/[%Mn] per % iron oxide."""

    iron_oxide: str
    factor: float
    linear: tuple[tuple[str, float], ...]
    per_T: float
    constant: float
    note: LawNote


@cache
def _table() -> dict[str, _Law]:
    return {row["name"]: _compile(row) for row in read_toml("manganese.toml")["law"]}


def _compile(row: Mapping[str, Any]) -> _Law:
    linear = row.get("linear", {})
    text = " ".join(f"{c:+g}(%{oxide})" for oxide, c in linear.items())
    iron, mole = row["iron_oxide"], row["basis"] == "mole"
    left = f"X_MnO/([%Mn] X_{iron})" if mole else f"(%MnO)/([%Mn](%{iron}))"
    molar = molar_mass("MnO") / molar_mass("FeO") if mole else 1.0
    return _Law(
        iron_oxide=iron,
        factor=share_of("Mn", "MnO") * molar,
        linear=tuple((oxide, c * LN10) for oxide, c in linear.items()),
        per_T=row["per_T"] * LN10,
        constant=row["constant"] * LN10,
        note=read_note(row, f"log{{{left}}} = {text} {row['per_T']:+g}/T {row['constant']:+g}"),
    )


def laws() -> list[str]:
    """Names of the manganese laws."""
    return list(_table())


def describe(law: str) -> LawNote:
    """Formula text, source and range of a law. Raises DataError: unknown law."""
    return pick(_table(), law, "manganese law").note


def equilibrium_constant(law: str, slag_pct: Mapping[str, Num], T_K: Num) -> Num:
    """Constant k as the law prints it, per mass % of iron oxide (or ratio of mole fractions).

    slag_pct : mass % by oxide. T_K : temperature [K]. Raises DataError: unknown law.
    """
    row = pick(_table(), law, "manganese law")
    exponent = row.per_T / T_K + row.constant
    if row.linear:
        exponent = exponent + weighted_sum(row.linear, slag_pct)
    return ad.exp(exponent)


def partition_ratio(law: str, slag_pct: Mapping[str, Num], T_K: Num) -> Num:
    """L_Mn = (%Mn)/[%Mn] at equilibrium by the named law, dimensionless.

    Parameters
    ----------
    law : a name of `laws()`. slag_pct : mass % of the liquid slag by oxide, numbers, (n,) or
    Dual; absent = 0. T_K : temperature [K].

    Returns
    -------
    Num: share of Mn in MnO x k x (%FetO), or x (%FeO) where the law counts ferrous oxide.

    Raises
    ------
    DataError : unknown law.

    Source: of each law in its data row, see `describe`.
    """
    row = pick(_table(), law, "manganese law")
    iron = weighted_sum(((row.iron_oxide, row.factor),), slag_pct)
    return equilibrium_constant(law, slag_pct, T_K) * iron


def out_of_range(law: str, slag_pct: Mapping[str, Num], T_K: Num) -> list[Outside]:
    """Limits of the law that at least one heat leaves: (quantity, low, high, outside)."""
    return find_outside(describe(law).ranges, lambda name: measure(name, slag_pct, T_K))
