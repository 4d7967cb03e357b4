"""Offsets that follow the campaign: how fast they wander, where they jumped, where they are now.

The speed of each offset and the noise of each quantity are estimated by maximum likelihood;
jumps are found by the trace they leave in what the filter did not expect, one by one, largest
first, and dated.
"""

from __future__ import annotations

from dataclasses import dataclass, replace
from typing import Any

import numpy as np

from converter_calc.basis.dual import Array
from converter_calc.learning.state_filter import (
    Looked,
    Pass,
    Walk,
    log_likelihoods,
    look_back,
    run_filter,
)

#: The chance, over a whole log, of calling a jump where there is none.
FALSE_ALARM = 0.01
#: Jumps nearer together than this many heats are one jump.
APART = 10
#: A jump is dated anew within this many heats once the others are known.
NEAR = 25
SEARCH_SPEED = 0.3
MOST_JUMPS = 12
#: Steps of the search for speeds and noise; a few are enough where only a jump was added.
MOST_STEPS, FEW_STEPS = 25, 6
#: A jump at the very end of the log cannot yet be told from a bad sample.
LAST_HEATS = 3
#: Nor one at its start from the start itself.
FIRST_HEATS = 30
#: Log step of the differences that give the slope of the likelihood.
LOG_STEP = 1e-3
#: Speeds are looked for from this share of the noise on.
SLOWEST = 1e-4


@dataclass(frozen=True)
class Jump:
    """A step change: the first heat (row) that shows it, the offset, its size and error.

    sure : it stands beside the wander that the likelihood asks for; otherwise it is suspected
    only: a wander as fast as estimated could have gone so far.
    """

    row: int
    offset: str
    size: float
    standard_error: float
    score: float
    sure: bool = True


@dataclass(frozen=True)
class Drift:
    """Offsets of a log of n heats.

    offsets, quantities : names of the k offsets and m quantities. walk : speeds, noise, start
    and the shocks of the jumps found. forward : what was known before and after each heat.
    back : what all heats say. jumps : in time order.
    """

    offsets: tuple[str, ...]
    quantities: tuple[str, ...]
    walk: Walk
    forward: Pass
    back: Looked
    jumps: tuple[Jump, ...]

    @property
    def today(self) -> tuple[Array, Array]:
        """Offsets for the heat to come and their covariance, (k,) and (k, k)."""
        cov = self.forward.after_cov[-1] + np.diag(np.square(self.walk.speed))
        return self.forward.after[-1], cov


def follow_drift(
    y: Any,
    H: Any,
    offsets: tuple[str, ...],
    quantities: tuple[str, ...],
    start_cov: Any,
    *,
    start: Any = None,
    first: Walk | None = None,
) -> Drift:
    """Estimate speeds and noise, find jumps, and follow the offsets through a log.

    Parameters
    ----------
    y : what was observed less what the model predicts, heats in time order, (n, m); NaN where
        missing. H : derivative of each quantity by each offset, (n, m, k). offsets, quantities :
        their names. start, start_cov : offsets before the first heat, (k,), (k, k). first :
        an earlier estimate for the same log, whose speeds and noise to start from.

    Raises
    ------
    ValueError : shapes that do not fit, or no heat at all.
    """
    y, H = np.asarray(y, dtype=float), np.asarray(H, dtype=float)
    n, m = y.shape
    k = len(offsets)
    if n == 0 or H.shape != (n, m, k) or len(quantities) != m:
        message = f"y {y.shape} and H {H.shape} do not fit {m} quantities and {k} offsets"
        raise ValueError(message)
    a0 = np.zeros(k) if start is None else np.asarray(start, dtype=float)
    P0 = np.asarray(start_cov, dtype=float)
    if first is None:
        noise = _rough_noise(y)
        walk = estimate_walk(y, H, Walk(_rough_speed(H, noise), noise, a0, P0, {}))
    else:
        walk = estimate_walk(y, H, Walk(first.speed, first.noise, a0, P0, {}), FEW_STEPS)
    walk, jumps = find_jumps(y, H, walk, offsets)
    forward = run_filter(y, H, walk)
    back = look_back(y, H, forward)
    return Drift(offsets, quantities, walk, forward, back, jumps)


def find_jumps(
    y: Array, H: Array, walk: Walk, offsets: tuple[str, ...]
) -> tuple[Walk, tuple[Jump, ...]]:
    """Jumps of the offsets, and the walk with them.

    A jump passes for a fast walk at first, so the search takes slower steps than the likelihood
    asks for. What does not stand with the speeds estimated beside it is suspected only, and the
    offset does not go free there.
    """
    places: list[tuple[int, int]] = []
    suspected: list[Jump] = []
    while len(places) < MOST_JUMPS:
        slow = replace(walk, speed=walk.speed * SEARCH_SPEED)
        back = look_back(y, H, run_filter(y, H, slow))
        found = _largest_jump(_scores(back, places))
        if found is None:
            break
        places.append(found)
        suspected.append(replace(_jump(back, found, offsets), sure=False))
        walk = estimate_walk(y, H, _with_shock(walk, found, _size(back, found)), FEW_STEPS)
    walk, jumps = _settle(y, H, walk, places, offsets)
    if len(jumps) == len(places):
        return walk, jumps
    left = [
        jump
        for jump in suspected
        if not any(j.offset == jump.offset and abs(j.row - jump.row) <= NEAR for j in jumps)
    ]
    all_jumps = sorted([*jumps, *left], key=lambda jump: jump.row)
    return estimate_walk(y, H, walk, FEW_STEPS), tuple(all_jumps)


def _jump(back: Looked, place: tuple[int, int], offsets: tuple[str, ...]) -> Jump:
    error = float(back.push_information[place] ** -0.5)
    size = _size(back, place)
    return Jump(place[0], offsets[place[1]], size, error, size / error)


def estimate_walk(y: Array, H: Array, first: Walk, steps: int = MOST_STEPS) -> Walk:
    """Speeds and noise of the greatest likelihood, from a first guess.

    steps : at most so many steps of the search. A speed of zero stays zero, and a quantity never
    observed keeps its noise. Source: quasi-Newton on the logarithms (scipy L-BFGS-B), slopes by
    central differences, all of them in one pass.
    """
    from scipy.optimize import minimize

    free_q = np.flatnonzero(first.speed > 0.0)
    free_r = np.flatnonzero(np.isfinite(y).any(axis=0) & (first.noise > 0.0))
    size = free_q.size + free_r.size
    if not size:
        return first

    def walks(logs: Array) -> Walk:
        speed = np.tile(first.speed, (len(logs), 1))
        noise = np.tile(first.noise, (len(logs), 1))
        speed[:, free_q] = np.exp(logs[:, : free_q.size])
        noise[:, free_r] = np.exp(logs[:, free_q.size :])
        return Walk(speed, noise, first.start, first.start_cov, first.shocks)

    def loss(logs: Array) -> tuple[float, Array]:
        steps = np.vstack([np.zeros(size), np.eye(size), -np.eye(size)]) * LOG_STEP
        found = -log_likelihoods(y, H, walks(logs + steps))
        return float(found[0]), (found[1 : size + 1] - found[size + 1 :]) / (2.0 * LOG_STEP)

    logs = np.log(np.concatenate([first.speed[free_q], first.noise[free_r]]))
    bounds = _bounds(H, first, free_q, free_r)
    best = minimize(
        loss, np.clip(logs, *np.transpose(bounds)), jac=True, method="L-BFGS-B", bounds=bounds,
        options={"maxiter": steps, "ftol": 1e-6},
    )  # fmt: skip
    found = walks(best.x[None, :])
    return Walk(found.speed[0], found.noise[0], first.start, first.start_cov, first.shocks)


def _bounds(H: Array, first: Walk, free_q: Array, free_r: Array) -> list[tuple[float, float]]:
    fastest = _rough_speed(H, first.noise) * 10.0
    speeds = [(np.log(fastest[j] * SLOWEST * 0.1), np.log(fastest[j] * 10.0)) for j in free_q]
    noises = [(np.log(first.noise[i]) - 5.0, np.log(first.noise[i]) + 5.0) for i in free_r]
    return [*speeds, *noises]


def still_log_likelihood(y: Array, H: Array, walk: Walk) -> float:
    """Log likelihood of offsets that stay as they are, the noise estimated anew: for comparison."""
    still = estimate_walk(y, H, replace(walk, speed=np.zeros_like(walk.speed), shocks={}))
    batch = replace(still, speed=still.speed[None, :], noise=still.noise[None, :])
    return float(log_likelihoods(y, H, batch)[0])


def _rough_noise(y: Array) -> Array:
    """Noise from the differences of one heat to the next (median, so gross errors do not count)."""
    found = np.ones(y.shape[1])
    for i, column in enumerate(y.T):
        seen = column[np.isfinite(column)]
        if seen.size > 2:  # noqa: SIM102
            if (spread := float(np.median(np.abs(np.diff(seen))))) > 0.0:
                found[i] = spread / (0.6745 * np.sqrt(2.0))
    return found


def _rough_speed(H: Array, noise: Array) -> Array:
    """A tenth of the step that would move some quantity by its noise."""
    moved = np.max(np.median(np.abs(H), axis=0) / noise[:, None], axis=0)
    return 0.1 / np.where(moved > 0.0, moved, 1.0)


def _scores(back: Looked, known: list[tuple[int, int]]) -> Array:
    """Standard scores of a shock at each heat and offset; none where one is known already."""
    information = np.where(back.push_information > 0.0, back.push_information, np.inf)
    score: Array = back.push / np.sqrt(information)
    score[:FIRST_HEATS] = 0.0
    score[max(len(score) - LAST_HEATS, 0) :] = 0.0
    for row, j in known:
        score[max(row - APART, 0) : row + APART + 1, j] = 0.0
    return score


def _largest_jump(score: Array) -> tuple[int, int] | None:
    """The most telling shock beyond what chance would show in n x k places."""
    row, j = divmod(int(np.argmax(np.abs(score))), score.shape[1])
    return (row, j) if abs(score[row, j]) >= _threshold(score.size) else None


def _threshold(places: int) -> float:
    from scipy.special import ndtri

    return -float(ndtri(0.5 * FALSE_ALARM / places))


def _size(back: Looked, place: tuple[int, int]) -> float:
    return float(back.push[place] / back.push_information[place])


def _with_shock(walk: Walk, place: tuple[int, int], size: float) -> Walk:
    """Let the offset go free at the jump: a shock far wider than its size."""
    row, j = place
    shock = walk.shocks.get(row, np.zeros(walk.start.size)).copy()
    shock[j] += (10.0 * size) ** 2
    return replace(walk, shocks={**walk.shocks, row: shock})


def _without_shock(walk: Walk, place: tuple[int, int]) -> Walk:
    row, j = place
    shock = walk.shocks[row].copy()
    shock[j] = 0.0
    return replace(walk, shocks={**walk.shocks, row: shock})


def _settle(
    y: Array, H: Array, walk: Walk, places: list[tuple[int, int]], offsets: tuple[str, ...]
) -> tuple[Walk, tuple[Jump, ...]]:
    """Each jump dated and sized anew with all others in place; what tells nothing any more goes."""
    jumps = []
    kept = list(places)
    for place in places:
        kept.remove(place)
        without = _without_shock(walk, place)
        back = look_back(y, H, run_filter(y, H, without))
        score = _scores(back, kept)
        near = slice(max(place[0] - NEAR, 0), place[0] + NEAR + 1)
        row = near.start + int(np.argmax(np.abs(score[near, place[1]])))
        walk = without
        if abs(score[row, place[1]]) < _threshold(score.size):
            continue
        moved = (row, place[1])
        kept.append(moved)
        walk = _with_shock(walk, moved, _size(back, moved))
        jumps.append(_jump(back, moved, offsets))
    return walk, tuple(sorted(jumps, key=lambda jump: jump.row))
