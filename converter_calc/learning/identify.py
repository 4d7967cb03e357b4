"""What a log can tell: information from data against prior, covariance, pairs it cannot part."""

from __future__ import annotations

from collections.abc import Sequence

import numpy as np

from converter_calc.basis.dual import Array
from converter_calc.learning.tuning_equations import NormalEquations

#: Correlation from which two parameters are told apart by little but their priors.
COLLINEAR = 0.9


def told_by_data(information: Array) -> Array:
    """Share of what is known of each parameter that comes from the data, (k,), 0 to 1.

    information : of the data, whitened by the prior, (k, k). One less the ratio of the variance
    with the data to that without: 0 where the data say nothing, 1 where the prior says nothing.
    """
    k = len(information)
    return np.clip(1.0 - np.diag(np.linalg.inv(information + np.eye(k))), 0.0, 1.0)


def covariance_of(sums: NormalEquations, free: Array) -> Array:
    """Covariance of the whitened parameters, (k, k).

    The sandwich of Huber, from the outcomes of each heat together, since they share the errors of
    its charge: A^-1 (B + 1) A^-1 with A the curvature and B the sum of the squared slopes of each
    heat; the prior counts as one more observation of each parameter. A held parameter keeps its
    prior variance, and what it does to the others counts. Source: Huber, Proc. 5th Berkeley
    Symp. 1 (1967) 221 (from memory).
    """
    k = len(free)
    one = np.eye(k)
    few = sums.heats / max(sums.heats - k, 1)
    A = sums.curvature + one
    some = np.flatnonzero(free)
    if not some.size:
        return one
    held = np.flatnonzero(~free)
    inverse = np.linalg.inv(A[np.ix_(some, some)])
    B = sums.scores[np.ix_(some, some)] * few + np.eye(some.size)
    cov = np.zeros((k, k))
    cov[np.ix_(some, some)] = inverse @ B @ inverse
    if held.size:
        follows = -inverse @ A[np.ix_(some, held)]
        cov[np.ix_(some, some)] += follows @ follows.T
        cov[np.ix_(some, held)] = follows
        cov[np.ix_(held, some)] = follows.T
        cov[np.ix_(held, held)] = np.eye(held.size)
    return (cov + cov.T) * 0.5


def collinear_pairs(names: Sequence[str], cov: Array) -> tuple[tuple[str, str, float], ...]:
    """Pairs whose errors are correlated by COLLINEAR or more, most of all first."""
    sd = np.sqrt(np.diag(cov))
    correlation = cov / np.outer(sd, sd)
    pairs = [
        (names[i], names[j], float(correlation[i, j]))
        for i in range(len(names))
        for j in range(i)
        if abs(correlation[i, j]) >= COLLINEAR
    ]
    return tuple(sorted(pairs, key=lambda pair: -abs(pair[2])))
