"""The normal equations of a heat log at one set of parameters, summed heat by heat.

Sums of parts of a log add up to those of the whole, so a log of any length can be read in
chunks, on one machine or on many.
"""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass, field, replace
from functools import cache
from typing import Any

import numpy as np

from converter_calc.basis.dual import Array
from converter_calc.learning.parameters import ParameterSet
from converter_calc.learning.replay import HeatLog, Replay, replay
from converter_calc.learning.replay_quantities import quantities

#: Residual in standard deviations from which it counts by its size, no longer by its square: 95 %
#: as efficient as least squares where errors are normal (Huber, Ann. Math. Stat. 35 (1964) 73;
#: from memory).
HUBER = 1.345
#: Standard deviations of a normal distribution in its median absolute deviation.
MAD_TO_SD = 1.482602218505602
#: Standard deviations beyond which an outcome is a gross error.
GROSS = 5.0
#: Scatter is read from a count of residuals by sign and size: logarithmic bins between these
#: multiples of the first guess, 0.4 % wide. Counts add up exactly whatever the parts.
SMALLEST, LARGEST, BINS = 1e-9, 1e5, 8192
#: Replays in which a heat may have no answer before it is left out.
TRIES = 1
#: Most gross errors that a sum keeps by name.
MOST_NAMED = 10000


@dataclass(frozen=True)
class Point:
    """Where the equations are set up: whitened parameters z (k,), scatter by quantity.

    middle : median residual by quantity; a gross error is far from it and from 0.
    """

    parameters: ParameterSet
    z: Array
    sd: Mapping[str, float]
    middle: Mapping[str, float] = field(default_factory=dict)


@dataclass(frozen=True)
class GrossError:
    """An outcome, or a whole heat, that is not used."""

    heat_id: str
    field: str
    given: float
    expected: float
    sds: float
    whole_heat: bool


@dataclass
class NormalEquations:
    """Sums over heats; whitened parameters, prior not included.

    information : sum of w J J' / sd^2 (k, k); curvature : the same with the derivative of the
    weighted residual in place of w; gradient : sum of psi J / sd (k,); scores : sum over heats of
    the outer product of their gradients (k, k); cost : sum of the loss. By quantity: used,
    error, absolute (in its own unit), sizes (count of residuals by sign and size).
    """

    names: tuple[str, ...]
    information: Array
    curvature: Array
    gradient: Array
    scores: Array
    cost: float = 0.0
    heats: int = 0
    unusable: int = 0
    unsolved: int = 0
    gross_outcomes: int = 0
    gross_heats: int = 0
    used: dict[str, int] = field(default_factory=dict)
    error: dict[str, float] = field(default_factory=dict)
    absolute: dict[str, float] = field(default_factory=dict)
    sizes: dict[str, Array] = field(default_factory=dict)
    gross: list[GrossError] = field(default_factory=list)

    @classmethod
    def zero(cls, names: tuple[str, ...]) -> NormalEquations:
        """The equations of no heat."""
        k = len(names)
        return cls(names, np.zeros((k, k)), np.zeros((k, k)), np.zeros(k), np.zeros((k, k)))

    def __add__(self, other: NormalEquations) -> NormalEquations:
        """The equations of both parts together."""
        if self.names != other.names:
            raise ValueError("normal equations of different parameters do not add up")
        total = NormalEquations(
            self.names,
            self.information + other.information,
            self.curvature + other.curvature,
            self.gradient + other.gradient,
            self.scores + other.scores,
            self.cost + other.cost,
        )
        for name in ("heats", "unusable", "unsolved", "gross_outcomes", "gross_heats"):
            setattr(total, name, getattr(self, name) + getattr(other, name))
        for name in ("used", "error", "absolute", "sizes"):
            a, b = getattr(self, name), getattr(other, name)
            both = {key: a[key] + b[key] if key in a and key in b else a.get(key, b.get(key))
                    for key in (*a, *(key for key in b if key not in a))}  # fmt: skip
            setattr(total, name, both)
        total.gross = [*self.gross, *other.gross][:MOST_NAMED]
        return total

    def tempered(self, shared_error: float) -> NormalEquations:
        """The sums as they count where the errors of two heats have that correlation."""
        share = 1.0 / (1.0 + max(self.heats - 1, 0) * shared_error)
        return replace(
            self,
            information=self.information * share,
            curvature=self.curvature * share,
            gradient=self.gradient * share,
            scores=self.scores * share,
            cost=self.cost * share,
        )

    def middle(self) -> dict[str, float]:
        """Median residual of each quantity."""
        return {
            name: _median(_bin_centres() * quantities()[name].first_sd, counts)
            for name, counts in self.sizes.items()
        }

    def scatter(self) -> dict[str, float]:
        """Robust standard deviation of each quantity: 1.4826 median |residual - its median|.

        Never below the floor of data/observed_quantities.csv.
        """
        found = {}
        for name, middle in self.middle().items():
            quantity = quantities()[name]
            size = np.abs(_bin_centres() * quantity.first_sd - middle)
            order = np.argsort(size, kind="stable")
            sd = MAD_TO_SD * _median(size[order], self.sizes[name][order])
            found[name] = max(sd, quantity.least_sd)
        return found


@cache
def _bin_centres() -> Array:
    """Residuals, in first guesses of the scatter, that the bins stand for, rising."""
    size = SMALLEST * (LARGEST / SMALLEST) ** ((np.arange(BINS) + 0.5) / BINS)
    return np.concatenate([-size[::-1], [0.0], size])


def _median(values: Array, counts: Array) -> float:
    """Middle of rising values that occur so many times each, drawn straight between them."""
    seen = np.flatnonzero(counts)
    if not seen.size:
        return 0.0
    place = np.cumsum(counts[seen]) - 0.5 * (1.0 + counts[seen])
    return float(np.interp(0.5 * (counts.sum() - 1), place, values[seen]))


def normal_equations(log: HeatLog, point: Point, found: Replay | None = None) -> NormalEquations:
    """Sums of one log (or part of one) at `point`.

    found : a replay at `point` with the Jacobian of its parameters, where one is at hand.
    """
    entries = point.parameters
    if found is None:
        values = entries.values(point.z)
        found = replay(log, values=values, jacobian_of=entries.names, tries=TRIES)
    total = NormalEquations.zero(entries.coordinates)
    total.unusable = int((~found.usable).sum())
    total.unsolved = int((found.usable & ~found.converged).sum())
    offsets = entries.offset_values(point.z)
    residuals = found.residuals - np.array([offsets.get(name, 0.0) for name in found.names])
    observed = np.isfinite(residuals)
    sd = np.array([point.sd[name] for name in found.names])
    z = np.where(observed, residuals, 0.0) / sd
    middle = np.array([point.middle.get(name, 0.0) for name in found.names])
    off = np.minimum(np.abs(z), np.abs(z - middle / sd))
    use = observed & ~_gross(log, found, np.where(observed, np.copysign(off, z), 0.0), total)
    size = np.abs(z)
    weight = np.where(use, np.minimum(1.0, HUBER / np.maximum(size, 1e-300)), 0.0)
    J = np.zeros((*z.shape, len(total.names)))
    J[:, :, : len(entries.names)] = np.nan_to_num(found.jacobian)
    J[:, :, : len(entries.names)] *= entries.scale(point.z) / sd[:, None]
    for place, (name, wide) in enumerate(entries.offsets, start=len(entries.names)):
        if name in found.names:
            column = found.names.index(name)
            J[:, column, place] = wide / sd[column]
    rows = J.reshape(-1, len(total.names))
    total.information = (rows * weight.reshape(-1, 1)).T @ rows
    inside = rows[(use & (size < HUBER)).ravel()]
    total.curvature = inside.T @ inside
    scores = np.matmul((weight * z)[:, None, :], J)[:, 0, :]
    total.gradient, total.scores = scores.sum(axis=0), scores.T @ scores
    loss = np.where(size < HUBER, 0.5 * size**2, HUBER * (size - 0.5 * HUBER))
    limit = HUBER * (GROSS - 0.5 * HUBER)
    total.cost = float(np.sum(np.minimum(loss, limit)[observed]))
    total.cost += limit * float(np.isfinite(found.observed[found.usable & ~found.converged]).sum())
    total.heats = int(use.any(axis=1).sum())
    _by_quantity(found, residuals, use, total)
    return total


def _by_quantity(found: Replay, residuals: Array, use: Array, total: NormalEquations) -> None:
    """Errors in each quantity's own unit, and counts of residuals by size."""
    steps = BINS / np.log(LARGEST / SMALLEST)
    for column, name in enumerate(found.names):
        rows = use[:, column]
        observed, predicted = (x[rows] for x in found.plain(name))
        gap = observed - predicted
        total.used[name] = int(rows.sum())
        total.error[name] = float(gap.sum())
        total.absolute[name] = float(np.abs(gap).sum())
        left = residuals[:, column]
        ratio = left[np.isfinite(left)] / quantities()[name].first_sd
        size = np.clip(np.abs(ratio), SMALLEST, LARGEST)
        place = np.minimum(np.floor(np.log(size / SMALLEST) * steps), BINS - 1)
        side = np.where(np.abs(ratio) < SMALLEST, 0.0, np.sign(ratio) * (1.0 + place))
        total.sizes[name] = np.bincount(side.astype(int) + BINS, minlength=2 * BINS + 1)


def _gross(log: HeatLog, found: Replay, z: Array, total: NormalEquations) -> Any:
    """Outcomes too far off to be used (n, m): each alone, or with its whole heat."""
    beyond = np.abs(z) > GROSS
    if not beyond.any():
        return beyond
    doubted = np.array([quantities()[name].whole_heat for name in found.names])
    heats = (beyond & doubted).any(axis=1)
    total.gross_heats = int(heats.sum())
    total.gross_outcomes = int((beyond & ~heats[:, None]).sum())
    for row, column in np.argwhere(beyond)[:MOST_NAMED].tolist():
        name = found.names[column]
        if heats[row] and not doubted[column]:
            continue
        plain = quantities()[name].plain
        total.gross.append(
            GrossError(
                log.ids[row],
                name,
                float(plain(found.observed[row, column])),
                float(plain(found.predicted[row, column])),
                float(z[row, column]),
                bool(heats[row]),
            )
        )
    return beyond | heats[:, None]
