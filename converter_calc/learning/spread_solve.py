"""Draws of one heat solved together: all of them lie near the heat as read.

The draws differ from the heat by small random numbers z, so their answers are smooth functions
of z. A few of them are followed from the heat itself; a fit to these, linear in z and with the
products of the linear answers, starts all others so near that quasi-Newton steps without
derivatives finish. What does not converge so goes through the ordinary solver.
"""

from __future__ import annotations

import threading
from collections import OrderedDict
from collections.abc import Mapping
from typing import Any

import numpy as np

from converter_calc.balance.asks import Ask
from converter_calc.balance.newton import Unknowns, dense, follow
from converter_calc.balance.problem import Problem
from converter_calc.balance.recordings import kind_of
from converter_calc.balance.solving import Memory, solve_ask, units_of
from converter_calc.balance.system import System
from converter_calc.basis.dual import Array
from converter_calc.basis.tolerances import (
    FOLLOWED_STEPS,
)

#: Draws followed from the heat itself, and the least number a coefficient of the fit.
FOLLOWED = 256
FOLLOWED_A_TERM = 4
#: Steps from the heat itself, which is further away than a fit.
FAR_STEPS = 16
#: Kinds of heat whose recorded equations a thread keeps for the next spread.
KINDS_KEPT = 4
_KEPT = threading.local()
#: Residual from which a draw takes one last step, which gains two digits or more: far below
#: what any draw differs from the next by.
DRAWN = 1e-9
#: Residual at which a followed draw may be fitted.
GOOD = 1e-7


def solve_draws(
    p: Problem, ask: Ask, heat: Mapping[str, Array], z: Array, *, all_ways: bool = True
) -> tuple[Unknowns, Array]:
    """Unknowns of n draws of one heat, and which of them are solved.

    Parameters
    ----------
    p : givens of the draws. heat : unknowns of the heat as read, (1,) each. z : the random
    numbers of the draws (k, n). all_ways : what does not converge goes through the ordinary
    solver; otherwise it stays unsolved.
    """
    n = p.n
    system = System(p, ask, _memory_of(p).recorded)
    names = list(ask.unknowns)
    unit = units_of(p, names)
    inverse = _inverse_at(system, {name: heat[name] for name in names}, unit)

    def followed(start: Unknowns, rows: Array, steps: int) -> tuple[Unknowns, Array]:
        some = {name: _cut(size, rows) for name, size in unit.items()}
        return follow(system, start, some, inverse, rows, steps, DRAWN)

    def from_heat(rows: Array) -> Unknowns:
        return {name: np.full(rows.size, float(heat[name][0])) for name in names}

    everything = np.arange(n)
    size = max(FOLLOWED, FOLLOWED_A_TERM * (1 + len(z) + len(names) * (len(names) + 1) // 2))
    if n <= size:
        x, left = followed(from_heat(everything), everything, FAR_STEPS)
    else:
        rows = np.unique(np.linspace(0, n - 1, size).astype(int))
        x, left = followed(from_heat(rows), rows, FAR_STEPS)
        good = left <= GOOD
        if np.count_nonzero(good) < size // 2:
            solved = solve_ask(p, ask)
            return solved.unknowns, solved.converged
        answers = np.stack([(x[k] / _cut(unit[k], rows))[good] for k in names], axis=1)
        guess = _fitted(z[:, rows[good]], answers, z)
        begin = {name: guess[k] * unit[name] for k, name in enumerate(names)}
        x, left = followed(begin, everything, FOLLOWED_STEPS)
    missed = np.flatnonzero(left > DRAWN)
    if missed.size:  # afresh from where they stand, without the steps remembered
        start = {name: x[name][missed] for name in names}
        again, left[missed] = followed(start, missed, FAR_STEPS)
        for name in names:
            x[name][missed] = again[name]
    converged = left <= DRAWN
    missed = np.flatnonzero(~converged)
    if missed.size and all_ways:
        solved = solve_ask(p.take(missed), ask)
        for name in names:
            x[name][missed] = solved.unknowns[name]
        converged[missed] = solved.converged
    return x, converged


def _memory_of(p: Problem) -> Memory:
    """What this thread has recorded for heats of this kind: replaying fills arrays of its own."""
    kept: OrderedDict[Any, Memory] = _KEPT.__dict__.setdefault("memory", OrderedDict())
    kind = kind_of(p)
    memory = kept.pop(kind, None) or Memory()
    kept[kind] = memory
    while len(kept) > KINDS_KEPT:
        kept.popitem(last=False)
    return memory


def _cut(x: Any, rows: Array) -> Any:
    return x[rows] if isinstance(x, np.ndarray) and x.ndim else x


def _inverse_at(
    system: System, heat: Mapping[str, Array], unit: Mapping[str, Any]
) -> list[list[float]]:
    """Change of each unknown in its unit by each residual, at the heat as read."""
    J = dense(system.jacobian(np.array([0]), heat)[1], 1)[0]
    size = np.array([float(np.ravel(unit[name])[0]) for name in heat])
    found: list[list[float]] = np.linalg.inv(J * size).tolist()
    return found


def _fitted(z: Array, answers: Array, wanted: Array) -> Array:
    """Answers (n, u) of draws z (k, n), carried to the draws `wanted` (k, m): (u, m)."""

    def linear(x: Array) -> Array:
        return np.concatenate([np.ones((1, x.shape[1])), x])

    def products(y: Array) -> Array:
        return np.concatenate([y[k] * y[k:] for k in range(len(y))])

    terms = linear(z)
    first = np.linalg.lstsq(terms.T, answers, rcond=1e-10)[0].T
    middle = (first @ terms).mean(axis=1)
    first[:, 0] -= middle
    spread = (first @ terms).std(axis=1)
    first /= np.where(spread > 0.0, spread, 1.0)[:, None]
    table = np.concatenate([terms, products(first @ terms)])
    found = np.linalg.lstsq(table.T, answers, rcond=1e-10)[0].T
    terms = linear(wanted)
    return np.asarray(found @ np.concatenate([terms, products(first @ terms)]))
