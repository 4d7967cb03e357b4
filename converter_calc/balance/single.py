"""One heat, solved over plain floats by the recorded equations of its kind.

The steps are those of `newton.solve`. What does not converge so goes the ordinary way from the
start.
"""

from __future__ import annotations

from collections.abc import Mapping
from math import inf, isfinite

import numpy as np

from converter_calc.balance import recordings
from converter_calc.balance.asks import REACH, Ask
from converter_calc.balance.newton import Reach, Solved, Unknowns
from converter_calc.balance.problem import Problem
from converter_calc.balance.recordings import Recording, givens_of
from converter_calc.basis.tolerances import (
    MOST_HALVINGS,
    MOST_QUICK_STEPS,
    RESIDUAL,
    RESIDUAL_STALLED,
)

#: Share of the residual that a step with the last factors has to get below to be taken.
PAYS = 0.3


def solve_single(p: Problem, ask: Ask, start: Unknowns) -> Solved | None:
    """The heat of a problem with n = 1, from `start`, arrays (1,) by name.

    Returns None where the heat has to go the ordinary way: the first of its kind, derivatives
    by the givens wanted, or no convergence.
    """
    givens = givens_of(p)
    recording = None if givens is None else recordings.RECORDINGS.find(p, ask)
    if givens is None or recording is None:
        return None
    names = list(start)
    numbers = [float(np.asarray(x).item()) for x in givens]
    try:
        found = _newton(recording, numbers, [float(start[name][0]) for name in names], names)
    except (ArithmeticError, ValueError, np.linalg.LinAlgError):
        return None
    if found is None:
        return None
    x, norm, steps = found
    return Solved(
        {name: np.array([value]) for name, value in zip(names, x, strict=True)},
        np.array([norm]),
        np.array([steps]),
        np.array([True]),
    )


def _norm(residuals: list[float]) -> float:
    """Largest residual, infinite where one is not a number."""
    return max(map(abs, residuals)) if isfinite(sum(residuals)) else inf


def _newton(
    recording: Recording, givens: list[float], x: list[float], names: list[str]
) -> tuple[list[float], float, int] | None:
    """Damped Newton with the steps of `newton.solve`; None without convergence."""
    count, last = len(x), inf
    steady = recording.steady.floats(givens)
    for step in range(1, MOST_QUICK_STEPS + 1):
        both = recording.jacobian.floats(steady + x)
        values = both[:count]
        norm = _norm(values)
        inverse = np.linalg.inv(np.array(both[count:]).reshape(count, count))
        move = (inverse @ values).tolist()
        share = _share(x, move, names, REACH)
        for _ in range(MOST_HALVINGS + 1):
            new = [a - share * d for a, d in zip(x, move, strict=True)]
            values = recording.residuals.floats(steady + new)
            size = _norm(values)
            if size <= norm:
                break
            share *= 0.5
        for _ in range(2):  # the same factors again while they pay
            if size <= RESIDUAL:
                break
            move = (inverse @ values).tolist()
            trial = [a - d for a, d in zip(new, move, strict=True)]
            further = recording.residuals.floats(steady + trial)
            reached = _norm(further)
            if not reached < PAYS * size:
                break
            new, values, size = trial, further, reached
        x = new
        if size <= RESIDUAL or (size <= RESIDUAL_STALLED and size >= last):
            return x, size, step
        last = size
    return None


def _share(
    x: list[float], move: list[float], names: list[str], reach: Mapping[str, Reach]
) -> float:
    """Largest share of the step x - move, at most one, that respects every reach."""
    share = 1.0
    for name, at, down in zip(names, x, move, strict=True):
        limit = reach.get(name)
        if limit is None:
            continue
        size = abs(down) + 1e-300
        share = min(share, limit.step / size, limit.share * abs(at) / size)
        if down > 0.0 and limit.low > -inf:
            share = min(share, 0.9 * (at - limit.low) / size)
        if down < 0.0 and limit.high < inf:
            share = min(share, 0.9 * (limit.high - at) / size)
    return share
