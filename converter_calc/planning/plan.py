"""Plan and predict: one heat or a table of heats in, one result or a table out."""

from __future__ import annotations

from collections.abc import Callable, Iterator, Mapping
from pathlib import Path
from typing import TYPE_CHECKING, Any

import numpy as np

from converter_calc.balance.asks import Ask
from converter_calc.balance.heats import (
    HeatTable,
    heats_from_dict,
    heats_from_frame,
    read_heat_file,
)
from converter_calc.basis.dual import Array
from converter_calc.basis.errors import ConvergenceError, InfeasibleError
from converter_calc.planning.cautions import cautions_of
from converter_calc.planning.grading import grade_notes, judge_grade, with_grade_aims
from converter_calc.planning.limits import judge
from converter_calc.planning.outcome import Outcome
from converter_calc.planning.solving import plan_groups, predict_groups, solve_heats

if TYPE_CHECKING:
    import pandas as pd

#: Rows of a table that are held in full at once; bounds the memory of a long table.
ROWS_AT_ONCE = 32768

Groups = list[tuple[Array, HeatTable, Ask]]


def plan(heat: Any, shop: Any = None) -> Any:
    """Solve for what is missing from the charge.

    Parameters
    ----------
    heat : a heat file (path), the same as a dict, a HeatTable, or a pandas DataFrame with one
        row a heat (columns as in the heat log, and any other flat input name).
    shop : shop file (path) or dict for a DataFrame.

    Returns
    -------
    For one heat an Outcome of that heat; for a DataFrame a DataFrame of results in the same
    row order, whose column `status` says "solved", "infeasible" or "not converged".

    Raises
    ------
    InputError : the input is wrong, one fault a field.
    InfeasibleError, ConvergenceError : one heat that has no answer (never for a DataFrame).
    """
    return _run(heat, shop, _plan_groups, _finish_plan)


def predict(heat: Any, shop: Any = None) -> Any:
    """Where the blow ends for a complete charge; see `plan` for parameters and results."""
    return _run(heat, shop, predict_groups, _finish_predict)


def _run(
    heat: Any,
    shop: Any,
    grouping: Callable[[HeatTable], Groups],
    finish: Callable[[Outcome], None],
) -> Any:
    if hasattr(heat, "columns") and hasattr(heat, "iloc"):
        return _run_frame(heat, shop, grouping, finish)
    heats = as_heats(heat)
    outcomes = [outcome for _, outcome in solve_groups(heats, grouping, finish)]
    if heats.n != 1:
        return outcomes
    raise_unless_solved(outcomes[0])
    return outcomes[0]


def as_heats(heat: Any) -> HeatTable:
    """A HeatTable from a path, a dict or itself."""
    if isinstance(heat, HeatTable):
        return heat
    if isinstance(heat, Mapping):
        return heats_from_dict(dict(heat))
    return read_heat_file(Path(heat))


def solve_groups(
    heats: HeatTable,
    grouping: Callable[[HeatTable], Groups],
    finish: Callable[[Outcome], None],
) -> Iterator[tuple[Array, Outcome]]:
    """(row numbers, outcome) of each group of heats that pose the same question."""
    for rows, group, ask in grouping(heats):
        outcome = solve_heats(group, ask)
        finish(outcome)
        outcome.cautions = [*cautions_of(outcome), *grade_notes(outcome)]
        yield rows, outcome


def plan_heats(heats: HeatTable) -> list[tuple[Array, Outcome]]:
    """Planned groups of a HeatTable with their row numbers; nothing raised for one heat."""
    return list(solve_groups(heats, _plan_groups, _finish_plan))


def predict_heats(heats: HeatTable) -> list[tuple[Array, Outcome]]:
    """Predicted groups of a HeatTable with their row numbers."""
    return list(solve_groups(heats, predict_groups, _finish_predict))


def _plan_groups(heats: HeatTable) -> Groups:
    return plan_groups(with_grade_aims(heats))


def _finish_plan(outcome: Outcome) -> None:
    judge(outcome)
    judge_grade(outcome)


def _finish_predict(outcome: Outcome) -> None:
    outcome.status = ["solved" if good else "not converged" for good in outcome.converged]
    outcome.binding = [
        "" if good else "no end point was found for this charge" for good in outcome.converged
    ]
    outcome.frees = [[] if good else ["check oxygen and charge"] for good in outcome.converged]
    outcome.nearest = [{}] * outcome.n


def raise_unless_solved(outcome: Outcome, index: int = 0) -> None:
    """Raise what one heat deserves: InfeasibleError, ConvergenceError or nothing."""
    status, binding = outcome.status[index], outcome.binding[index]
    if status == "infeasible":
        raise InfeasibleError(
            f"no charge reaches the aim; what binds is {binding}",
            binding,
            outcome.frees[index],
            outcome.nearest[index],
        )
    if status == "not converged":
        help_text = "; ".join(outcome.frees[index])
        raise ConvergenceError(
            f"heat {outcome.heats.ids[index]}: {binding} (residual "
            f"{outcome.residual[index]:.1e}); {help_text}"
        )


def _run_frame(
    frame: pd.DataFrame,
    shop: Any,
    grouping: Callable[[HeatTable], Groups],
    finish: Callable[[Outcome], None],
) -> pd.DataFrame:
    import pandas as pd

    pieces = []
    for first in range(0, max(len(frame), 1), ROWS_AT_ONCE):
        part = frame.iloc[first : first + ROWS_AT_ONCE]
        heats = heats_from_frame(part, shop=shop)
        if heats.n == 0:
            continue
        solved = list(solve_groups(heats, grouping, finish))
        pieces.append(_table(heats.n, solved))
    if not pieces:
        return pd.DataFrame({"heat_id": [], "status": []})
    table = pd.concat(pieces, ignore_index=True) if len(pieces) > 1 else pieces[0]
    table.index = frame.index
    return table


def _table(n: int, solved: list[tuple[Array, Outcome]]) -> pd.DataFrame:
    """One table of n rows from the groups of a table of heats."""
    import pandas as pd

    if len(solved) == 1:
        return pd.DataFrame(result_columns(solved[0][1]))
    merged: dict[str, Any] = {}
    for rows, outcome in solved:
        for name, values in result_columns(outcome).items():
            if name not in merged:
                text = values.dtype == object
                merged[name] = np.full(n, "" if text else np.nan, dtype=values.dtype)
            merged[name][rows] = values
    return pd.DataFrame(merged)


def result_columns(outcome: Outcome) -> dict[str, Any]:
    """Columns of the result table, with what binds and the nearest end point of a heat."""
    table = outcome.columns()
    bad = np.array([status != "solved" for status in outcome.status], dtype=bool)
    for name, values in table.items():  # an unsolved heat shows no numbers of its own
        if bad.any() and values.dtype != object:
            values[bad] = np.nan
    table["binding"] = np.array(outcome.binding, dtype=object)
    for name in ("end_temp_C", "end_C_pct", "end_P_pct"):
        column = np.full(outcome.n, np.nan)
        for row in np.flatnonzero(bad).tolist():
            column[row] = outcome.nearest[row].get(name, np.nan)
        table["nearest_" + name] = column
    return table
