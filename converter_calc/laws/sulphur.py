"""Sulphur partition through sulphide capacity; numbers in data/sulphur.toml."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass
from functools import cache
from typing import Any

from converter_calc.basis import dual as ad
from converter_calc.basis.dual import LN10, Num
from converter_calc.data.tables import read_toml
from converter_calc.laws.catalogue import LawNote, Outside, find_outside, pick, read_note
from converter_calc.laws.slag_measures import measure, optical_basicity, weighted_sum


@dataclass(frozen=True)
class _Law:
    scale: str
    constant: float
    lambda_1: float
    lambda_2: float
    per_T: float
    lambda_per_T: float
    linear: tuple[tuple[str, float], ...]
    note: LawNote


@cache
def _table() -> dict[str, _Law]:
    return {row["name"]: _compile(row) for row in read_toml("sulphur.toml")["law"]}


def _compile(row: Mapping[str, Any]) -> _Law:
    linear = row.get("linear", {})
    text = (
        f"log C_S = {row['constant']:g} {row['lambda_1']:+g} L {row['lambda_2']:+g} L^2 "
        f"+ ({row['per_T']:g} {row['lambda_per_T']:+g} L)/T "
        + " ".join(f"{c:+g}(%{oxide})" for oxide, c in linear.items())
        + f", L = optical basicity ({row['optical_basicity']} scale)"
    )
    return _Law(
        scale=row["optical_basicity"],
        constant=row["constant"],
        lambda_1=row["lambda_1"],
        lambda_2=row["lambda_2"],
        per_T=row["per_T"],
        lambda_per_T=row["lambda_per_T"],
        linear=tuple(linear.items()),
        note=read_note(row, text),
    )


def laws() -> list[str]:
    """Names of the sulphur laws."""
    return list(_table())


def describe(law: str) -> LawNote:
    """Formula text, source and range of a law. Raises DataError: unknown law."""
    return pick(_table(), law, "sulphur law").note


def log10_capacity(law: str, slag_pct: Mapping[str, Num], T_K: Num) -> Num:
    """Decimal logarithm of the sulphide capacity C_S (mass % basis).

    slag_pct : mass % by oxide, numbers, (n,) or Dual. T_K : temperature [K].
    Raises DataError: unknown law. Source: of each law in its data row.
    """
    row = pick(_table(), law, "sulphur law")
    basic = optical_basicity(slag_pct, row.scale)
    result = basic * row.lambda_1 + row.constant
    if row.lambda_2:
        result = result + ad.square(basic) * row.lambda_2
    by_T = basic * row.lambda_per_T + row.per_T if row.lambda_per_T else row.per_T
    result = result + by_T / T_K
    return result + weighted_sum(row.linear, slag_pct) if row.linear else result


def partition_ratio(law: str, slag_pct: Mapping[str, Num], T_K: Num, aO_pct: Num, fS: Num) -> Num:
    """L_S = (%S)/[%S] at equilibrium, dimensionless.

    Parameters
    ----------
    law : a name of `laws()`. slag_pct : mass % by oxide; absent = 0. T_K : temperature [K].
    aO_pct : henrian activity of dissolved oxygen, mass % scale, above 0. fS : activity
    coefficient of sulphur in the metal.

    Returns
    -------
    Num: log L_S = log C_S - 935/T + 1.375 + log f_S - log a_O.

    Raises
    ------
    DataError : unknown law.

    Source: capacity as in `log10_capacity`; step to L_S in data/sulphur.toml.
    """
    step = read_toml("sulphur.toml")["partition"]
    exponent = log10_capacity(law, slag_pct, T_K) + (step["per_T"] / T_K + step["constant"])
    return ad.exp(exponent * LN10) * fS / aO_pct


def out_of_range(law: str, slag_pct: Mapping[str, Num], T_K: Num) -> list[Outside]:
    """Limits of the law that at least one heat leaves: (quantity, low, high, outside)."""
    scale = pick(_table(), law, "sulphur law").scale
    return find_outside(
        describe(law).ranges, lambda name: measure(name, slag_pct, T_K, scale=scale)
    )
