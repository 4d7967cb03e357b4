"""Plan and predict: one heat or a table of heats in, one result or a table out."""

from __future__ import annotations

import itertools
import os
import threading
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
from converter_calc.balance.solving import Memory
from converter_calc.basis.dual import Array
from converter_calc.basis.errors import ConvergenceError, InfeasibleError
from converter_calc.planning.cautions import cautions_of
from converter_calc.planning.grading import grade_notes, judge_grade, with_grade_aims
from converter_calc.planning.limits import judge
from converter_calc.planning.outcome import Outcome
from converter_calc.planning.solving import plan_groups, predict_groups, solve_in_parts

if TYPE_CHECKING:
    import pandas as pd

#: Rows of a table that are solved at once, and that are read off at once: they bound the
#: memory of a long table, and the second keeps its arrays in cache.
ROWS_AT_ONCE = 65536
ROWS_READ_OFF = 4096
#: Rows from which a table is shared out among processes: starting them costs about as much
#: as solving 3000 heats.
SHARED_FROM = 30000

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
    rows_read_off: int | None = None,
    memory: Memory | None = None,
) -> Iterator[tuple[Array, Outcome]]:
    """(row numbers, outcome) of each group of heats that pose the same question."""
    for rows, group, ask in grouping(heats):
        size = rows_read_off or max(group.n, 1)
        for place, outcome in enumerate(solve_in_parts(group, ask, size, memory)):
            finish(outcome)
            outcome.cautions = [*cautions_of(outcome), *grade_notes(outcome)]
            yield rows[place * size : (place + 1) * size], outcome


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
    n = outcome.n
    outcome.status, outcome.binding = ["solved"] * n, [""] * n
    outcome.frees, outcome.nearest = [[]] * n, [{}] * n
    for row in np.flatnonzero(~outcome.converged).tolist():
        outcome.status[row] = "not converged"
        outcome.binding[row] = "no end point was found for this charge"
        outcome.frees[row] = ["check oxygen and charge against ordinary practice"]


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

    workers = _workers(len(frame))
    if workers > 1:
        pieces = _share_out(frame, shop, grouping, finish, workers)
    else:
        pieces = _solve_frame(frame, shop, grouping, finish)
    if not pieces:
        return pd.DataFrame({"heat_id": [], "status": []})
    table = pd.DataFrame(_joined(pieces))
    table.index = frame.index
    return table


def _workers(n: int) -> int:
    """Processes to share n heats out to: one where it would not pay or is not safe.

    A process is forked, which is safe only while no other thread runs.
    """
    if n < SHARED_FROM or threading.active_count() > 1 or not hasattr(os, "fork"):
        return 1
    return min(os.cpu_count() or 1, n // (SHARED_FROM // 2))


def _share_out(
    frame: pd.DataFrame,
    shop: Any,
    grouping: Callable[[HeatTable], Groups],
    finish: Callable[[Outcome], None],
    workers: int,
) -> list[Columns]:
    """Equal parts of the table in processes of their own, in row order."""
    import multiprocessing
    from concurrent.futures import ProcessPoolExecutor

    edges = np.linspace(0, len(frame), workers + 1).astype(int)
    parts = [frame.iloc[a:b] for a, b in itertools.pairwise(edges)]
    context = multiprocessing.get_context("fork")
    with ProcessPoolExecutor(workers, mp_context=context) as pool:
        runs = [pool.submit(_solve_frame, part, shop, grouping, finish) for part in parts]
        return [piece for run in runs for piece in run.result()]


Columns = dict[str, Any]


def _solve_frame(
    frame: pd.DataFrame,
    shop: Any,
    grouping: Callable[[HeatTable], Groups],
    finish: Callable[[Outcome], None],
) -> list[Columns]:
    """Result columns of a table, in pieces of ROWS_AT_ONCE.

    On one thread: the products are small, and waking another costs more than it saves.
    """
    from threadpoolctl import threadpool_limits

    with threadpool_limits(limits=1, user_api="blas"):
        return _solve_pieces(frame, shop, grouping, finish)


def _solve_pieces(
    frame: pd.DataFrame,
    shop: Any,
    grouping: Callable[[HeatTable], Groups],
    finish: Callable[[Outcome], None],
) -> list[Columns]:
    pieces: list[Columns] = []
    memory = Memory()
    for first in range(0, len(frame), ROWS_AT_ONCE):
        heats = heats_from_frame(frame.iloc[first : first + ROWS_AT_ONCE], shop=shop)
        merged: Columns = {}
        for rows, outcome in solve_groups(heats, grouping, finish, ROWS_READ_OFF, memory):
            for name, values in result_columns(outcome).items():
                if name not in merged:
                    merged[name] = _blank(heats.n, text=values.dtype == object)
                merged[name][rows] = values
        pieces.append(merged)
    return pieces


def _blank(n: int, *, text: bool) -> Any:
    return np.full(n, "" if text else np.nan, dtype=object if text else float)


def _joined(pieces: list[Columns]) -> Columns:
    """Pieces one under the other; a column that a piece lacks is blank there."""
    sizes = [len(piece["heat_id"]) for piece in pieces]
    names = dict.fromkeys(name for piece in pieces for name in piece)
    joined: Columns = {}
    for name in names:
        text = any(piece[name].dtype == object for piece in pieces if name in piece)
        joined[name] = np.concatenate(
            [
                piece[name] if name in piece else _blank(size, text=text)
                for piece, size in zip(pieces, sizes, strict=True)
            ]
        )
    return joined


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
