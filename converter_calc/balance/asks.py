"""What is asked: which quantities are unknown, and the condition that each one answers to.

Predict and every way of planning are rows of one table; the equations are the same.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from converter_calc.balance.charge import ENTHALPY, TEMPERATURE
from converter_calc.balance.closures import add_closures
from converter_calc.balance.evaluation import evaluate
from converter_calc.balance.newton import Reach, Unknowns
from converter_calc.balance.problem import Problem
from converter_calc.balance.state import State
from converter_calc.basis.dual import Array, Num
from converter_calc.basis.units import ZERO_C_K


@dataclass(frozen=True)
class Ask:
    """Unknowns, each beside the residual it is paired with in the elimination.

    end : what the oxygen balance gives ("oxygen_Nm3" or "root_C"). heat : what the energy
    balance gives ("T_K", "scrap_kg", "trim_kg" or "heat_loss_J"). lime, flux, hot_metal :
    whether these are free; lime_rule : the condition that lime answers to.
    """

    end: str = "oxygen_Nm3"
    heat: str = "T_K"
    lime: bool = False
    flux: bool = False
    hot_metal: bool = False
    lime_rule: str = "lime"

    @property
    def pairs(self) -> tuple[tuple[str, str], ...]:
        """(unknown, residual) in the order of elimination."""
        pairs = [("metal_kg", "metal"), ("slag_kg", "slag"), ("f_Mn", "Mn"), ("f_P", "P")]
        if self.lime:
            pairs.append(("lime_kg", self.lime_rule))
        if self.flux:
            pairs.append(("flux_kg", "MgO"))
        pairs += [(self.end, "O"), (self.heat, "heat")]
        if self.hot_metal:
            pairs.append(("hot_metal_kg", "steel"))
        return tuple(pairs)

    @property
    def unknowns(self) -> tuple[str, ...]:
        """Names of the unknowns."""
        return tuple(name for name, _ in self.pairs)

    @property
    def residuals(self) -> tuple[str, ...]:
        """Names of the residuals."""
        return tuple(name for _, name in self.pairs)


def evaluate_ask(p: Problem, ask: Ask, x: dict[str, Num]) -> State:
    """State of n heats with every residual that the ask needs."""
    state = evaluate(p, x)
    add_closures(p, x, state, ask.residuals)
    return state


def first_guess(p: Problem, ask: Ask) -> Unknowns:
    """A rough heat to start from: shares of hot metal seen in ordinary practice."""
    n = p.n
    scale = np.broadcast_to(np.asarray(p.scale_kg, dtype=float), (n,))
    hot_metal = scale * 0.85 if ask.hot_metal else _array(p.values["hot_metal_kg"], n)
    silicon = _array(p.hot_metal_pct.get("Si", 0.0), n) * 0.01 * hot_metal
    charged = hot_metal * 0.94
    for name, kg in p.fixed.items():
        if name in p.contents:
            charged = charged + _array(kg, n) * p.contents[name].elements.get("Fe", 0.0) * 0.97
    scrap = hot_metal * 0.22
    if ask.heat == "scrap_kg":
        charged = charged + scrap
    else:  # blank where another heat of the table gives it
        share = np.nan_to_num(_array(p.values.get("scrap_share_pct", 0.0), n)) * 0.01
        charged = charged + hot_metal * share / (1.0 - share)
        charged = charged + np.nan_to_num(_array(p.values.get("scrap_kg", 0.0), n))
    guesses = {
        "metal_kg": np.maximum(charged, 0.05 * scale),
        "slag_kg": 0.03 * hot_metal + 9.0 * silicon + _slag_back_kg(p, n),
        "f_Mn": np.full(n, 0.7),
        "f_P": np.full(n, 0.88),
        "lime_kg": 0.01 * hot_metal + 5.0 * silicon,
        "flux_kg": 0.012 * hot_metal,
        "oxygen_Nm3": 0.052 * hot_metal,
        "root_C": np.full(n, 0.06**-0.5),
        "T_K": np.full(n, 1650.0 + ZERO_C_K),
        "scrap_kg": scrap,
        "trim_kg": 0.002 * hot_metal,
        "heat_loss_J": 0.5e5 * hot_metal,
        "hot_metal_kg": hot_metal,
    }
    return {name: np.array(guesses[name], dtype=float) for name in ask.unknowns}


def _slag_back_kg(p: Problem, n: int) -> Array:
    """Slag that is in the vessel from before."""
    back = np.nan_to_num(_array(p.values.get("retained_slag_kg", 0.0), n))
    for key, kg in p.returned.items():
        if key.startswith("slag_kept:") and not key.endswith((ENTHALPY, TEMPERATURE)):
            back = back + _array(kg, n)
    return back


def _array(x: Num, n: int) -> Array:
    return np.broadcast_to(np.asarray(x, dtype=float), (n,))


#: How far one Newton step may go; wide enough never to bind near the answer.
REACH = {
    "metal_kg": Reach(share=0.6, low=0.0),
    "slag_kg": Reach(share=0.6, low=0.0),
    "f_Mn": Reach(low=0.0, high=1.0),
    "f_P": Reach(low=0.0, high=1.0),
    "oxygen_Nm3": Reach(share=0.8, low=0.0),
    "root_C": Reach(share=0.6, low=0.38, high=400.0),
    "T_K": Reach(step=250.0, low=1200.0, high=2900.0),
    "hot_metal_kg": Reach(share=0.6, low=0.0),
}
