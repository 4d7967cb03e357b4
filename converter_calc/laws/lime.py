"""Lime that the liquid slag can hold; numbers in data/lime.toml."""

from __future__ import annotations

from collections.abc import Mapping

from converter_calc.basis.dual import Num
from converter_calc.data.tables import read_toml
from converter_calc.laws.catalogue import Outside, Range, find_outside, read_ranges
from converter_calc.laws.slag_measures import measure


def dissolution_limit_pct(FetO_pct: Num, T_K: Num) -> Num:
    """Greatest (%CaO) of the liquid slag [mass %]; what is above it stays solid.

    FetO_pct : all iron of the slag as FeO [mass %], about 8 to 35. T_K : temperature [K].
    47 + 0.25 [(%FetO) - 15] + 0.04 (T - 1650 C), for 12 to 16 % SiO2.
    Source: from memory, publication not known here.
    """
    data = read_toml("lime.toml")
    by_iron = (FetO_pct - data["reference_FetO_pct"]) * data["per_FetO"]
    return by_iron + (T_K - data["reference_T_K"]) * data["per_K"] + data["base_CaO_pct"]


def ranges() -> tuple[Range, ...]:
    """Ranges of the rule: SiO2, iron oxide and temperature."""
    return read_ranges(read_toml("lime.toml"))


def out_of_range(slag_pct: Mapping[str, Num], T_K: Num) -> list[Outside]:
    """Limits of the rule that at least one heat leaves: (quantity, low, high, outside)."""
    return find_outside(ranges(), lambda name: measure(name, slag_pct, T_K))
