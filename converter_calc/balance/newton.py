"""Damped Newton for many small systems at once, with exact derivatives.

One system a heat; all heats of a chunk go through the same array operations. A heat that is
solved leaves the chunk; a heat that cannot be solved says so and does not touch its
neighbours. Between two Jacobians the factors of the last one are used again while they
still pay (Shamanskii's modification, Ukrain. Mat. Zh. 19 (1967) 118; from memory).
"""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass, field
from typing import Any, Protocol

import numpy as np

from converter_calc.basis.dual import Array
from converter_calc.basis.tolerances import (
    MOST_HALVINGS,
    MOST_STEPS,
    NARROWED_FROM,
    POLISHED,
    RESIDUAL,
    RESIDUAL_STALLED,
)

Unknowns = dict[str, Array]
Matrix = list[list[Any]]
#: Triangular factors in one matrix, and the inverse pivots.
Factors = tuple[Matrix, list[Any]]


class Equations(Protocol):
    """What the solver needs: residuals of some heats, and their Jacobian."""

    def residuals(self, rows: Any, x: Mapping[str, Array]) -> list[Any]:
        """Residuals of the heats `rows`, one a closure, in order."""

    def jacobian(self, rows: Any, x: Mapping[str, Array]) -> tuple[list[Any], Matrix]:
        """Residuals and the derivative of each by each unknown; 0.0 where there is none."""


@dataclass(frozen=True)
class Reach:
    """How far one step may move an unknown: absolute, as a share, and hard bounds."""

    step: float = np.inf
    share: float = np.inf
    low: float = -np.inf
    high: float = np.inf


@dataclass
class Solved:
    """Unknowns of n heats with their convergence: residual norm and number of Jacobians."""

    unknowns: Unknowns
    residual: Array
    steps: Array
    converged: Any


def _is_zero(a: Any) -> bool:
    return isinstance(a, float) and a == 0.0


def factorise(J: Matrix) -> tuple[Matrix, list[Any], Any]:
    """LU factors without exchange of rows, over arrays of heats.

    Entries that are the number 0.0 are skipped. Returns (factors, inverse pivots, trouble)
    where trouble marks heats whose pivot is too small to trust.
    """
    k = len(J)
    A = [row[:] for row in J]
    inverse: list[Any] = []
    trouble: Any = False
    for c in range(k):
        pivot = A[c][c]
        size = sum(np.abs(entry) for entry in J[c])
        trouble = trouble | ~(np.abs(pivot) > 1e-10 * size)
        inverse.append(1.0 / pivot if not _is_zero(pivot) else np.inf)
        for r in range(c + 1, k):
            if _is_zero(A[r][c]):
                continue
            factor = A[r][c] * inverse[c]
            A[r][c] = factor
            for j in range(c + 1, k):
                if not _is_zero(A[c][j]):
                    A[r][j] = A[r][j] - factor * A[c][j]
    return A, inverse, trouble


def substitute(factors: Factors, rhs: Sequence[Any]) -> list[Any]:
    """Solution of the factored systems for one right-hand side a heat."""
    A, inverse = factors
    k = len(rhs)
    y = list(rhs)
    for r in range(1, k):
        for c in range(r):
            if not _is_zero(A[r][c]):
                y[r] = y[r] - A[r][c] * y[c]
    for r in range(k - 1, -1, -1):
        for c in range(r + 1, k):
            if not _is_zero(A[r][c]):
                y[r] = y[r] - A[r][c] * y[c]
        y[r] = y[r] * inverse[r]
    return y


def dense(J: Matrix, n: int) -> Array:
    """The Jacobian as an array (n, k, k)."""
    k = len(J)
    full = np.zeros((n, k, k))
    for r in range(k):
        for c in range(k):
            full[:, r, c] = J[r][c]
    return full


def residual_norm(residuals: Sequence[Any], shape: tuple[int, ...]) -> Array:
    """Largest residual of each heat, infinite where one is not a number."""
    size = np.zeros(shape)
    for residual in residuals:
        np.maximum(size, np.abs(residual), out=size)
    size[~np.isfinite(size)] = np.inf
    return size


def newton_step(residuals: Sequence[Any], J: Matrix, n: int) -> tuple[list[Any], Factors]:
    """Full Newton step of n heats: (step a unknown, factors to step with again)."""
    A, inverse, trouble = factorise(J)
    rhs = [-residual for residual in residuals]
    step = substitute((A, inverse), rhs)
    bad = np.flatnonzero(np.broadcast_to(trouble, (n,)))
    if bad.size:
        full = dense(J, n)[bad]
        right = np.stack([np.broadcast_to(part, (n,))[bad] for part in rhs], axis=1)
        fixed = _solve_dense(full, right)
        step = [np.array(np.broadcast_to(part, (n,))) for part in step]
        for c in range(len(step)):
            step[c][bad] = fixed[:, c]
    return step, (A, inverse)


def _solve_dense(full: Array, right: Array) -> Array:
    """Least-squares solution, which also stands where a Jacobian is singular."""
    full = np.nan_to_num(full, posinf=0.0, neginf=0.0)
    right = np.nan_to_num(right, posinf=0.0, neginf=0.0)
    inverse = np.linalg.pinv(full, rcond=1e-13)
    return np.asarray(np.einsum("nij,nj->ni", inverse, right))


def _damping(x: Unknowns, step: Sequence[Any], reach: Mapping[str, Reach]) -> Array:
    """Largest share of the step, at most one, that respects every reach."""
    names = list(x)
    n = x[names[0]].shape[0]
    share = np.ones(n)
    for name, move in zip(names, step, strict=True):
        limit = reach.get(name)
        if limit is None:
            continue
        size = np.abs(move) + 1e-300
        if np.isfinite(limit.step):
            share = np.minimum(share, limit.step / size)
        if np.isfinite(limit.share):
            share = np.minimum(share, limit.share * np.abs(x[name]) / size)
        if np.isfinite(limit.low):
            room = np.where(move < 0.0, 0.9 * (x[name] - limit.low) / size, 1.0)
            share = np.minimum(share, room)
        if np.isfinite(limit.high):
            room = np.where(move > 0.0, 0.9 * (limit.high - x[name]) / size, 1.0)
            share = np.minimum(share, room)
    return share


def follow(
    equations: Equations,
    x: Unknowns,
    unit: Mapping[str, Any],
    inverse: Sequence[Sequence[Any]],
    indices: Array,
    steps: int,
    near_enough: float = POLISHED,
) -> tuple[Unknowns, Array]:
    """Quasi-Newton from an inverse Jacobian that is nearly right: values only, so quick.

    Parameters
    ----------
    x : start, arrays (n,). unit : size of each unknown, numbers or (n,). inverse : entry
    [u][r] is the change of unknown u (in its unit) by residual r, numbers or (n,).

    Returns
    -------
    The best unknowns seen and their residual norm; what is not solved goes to `solve`. A heat
    whose residual is at most `near_enough` takes one more step unseen, which gains at least two
    digits; the state worked out from it shows the residual that is left.

    Source: Broyden's first method in the form that keeps the steps instead of a matrix (C.T.
    Kelley, Iterative Methods for Linear and Nonlinear Equations, SIAM 1995, ch. 7; from
    memory).
    """
    names = list(x)
    best = {name: np.array(values) for name, values in x.items()}
    least = np.full(indices.shape, np.inf)
    run = _Run(np.arange(indices.size), indices, x, dict(unit), [list(row) for row in inverse])
    with np.errstate(all="ignore"):
        for step in range(steps):
            parts = equations.residuals(run.rows, run.x)
            size = residual_norm(parts, run.rows.shape)
            better = size < least[run.places]
            at = run.places[better]
            least[at] = size[better]
            for name in names:
                best[name][at] = run.x[name][better]
            open_ = np.flatnonzero(least[run.places] > RESIDUAL)
            if not open_.size:
                break
            near = least[run.places] <= near_enough  # one more step, and it is there
            if step >= NARROWED_FROM and open_.size < 0.7 * run.places.size:
                run = run.narrowed(open_)
                parts = [_cut(part, open_) for part in parts]
                near = near[open_]
            z = [-_dot(row, parts) for row in run.inverse]
            for old, new, square in zip(run.taken, run.taken[1:], run.squares, strict=False):
                along = _dot(old, z) / square
                z = [a + along * b for a, b in zip(z, new, strict=True)]
            if run.taken:
                stretch = 1.0 / (1.0 - _dot(run.taken[-1], z) / run.squares[-1])
                z = [a * stretch for a in z]
            run.taken.append(z)
            run.squares.append(_dot(z, z) + 1e-300)
            run.x = {
                name: run.x[name] + a * run.unit[name] for name, a in zip(names, z, strict=True)
            }
            if near.any():
                at = run.places[near]
                for name in names:
                    best[name][at] = run.x[name][near]
                run = run.narrowed(np.flatnonzero(~near))
                if not run.places.size:
                    break
    return best, least


def _cut(x: Any, keep: Array) -> Any:
    return x[keep] if isinstance(x, np.ndarray) and x.ndim else x


@dataclass
class _Run:
    """What the quasi-Newton steps of some heats remember; places: where they stand in all."""

    places: Array
    rows: Array
    x: Unknowns
    unit: dict[str, Any]
    inverse: list[list[Any]]
    taken: list[list[Any]] = field(default_factory=list)
    squares: list[Any] = field(default_factory=list)

    def narrowed(self, keep: Array) -> _Run:
        """The same for some of the heats."""
        return _Run(
            self.places[keep],
            self.rows[keep],
            {name: values[keep] for name, values in self.x.items()},
            {name: _cut(values, keep) for name, values in self.unit.items()},
            [[_cut(entry, keep) for entry in row] for row in self.inverse],
            [[_cut(part, keep) for part in step] for step in self.taken],
            [_cut(square, keep) for square in self.squares],
        )


def _dot(a: Sequence[Any], b: Sequence[Any]) -> Any:
    total = a[0] * b[0]
    for left, right in zip(a[1:], b[1:], strict=True):
        total = total + left * right
    return total


def solve(
    equations: Equations,
    start: Unknowns,
    reach: Mapping[str, Reach],
    indices: Array,
    most_steps: int = MOST_STEPS,
    residual: float = RESIDUAL,
) -> Solved:
    """Solve n systems of equal shape.

    Parameters
    ----------
    equations : asked with the indices of the heats still unsolved and their unknowns.
    start : first guess, arrays (n,). reach : limits of a step. indices : heats, (n,) ints.
    most_steps : Jacobians before a heat is left as it stands. residual : what counts as solved.

    Returns
    -------
    Solved, in the order of `indices`. Nothing is raised for a heat that does not converge.
    """
    names = list(start)
    n = len(indices)
    answer = {name: np.array(start[name], dtype=float) for name in names}
    norm_of, steps_of = np.full(n, np.inf), np.zeros(n, dtype=int)
    active = np.arange(n)
    here = indices
    x = {name: answer[name].copy() for name in names}
    with np.errstate(all="ignore"):
        for _ in range(most_steps):
            if not active.size:
                break
            values, J = equations.jacobian(here, x)
            norm = residual_norm(values, active.shape)
            steps_of[active] += 1
            step, factors = newton_step(values, J, active.size)
            x, norm = _advance(equations, here, x, step, norm, reach, factors)
            for name in names:
                answer[name][active] = x[name]
            stalled = norm >= norm_of[active]
            norm_of[active] = norm
            done = (norm <= residual) | ((norm <= RESIDUAL_STALLED) & stalled)
            if done.any():
                active = active[~done]
                here = indices[active]
                x = {name: x[name][~done] for name in names}
    solved = norm_of <= max(residual, RESIDUAL_STALLED)
    return Solved(answer, norm_of, steps_of, solved)


def _advance(
    equations: Equations,
    here: Array,
    x: Unknowns,
    step: Sequence[Any],
    norm: Array,
    reach: Mapping[str, Reach],
    factors: Factors,
) -> tuple[Unknowns, Array]:
    """Take the step, shortened where it does not help, then reuse the factors while it pays."""
    names = list(x)
    share = _damping(x, step, reach)
    new = {name: x[name] + share * move for name, move in zip(names, step, strict=True)}
    parts = equations.residuals(here, new)
    size = residual_norm(parts, here.shape)
    for _ in range(MOST_HALVINGS):
        worse = np.flatnonzero(size > norm)
        if not worse.size:
            break
        share[worse] *= 0.5
        some = {
            name: x[name][worse] + share[worse] * np.broadcast_to(move, here.shape)[worse]
            for name, move in zip(names, step, strict=True)
        }
        again = equations.residuals(here[worse], some)
        size[worse] = residual_norm(again, worse.shape)
        for name in names:
            new[name][worse] = some[name]
        parts = [np.array(np.broadcast_to(part, here.shape)) for part in parts]
        for old, part in zip(parts, again, strict=True):
            old[worse] = part
    for _ in range(2):
        if not (size > RESIDUAL).any():
            break
        move = substitute(factors, [-part for part in parts])
        trial = {name: new[name] + d for name, d in zip(names, move, strict=True)}
        further = equations.residuals(here, trial)
        reached = residual_norm(further, here.shape)
        better = reached < 0.3 * size
        if not better.any():
            break
        new = {name: np.where(better, trial[name], new[name]) for name in names}
        size = np.where(better, reached, size)
        parts = [np.where(better, a, b) for a, b in zip(further, parts, strict=True)]
    return new, size
