"""The state at the end of the blow, written once for every question.

`evaluate` takes the givens of n heats and values for the unknowns and works out everything
else in closed form: totals charged, slag, metal, gas, dust, enthalpies, and the residuals
that are zero at the answer. Which quantities are unknown is not its business.

Unknowns (any of them may be a given instead): T_K, root_C (end carbon [mass %] to the power
-1/2, in which the oxygen bound as iron oxide is nearly straight), slag_kg (liquid slag),
metal_kg (steel + droplets + ejections), f_Mn and f_P (share of the element in the slag),
oxygen_Nm3, hot_metal_kg, scrap_kg, lime_kg, flux_kg, trim_kg (coolant if positive, fuel if
negative), heat_loss_J.
"""

from __future__ import annotations

from collections.abc import Mapping

from converter_calc.balance.heat import add_heat
from converter_calc.balance.intake import add_charge
from converter_calc.balance.problem import Problem
from converter_calc.balance.products import add_dust, add_gas, share_out
from converter_calc.balance.state import State
from converter_calc.basis import dual as ad
from converter_calc.basis.dual import Num
from converter_calc.basis.units import ZERO_C_K


def evaluate(p: Problem, x: Mapping[str, Num]) -> State:
    """State and residuals of n heats.

    Parameters
    ----------
    p : the givens. x : unknowns by name, arrays (n,) or Dual.

    Returns
    -------
    State, with dimensionless residuals slag, metal, Mn, P, O and heat (all zero at the
    answer). Source: conservation of mass and energy; laws as named in `p.laws`.
    """
    s = State()
    s.T_K = x["T_K"] if "T_K" in x else p.values["aim_temp_C"] + ZERO_C_K
    s.C_pct = 1.0 / ad.square(x["root_C"]) if "root_C" in x else p.values["aim_C_pct"]
    s.slag_kg, s.metal_kg = x["slag_kg"], x["metal_kg"]
    _metal_lots(p, s)
    add_charge(p, x, s)
    add_dust(p, s)
    share_out(p, x, s)
    add_gas(p, s)
    add_heat(p, x, s)
    return s


def _metal_lots(p: Problem, s: State) -> None:
    """Split the metal into steel, droplets in the slag and ejections."""
    s.droplets_kg = p.pinned("droplets_kg", lambda: s.slag_kg * (p.values["droplets_pct"] * 0.01))
    share = p.values["ejections_kg_per_t"] * 1e-3
    rest = s.metal_kg - s.droplets_kg
    s.ejections_kg = p.pinned("ejections_kg", lambda: rest * (share / (1.0 + share)))
    s.steel_kg = rest - s.ejections_kg
