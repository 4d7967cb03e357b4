"""The tuned model following a log: offsets of a few parameters, heat by heat, and today's."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass, replace
from functools import cache
from typing import TYPE_CHECKING, Any

import numpy as np

from converter_calc.basis.dual import Array
from converter_calc.data.tables import read_csv_rows
from converter_calc.learning.drift import FEW_STEPS, Drift, estimate_walk, find_jumps, follow_drift
from converter_calc.learning.replay import read_heats
from converter_calc.learning.replay import replay as replay_log
from converter_calc.learning.residual import ResidualModel, fit_residual, usual_range
from converter_calc.learning.state_filter import Walk, look_back, run_filter
from converter_calc.learning.tuned import Tuned

if TYPE_CHECKING:
    import pandas as pd

#: Quantities whose misses move the offsets.
FOLLOWED = ("end_temp_C", "end_C_pct", "end_P_pct", "end_Mn_pct")


@cache
def offsets() -> dict[str, bool]:
    """Parameters that may wander -> whether the offset is one of the logarithm."""
    return {row["name"]: row["transform"] == "log" for row in read_csv_rows("drift_offsets.csv")}


@dataclass(frozen=True)
class Followed:
    """A tuned model and how its offsets followed a log of n heats (in time order).

    tuned : parameters they are offsets from. names : the m quantities of the log that were
    followed. materials : those that have a column. predicted : by the tuned model, transformed,
    (n, m). residuals : observed less predicted. H : derivative by each offset, (n, m, k).
    drift : the offsets; in `Drift.offsets` log offsets are shares.
    """

    tuned: Tuned
    names: tuple[str, ...]
    materials: tuple[str, ...]
    predicted: Array
    residuals: Array
    H: Array
    drift: Drift

    def today(self) -> Tuned:
        """The tuned parameters with the offsets of the heat to come, and their covariance."""
        offset, cov = self.drift.today
        return self.at(offset, cov)

    def at(self, offset: Array, cov: Array) -> Tuned:
        """The tuned parameters with given offsets (k,) and covariance (k, k)."""
        found = self.tuned.practice_values()
        covariance = np.array(self.tuned.covariance, dtype=float)
        slopes = np.ones(len(offset))
        for j, name in enumerate(self.drift.offsets):
            if offsets()[name]:
                slopes[j] = found[name] * np.exp(offset[j])
                found[name] = slopes[j]
            else:
                found[name] += offset[j]
        places = [self.tuned.names.index(name) for name in self.drift.offsets]
        self._lay_over(covariance, places, cov * np.outer(slopes, slopes))
        errors = np.sqrt(np.diag(covariance))
        return replace(
            self.tuned,
            parameters=tuple(
                replace(entry, value=float(found[entry.name]), standard_error=float(error))
                for entry, error in zip(self.tuned.parameters, errors, strict=True)
            ),
            covariance=covariance,
        )

    @staticmethod
    def _lay_over(covariance: Array, places: list[int], cov: Array) -> None:
        """Put in the covariance of the offsets; what the others share with them stays.

        cov holds for the other parameters as they are, so these add what they carry over: with
        B the regression of the offsets' parameters on the others, B C B' and B C.
        """
        rest = [k for k in range(len(covariance)) if k not in places]
        others = covariance[np.ix_(rest, rest)]
        B = covariance[np.ix_(places, rest)] @ np.linalg.pinv(others, hermitian=True)
        covariance[np.ix_(places, rest)] = B @ others
        covariance[np.ix_(rest, places)] = (B @ others).T
        covariance[np.ix_(places, places)] = cov + B @ others @ B.T


def follow_log(
    frame: pd.DataFrame,
    shop: str | Mapping[str, Any] | None,
    tuned: Tuned,
    *,
    learn_from: int | None = None,
    before: Followed | None = None,
) -> Followed:
    """Follow the offsets of a tuned model through a log.

    Parameters
    ----------
    frame : heat log in time order. shop : as in `replay`. tuned : parameters. learn_from : speeds,
    noise and jumps are learnt from the first so many heats only (None: all); the offsets go on
    through the rest, each heat counting for those after it. before : an earlier result for the
    same log, to start from.

    Raises InputError as `replay`.
    """
    log = read_heats(frame, shop)
    wander = tuple(name for name in offsets() if name in tuned.names)
    played = replay_log(log, values=tuned.practice_values(), jacobian_of=wander)
    columns = [played.names.index(name) for name in FOLLOWED if name in played.names]
    names = tuple(played.names[column] for column in columns)
    H = played.jacobian[:, columns, :].copy()
    value = tuned.practice_values()
    for j, name in enumerate(wander):
        if offsets()[name]:
            H[:, :, j] *= value[name]
    y = played.residuals[:, columns].copy()
    lost = ~np.isfinite(H).all(axis=2)
    H[lost] = 0.0
    y[lost] = np.nan
    start_cov = np.diag(np.square(_prior_deviations(tuned, wander)))
    learn = len(frame) if learn_from is None else learn_from
    drift = follow_drift(
        y[:learn], H[:learn], wander, names, start_cov,
        first=None if before is None else before.drift.walk,
    )  # fmt: skip
    if learn < len(frame):
        drift = _followed(drift, drift.walk, y, H)
    return Followed(tuned, names, log.materials, played.predicted[:, columns], y, H, drift)


def _prior_deviations(tuned: Tuned, wander: tuple[str, ...]) -> Array:
    """Prior deviation of each offset, in the scale of the offset."""
    prior = {entry.name: entry.prior_sd for entry in tuned.parameters}
    value = tuned.practice_values()
    return np.array(
        [prior[name] / value[name] if offsets()[name] else prior[name] for name in wander]
    )


#: Rounds in which offsets and what is left are fitted in turn.
ROUNDS = 2


@dataclass(frozen=True)
class Topped:
    """Offsets and a model of what is left, fitted together.

    models : quantity -> model. added : what they add to the tuned model, (n, m). drift : the
    offsets beside them. expected, expected_var : what is expected of each quantity above the
    tuned model from the heats before, transformed, (n, m), and its variance.
    """

    models: dict[str, ResidualModel]
    added: Array
    low: Array
    high: Array
    drift: Drift
    expected: Array
    expected_var: Array


def balance_feature(quantity: str) -> str:
    """Name of the feature that is what the balance itself predicts, transformed."""
    return f"balance_{quantity}"


def top_up(
    followed: Followed, features: list[str], X: Array, *, learn_from: int | None = None
) -> Topped:
    """Fit a model of what is left beside the offsets, each in turn.

    What the balance predicts is a feature too: where inputs carry errors of their own, the best
    prediction follows the balance less than fully.

    features, X : names and values (n, p) of the features of the same heats. learn_from : only
    the first so many heats are learnt from (None: all).
    """
    learn = len(X) if learn_from is None else learn_from
    drift, y, H = followed.drift, followed.residuals, followed.H
    features = [*features, *(balance_feature(name) for name in followed.names)]
    X = np.column_stack([X, followed.predicted])
    models: dict[str, ResidualModel] = {}
    added = np.zeros_like(y)
    for _ in range(ROUNDS):
        left = y - drift.forward.expected
        for i, name in enumerate(followed.names):
            models[name] = fit_residual(features, X[:learn], left[:learn, i])
            added[:, i] = models[name].predict(X)
        if not any(model.used for model in models.values()):
            break
        walk = estimate_walk(y[:learn] - added[:learn], H[:learn], drift.walk, FEW_STEPS)
        drift = _followed(drift, walk, y - added, H)
    if added.any():  # with less noise, jumps are told that were not before
        walk = replace(drift.walk, shocks={})
        walk, jumps = find_jumps(y[:learn] - added[:learn], H[:learn], walk, drift.offsets)
        drift = replace(_followed(drift, walk, y - added, H), jumps=jumps)
    expected = drift.forward.expected + added
    low, high = usual_range(followed.predicted[:learn])
    return Topped(models, added, low, high, drift, expected, drift.forward.expected_var)


def _followed(drift: Drift, walk: Walk, y: Array, H: Array) -> Drift:
    forward = run_filter(y, H, walk)
    return replace(drift, walk=walk, forward=forward, back=look_back(y, H, forward))
