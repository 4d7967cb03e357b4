"""Saturation of the slag with dicalcium silicate; numbers in data/saturation.toml."""

from __future__ import annotations

from collections.abc import Mapping

from converter_calc.basis import dual as ad
from converter_calc.basis.dual import Num
from converter_calc.basis.units import ZERO_C_K
from converter_calc.data.tables import read_toml
from converter_calc.laws.catalogue import Outside, Range, find_outside, read_ranges
from converter_calc.laws.slag_measures import weighted_sum

ACID = (("SiO2", 1.0), ("P2O5", 1.0))
FLUX = (("FeO", 1.0), ("Fe2O3", 1.0), ("MnO", 1.0), ("MgO", 1.0))


def plane(slag_pct: Mapping[str, Num]) -> tuple[Num, Num]:
    """Where a slag lies on the plane lime - acid - flux.

    slag_pct : mass % by oxide, CaO and SiO2 above 0. Returns (lime/acid, flux [mass % of the
    three]); acid is SiO2 + P2O5, flux FeO + Fe2O3 + MnO + MgO.
    """
    lime, acid, flux = slag_pct["CaO"], weighted_sum(ACID, slag_pct), weighted_sum(FLUX, slag_pct)
    return lime / acid, flux * 100.0 / (lime + acid + flux)


def least_flux_pct(basicity: Num, T_K: Num) -> Num:
    """Least flux that keeps the slag free of solid dicalcium silicate [mass % of the plane].

    basicity : lime/acid of `plane`, 1.3 to 3.2. T_K : temperature [K], 1773 to 1993.
    Source: a parabola through marks of the usual isothermal section at 1600 C, from memory,
    good to about 4 % flux; see the data file.
    """
    data = read_toml("saturation.toml")
    away = ad.square(ad.log(basicity * (1.0 / data["peak_B"]))) * -data["curvature"]
    return away + (T_K - data["reference_T_K"]) * data["per_K"] + data["peak_pct"]


def silicate_margin_pct(slag_pct: Mapping[str, Num], T_K: Num) -> Num:
    """Flux above what dicalcium silicate asks for [mass % of the plane]; negative: saturated.

    slag_pct : mass % by oxide, CaO and SiO2 above 0. T_K : temperature [K]. A slag beyond
    B 3.2 is bound by lime rather than by the silicate. Source: as `least_flux_pct`.
    """
    basicity, flux = plane(slag_pct)
    return flux - least_flux_pct(basicity, T_K)


def ranges() -> tuple[Range, ...]:
    """Ranges of the marks: lime/acid and temperature."""
    return read_ranges(read_toml("saturation.toml"))


def out_of_range(slag_pct: Mapping[str, Num], T_K: Num) -> list[Outside]:
    """Limits that at least one heat leaves: (quantity, low, high, outside)."""
    values = {"basicity": plane(slag_pct)[0], "temperature_C": T_K - ZERO_C_K}
    return find_outside(ranges(), values.get)
