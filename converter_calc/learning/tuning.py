"""Tuning: the parameters of a shop from its heat log, by penalised least squares.

What is minimised is the sum of the losses of all outcomes, each by its own scatter, and half the
squared distance of each parameter from its prior in prior standard deviations. The model is the
one balance, its derivatives are exact, and the steps are those of Gauss and Newton on weights
that take the edge off outliers (iteratively reweighted least squares: Holland & Welsch, Commun.
Stat. A 6 (1977) 813; from memory).
"""

from __future__ import annotations

from collections.abc import Callable, Mapping, Sequence
from dataclasses import dataclass, replace
from pathlib import Path
from typing import TYPE_CHECKING, Any

import numpy as np

from converter_calc.balance.checks import check_document
from converter_calc.balance.documents import read_shop
from converter_calc.balance.schema import parameters
from converter_calc.basis.dual import Array
from converter_calc.basis.errors import ConvergenceError, Fault, InputError
from converter_calc.learning.identify import collinear_pairs, covariance_of, told_by_data
from converter_calc.learning.parameters import ParameterSet, parameter_set
from converter_calc.learning.replay import HeatLog, read_heats
from converter_calc.learning.replay_quantities import quantities
from converter_calc.learning.tuned import Fitted, Tuned, TunedParameter
from converter_calc.learning.tuning_equations import NormalEquations, Point, normal_equations

if TYPE_CHECKING:
    import pandas as pd

#: Sums of a whole log at a point; how the log is read and by whom is not this module's business.
Accumulate = Callable[[Point], NormalEquations]

#: Errors of the model itself, and of what the shop does all the time, are common to all heats:
#: correlation of the errors of two heats (choice of this package). n heats then tell as much as
#: n / (1 + (n - 1) r) that had nothing in common, 50 at most (the design effect: L. Kish, Survey
#: Sampling, Wiley 1965; from memory).
SHARED_ERROR = 0.02
#: Below this share of its information from the log, a parameter is not told by it and is held.
LEAST_TOLD = 0.05
#: Passes over the log at most; ordinary logs need 10 to 20.
MOST_PASSES = 60
#: Scatter has settled once it moves by less than this share; it is then kept as it is.
SCATTER_SETTLED = 5e-3
#: Steps of this size [standard errors] are small enough to look at the scatter again, and to end.
STEP_SMALL, STEP_SETTLED = 0.3, 1e-5
#: Damping of the first step, as a share of the largest information on a parameter: what the log
#: tells well moves first, so that no parameter runs off to stand in for another.
FIRST_DAMPING = 0.01
#: A step longer than this many prior standard deviations is cut.
LONGEST_STEP = 3.0
#: Rows of a log that are summed up at once; bounds the memory.
ROWS_AT_ONCE = 16384


@dataclass(frozen=True)
class Search:
    """Where a search ended: point, the sums there and at the prior, passes, free parameters."""

    point: Point
    there: NormalEquations
    before: NormalEquations
    free: Array
    passes: int
    settled: bool
    shared_error: float

    @property
    def told(self) -> NormalEquations:
        """The sums as they count: less by what the heats have in common."""
        return self.there.tempered(self.shared_error)


def tune(
    log: pd.DataFrame,
    shop: str | Path | Mapping[str, Any],
    *,
    only: Sequence[str] = (),
    without: Sequence[str] = (),
    shared_error: float = SHARED_ERROR,
    start: Tuned | Mapping[str, float] | None = None,
    step_settled: float = STEP_SETTLED,
    progress: Callable[[int], None] | None = None,
) -> Tuned:
    """Parameters of a shop from its heat log.

    Parameters
    ----------
    log : heat log, as `heatlog.reading.read_log` gives it. shop : shop file or its content; what
        it says is where the parameters are believed to be. only, without : parameters to tune,
        and to leave as they are (data/tuning_parameters.csv). shared_error : correlation of the
        errors of two heats, 0 (none: only for a log whose heats have no error in common) to 1.
    start : where to start the search, the prior where not given; it makes no difference to the
        answer. step_settled : largest step that ends it, in standard errors. progress : told
        after each pass over the log how many were made.

    Returns
    -------
    Tuned. Heats that lack part of the charge, have no answer, or hold a gross error are listed,
    not used; missing outcomes are missing.

    Raises
    ------
    InputError : the shop or the log is wrong, or no heat of it can be used. ConvergenceError :
    the search did not settle on numbers.
    """
    document = dict(shop) if isinstance(shop, Mapping) else read_shop(Path(shop))
    entries = parameter_set(document, map(str, log.columns), only, without)
    logs = [
        read_heats(log.iloc[first : first + ROWS_AT_ONCE], document)
        for first in range(0, len(log), ROWS_AT_ONCE)
    ]
    faults = [
        {**row, "row": row["row"] + place * ROWS_AT_ONCE}
        for place, part in enumerate(logs)
        for row in part.faults.to_dict("records")
    ]
    values = start.practice_values() if isinstance(start, Tuned) else start
    sums = summed(logs) if progress is None else counted(summed(logs), progress)
    found = search(entries, sums, values, shared_error=shared_error, step_settled=step_settled)
    return report(found, document, rows=len(log), faults=faults)  # type: ignore[arg-type]


def summed(logs: Sequence[HeatLog]) -> Accumulate:
    """Sums over parts of a log that are at hand."""

    def accumulate(point: Point) -> NormalEquations:
        total = NormalEquations.zero(point.parameters.coordinates)
        for part in logs:
            total = total + normal_equations(part, point)
        return total

    return accumulate


def counted(accumulate: Accumulate, progress: Callable[[int], None]) -> Accumulate:
    """The same sums; `progress` is told how many passes were made."""
    passes = 0

    def accumulate_and_tell(point: Point) -> NormalEquations:
        nonlocal passes
        found = accumulate(point)
        passes += 1
        progress(passes)
        return found

    return accumulate_and_tell


def search(
    entries: ParameterSet,
    accumulate: Accumulate,
    start: Mapping[str, float] | None = None,
    *,
    shared_error: float = SHARED_ERROR,
    step_settled: float = STEP_SETTLED,
) -> Search:
    """The minimum of the penalised loss.

    Parameters
    ----------
    entries : parameters with their priors. accumulate : sums of the log at a point. start :
    values to start from, the prior where not given. shared_error : as in `tune`. step_settled :
    largest step that ends the search, in standard errors.
    """
    if not 0.0 <= shared_error <= 1.0:
        raise InputError([Fault("shared_error", f"must be 0 to 1, given {shared_error:g}")])
    first = {name: quantity.first_sd for name, quantity in quantities().items()}
    z = np.zeros(len(entries.coordinates))
    before = accumulate(Point(entries, z, first))
    if not before.heats:
        raise InputError([Fault("log", _nothing_used(before))])
    run = _Run(accumulate, shared_error, step_settled, *entries.bounds())
    at, sums = Point(entries, z, first), before
    if start:
        at = replace(at, z=entries.whitened(start))
        sums = accumulate(at)
        run.passes += 1
    free = np.ones(z.size, dtype=bool)
    at, sums = run.settle(at, sums, free)
    told = told_by_data(sums.tempered(shared_error).information)
    held = (told < LEAST_TOLD) & (np.arange(told.size) < len(entries.names))
    if held.any():
        at = replace(at, z=np.where(held, 0.0, at.z))
        free = ~held
        at, sums = run.settle(at, accumulate(at), free)
        run.passes += 1
    if not np.isfinite(at.z).all():
        raise ConvergenceError("tuning did not settle on numbers; look at the log for gross errors")
    return Search(at, sums, before, free, run.passes, run.settled, shared_error)


@dataclass
class _Run:
    """Steps over a log, passes counted."""

    accumulate: Accumulate
    shared_error: float
    step_settled: float
    low: Array
    high: Array
    passes: int = 1
    settled: bool = False

    def settle(
        self, at: Point, sums: NormalEquations, free: Array
    ) -> tuple[Point, NormalEquations]:
        """Damped Gauss-Newton steps until scatter and free parameters stand still.

        Damping as in Levenberg, Q. Appl. Math. 2 (1944) 164 (from memory).
        """
        at, sums = self._look_again(at, sums)
        self.settled, kept = False, False
        last = self.passes + MOST_PASSES
        damping = FIRST_DAMPING * float(np.max(np.diag(self._told(sums).information)))
        while self.passes < last:
            size = self._step(sums, at.z, free, 0.0)[1]
            if not kept and size < STEP_SMALL:
                scatter = sums.scatter()
                moved = max(abs(scatter[name] / at.sd[name] - 1.0) for name in scatter)
                kept = moved < SCATTER_SETTLED
                if not kept:
                    at, sums = self._look_again(at, sums)
                    size = self._step(sums, at.z, free, 0.0)[1]
            if kept and size <= self.step_settled:
                self.settled = True
                break
            there = replace(at, z=at.z + self._step(sums, at.z, free, damping)[0])
            found = self.accumulate(there)
            self.passes += 1
            worth = self._worth(sums, at)
            if self._worth(found, there) > worth + 1e-9 * (1.0 + abs(worth)):
                if damping > 1e6:
                    break
                damping = max(damping, 0.1) * 8.0
                continue
            damping = 0.1 * damping if damping > 0.01 else 0.0
            at, sums = there, found
        return at, sums

    def _look_again(self, at: Point, sums: NormalEquations) -> tuple[Point, NormalEquations]:
        """The same point with the scatter that it shows."""
        at = replace(at, sd=dict(at.sd) | sums.scatter(), middle=sums.middle())
        self.passes += 1
        return at, self.accumulate(at)

    def _told(self, sums: NormalEquations) -> NormalEquations:
        return sums.tempered(self.shared_error)

    def _worth(self, sums: NormalEquations, at: Point) -> float:
        """The loss that is minimised."""
        return self._told(sums).cost + 0.5 * float(at.z @ at.z)

    def _step(
        self, sums: NormalEquations, z: Array, free: Array, damping: float
    ) -> tuple[Array, float]:
        """Step within the bounds, and its size in standard errors."""
        told = self._told(sums)
        matrix = told.information + (1.0 + damping) * np.eye(z.size)
        slope = told.gradient - z
        open_ = free & ~((z <= self.low) & (slope < 0.0)) & ~((z >= self.high) & (slope > 0.0))
        step, size = np.zeros(z.size), 0.0
        if open_.any():
            some = np.ix_(open_, open_)
            step[open_] = np.linalg.solve(matrix[some], slope[open_])
            error = np.sqrt(np.diag(np.linalg.inv(matrix[some])))
            size = float(np.max(np.abs(step[open_]) / error))
        longest = np.max(np.abs(step), initial=0.0)
        if longest > LONGEST_STEP:
            step *= LONGEST_STEP / longest
        return np.clip(z + step, self.low, self.high) - z, size


def _nothing_used(sums: NormalEquations) -> str:
    if sums.unusable and not sums.unsolved:
        return f"no heat can be used: in all {sums.unusable} part of the charge is not given"
    return "no heat can be used: none has both a complete charge and an outcome that fits it"


def report(
    found: Search,
    shop: Mapping[str, Any],
    *,
    rows: int,
    faults: Sequence[Mapping[str, Any]] = (),
) -> Tuned:
    """What a search has found, with errors, ready to keep and to apply.

    Parameters
    ----------
    found : of `search`. shop : content of the shop file. rows : heats in the log. faults : rows
    that could not be used, as in HeatLog.faults.
    """
    entries, z = found.point.parameters, found.point.z
    sums = found.told
    cov = covariance_of(sums, found.free)
    told = told_by_data(sums.information)
    low, high = entries.bounds()
    scale = entries.scale(z)
    values = entries.values(z)
    k = scale.size
    own = cov[:k, :k] * np.outer(scale, scale)
    prior_scale = np.abs(entries.scale(np.zeros(z.size)))
    tuned = [
        TunedParameter(
            entry.name,
            entry.unit,
            values[entry.name],
            float(np.sqrt(own[i, i])),
            entry.mean,
            float(prior_scale[i]),
            float(told[i]),
            not bool(found.free[i]),
            bool(found.free[i] and (z[i] <= low[i] or z[i] >= high[i])),
            entry.acts_on,
        )
        for i, entry in enumerate(entries.entries)
    ]
    givens = check_document(dict(shop), [])
    topics = {name: row for name, row in parameters().items() if row.section == "law"}
    there = found.there
    return Tuned(
        shop=givens.texts.get("name", ""),
        parameters=tuple(tuned),
        covariance=own,
        fitted=tuple(_fitted(found, name) for name in there.sizes),
        collinear=collinear_pairs(entries.names, cov[:k, :k]),
        rows=rows,
        heats=there.heats,
        unusable=there.unusable,
        unsolved=there.unsolved,
        gross_heats=there.gross_heats,
        gross_outcomes=there.gross_outcomes,
        passes=found.passes,
        settled=found.settled,
        shared_error=found.shared_error,
        laws={row.key: givens.texts.get(name, row.default) for name, row in topics.items()},
        blowing=givens.texts.get("blowing", parameters()["blowing"].default),
        gross_errors=tuple(there.gross),
        faults=tuple(dict(fault) for fault in faults),
    )


def _fitted(found: Search, name: str) -> Fitted:
    def means(sums: NormalEquations) -> tuple[float, float]:
        count = max(sums.used[name], 1)
        return sums.error[name] / count, sums.absolute[name] / count

    quantity = quantities()[name]
    before, now = means(found.before), means(found.there)
    return Fitted(
        name,
        quantity.unit,
        quantity.log,
        found.there.used[name],
        float(found.point.sd[name]),
        found.point.parameters.offset_values(found.point.z).get(name, 0.0),
        *before,
        *now,
    )
