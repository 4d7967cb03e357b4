"""How much each input matters: derivatives of the answer, without solving again.

Implicit differentiation of the residuals at the answer: with R(x, g) = 0,
dx/dg = -(dR/dx)^-1 dR/dg. Both factors come from the same residuals, exactly.
"""

from __future__ import annotations

from collections.abc import Callable, Mapping, Sequence
from dataclasses import dataclass
from typing import Any

import numpy as np

from converter_calc.balance.asks import Ask, evaluate_ask
from converter_calc.balance.heats import HeatTable
from converter_calc.balance.newton import dense, residual_norm
from converter_calc.balance.problem import Problem, build_problem
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


def _outputs(p: Problem, state: State, x: Mapping[str, Num]) -> dict[str, Num]:
    found = {
        "end_temp_C": state.T_K,
        "end_C_pct": state.C_pct,
        "end_P_pct": state.metal_species_kg["P"] * (100.0 / state.metal_kg),
        "steel_kg": state.steel_kg,
    }
    for name in ("scrap_kg", "trim_kg", "lime_kg", "flux_kg"):
        if name in x:
            found[name] = x[name]
    for name, meter in (("oxygen_Nm3", "oxygen"), ("hot_metal_kg", "hot_metal")):
        if name in x:
            found[name] = p.read(meter, x[name])
    return found


#: Quantities of a solved state, from the givens, the state and the unknowns.
Outputs = Callable[[Problem, State, Mapping[str, Num]], Mapping[str, Num]]


@dataclass(frozen=True)
class Response:
    """How n solved heats answer to their inputs.

    values : each quantity, (n,). slopes : its total derivative by each input, (n, k).
    unknowns : unknowns after one more Newton step, (n,) each. unknown_slopes : their
    derivatives, (n, unknowns, k). residual : largest residual before that step, (n,).
    """

    values: dict[str, Array]
    slopes: dict[str, Array]
    unknowns: dict[str, Array]
    unknown_slopes: Array
    residual: Array


def derivatives(
    heats: HeatTable, ask: Ask, x: dict[str, Array], names: list[str]
) -> dict[str, dict[str, Array]]:
    """Total derivative of each result by each input, (n,) each: {result: {input: d}}.

    Parameters
    ----------
    heats, ask, x : solved heats. names : flat names of numeric inputs, `hm_<El>_pct` or
    `<material>_kg`.
    """
    found = response(build_problem(heats, seeds=names), ask, x, names, _outputs)
    return {
        label: {name: slopes[:, c] for c, name in enumerate(names)}
        for label, slopes in found.slopes.items()
    }


def response(
    p: Problem, ask: Ask, x: Mapping[str, Array], names: Sequence[str], outputs: Outputs
) -> Response:
    """Answer of solved heats to their inputs, by the theorem of the implicit function.

    Parameters
    ----------
    p : givens, built with `names` as seeds. ask, x : question and its unknowns, solved.
    names : inputs. outputs : quantities wanted. Heats whose Jacobian is singular come out as
    NaN.
    """
    n = p.n
    seeds: dict[str, Any] = {name: ad.seed(values, "x:" + name) for name, values in x.items()}
    state = evaluate_ask(p, ask, seeds)
    residuals = [state.residuals[name] for name in ask.residuals]
    unknown = ["x:" + name for name in ask.unknowns]
    right = np.zeros((n, len(residuals), 1 + len(names)))
    for r, residual in enumerate(residuals):
        right[:, r, 0] = ad.value(residual)
        for c, name in enumerate(names):
            right[:, r, 1 + c] = ad.slope(residual, name)
    J = dense([[ad.slope(r, name) for name in unknown] for r in residuals], n)
    moves = -_solved(J, right)
    dx = moves[:, :, 1:]
    values, slopes = {}, {}
    for label, output in outputs(p, state, seeds).items():
        by_x = np.zeros((n, len(unknown)))
        for c, name in enumerate(unknown):
            by_x[:, c] = ad.slope(output, name)
        total = np.matmul(by_x[:, None, :], dx)[:, 0, :]
        for c, name in enumerate(names):
            total[:, c] += ad.slope(output, name)
        values[label] = np.array(np.broadcast_to(ad.value(output), (n,)), dtype=float)
        slopes[label] = total
    return Response(
        values,
        slopes,
        {name: x[name] + moves[:, c, 0] for c, name in enumerate(ask.unknowns)},
        dx,
        residual_norm([ad.value(r) for r in residuals], (n,)),
    )


def _solved(J: Array, right: Array) -> Array:
    """J^-1 right; NaN for a heat whose matrix is singular or not finite."""
    bad = ~(np.isfinite(J).all(axis=(1, 2)) & np.isfinite(right).all(axis=(1, 2)))
    if bad.any():
        J = J.copy()
        J[bad] = np.eye(J.shape[1])
    try:
        found: Array = np.linalg.solve(J, right)
    except np.linalg.LinAlgError:
        singular = np.linalg.matrix_rank(J) < J.shape[1]
        bad |= singular
        J = np.where(singular[:, None, None], np.eye(J.shape[1]), J)
        found = np.linalg.solve(J, right)
    found[bad] = np.nan
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
    heats = with_values(charged, oxygen_Nm3=outcome.oxygen_Nm3)
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
