"""Solving a table of heats for one ask: chunks, a start from a sample, Newton for the rest.

A long table is solved in two goes. A sample of its heats is solved by Newton with exact
derivatives. A quadratic through their answers then predicts the answer of every heat to
about a part in a thousand, a linear fit its inverse Jacobian, and a few quasi-Newton steps
without derivatives bring it to the same tolerance. What is left, and every short table,
goes through Newton; so the sample decides how long it takes, never what comes out.
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import Any

import numpy as np

from converter_calc.balance.asks import REACH, Ask, first_guess
from converter_calc.balance.newton import Solved, Unknowns, dense, follow, solve
from converter_calc.balance.problem import Problem
from converter_calc.balance.system import System
from converter_calc.basis.dual import Array
from converter_calc.basis.tolerances import (
    CHUNK,
    FOLLOWED_STEPS,
    MOST_STEPS,
    QUICK_STEPS,
    RESIDUAL,
    SAMPLED_FROM,
)

#: Size of the unknowns that do not grow with the heat; the others are measured by its mass.
INTENSIVE = {"f_Mn": 1.0, "f_P": 1.0, "ln_C": 1.0, "T_K": 1000.0}
#: Size of the others, per kg of the scale of the heat (1 where not named).
EXTENSIVE = {
    "oxygen_Nm3": 0.05,
    "slag_kg": 0.1,
    "lime_kg": 0.05,
    "flux_kg": 0.05,
    "trim_kg": 0.05,
    "heat_loss_J": 1e6,
}
#: Inputs that vary beyond this many make a full quadratic too long: squares only.
MOST_CROSSED = 24
#: Standard deviations at which an input is cut off in the fit, so that an outlier among the
#: inputs does not throw its start far off.
OUTLIER = 4.0


def solve_ask(p: Problem, ask: Ask) -> Solved:
    """Solve all heats of `p` for what `ask` leaves open.

    Returns unknowns, residual norm, Jacobians used and convergence of each heat; nothing is
    raised for a heat that does not converge, and it does not touch its neighbours.
    """
    n = p.n
    guess = first_guess(p, ask)
    system = System(p, ask)
    solved = Solved(guess, np.full(n, np.inf), np.zeros(n, dtype=int), np.zeros(n, dtype=bool))
    fit = _sample(system, guess) if n >= SAMPLED_FROM else None
    if fit is not None:
        for first in range(0, n, CHUNK):
            rows = np.arange(first, min(first + CHUNK, n))
            x, unit, inverse = fit.predict(p.take(slice(rows[0], rows[-1] + 1)))
            x, residual = follow(system, x, unit, inverse, rows, FOLLOWED_STEPS)
            for name in guess:
                solved.unknowns[name][rows] = x[name]
            solved.residual[rows] = residual
        solved.converged = solved.residual <= RESIDUAL
    for steps in (QUICK_STEPS, MOST_STEPS):
        left = np.flatnonzero(~solved.converged)
        for first in range(0, left.size, CHUNK):
            _solve_rows(system, solved, left[first : first + CHUNK], steps)
    return solved


def _solve_rows(system: System, solved: Solved, rows: Array, most_steps: int) -> None:
    """Newton for some rows, from where they stand; put into `solved`."""
    begin = {name: x[rows] for name, x in solved.unknowns.items()}
    found = solve(system, begin, REACH, rows, most_steps)
    for name, x in found.unknowns.items():
        solved.unknowns[name][rows] = x
    solved.residual[rows] = found.residual
    solved.steps[rows] += found.steps
    solved.converged[rows] = found.converged


def units_of(p: Problem, names: Any) -> dict[str, Any]:
    """Size of each unknown: numbers or (n,)."""
    return {
        name: INTENSIVE[name] if name in INTENSIVE else EXTENSIVE.get(name, 1.0) * p.scale_kg
        for name in names
    }


def _inputs(p: Problem) -> Array | None:
    """Inputs that differ between the heats, a column each (n, d); None where one has gaps."""
    columns = [
        x
        for group in (p.values, p.fixed, {k: v for k, v in p.hot_metal_pct.items() if k != "Fe"})
        for x in group.values()
        if isinstance(x, np.ndarray) and x.ndim and x.size > 1
    ]
    if not columns:
        return np.zeros((p.n, 0))
    table = np.stack(columns, axis=1)
    return table if np.isfinite(table).all() else None


@dataclass
class _Fit:
    """Answers of a sample as functions of the inputs.

    mean, deviation : of the inputs (d,). answer : coefficients of the quadratic (m, k).
    inverse : coefficients of the linear fit of the inverse Jacobian (1 + d, k * k).
    """

    names: tuple[str, ...]
    mean: Array
    deviation: Array
    answer: Array
    inverse: Array

    def predict(self, p: Problem) -> tuple[Unknowns, dict[str, Any], list[list[Any]]]:
        """Start, units and inverse Jacobian of all heats of p."""
        inputs = _inputs(p)
        if inputs is None or inputs.shape[1] != self.mean.size:
            inputs = np.broadcast_to(self.mean, (p.n, self.mean.size))
        z = _standard(inputs, self.mean, self.deviation)
        unit = units_of(p, self.names)
        found = (self.answer.T @ _quadratic(z).T) if z.size else self.answer.T @ np.ones((1, p.n))
        x = {name: found[k] * unit[name] for k, name in enumerate(self.names)}
        count = len(self.names)
        entries = self.inverse.T @ np.vstack([np.ones(p.n), z.T])
        inverse = [[entries[u * count + r] for r in range(count)] for u in range(count)]
        return x, unit, inverse


def _standard(inputs: Array, mean: Array, deviation: Array) -> Array:
    return np.asarray(np.clip((inputs - mean) / deviation, -OUTLIER, OUTLIER))


def _quadratic(z: Array) -> Array:
    """1, all inputs, all products of two (squares only where there are many), (n, m)."""
    n, d = z.shape
    if d > MOST_CROSSED:
        return np.hstack([np.ones((n, 1)), z, z * z])
    crossed = [z[:, k : k + 1] * z[:, k:] for k in range(d)]
    return np.hstack([np.ones((n, 1)), z, *crossed])


def _sample(system: System, guess: Unknowns) -> _Fit | None:
    """Solve some heats of the table and fit them; None where that is not possible."""
    p = system.p
    inputs = _inputs(p)
    if inputs is None:
        return None
    d = inputs.shape[1]
    size = 3 * (1 + 2 * d if d > MOST_CROSSED else (d + 1) * (d + 2) // 2)
    rows = np.unique(np.linspace(0, p.n - 1, min(max(size, 64), p.n // 4)).astype(int))
    begin = {name: x[rows] for name, x in guess.items()}
    solved = solve(system, begin, REACH, rows, QUICK_STEPS * 2)
    good = np.flatnonzero(solved.converged)
    if good.size < max(16, rows.size // 2):
        return None
    rows = rows[good]
    x = {name: values[good] for name, values in solved.unknowns.items()}
    unit = units_of(p.take(rows), x)
    deviation = inputs.std(axis=0)
    deviation[deviation == 0.0] = 1.0
    mean = inputs.mean(axis=0)
    z = _standard(inputs[rows], mean, deviation)
    answers = np.stack([values / unit[name] for name, values in x.items()], axis=1)
    answer = np.linalg.lstsq(_quadratic(z), answers, rcond=1e-10)[0]
    inverses = _inverse_jacobians(system, rows, x, unit)
    flat = np.hstack([np.ones((good.size, 1)), z])
    inverse = np.linalg.lstsq(flat, inverses.reshape(good.size, -1), rcond=1e-10)[0]
    return _Fit(tuple(x), mean, deviation, answer, inverse)


def _inverse_jacobians(system: System, rows: Array, x: Unknowns, unit: dict[str, Any]) -> Array:
    """d(unknown in its unit) / d(residual) at x, (n, k, k)."""
    with np.errstate(all="ignore"):
        full = dense(system.jacobian(rows, x)[1], rows.size)
    for c, name in enumerate(x):
        full[:, :, c] *= np.broadcast_to(unit[name], (rows.size,))[:, None]
    return np.linalg.pinv(np.nan_to_num(full))
