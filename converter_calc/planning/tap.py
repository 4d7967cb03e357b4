"""Tap one heat or a table of heats: plan (or predict), then additions and ladle."""

from __future__ import annotations

from typing import Any

import numpy as np

from converter_calc.balance.heats import HeatTable, heats_from_frame
from converter_calc.basis.errors import InfeasibleError
from converter_calc.planning.ladle import LadlePlan, ladle_of
from converter_calc.planning.plan import plan, plan_heats, predict, predict_heats
from converter_calc.planning.tap_report import TapResult


def tap(heat: Any, shop: Any = None, *, predicted: bool = False) -> Any:
    """From the end of the blow to the ladle: additions, temperature, analysis against grade.

    Parameters
    ----------
    heat : a heat file (path), the same as a dict, a HeatTable of one heat, or a pandas
        DataFrame with one row a heat, as for `plan`.
    shop : shop file (path) or dict for a DataFrame.
    predicted : the charge is complete; where the blow ends is predicted, not planned.

    Returns
    -------
    For one heat a TapResult; for a DataFrame a DataFrame of ladle results in the same row
    order, blank where a heat is not solved (columns `status` of the heat, `tap_status`).

    Raises
    ------
    InputError : the input is wrong, one fault a field.
    InfeasibleError, ConvergenceError : one heat without an answer, or whose grade no additions
        reach (never for a DataFrame).
    """
    if hasattr(heat, "columns") and hasattr(heat, "iloc"):
        return _tap_table(heats_from_frame(heat, shop=shop), heat.index, predicted=predicted)
    outcome = predict(heat) if predicted else plan(heat)
    result = TapResult(outcome, ladle_of(outcome))
    raise_unless_reached(result.ladle)
    return result


def raise_unless_reached(ladle: LadlePlan, index: int = 0) -> None:
    """Raise InfeasibleError where no additions bring the heat into its grade."""
    if ladle.choice.feasible[index]:
        return
    contents = ladle.poured.steel_pct()
    shown = [e for e in ladle.grade.limits if e in contents]
    raise InfeasibleError(
        f"no additions reach {ladle.grade.name}; what binds is {ladle.choice.binding[index]}",
        ladle.choice.binding[index],
        ladle.choice.frees[index],
        {f"ladle_{e}_pct": float(contents[e][index]) for e in shown},
    )


def _tap_table(heats: HeatTable, index: Any, *, predicted: bool) -> Any:
    import pandas as pd

    found: dict[str, Any] = {
        "heat_id": np.array(heats.ids, dtype=object),
        "status": np.full(heats.n, "", dtype=object),
    }
    groups = predict_heats(heats) if predicted else plan_heats(heats)
    for rows, outcome in groups:
        found["status"][rows] = outcome.status
        solved = np.flatnonzero([status == "solved" for status in outcome.status])
        columns = ladle_of(outcome, solved).columns() if solved.size else {}
        for name, values in columns.items():
            if name == "heat_id":
                continue
            text = values.dtype == object
            if name not in found:
                blank: Any = "" if text else np.nan
                found[name] = np.full(heats.n, blank, dtype=object if text else float)
            found[name][rows[solved]] = values
    return pd.DataFrame(found, index=index)
