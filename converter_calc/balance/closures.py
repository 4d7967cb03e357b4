"""Conditions that a plan adds to the balance, one for each quantity it sets free.

Each is a residual like those of the balance. "At least" conditions are complementarity
conditions: the flux is not negative, the demand is met, and one of the two just holds.
"""

from __future__ import annotations

from collections.abc import Mapping

from converter_calc.balance.problem import Problem
from converter_calc.balance.products import LIME_CORNER
from converter_calc.balance.state import State
from converter_calc.basis import dual as ad
from converter_calc.basis.dual import Num
from converter_calc.basis.tolerances import CORNER
from converter_calc.laws import magnesia


def add_closures(p: Problem, x: Mapping[str, Num], s: State, names: tuple[str, ...]) -> None:
    """Put the residuals `names` into `s.residuals` (those of the balance are there already)."""
    makers = {"lime": lime, "lime_limit": lime_limit, "MgO": magnesia_flux, "steel": steel}
    for name in names:
        if name not in s.residuals:
            s.residuals[name] = makers[name](p, x, s)


def phosphorus_margin(p: Problem, s: State) -> Num:
    """(aim P - end P) / aim P: negative where the steel holds too much phosphorus."""
    aim = p.values["aim_P_pct"]
    return (aim - s.metal_species_kg["P"] * (100.0 / s.metal_kg)) / aim


def basicity_margin(p: Problem, s: State) -> Num:
    """(B - least B) / least B."""
    return s.basicity / p.values["aim_basicity"] - 1.0


def lime(p: Problem, x: Mapping[str, Num], s: State) -> Num:
    """Lime follows the phosphorus aim or the least basicity, whichever asks for more."""
    demand = basicity_margin(p, s)
    if "aim_P_pct" in p.values and "P" in s.metal_species_kg:
        both = ad.fischer_burmeister(phosphorus_margin(p, s), demand, CORNER)
        mask = p.mask("aim_P_pct")
        demand = both if mask is True else ad.where(mask, both, demand)
    residual = ad.fischer_burmeister(x["lime_kg"] * (50.0 / p.scale_kg), demand, CORNER)
    for pin, have in (
        ("pin_basicity", s.basicity),
        ("pin_slag_CaO_pct", s.slag_species_kg["CaO"] * (100.0 / s.slag_kg)),
    ):
        if pin in p.values:
            mask, met = p.mask(pin), have / p.values[pin] - 1.0
            residual = met if mask is True else ad.where(mask, met, residual)
    return residual


def lime_limit(p: Problem, _: Mapping[str, Num], s: State) -> Num:
    """Lime up to the point where it stops dissolving (the middle of the rounded corner)."""
    lumps = p.values["undissolved_lime_pct"] * 0.01
    dissolved = s.slag_pct["CaO"] * (s.slag_kg * 0.01)
    whole = (dissolved + s.undissolved_kg) * (1.0 - lumps)
    return (whole - dissolved) / s.slag_kg - 0.5 * LIME_CORNER


def magnesia_aim_pct(p: Problem, s: State) -> Num:
    """(%MgO) wanted: the aim, else saturation at the end of the blow times a factor."""

    def saturation() -> Num:
        sat = magnesia.saturation_pct(s.liquid_basicity, s.T_K)
        return sat * p.values["MgO_saturation_factor"]

    aim = p.get("aim_MgO_pct")
    if aim is None:
        return saturation()
    mask = p.mask("aim_MgO_pct")
    return aim if mask is True else ad.where(mask, aim, saturation())


def magnesia_flux(p: Problem, x: Mapping[str, Num], s: State) -> Num:
    """Magnesia flux follows the MgO aim or saturation."""
    margin = s.slag_pct["MgO"] / magnesia_aim_pct(p, s) - 1.0
    residual = ad.fischer_burmeister(x["flux_kg"] * (50.0 / p.scale_kg), margin, CORNER)
    if "pin_slag_MgO_pct" in p.values:
        mask = p.mask("pin_slag_MgO_pct")
        met = s.slag_pct["MgO"] / p.values["pin_slag_MgO_pct"] - 1.0
        residual = met if mask is True else ad.where(mask, met, residual)
    return residual


def steel(p: Problem, _: Mapping[str, Num], s: State) -> Num:
    """Tapped steel is the weight asked for."""
    return s.steel_kg / p.values["aim_steel_kg"] - 1.0
