"""Proof out of sample: the log is walked through in time, and nothing is fitted to what comes.

At each stage everything is fitted to the heats before it, and the heats of the stage are then
predicted one by one; offsets follow the outcome of each heat only for the heats after it.
"""

from __future__ import annotations

from collections.abc import Callable, Iterator, Mapping, Sequence
from dataclasses import dataclass
from functools import cache
from typing import TYPE_CHECKING, Any

import numpy as np

from converter_calc.basis.dual import Array
from converter_calc.basis.errors import Fault, InputError
from converter_calc.data.tables import read_csv_rows
from converter_calc.learning.features import features_of
from converter_calc.learning.following import Followed, Topped, follow_log, top_up
from converter_calc.learning.replay import HeatLog, read_heats, replay
from converter_calc.learning.replay_quantities import quantities
from converter_calc.learning.residual import FAR, usual_range
from converter_calc.learning.tuned import Tuned
from converter_calc.learning.tuning import tune

if TYPE_CHECKING:
    import pandas as pd

#: Methods of ours, each on top of the one before.
OURS = ("untuned", "tuned", "with drift", "with residual")
REGRESSION = "linear regression"
#: Heats of which every method misses a quantity by more than so many robust deviations of the
#: best are told beside the scores: the log is in error there, not the methods.
MISREAD = 6.0
#: Steps of the tuning that end it, in standard errors: what is below moves no prediction.
SETTLED = 0.05

#: fit(features (n, p), outcome (n,), later features (l, p)) -> predicted (l,). Blanks are NaN.
Competitor = Callable[[Array, Array, Array], Array]
Progress = Callable[[int, int], None]


@cache
def windows() -> dict[str, float]:
    """Half width of the window within which each quantity counts as hit, in its unit."""
    return {row["name"]: float(row["window"]) for row in read_csv_rows("proof_windows.csv")}


@dataclass(frozen=True)
class Proof:
    """Heats predicted by several methods that had not seen them.

    rows : row of each heat in the log, (n,). heat_id, tapped_at : of each. names : quantities
    (m). observed : (n, m), own units, NaN where missing. predicted : method -> (n, m).
    deviation : method -> standard deviation of the prediction as stated, transformed, (n, m).
    stages : first row of each stage. used : quantity -> share of the stages in which the
    residual model was used.
    """

    rows: Array
    heat_id: list[str]
    tapped_at: list[Any]
    names: tuple[str, ...]
    observed: Array
    predicted: dict[str, Array]
    deviation: dict[str, Array]
    stages: tuple[int, ...]
    residual_used: dict[str, float]

    def misread(self) -> Array:
        """Readings that every method misses by far, (n, m) bool."""
        far = np.ones(self.observed.shape, dtype=bool)
        scales = {method: self._scale(method) for method in self.predicted}
        least = np.min(np.stack(list(scales.values())), axis=0)
        for method in self.predicted:
            with np.errstate(invalid="ignore"):
                far &= np.abs(self._errors(method)) > MISREAD * least
        return far

    def _errors(self, method: str) -> Array:
        """Observed less predicted, transformed."""
        columns = [quantities()[name].transformed for name in self.names]
        return np.column_stack(
            [
                transformed(self.observed[:, i]) - transformed(self.predicted[method][:, i])
                for i, transformed in enumerate(columns)
            ]
        )

    def _scale(self, method: str) -> Array:
        return np.nanmedian(np.abs(self._errors(method)), axis=0) / 0.6745

    def scores(self, *, without_misread: bool = False) -> pd.DataFrame:
        """Mean absolute error, bias and hit rate of each method and quantity.

        Returns
        -------
        DataFrame: quantity, method, heats, mae, mae_error (standard error of the mean), bias
        (predicted less observed), hit_pct, hit_error_pct; units of the quantity.
        """
        import pandas as pd

        out = self.misread() if without_misread else np.zeros(self.observed.shape, dtype=bool)
        found = []
        for i, name in enumerate(self.names):
            for method, predicted in self.predicted.items():
                error = (predicted[:, i] - self.observed[:, i])[~out[:, i]]
                error = error[np.isfinite(error)]
                n = max(error.size, 1)
                hits = np.abs(error) <= windows()[name]
                share = float(hits.mean()) if error.size else np.nan
                found.append(
                    {
                        "quantity": name,
                        "method": method,
                        "heats": error.size,
                        "mae": float(np.abs(error).mean()) if error.size else np.nan,
                        "mae_error": float(np.abs(error).std() / np.sqrt(n)),
                        "bias": float(error.mean()) if error.size else np.nan,
                        "hit_pct": 100.0 * share,
                        "hit_error_pct": 100.0 * float(np.sqrt(share * (1.0 - share) / n)),
                    }
                )
        return pd.DataFrame(found)

    def calibration(self, method: str = OURS[-1], levels: Sequence[float] = ()) -> pd.DataFrame:
        """How often a stated interval held what came.

        levels : stated probabilities, 0..1 (none: ten from 0.1 to 0.99). Returns DataFrame:
        quantity, stated, held, heats.
        """
        import pandas as pd
        from scipy.stats import norm

        levels = levels or (0.1, 0.2, 0.3, 0.4, 0.5, 0.6, 0.7, 0.8, 0.9, 0.95, 0.99)
        with np.errstate(invalid="ignore"):
            z = np.abs(self._errors(method)) / self.deviation[method]
        return pd.DataFrame(
            [
                {
                    "quantity": name,
                    "stated": level,
                    "held": float(np.mean(seen <= norm.ppf(0.5 + 0.5 * level))),
                    "heats": seen.size,
                }
                for i, name in enumerate(self.names)
                for seen in [z[np.isfinite(z[:, i]), i]]
                for level in levels
                if seen.size
            ]
        )

    def hit_chances(self, method: str = OURS[-1], bins: int = 5) -> pd.DataFrame:
        """Stated chance of a hit against the share that hit, heats in groups of equal chance.

        Returns DataFrame: quantity, stated, held, heats.
        """
        import pandas as pd
        from scipy.stats import norm

        found = []
        for i, name in enumerate(self.names):
            predicted, sd = self.predicted[method][:, i], self.deviation[method][:, i]
            transformed, window = quantities()[name].transformed, windows()[name]
            centre = transformed(predicted)
            above = norm.cdf((transformed(predicted + window) - centre) / sd)
            below = transformed(predicted - window)  # no logarithm: the window reaches to zero
            low = np.where(np.isfinite(below), norm.cdf((below - centre) / sd), 0.0)
            stated = above - low
            hit = np.abs(predicted - self.observed[:, i]) <= window
            seen = np.isfinite(stated) & np.isfinite(self.observed[:, i])
            order = np.argsort(stated[seen])
            found += [
                {
                    "quantity": name,
                    "stated": float(stated[seen][part].mean()),
                    "held": float(hit[seen][part].mean()),
                    "heats": part.size,
                }
                for part in np.array_split(order, bins)
                if part.size
            ]
        return pd.DataFrame(found)

    def heats(self) -> pd.DataFrame:
        """One row a heat, quantity and method: observed, predicted, and stated deviation."""
        import pandas as pd

        parts = []
        for method, predicted in self.predicted.items():
            for i, name in enumerate(self.names):
                sd = self.deviation.get(method)
                parts.append(
                    pd.DataFrame(
                        {
                            "heat_id": self.heat_id,
                            "tapped_at": self.tapped_at,
                            "quantity": name,
                            "method": method,
                            "observed": self.observed[:, i],
                            "predicted": predicted[:, i],
                            "deviation": np.nan if sd is None else sd[:, i],
                        }
                    )
                )
        return pd.concat(parts, ignore_index=True)


def linear_regression(X: Array, y: Array, later: Array) -> Array:
    """Ordinary least squares on standardised features; a blank counts as the mean.

    Features are drawn in to the usual range and outcomes to `FAR` robust deviations, as anybody
    would clean them first.

    X : (n, p). y : (n,). later : (l, p). Returns predicted (l,).
    """
    low, high = usual_range(X)
    X, later = np.clip(X, low, high), np.clip(later, low, high)
    middle = float(np.median(y))
    far = FAR * float(np.median(np.abs(y - middle))) / 0.6745
    y = np.clip(y, middle - far, middle + far) if far > 0.0 else y
    count = np.maximum(np.isfinite(X).sum(axis=0), 1)
    mean = np.nansum(X, axis=0) / count
    filled, blank = np.where(np.isfinite(X), X, mean), np.where(np.isfinite(later), later, mean)
    scale = filled.std(axis=0)
    scale = np.where(scale > 0.0, scale, 1.0)
    A = np.column_stack([np.ones(len(X)), (filled - mean) / scale])
    slopes, *_ = np.linalg.lstsq(A, y, rcond=None)
    found: Array = np.column_stack([np.ones(len(later)), (blank - mean) / scale]) @ slopes
    return found


def walk_forward(
    frame: pd.DataFrame,
    shop: str | Mapping[str, Any] | None = None,
    *,
    start_share: float = 0.4,
    stage: int = 100,
    competitors: Mapping[str, Competitor] | None = None,
    progress: Progress | None = None,
) -> Proof:
    """Predict the later part of a log, stage by stage, from what came before each stage.

    Parameters
    ----------
    frame : heat log; taken in the order of tapped_at. shop : shop file or its content.
    start_share : share of the heats that the first stage may learn from, 0.1 to 0.9. stage :
        heats a stage. competitors : name -> method of plain statistics, beside linear
        regression. progress : told (stages done, stages in all).

    Raises
    ------
    InputError : too few heats, the log or the shop is wrong.
    """
    frame = frame.sort_values("tapped_at", kind="stable").reset_index(drop=True)
    if not 0.1 <= start_share <= 0.9:
        raise InputError([Fault("start_share", f"must be 0.1 to 0.9, given {start_share:g}")])
    first = int(len(frame) * start_share)
    if first < 50 or len(frame) - first < 10:
        message = f"holds {len(frame)} heats; a proof needs 50 to learn from and 10 after them"
        raise InputError([Fault("log", message)])
    rivals = {REGRESSION: linear_regression, **(competitors or {})}
    log = read_heats(frame, shop)
    names = tuple(name for name in windows() if name in log.names)
    columns = [log.names.index(name) for name in names]
    n = len(frame)
    predicted = {method: np.full((n, len(names)), np.nan) for method in (*OURS, *rivals)}
    deviation = {method: np.full((n, len(names)), np.nan) for method in OURS[2:]}
    used: dict[str, list[bool]] = {name: [] for name in names}
    untuned = replay(log).predicted[:, columns]
    feature_names, X = features_of(frame, list(log.materials))
    edges = list(range(first, n, stage))
    known: Followed | None = None
    for count, begin in enumerate(edges):
        end = min(begin + stage, n)
        now = slice(begin, end)
        predicted["untuned"][now] = untuned[now]
        known = _learn(frame.iloc[:end], shop, begin, known)
        ours, sd, model_used = _stage(known, names, feature_names, X, begin, end)
        for method, values in ours.items():
            predicted[method][now] = values
        for method, values in sd.items():
            deviation[method][now] = values
        for name in names:
            used[name].append(model_used[name])
        for method, fit in rivals.items():
            for i, y in enumerate(log.observed[:begin, columns].T):
                seen = np.isfinite(y) & log.usable[:begin]
                predicted[method][now, i] = fit(X[:begin][seen], y[seen], X[now])
        if progress is not None:
            progress(count + 1, len(edges))
    return _proof(frame, log, names, columns, predicted, deviation, tuple(edges), used)


def _learn(upto: pd.DataFrame, shop: Any, begin: int, before: Followed | None) -> Followed:
    """Tune on the heats before `begin`, and follow the offsets through all heats of `upto`."""
    start = None if before is None else before.tuned
    tuned: Tuned = tune(upto.iloc[:begin], shop, start=start, step_settled=SETTLED)
    return follow_log(upto, shop, tuned, learn_from=begin, before=before)


def _stage(
    known: Followed, names: tuple[str, ...], features: list[str], X: Array, begin: int, end: int
) -> tuple[dict[str, Array], dict[str, Array], dict[str, bool]]:
    """Predictions of one stage by our three fitted methods, transformed; stated deviation."""
    columns = [known.names.index(name) for name in names]
    now = slice(begin, end)
    topped: Topped = top_up(known, features, X[:end], learn_from=begin)
    tuned = known.predicted[now][:, columns]
    ours = {
        "tuned": tuned,
        "with drift": tuned + known.drift.forward.expected[now][:, columns],
        "with residual": np.clip(tuned, topped.low[columns], topped.high[columns])
        + topped.expected[now][:, columns],
    }
    deviations = {
        "with drift": np.sqrt(known.drift.forward.expected_var[now][:, columns]),
        "with residual": np.sqrt(topped.expected_var[now][:, columns]),
    }
    used = {name: topped.models[name].used for name in names}
    return ours, deviations, used


def _proof(
    frame: pd.DataFrame,
    log: HeatLog,
    names: tuple[str, ...],
    columns: list[int],
    predicted: dict[str, Array],
    deviation: dict[str, Array],
    stages: tuple[int, ...],
    used: dict[str, list[bool]],
) -> Proof:
    """All stages in own units, heats without a usable charge left out."""
    rows = np.array([row for row in range(stages[0], len(frame)) if log.usable[row]])
    plain = {
        method: np.column_stack(list(_plain(names, values[rows])))
        for method, values in predicted.items()
    }
    return Proof(
        rows=rows,
        heat_id=[log.ids[row] for row in rows],
        tapped_at=frame["tapped_at"].iloc[rows].tolist(),
        names=names,
        observed=np.column_stack(list(_plain(names, log.observed[rows][:, columns]))),
        predicted=plain,
        deviation={method: values[rows] for method, values in deviation.items()},
        stages=stages,
        residual_used={name: float(np.mean(flags)) for name, flags in used.items()},
    )


def _plain(names: tuple[str, ...], values: Array) -> Iterator[Array]:
    for i, name in enumerate(names):
        yield quantities()[name].plain(values[:, i])
