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
    pass

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
        from converter_calc.planning.tables import solve_table

        def solve(heats: HeatTable, rows: int, memory: Memory) -> Iterator[tuple[Array, Outcome]]:
            return solve_groups(heats, grouping, finish, rows, memory)

        return solve_table(heat, shop, solve)
    heats = as_heats(heat)
    outcomes = [outcome for _, outcome in solve_groups(heats, grouping, finish)]
    if heats.n != 1:
        return outcomes
    raise_unless_solved(outcomes[0])
    raise_unless_closed(outcomes[0])
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
            with np.errstate(all="ignore"):  # what is not a number there is told as no answer
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


def raise_unless_closed(outcome: Outcome) -> None:
    """Raise ConvergenceError where an element or the energy of a solved heat does not close."""
    if outcome.check_closures().all():
        return
    gaps = {name: float(np.max(np.abs(c.relative))) for name, c in outcome.closures.items()}
    worst = max(gaps, key=lambda name: gaps[name])
    raise ConvergenceError(
        f"heat {outcome.heats.ids[0]}: the balance of {worst} does not close ({gaps[worst]:.1e}); "
        "please report this heat"
    )


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
