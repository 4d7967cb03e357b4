"""How much each input matters: derivatives of the answer, without solving again.

Implicit differentiation of the residuals at the answer: with R(x, g) = 0,
dx/dg = -(dR/dx)^-1 dR/dg. Both factors come from the same residuals, exactly.
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import Any

import numpy as np

from converter_calc.balance.asks import Ask, evaluate_ask
from converter_calc.balance.heats import HeatTable
from converter_calc.balance.newton import dense
from converter_calc.balance.problem import build_problem
from converter_calc.balance.state import State
from converter_calc.basis import dual as ad
from converter_calc.basis.dual import Array, Num
from converter_calc.planning.outcome import Outcome
from converter_calc.planning.solving import complete_charge, solve_heats, with_values

#: Inputs looked at beside the materials of the charge, with the step the shop thinks in.
INPUTS = {
    "hot_metal_temp_C": (10.0, "10 C hotter hot metal"),
    "hm_C_pct": (0.1, "0.1 % more C in the hot metal"),
    "hm_Si_pct": (0.1, "0.1 % more Si in the hot metal"),
    "hm_Mn_pct": (0.1, "0.1 % more Mn in the hot metal"),
    "hm_P_pct": (0.01, "0.01 % more P in the hot metal"),
    "hot_metal_kg": (1000.0, "1 t more hot metal"),
    "oxygen_Nm3": (100.0, "100 Nm3 more oxygen"),
    "wait_min": (10.0, "10 min longer wait"),
    "post_combustion_ratio": (0.01, "0.01 more post-combustion ratio"),
    "iron_oxide_factor": (0.1, "10 % more iron oxide in the slag"),
    "P_approach": (0.1, "0.1 nearer to phosphorus equilibrium"),
    "aim_temp_C": (10.0, "10 C higher aim temperature"),
    "aim_C_pct": (0.01, "0.01 % higher aim carbon"),
    "aim_P_pct": (0.001, "0.001 % higher aim phosphorus"),
    "aim_basicity": (0.1, "0.1 higher least basicity"),
    "aim_MgO_pct": (1.0, "1 % higher aim MgO"),
}
MATERIAL_STEP_KG = 1000.0


@dataclass(frozen=True)
class Sensitivity:
    """Change of each result for one step of one input: `step` in the input's own unit."""

    input: str
    step: float
    label: str
    change: dict[str, float]


def _steps(heats: HeatTable, *, aims: bool) -> dict[str, tuple[float, str]]:
    """Inputs that this heat gives, with step and label."""
    steps = {}
    for name, entry in INPUTS.items():
        if name.startswith("hm_"):
            known = name.removeprefix("hm_").removesuffix("_pct") in heats.hm_pct
        else:
            known = bool(np.isfinite(heats.values[name]).all())
        if known and (aims or not name.startswith("aim_")):
            steps[name] = entry
    for name, kg in heats.masses_kg.items():
        if np.isfinite(kg).all():
            steps[name + "_kg"] = (MATERIAL_STEP_KG, f"1 t more {name}")
    return steps


def _outputs(state: State, x: dict[str, Num]) -> dict[str, Num]:
    found = {
        "end_temp_C": state.T_K,
        "end_C_pct": state.C_pct,
        "end_P_pct": state.metal_species_kg["P"] * (100.0 / state.metal_kg),
        "steel_kg": state.steel_kg,
    }
    for name in ("scrap_kg", "trim_kg", "lime_kg", "flux_kg", "oxygen_Nm3", "hot_metal_kg"):
        if name in x:
            found[name] = x[name]
    return found


def derivatives(
    heats: HeatTable, ask: Ask, x: dict[str, Array], names: list[str]
) -> dict[str, dict[str, Array]]:
    """Total derivative of each result by each input, (n,) each: {result: {input: d}}.

    Parameters
    ----------
    heats, ask, x : solved heats. names : flat names of numeric inputs, `hm_<El>_pct` or
    `<material>_kg`.
    """
    p = build_problem(heats, seeds=names)
    seeds: dict[str, Any] = {name: ad.seed(values, "x:" + name) for name, values in x.items()}
    state = evaluate_ask(p, ask, seeds)
    residuals = [state.residuals[name] for name in ask.residuals]
    unknown = ["x:" + name for name in ask.unknowns]
    J = dense([[ad.slope(r, name) for name in unknown] for r in residuals], heats.n)
    G = np.zeros((heats.n, len(residuals), len(names)))
    for r, residual in enumerate(residuals):
        for c, name in enumerate(names):
            G[:, r, c] = ad.slope(residual, name)
    dx = -np.linalg.solve(J, G)
    found: dict[str, dict[str, Array]] = {}
    for label, output in _outputs(state, seeds).items():
        by_x = np.zeros((heats.n, len(unknown)))
        for c, name in enumerate(unknown):
            by_x[:, c] = ad.slope(output, name)
        total = np.einsum("nu,nug->ng", by_x, dx)
        found[label] = {name: total[:, c] + ad.slope(output, name) for c, name in enumerate(names)}
    return found


def sensitivities(outcome: Outcome) -> dict[str, list[Sensitivity]]:
    """Sensitivities of one planned (or predicted) heat.

    Returns
    -------
    {"plan": ..., "predict": ...}: what the plan would ask for if an input were other, and
    where the blow would end if an input were other with the charge left as it is.
    """
    found = {}
    if outcome.ask.heat != "T_K":
        found["plan"] = _one(outcome.heats, outcome.ask, outcome.x, aims=True)
        charged = complete_charge(outcome)
    else:
        charged = outcome.heats
    heats = with_values(charged, oxygen_Nm3=outcome.state.oxygen_Nm3)
    ask = Ask(end="root_C", heat="T_K")
    solved = solve_heats(heats, ask)
    found["predict"] = _one(heats, ask, solved.x, aims=False)
    return found


def _one(heats: HeatTable, ask: Ask, x: dict[str, Array], *, aims: bool) -> list[Sensitivity]:
    steps = _steps(heats, aims=aims)
    unknown = set(ask.unknowns)
    names = [name for name in steps if name not in unknown]
    table = derivatives(heats, ask, x, names)
    return [
        Sensitivity(
            name,
            steps[name][0],
            steps[name][1],
            {label: float(row[name][0]) * steps[name][0] for label, row in table.items()},
        )
        for name in names
    ]
