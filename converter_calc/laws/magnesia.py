"""Magnesia saturation of the slag; numbers in data/magnesia.toml."""

from __future__ import annotations

from converter_calc.basis import dual as ad
from converter_calc.basis.dual import Num
from converter_calc.basis.units import ZERO_C_K
from converter_calc.data.tables import read_toml
from converter_calc.laws.catalogue import Outside, Range, find_outside, read_ranges


def saturation_pct(basicity: Num, T_K: Num) -> Num:
    """(%MgO) at which the slag is saturated with magnesia [mass %], at about 20 % FeO.

    Parameters
    ----------
    basicity : CaO/SiO2 by mass, table 1 to 4. T_K : temperature [K], table 1873 to 1973.

    Returns
    -------
    Num: a + b e + (T - 1923.15)(d + f e), e = exp(-B / 1.021).

    Source: usual isotherms (from memory); fit and its deviation (0.5 % MgO at most) in the
    data file.
    """
    data = read_toml("magnesia.toml")
    fit = data["fit"]
    fall = ad.exp(basicity * (-1.0 / fit["B_scale"]))
    by_T = (T_K - data["reference_T_K"]) * (fall * fit["f"] + fit["d"])
    return fall * fit["b"] + by_T + fit["a"]


def ranges() -> tuple[Range, ...]:
    """Ranges of the table: basicity and temperature."""
    return read_ranges(read_toml("magnesia.toml"))


def out_of_range(basicity: Num, T_K: Num) -> list[Outside]:
    """Limits of the table that at least one heat leaves: (quantity, low, high, outside)."""
    values = {"basicity": basicity, "temperature_C": T_K - ZERO_C_K}
    return find_outside(ranges(), values.get)
