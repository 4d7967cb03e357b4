"""The steady state of heats that keep slag: a fixed point, found for all heats together."""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import replace
from itertools import pairwise

import numpy as np

from converter_calc.balance.asks import REACH, Ask, evaluate_ask
from converter_calc.balance.heats import HeatTable
from converter_calc.balance.newton import Unknowns, solve
from converter_calc.balance.problem import build_problem
from converter_calc.balance.state import State
from converter_calc.balance.system import System
from converter_calc.basis.dual import Array
from converter_calc.metallurgy.practices_stages import kept_slag, with_enthalpy
from converter_calc.planning.solving import plan_groups, solve_heats, with_values

#: Relative change of each species of the kept slag from heat to heat at which it counts as
#: steady: a tenth of what the closures promise.
STEADY = 1e-10
#: Species below this share of the kept slag are measured by it, not by themselves.
TRACE = 1e-12
MOST_HEATS = 200
#: Heats before that a step of the acceleration looks at.
DEPTH = 5
#: Newton steps from the heat before; it takes two or three.
NEAR_STEPS = 6


def steady_point(
    follow: Callable[[Array, Array], Array], start: Array, most: int = MOST_HEATS
) -> tuple[Array, Array, int]:
    """Rows x = follow(x), by Anderson's acceleration of the plain repetition.

    Parameters
    ----------
    follow : x (m, d) and row numbers (m,) to the image (m, d), each row on its own; NaN where a
    row has no answer. start : (n, d), not negative; answers are not negative either.

    Returns
    -------
    x (n, d), largest relative change in each row in the last step (n,), NaN where there is
    no answer; number of calls.

    Notes
    -----
    A row whose change grows takes the plain step, which a heat that keeps less than all of its
    slag always shrinks in the end; so kinks of the plan (lime by the aim or by the basicity)
    do not throw it off. Rows that are steady drop out.

    Source: D.G. Anderson, J. ACM 12 (1965) 547 (from memory).
    """
    found = np.array(start, dtype=float)
    gaps = np.full(len(found), np.nan)
    rows = np.arange(len(found))
    x, least = found.copy(), np.full(len(found), np.inf)
    points: list[Array] = []
    images: list[Array] = []
    for step in range(1, most + 1):
        image = follow(x, rows)
        size = np.abs(image) + TRACE * np.abs(image).sum(axis=1, keepdims=True) + 1e-300
        gap = (np.abs(image - x) / size).max(axis=1)
        gaps[rows] = gap
        answered = np.isfinite(gap)
        found[rows[answered]] = image[answered]
        left = np.flatnonzero(gap > STEADY)
        if not left.size:
            return found, gaps, step
        points, images = [*points[-DEPTH:], x], [*images[-DEPTH:], image]
        if left.size < rows.size:
            points, images = ([part[left] for part in kept] for kept in (points, images))
            rows, gap, least = rows[left], gap[left], least[left]
        nearer = gap < least
        least = np.minimum(gap, least)
        x = np.where(nearer[:, None], _accelerated(points, images), images[-1])
    return found, gaps, most


def _accelerated(points: list[Array], images: list[Array]) -> Array:
    """The next point from those before; the plain image where the guess turns negative."""
    plain = images[-1]
    if len(points) < 2:
        return plain
    errors = [image - point for point, image in zip(points, images, strict=True)]
    by_error = np.stack([b - a for a, b in pairwise(errors)], axis=2)
    by_image = np.stack([b - a for a, b in pairwise(images)], axis=2)
    weights = np.linalg.pinv(by_error, rcond=1e-10) @ errors[-1][:, :, None]
    guess = plain - (by_image @ weights)[:, :, 0]
    good = np.isfinite(guess).all(axis=1) & (guess >= 0.0).all(axis=1)
    return np.where(good[:, None], guess, plain)


def steady_heats(heats: HeatTable, share: Array, temp_C: Array) -> tuple[HeatTable, Array, int]:
    """Heats that start on a share of the slag of a heat made in the very same way.

    Parameters
    ----------
    heats : n heats that pose the same question. share : of the end slag that stays, 0 to below
    1, (n,). temp_C : its temperature at charging [C], (n,).

    Returns
    -------
    The heats with their kept slag, the change that is left (see `steady_point`), heats tried.
    """
    bare = with_values(heats, retained_slag_kg=0.0)

    ((_, group, ask),) = plan_groups(bare)
    begin = solve_heats(group, ask)
    first = kept_slag(begin.state, heats.n, share, temp_C)
    keys = [key for key in first if not key.endswith(("enthalpy_J", "temp_C"))]
    unknowns = {name: values.copy() for name, values in begin.x.items()}

    def returned(x: Array, temp_C: Array) -> dict[str, Array]:
        return with_enthalpy({key: x[:, k] for k, key in enumerate(keys)}, temp_C)

    def follow(x: Array, rows: Array) -> Array:
        some = group if rows.size == heats.n else group.take(rows)
        some = replace(some, returned=returned(x, temp_C[rows]))
        near = {name: values[rows] for name, values in unknowns.items()}
        state, near, good = _solved_near(some, ask, near)
        for name, values in near.items():
            unknowns[name][rows] = values
        kept = kept_slag(state, rows.size, share[rows], temp_C[rows])
        image = np.stack([kept[key] for key in keys], axis=1)
        image[~good] = np.nan
        return image

    start = np.nan_to_num(np.stack([first[key] for key in keys], axis=1))
    x, gap, heats_tried = steady_point(follow, np.maximum(start, 0.0))
    return replace(bare, returned=returned(x, temp_C)), gap, heats_tried


def _solved_near(heats: HeatTable, ask: Ask, near: Unknowns) -> tuple[State, Unknowns, Array]:
    """Heats solved from the unknowns of the heat before; from afresh where that fails."""
    if heats.n == 1:  # one heat is replayed from a recording, faster than it is followed
        alone = solve_heats(heats, ask)
        return alone.state, alone.x, alone.converged
    p = build_problem(heats)
    solved = solve(System(p, ask), near, REACH, np.arange(p.n), NEAR_STEPS)
    x, good = solved.unknowns, np.asarray(solved.converged)
    rows = np.flatnonzero(~good)
    if rows.size:
        again = solve_heats(heats.take(rows), ask)
        for name, values in again.x.items():
            x[name][rows] = values
        good[rows] = again.converged
    return evaluate_ask(p, ask, dict(x)), x, good
