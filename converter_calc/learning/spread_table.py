"""Spread of many heats at once: the chances of each heat of a table."""

from __future__ import annotations

from typing import TYPE_CHECKING, Any

import numpy as np

from converter_calc.balance.asks import evaluate_ask
from converter_calc.balance.heats import HeatTable, heats_from_frame
from converter_calc.balance.problem import build_problem
from converter_calc.balance.solving import Memory, solve_ask
from converter_calc.basis.dual import Array
from converter_calc.learning.errors_of_inputs import (
    ErrorModel,
    Extra,
    error_model,
)
from converter_calc.learning.spread import PREDICT, charge_of
from converter_calc.learning.spread_draws import end_points, normal_draws, plan_draws
from converter_calc.learning.spread_numbers import all_hits, interval, windows_of
from converter_calc.learning.spread_truth import of_heats, true_heats
from converter_calc.planning.grading import with_grade_aims
from converter_calc.planning.outcome import Outcome
from converter_calc.planning.plan import plan_heats, predict_heats

if TYPE_CHECKING:
    import pandas as pd

#: Draws of all heats solved at once.
ROWS_AT_ONCE = 32768
#: Results of which a table shows mean and standard deviation.
SHOWN = ("end_temp_C", "end_C_pct", "end_P_pct", "end_Mn_pct")
WINDOWS = ("end_temp_C", "end_C_pct", "end_P_pct", "end_Mn_pct", "end_S_pct")


def spread_table(
    heats: Any,
    shop: Any = None,
    draws: int = 512,
    seed: int = 1,
    *,
    extra: Extra | None = None,
    charged: bool = False,
) -> pd.DataFrame:
    """Chances of each heat of a table, in the same order and with the same index.

    Parameters
    ----------
    heats : pandas DataFrame (columns as for `plan`) or HeatTable. shop : shop file or dict for
    a DataFrame. draws, seed : of each heat; all heats see the same draws, so that they can be
    compared. extra, charged : as in `spread`.

    Returns
    -------
    DataFrame: heat_id, status as of the plan, chance_all and chance_<result> (0 to 1, NaN where
    there is no aim), chance_all_half_interval, and <result>_mean and _sd.

    Raises InputError for wrong input.
    """
    import pandas as pd

    index = getattr(heats, "index", None)
    table = heats if isinstance(heats, HeatTable) else heats_from_frame(heats, shop=shop)
    names = ["chance_all", "chance_all_half_interval", *(f"chance_{name}" for name in WINDOWS)]
    names += [f"{name}_{what}" for name in SHOWN for what in ("mean", "sd")]
    columns: dict[str, Any] = {name: np.full(table.n, np.nan) for name in names}
    status = np.full(table.n, "", dtype=object)
    if table.n:
        groups = predict_heats(with_grade_aims(table)) if charged else plan_heats(table)
        for rows, outcome in groups:
            status[rows] = outcome.status
            good = np.flatnonzero(status[rows] == "solved")
            if good.size:
                _fill(columns, rows, good, outcome, (draws, seed, extra))
    ids = np.array(table.ids, dtype=object)
    return pd.DataFrame({"heat_id": ids, "status": status, **columns}, index=index)


def _fill(
    columns: dict[str, Any], rows: Array, good: Array, outcome: Outcome,
    run: tuple[int, int, Extra | None],
) -> None:  # fmt: skip
    """Chances of the solved heats of one group."""
    draws, seed, extra = run
    charge, x = charge_of(outcome)
    charge = charge.take(good)
    x = {name: values[good] for name, values in x.items()}
    model = error_model(charge, PREDICT, x, extra)
    plan = plan_draws(draws, seed)
    z = normal_draws(plan, model.size, 0, plan.replicates)
    memory = Memory()
    at_once = max(1, ROWS_AT_ONCE // plan.draws)
    for first in range(0, good.size, at_once):
        part = np.arange(first, min(first + at_once, good.size))
        values = _drawn(charge, model, z, part, memory)
        for place, heat in enumerate(part.tolist()):
            one = {name: found[place] for name, found in values.items()}
            _read_off(columns, int(rows[good[heat]]), charge, heat, one, plan.replicates)


def _drawn(
    charge: HeatTable, model: ErrorModel, z: Array, heats: Array, memory: Memory
) -> dict[str, Array]:
    """End points of some heats in all draws, (heats, draws) each; NaN where not solved."""
    from threadpoolctl import threadpool_limits

    draws = z.shape[1]
    rows = np.repeat(heats, draws)
    table, _ = true_heats(charge.take(rows), of_heats(model, rows), np.tile(z, len(heats)))
    with threadpool_limits(limits=1, user_api="blas"), np.errstate(all="ignore"):
        p = build_problem(table)
        solved = solve_ask(p, PREDICT, memory)
        state = evaluate_ask(p, PREDICT, dict(solved.unknowns))
        found = end_points(table, PREDICT, p, state, solved.unknowns)
    return {
        name: np.where(solved.converged, values, np.nan).reshape(len(heats), draws)
        for name, values in found.items()
    }


def _read_off(
    columns: dict[str, Any], row: int, charge: HeatTable, heat: int,
    values: dict[str, Array], replicates: int,
) -> None:  # fmt: skip
    middle = {name: float(np.nanmedian(x)) for name, x in values.items()}
    windows = windows_of(charge, heat, middle)
    hits = all_hits(windows, values)
    found = interval(hits.reshape(replicates, -1).mean(axis=1))
    columns["chance_all"][row], columns["chance_all_half_interval"][row] = found
    for window in windows:
        columns[f"chance_{window.name}"][row] = window.holds(values[window.name]).mean()
    for name in SHOWN:
        columns[f"{name}_mean"][row] = np.nanmean(values[name])
        columns[f"{name}_sd"][row] = np.nanstd(values[name], ddof=1)
