"""A state filter for offsets that wander: one pass forward, one back, many speeds at once.

The state s (k offsets) walks at random from heat to heat, s' = s + w with w ~ N(0, q²), and each
heat shows m quantities y = H s + e, e ~ N(0, r²). Observations of a heat are taken in one by
one, which needs no inverse and lets any of them be missing.

Sources of the method: R.E. Kalman, J. Basic Eng. 82 (1960) 35; one observation at a time: S.J.
Koopman, J. Durbin, J. Time Ser. Anal. 21 (2000) 281; likelihood and backward recursion: J.
Durbin, S.J. Koopman, Time Series Analysis by State Space Methods (2nd ed., 2012), chapters 4, 6
and 7 (from memory).
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from converter_calc.basis.dual import Array

#: Innovations beyond so many standard deviations weigh less (Huber): a sample of another heat
#: must not move today's offsets.
HUBER = 3.0
#: Share of gross errors, and their deviation against that of a good reading, for which the
#: likelihood allows (a contaminated normal distribution, J.W. Tukey 1960), so that they do not
#: pass for noise.
GROSS_SHARE, GROSS_TIMES = 0.02, 10.0


@dataclass(frozen=True)
class Walk:
    """What is known before the first heat, and how fast offsets and readings vary.

    speed : standard deviation of a step from heat to heat, (k,) or (b, k) for b guesses at once.
    noise : standard deviation of each observed quantity, (m,) or (b, m).
    start, start_cov : mean (k,) and covariance (k, k) of the offsets at the first heat.
    shocks : heat -> extra variance (k,) of the step that leads to it.
    """

    speed: Array
    noise: Array
    start: Array
    start_cov: Array
    shocks: dict[int, Array]


@dataclass(frozen=True)
class Pass:
    """A forward pass over n heats.

    before, before_cov : offsets and covariance before the heat is seen, (n, k), (n, k, k).
    after, after_cov : the same once it is seen. expected, expected_var : what was expected of
    each quantity from the heats before, (n, m). gap, gap_var, gain : innovation, its variance
    and the gain of each observation in the order taken, (n, m), (n, m), (n, m, k); NaN where
    missing. log_likelihood : of all that was seen.
    """

    before: Array
    before_cov: Array
    after: Array
    after_cov: Array
    expected: Array
    expected_var: Array
    gap: Array
    gap_var: Array
    gain: Array
    log_likelihood: float


def run_filter(y: Array, H: Array, walk: Walk, *, robust: bool = True) -> Pass:
    """One pass over n heats in time order.

    Parameters
    ----------
    y : (n, m), NaN where missing. H : (n, m, k). walk : speeds (k,), noise (m,).
    robust : an innovation beyond `HUBER` standard deviations counts with a wider noise.
    """
    n, m = y.shape
    k = H.shape[2]
    a, P = walk.start.astype(float).copy(), walk.start_cov.astype(float).copy()
    step, noise = np.square(walk.speed), np.square(walk.noise)
    before, after = np.empty((n, k)), np.empty((n, k))
    before_cov, after_cov = np.empty((n, k, k)), np.empty((n, k, k))
    expected, expected_var = np.empty((n, m)), np.empty((n, m))
    gap, gap_var = np.full((n, m), np.nan), np.full((n, m), np.nan)
    gain = np.zeros((n, m, k))
    log_likelihood = 0.0
    diagonal = np.diag_indices(k)
    for t in range(n):
        if t:
            P[diagonal] += step
        if t in walk.shocks:
            P[diagonal] += walk.shocks[t]
        before[t], before_cov[t] = a, P
        expected[t] = H[t] @ a
        expected_var[t] = np.einsum("mi,ij,mj->m", H[t], P, H[t]) + noise
        for i in np.flatnonzero(np.isfinite(y[t])).tolist():
            h = H[t, i]
            Ph = P @ h
            v = y[t, i] - h @ a
            f, loss = _weighed(v, float(h @ Ph), float(noise[i]), robust=robust)
            log_likelihood -= loss
            K = Ph / f
            a = a + K * v
            P = P - np.outer(K, Ph)
            gap[t, i], gap_var[t, i], gain[t, i] = v, f, K
        after[t], after_cov[t] = a, P
    return Pass(
        before, before_cov, after, after_cov, expected, expected_var, gap, gap_var, gain,
        float(log_likelihood),
    )  # fmt: skip


def _weighed(v: float, from_state: float, noise: float, *, robust: bool) -> tuple[float, float]:
    """Variance of an innovation, widened where it is an outlier, and its negative log density."""
    f = from_state + noise
    square = v * v / f
    if not robust:
        return f, 0.5 * (np.log(2.0 * np.pi * f) + square)
    loss = float(_contaminated_loss(np.array(square), np.array(f)))
    return f * max(np.sqrt(square) / HUBER, 1.0), loss


def _contaminated_loss(square: Array, f: Array) -> Array:
    """Negative log density of an innovation that may be a gross error."""
    good = np.log1p(-GROSS_SHARE) - 0.5 * square
    gross = np.log(GROSS_SHARE / GROSS_TIMES) - 0.5 * square / GROSS_TIMES**2
    loss: Array = 0.5 * np.log(2.0 * np.pi * f) - np.logaddexp(good, gross)
    return loss


def log_likelihoods(y: Array, H: Array, walk: Walk, *, robust: bool = True) -> Array:
    """Log likelihood of b guesses of speed and noise at once, (b,); see `run_filter`.

    walk.speed : (b, k). walk.noise : (b, m).
    """
    n, m = y.shape
    b, k = walk.speed.shape
    a = np.tile(walk.start.astype(float), (b, 1))
    P = np.tile(walk.start_cov.astype(float), (b, 1, 1))
    step, noise = np.square(walk.speed), np.square(walk.noise)
    total = np.zeros(b)
    diagonal = np.arange(k)
    seen = np.isfinite(y)
    for t in range(n):
        if t:
            P[:, diagonal, diagonal] += step
        if t in walk.shocks:
            P[:, diagonal, diagonal] += walk.shocks[t]
        for i in range(m):
            if not seen[t, i]:
                continue
            h = H[t, i]
            Ph = P @ h
            v = y[t, i] - a @ h
            f = Ph @ h + noise[:, i]
            square = v * v / f
            if robust:
                total -= _contaminated_loss(square, f)
                f = f * np.maximum(np.sqrt(square) / HUBER, 1.0)
            else:
                total -= 0.5 * (np.log(2.0 * np.pi * f) + square)
            K = Ph / f[:, None]
            a = a + K * v[:, None]
            P = P - K[:, :, None] * Ph[:, None, :]
    return total


@dataclass(frozen=True)
class Looked:
    """A backward pass: what all heats say of each.

    smoothed, smoothed_sd : offsets given all heats, (n, k). push, push_information : score of a
    shock in the step that leads to each heat, and its information, (n, k): push /
    sqrt(push_information) is standard normal where there was none, push / push_information the
    size that a shock would have.
    """

    smoothed: Array
    smoothed_sd: Array
    push: Array
    push_information: Array


def look_back(y: Array, H: Array, forward: Pass) -> Looked:
    """Smoothed offsets, and the trace that a shock at each heat would have left.

    Source of the shock statistics: A.C. Harvey, S.J. Koopman, J. Bus. Econ. Stat. 10 (1992) 377;
    P. de Jong, J. Penzer, J. Am. Stat. Assoc. 93 (1998) 796 (from memory).
    """
    n, m = y.shape
    k = H.shape[2]
    r, N = np.zeros(k), np.zeros((k, k))
    smoothed, smoothed_sd = np.empty((n, k)), np.empty((n, k))
    push, information = np.empty((n, k)), np.empty((n, k))
    unit = np.eye(k)
    for t in range(n - 1, -1, -1):
        for i in range(m - 1, -1, -1):
            if np.isnan(forward.gap[t, i]):
                continue
            h, f = H[t, i], forward.gap_var[t, i]
            L = unit - np.outer(forward.gain[t, i], h)
            r = h * (forward.gap[t, i] / f) + L.T @ r
            N = np.outer(h, h) / f + L.T @ N @ L
        P = forward.before_cov[t]
        smoothed[t] = forward.before[t] + P @ r
        smoothed_sd[t] = np.sqrt(np.maximum(np.diag(P - P @ N @ P), 0.0))
        push[t], information[t] = r, np.diag(N)
    return Looked(smoothed, smoothed_sd, push, information)
