"""Oxygen dissolved in the steel at the end of the blow; numbers in data/carbon_oxygen.toml."""

from __future__ import annotations

from collections.abc import Mapping
from functools import cache
from typing import Any

import numpy as np

from converter_calc.basis import dual as ad
from converter_calc.basis.dual import LN10, Dual, Num
from converter_calc.data.tables import read_toml
from converter_calc.laws.catalogue import LawNote, Outside, find_outside, pick, read_note
from converter_calc.laws.slag_measures import measure

#: Halley steps for the implicit oxygen; the third leaves rounding only (checked in the tests).
HALLEY_STEPS = 3
LARGEST_Z = float(np.exp(-1.0))


@cache
def _rows() -> dict[str, dict[str, Any]]:
    return {row["name"]: row for row in read_toml("carbon_oxygen.toml")["law"]}


def laws() -> list[str]:
    """Names of the carbon-oxygen laws."""
    return list(_rows())


def describe(law: str) -> LawNote:
    """Formula text, source and range of a law. Raises DataError: unknown law."""
    row = pick(_rows(), law, "carbon-oxygen law")
    return read_note(row, row["formula"].format_map(row))


def blowing_kinds() -> list[str]:
    """Ways of blowing with their own data: top, combined, bottom."""
    entries = read_toml("carbon_oxygen.toml")["blowing"]
    return [name for name, entry in entries.items() if isinstance(entry, dict)]


@cache
def equilibrium_product(T_K: float) -> float:
    """[%C][%O] at 1 atm CO and infinite dilution, (mass %)^2, by jsps_1988 at T [K]."""
    row = _rows()["jsps_1988"]
    return float(10.0 ** -(row["per_T"] / T_K + row["constant"]))


@cache
def effective_pressure_atm(blowing: str) -> float:
    """Effective CO pressure [atm] of a way of blowing.

    With it jsps_1988 gives the [%C][%O] of that way of blowing at 0.04 % C and 1650 C.
    Raises DataError: unknown way of blowing. Source of the products: common practice, no
    source.
    """
    row, product = _rows()["jsps_1988"], _product(blowing)
    reference = read_toml("carbon_oxygen.toml")["blowing"]
    carbon = reference["reference_C_pct"]
    by_carbon, by_oxygen = row["e_C_C"] + row["e_O_C"], row["e_C_O"] + row["e_O_O"]
    log_f = by_carbon * carbon + by_oxygen * (product / carbon)
    return float(product / equilibrium_product(reference["reference_T_K"]) * 10.0**log_f)


def _product(blowing: str) -> float:
    kinds = {name: read_toml("carbon_oxygen.toml")["blowing"][name] for name in blowing_kinds()}
    return float(pick(kinds, blowing, "way of blowing")["product"])


def _pressure(p_CO_atm: Num | None, blowing: str) -> Num:
    """The given pressure; that of the way of blowing where it is None or NaN."""
    default = effective_pressure_atm(blowing)
    if p_CO_atm is None:
        return default
    if isinstance(p_CO_atm, float | int):
        return default if np.isnan(p_CO_atm) else p_CO_atm
    return ad.where(np.isnan(ad.value(p_CO_atm)), default, p_CO_atm)


def saturated_oxygen_pct(T_K: Num, law: str = "taylor_chipman") -> Num:
    """[%O] of liquid iron in equilibrium with liquid iron oxide [mass %].

    T_K : temperature [K], about 1800 to 2050. law : "taylor_chipman" or "textbook".
    Raises DataError: unknown law. Source: C.R. Taylor, J. Chipman, Trans. AIME 154 (1943)
    228 (from memory); log[%O] = -6320/T + 2.734.
    """
    row = pick(read_toml("carbon_oxygen.toml")["saturation"], law, "oxygen saturation law")
    return ad.exp(row["per_T"] * LN10 / T_K + row["constant"] * LN10)


def _smallest_root(z: Num) -> Num:
    """The root y <= 1 of y = z exp(y), for 0 <= z < 1/e.

    Starts from a fraction that agrees with the series z + z^2 + 3/2 z^3 + 8/3 z^4, then takes
    Halley steps. The derivative is that of the equation, y / (z (1 - y)), not of the steps.
    """
    plain = np.minimum(ad.value(z), LARGEST_Z)
    y = plain / (1.0 - plain * (1.0 + plain * (0.5 + plain * (2.0 / 3.0))))
    for _ in range(HALLEY_STEPS):
        power = plain * np.exp(y)
        miss, slope = y - power, 1.0 - power
        y = y - 2.0 * miss * slope / (2.0 * slope * slope + miss * power)
    return z.chain(y, y / (plain * (1.0 - y))) if isinstance(z, Dual) else y


def _effective_carbon(C_pct: Num) -> Num:
    floor = read_toml("carbon_oxygen.toml")["floor"]["C_pct"]
    return ad.sqrt(ad.square(C_pct) + floor * floor)


def _limited(free: Num, limit: Num, corner: float) -> Num:
    """Smooth minimum, rounded in proportion to the smaller of the two."""
    return ad.smooth_min(free, limit, free * limit / (free + limit) * corner)


def _jsps(row: Mapping[str, Any], carbon: Num, T_K: Num, p_CO: Num, corner: float) -> Num:
    """[O] = A 10^(b [O]); A limited to the value that belongs to saturation."""
    by_carbon = -(row["e_C_C"] + row["e_O_C"]) * LN10
    by_oxygen = -(row["e_C_O"] + row["e_O_O"]) * LN10
    exponent = carbon * by_carbon - row["per_T"] * LN10 / T_K - row["constant"] * LN10
    free = ad.exp(exponent) * p_CO / carbon
    saturated = saturated_oxygen_pct(T_K)
    limit = saturated * ad.exp(saturated * -by_oxygen)
    return _smallest_root(_limited(free, limit, corner) * by_oxygen) / by_oxygen


def dissolved_oxygen_pct(
    law: str, C_pct: Num, T_K: Num, p_CO_atm: Num | None = None, blowing: str = "combined"
) -> Num:
    """Oxygen dissolved in the steel, [%O] in mass %, never above saturation with iron oxide.

    Parameters
    ----------
    law : "jsps_1988", "effective_product" or "turkdogan_1996".
    C_pct : carbon of the metal [mass %], 0 to about 1; the law sees sqrt(C^2 + 1e-12).
    T_K : temperature [K], about 1800 to 2050.
    p_CO_atm : effective CO pressure [atm]; None or NaN = that of the way of blowing. It
    scales "effective_product" too; "turkdogan_1996" takes no notice of it.
    blowing : "top", "combined" or "bottom".

    Returns
    -------
    Num. jsps_1988 solves [%O] f_O [%C] f_C = p_CO / K with f from first-order interaction.
    Saturation is a smooth minimum whose corner is 0.05 % of it wide, which moves [O] by less
    than 2e-6 of itself while it stays below 90 % of saturation.

    Raises
    ------
    DataError : unknown law or way of blowing.

    Source: JSPS, Steelmaking Data Sourcebook, 1988; E.T. Turkdogan, Fundamentals of
    Steelmaking, 1996 (both from memory); products: common practice, no source.
    """
    row = pick(_rows(), law, "carbon-oxygen law")
    corner = read_toml("carbon_oxygen.toml")["floor"]["saturation_corner"]
    carbon = _effective_carbon(C_pct)
    if law == "jsps_1988":
        return _jsps(row, carbon, T_K, _pressure(p_CO_atm, blowing), corner)
    if law == "effective_product":
        per_atm = _product(blowing) / effective_pressure_atm(blowing)
        free = _pressure(p_CO_atm, blowing) * per_atm / carbon
    else:
        pick(dict.fromkeys(blowing_kinds()), blowing, "way of blowing")
        free = row[blowing] * 1e-4 / ad.sqrt(carbon)
    saturated = saturated_oxygen_pct(T_K)
    return _limited(free, saturated, corner)


def out_of_range(law: str, C_pct: Num, T_K: Num) -> list[Outside]:
    """Limits of the law that at least one heat leaves: (quantity, low, high, outside)."""
    return find_outside(describe(law).ranges, lambda name: measure(name, {}, T_K, C_pct))
