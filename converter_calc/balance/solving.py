"""Solving a table of heats for one ask: chunks, a start from a sample, Newton for the rest.

A long table is solved in two goes. A sample of its heats is solved by Newton with exact
derivatives. A linear fit then predicts the answer of every heat to about a part in
a hundred, and its inverse Jacobian, and a few quasi-Newton steps
without derivatives bring it to the same tolerance. What is left, and every short table,
goes through Newton; so the sample decides how long it takes, never what comes out.
"""

from __future__ import annotations

from dataclasses import dataclass, field
from typing import Any

import numpy as np

from converter_calc.balance.asks import REACH, Ask, first_guess
from converter_calc.balance.newton import Solved, Unknowns, dense, follow, solve
from converter_calc.balance.problem import Problem
from converter_calc.balance.schema import is_element_column
from converter_calc.balance.single import solve_single
from converter_calc.balance.system import Recorded, System
from converter_calc.basis.dual import Array
from converter_calc.basis.tolerances import (
    CHUNK,
    FITTED_FROM,
    FOLLOWED_STEPS,
    MOST_STEPS,
    POLISHED,
    QUICK_STEPS,
    SAMPLE,
    SAMPLED_FROM,
)

#: Size of the unknowns that do not grow with the heat; the others are measured by its mass.
INTENSIVE = {"f_Mn": 1.0, "f_P": 1.0, "root_C": 5.0, "T_K": 1000.0}
#: Size of the others, per kg of the scale of the heat (1 where not named).
EXTENSIVE = {
    "oxygen_Nm3": 0.05,
    "slag_kg": 0.1,
    "lime_kg": 0.05,
    "flux_kg": 0.05,
    "trim_kg": 0.05,
    "heat_loss_J": 1e6,
}
#: Times the first guess of the slag, and Newton steps, of a last go for heats with slag from
#: before.
MORE_SLAG, MORE_STEPS = 1.3, 20
#: Residual at which a heat of the sample is good enough to start others from.
GOOD_START = 1e-7
#: Standard deviations at which an input is cut off in the fit, so that an outlier among the
#: inputs does not throw its start far off.
OUTLIER = 4.0


def solve_ask(p: Problem, ask: Ask, memory: Memory | None = None) -> Solved:
    """Solve all heats of `p` for what `ask` leaves open.

    memory : of earlier parts of the same table, used again and added to.

    Returns unknowns, residual norm, Jacobians used and convergence of each heat; nothing is
    raised for a heat that does not converge, and it does not touch its neighbours.
    """
    n = p.n
    first = first_guess(p, ask)
    if n == 1:
        found = solve_single(p, ask, first)
        if found is not None:
            return found
    guess = {name: x.copy() for name, x in first.items()}
    memory = Memory() if memory is None else memory
    system = System(p, ask, memory.recorded)
    solved = Solved(guess, np.full(n, np.inf), np.zeros(n, dtype=int), np.zeros(n, dtype=bool))
    fit = _fit_for(system, guess, memory.fits)
    if fit is not None:
        for begin in range(0, n, CHUNK):
            rows = np.arange(begin, min(begin + CHUNK, n))
            x, unit, inverse = fit.predict(p.take(slice(rows[0], rows[-1] + 1)))
            x, residual = follow(system, x, unit, inverse, rows, FOLLOWED_STEPS)
            for name in guess:
                solved.unknowns[name][rows] = x[name]
            solved.residual[rows] = residual
        solved.converged = solved.residual <= POLISHED
    _finish(system, solved, first)
    return solved


def _finish(system: System, solved: Solved, first: Unknowns) -> None:
    """Newton for what is not solved; put into `solved`.

    What stands badly starts again as it would alone, so that company makes no difference.
    """
    goes: list[tuple[int, float | None]] = [(QUICK_STEPS, None), (MOST_STEPS, 1.0)]
    if system.p.returned:
        goes.append((MORE_STEPS, MORE_SLAG))
    for steps, more_slag in goes:
        left = np.flatnonzero(~solved.converged)
        if more_slag is not None:
            for name, values in solved.unknowns.items():
                values[left] = first[name][left] * (more_slag if name == "slag_kg" else 1.0)
        for begin in range(0, left.size, CHUNK):
            _solve_rows(system, solved, left[begin : begin + CHUNK], steps)


def _fit_for(system: System, guess: Unknowns, fits: Fits) -> Fit | None:
    """A fit that suits these heats, from earlier ones or from a sample of these."""
    key = (system.ask, _varying(system.p))
    if key not in fits and system.n >= SAMPLED_FROM:
        found = _sample(system, guess)
        if found is not None:
            fits[key] = found
    return fits.get(key) if system.n >= FITTED_FROM else None


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


def _varying(p: Problem) -> tuple[str, ...]:
    """Names of the inputs that differ between the heats."""
    return tuple(
        f"{part}:{name}"
        for part in ("values", "fixed", "hot_metal_pct")
        for name, x in getattr(p, part).items()
        if isinstance(x, np.ndarray)
        and x.ndim
        and (part, name) != ("hot_metal_pct", "Fe")
        # the analysis stands in hot_metal_pct, where a blank is 0
        and not (part == "values" and is_element_column(name))
    )


def _inputs(p: Problem) -> Array | None:
    """These inputs, a row each (d, n); None where one has gaps."""
    rows = []
    for place in _varying(p):
        part, name = place.split(":", 1)
        rows.append(getattr(p, part)[name])
    table = np.stack(rows) if rows else np.zeros((0, p.n))
    return table if np.isfinite(table).all() else None


@dataclass
class Fit:
    """Answers of a sample, and their inverse Jacobians, as linear functions of the inputs.

    mean, deviation : of the inputs (d,). first : coefficients of linear fits of the k answers
    (k, 1 + d), scaled to mean 0 and deviation 1. coefficients : of the answers and then of the
    entries of the inverse Jacobian (k + k * k, m), in the inputs and in the products of two of
    those first answers, which carry most of the curvature.
    """

    names: tuple[str, ...]
    mean: Array
    deviation: Array
    first: Array
    coefficients: Array

    def predict(self, p: Problem) -> tuple[Unknowns, dict[str, Any], list[list[Any]]]:
        """Start, units and inverse Jacobian of all heats of p."""
        count = len(self.names)
        inputs = _inputs(p)
        if inputs is None:
            inputs = np.broadcast_to(self.mean[:, None], (self.mean.size, p.n))
        linear = _terms(inputs, self.mean, self.deviation)
        found = self.coefficients @ _with_products(linear, self.first)
        unit = units_of(p, self.names)
        x = {name: found[k] * unit[name] for k, name in enumerate(self.names)}
        inverse = [[found[count * (1 + u) + r] for r in range(count)] for u in range(count)]
        return x, unit, inverse


#: Fits by ask and names of the inputs that vary.
Fits = dict[Any, Fit]


def _terms(inputs: Array, mean: Array, deviation: Array) -> Array:
    """One, and each input in standard deviations from its mean (1 + d, n)."""
    z = (inputs - mean[:, None]) / deviation[:, None]
    return np.concatenate([np.ones((1, inputs.shape[1])), np.clip(z, -OUTLIER, OUTLIER)])


def _with_products(linear: Array, first: Array) -> Array:
    """The linear terms, and below them all products of two first answers (m, n)."""
    y = first @ linear
    return np.concatenate([linear, *(y[k] * y[k:] for k in range(len(y)))])


@dataclass
class Memory:
    """What parts of one table hand on to each other: fits of samples, recorded programs.

    Only for parts that share their shop: the programs hold its materials.
    """

    fits: Fits = field(default_factory=dict)
    recorded: Recorded = field(default_factory=dict)


def _sample(system: System, guess: Unknowns) -> Fit | None:
    """Solve some heats of the table and fit them; None where that is not possible."""
    p = system.p
    inputs = _inputs(p)
    if inputs is None:
        return None
    size = max(SAMPLE, 6 * (1 + inputs.shape[0]))
    rows = np.unique(np.linspace(0, p.n - 1, min(size, p.n // 4)).astype(int))
    begin = {name: x[rows] for name, x in guess.items()}
    solved = solve(system, begin, REACH, rows, QUICK_STEPS, GOOD_START)
    good = np.flatnonzero(solved.converged)
    if good.size < max(16, rows.size // 2):
        return None
    rows = rows[good]
    x = {name: values[good] for name, values in solved.unknowns.items()}
    unit = units_of(p.take(rows), x)
    mean, deviation = inputs.mean(axis=1), inputs.std(axis=1)
    deviation[deviation == 0.0] = 1.0
    answers = np.stack([values / unit[name] for name, values in x.items()], axis=1)
    inverses = _inverse_jacobians(system, rows, x, unit).reshape(good.size, -1)
    linear = _terms(inputs[:, rows], mean, deviation)
    first = np.linalg.lstsq(linear.T, answers, rcond=1e-10)[0].T
    y = first @ linear
    first[:, 0] -= y.mean(axis=1)
    first /= y.std(axis=1)[:, None] + 1e-12
    terms = _with_products(linear, first).T
    found = np.linalg.lstsq(terms, np.hstack([answers, inverses]), rcond=1e-10)[0]
    return Fit(tuple(x), mean, deviation, first, np.ascontiguousarray(found.T))


def _inverse_jacobians(system: System, rows: Array, x: Unknowns, unit: dict[str, Any]) -> Array:
    """d(unknown in its unit) / d(residual) at x, (n, k, k)."""
    with np.errstate(all="ignore"):
        full = dense(system.jacobian(rows, x)[1], rows.size)
    for c, name in enumerate(x):
        full[:, :, c] *= np.broadcast_to(unit[name], (rows.size,))[:, None]
    return np.linalg.pinv(np.nan_to_num(full))
