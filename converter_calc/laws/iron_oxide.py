"""Iron oxide of the slag against carbon at the end of the blow; data/iron_oxide.toml."""

from __future__ import annotations

from converter_calc.basis import dual as ad
from converter_calc.basis.dual import Num
from converter_calc.data.tables import read_toml
from converter_calc.laws.catalogue import Outside, Range, find_outside, pick, read_ranges
from converter_calc.laws.slag_measures import measure


def total_iron_pct(C_pct: Num, T_K: Num, blowing: str = "combined", factor: Num = 1.0) -> Num:
    """Total iron of the slag (%T.Fe) [mass %] at the end of the blow.

    Parameters
    ----------
    C_pct : carbon of the metal [mass %], table 0.02 to 0.40, finite at 0.
    T_K : temperature [K]. blowing : "top", "combined" or "bottom".
    factor : the shop's own factor on the whole.

    Returns
    -------
    Num: factor x (a + b x + c x^2 + 0.0571 dT), x = (C^2 + 0.005^2)^(-1/4), close to
    1/sqrt(C); dT = T - 1923.15 levels off smoothly at 150 K (0.3 % less at 50 K), beyond which
    nothing is known and a straight line would let a hot heat run away.

    Raises
    ------
    DataError : unknown way of blowing.

    Source: common practice, no source; table, fit and its deviation in the data file.
    """
    data = read_toml("iron_oxide.toml")
    fit = pick(data["fit"], blowing, "way of blowing")
    floor = data["C_floor_pct"]
    x = 1.0 / ad.sqrt(ad.sqrt(ad.square(C_pct) + floor * floor))
    rise = T_K - data["reference_T_K"]
    fourth = ad.square(ad.square(rise * (1.0 / data["T_span_K"])))
    bounded = rise / ad.sqrt(ad.sqrt(fourth + 1.0))
    iron = (x * fit["c"] + fit["b"]) * x + bounded * data["per_K"]
    return (iron + fit["a"]) * factor


def ferric_share_pct() -> float:
    """Default share of the slag's iron that is Fe2O3 [%]. Source: common practice, no source."""
    return float(read_toml("iron_oxide.toml")["ferric_share_pct"])


def ranges() -> tuple[Range, ...]:
    """Ranges of the table: carbon and temperature."""
    return read_ranges(read_toml("iron_oxide.toml"))


def out_of_range(C_pct: Num, T_K: Num) -> list[Outside]:
    """Limits of the table that at least one heat leaves: (quantity, low, high, outside)."""
    return find_outside(ranges(), lambda name: measure(name, {}, T_K, C_pct))
