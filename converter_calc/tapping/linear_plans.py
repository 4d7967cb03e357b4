"""Linear programmes that share their matrix: min c x with A x <= b, x >= 0, for n heats.

The first heat is solved by HiGHS; its optimal basis stays optimal for every other heat in
which it is feasible, because cost and matrix are the same, so all those are read off at once.
The rest goes on likewise. Source: parametric linear programming, e.g. D. Bertsimas, J.N.
Tsitsiklis, Introduction to Linear Optimization (1997), ch. 5 (from memory).
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from converter_calc.basis.dual import Array

#: A variable or slack below this share of the right-hand sides is at its bound.
AT_BOUND = 1e-10
#: Rounding allowed when a known basis is read off.
ROUNDING = 1e-11
#: Infeasible for sure: the proof misses zero by more than this.
PROVEN = 1e-6


@dataclass
class LinearAnswer:
    """x : (n, variables), NaN where infeasible; feasible : (n,); solved : programmes solved."""

    x: Array
    feasible: Array
    solved: int


def solve_all(cost: Array, matrix: Array, limits: Array) -> LinearAnswer:
    """The least cost x of each heat.

    Parameters
    ----------
    cost : (k,), not negative. matrix : (m, k). limits : (n, m), right-hand sides; inf = no row.

    Returns
    -------
    LinearAnswer. Every x is the exact optimum of its own programme (to rounding).
    """
    n, k = limits.shape[0], cost.size
    x, feasible = np.full((n, k), np.nan), np.zeros(n, dtype=bool)
    left, solved = np.arange(n), 0
    while left.size:
        row = left[0]
        here = limits[row]
        rows = np.isfinite(here)
        answer = _one(cost, matrix[rows], here[rows])
        solved += 1
        if answer is None:
            proof = _proof(matrix[rows], here[rows])
            alike = (np.isfinite(limits[left]) == rows).all(axis=1)
            hopeless = np.zeros(left.size, dtype=bool)
            hopeless[alike] = limits[left[alike]][:, rows] @ proof < -PROVEN
            hopeless[0] = True
            left = left[~hopeless]
            continue
        done = np.zeros(left.size, dtype=bool)
        x[row], feasible[row], done[0] = answer, True, True
        alike = (np.isfinite(limits[left]) == rows).all(axis=1)
        values, fits = _read_off(matrix[rows], here[rows], answer, limits[left][:, rows])
        fits &= alike
        x[left[fits]], feasible[left[fits]] = values[fits], True
        left = left[~(done | fits)]
    return LinearAnswer(x, feasible, solved)


def _one(cost: Array, matrix: Array, limits: Array) -> Array | None:
    from scipy.optimize import linprog

    if cost.size == 0:
        return np.zeros(0) if (limits >= 0.0).all() else None
    found = linprog(cost, A_ub=matrix, b_ub=limits, bounds=(0, None), method="highs")
    return np.asarray(found.x, dtype=float) if found.status == 0 else None


def _proof(matrix: Array, limits: Array) -> Array:
    """Weights y >= 0 with y A >= 0 and y b < 0: no x >= 0 keeps such limits (Farkas).

    The same weights prove it for every heat with y b < 0.
    """
    from scipy.optimize import linprog

    m, k = matrix.shape
    cost = np.concatenate([np.zeros(k), np.ones(m)])
    system = np.hstack([matrix, -np.eye(m)])
    found = linprog(cost, A_ub=system, b_ub=limits, bounds=(0, None), method="highs")
    return np.asarray(-found.ineqlin.marginals, dtype=float)


def _read_off(matrix: Array, limits: Array, x: Array, others: Array) -> tuple[Array, Array]:
    """Solutions of other heats on the basis of one that is solved, and where they are feasible."""
    m, k = matrix.shape
    none: tuple[Array, Array] = (
        np.zeros((others.shape[0], k)),
        np.zeros(others.shape[0], dtype=bool),
    )
    scale = max(1.0, float(np.abs(limits).max(initial=0.0)))
    slack = limits - matrix @ x
    basic = np.concatenate([x, slack]) > AT_BOUND * scale
    if int(basic.sum()) != m:  # degenerate: the basis cannot be told
        return none
    whole = np.hstack([matrix, np.eye(m)])[:, basic]
    try:
        values = np.linalg.solve(whole, others.T).T
    except np.linalg.LinAlgError:
        return none
    full = np.zeros((others.shape[0], k + m))
    full[:, basic] = values
    fits = np.asarray((values >= -ROUNDING * scale).all(axis=1))
    return np.maximum(full[:, :k], 0.0), fits


def least_violation(matrix: Array, limits: Array, weights: Array) -> tuple[Array, Array]:
    """The x that breaks the limits of one heat least, and by how much it breaks each.

    matrix (m, k), limits (m,), weights (m,) of the violations. Returns x (k,), violation (m,).
    """
    from scipy.optimize import linprog

    rows = np.isfinite(limits)
    m, k = int(rows.sum()), matrix.shape[1]
    cost = np.concatenate([np.full(k, 1e-7), weights[rows]])
    system = np.hstack([matrix[rows], -np.eye(m)])
    found = linprog(cost, A_ub=system, b_ub=limits[rows], bounds=(0, None), method="highs")
    x = np.asarray(found.x, dtype=float)
    violation = np.zeros(limits.size)
    violation[rows] = np.where(x[k:] > 1e-7, x[k:], 0.0)
    return x[:k], violation
