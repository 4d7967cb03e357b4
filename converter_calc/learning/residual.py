"""What the balance leaves over: a small ridge regression, used only where it wins.

The penalty is chosen, and whether the regression is used at all decided, on heats later than
those it was fitted to. Source of the method: A.E. Hoerl, R.W. Kennard, Technometrics 12 (1970)
55; gross errors are drawn in to `FAR` robust deviations first (P.J. Huber, 1964).
"""

from __future__ import annotations

import itertools
from collections.abc import Mapping
from dataclasses import asdict, dataclass
from typing import Any

import numpy as np

from converter_calc.basis.dual import Array

PENALTIES = np.logspace(0.0, 5.0, 11)
FOLDS = 4
FAR = 3.0
OUTERMOST = 0.005
#: Fewer heats than this teach nothing.
LEAST_HEATS = 80
#: It must win by so many standard errors of the gain in mean absolute error.
CLEARLY = 1.0


@dataclass(frozen=True)
class ResidualModel:
    """One quantity: y = constant + standardised features @ slopes, or nothing where not used.

    features : names (p). low, high : features are drawn in to these, the range of all but the
    outermost heats it was fitted to. mean, scale : of the features. slopes : per standard
    deviation of a feature, in the unit of y. least, most : what it adds stays between these,
    the range over the heats it was fitted to. penalty : chosen. used : whether it won. gain,
    gain_error : mean absolute error saved out of sample and its standard error, unit of y.
    """

    features: tuple[str, ...]
    low: Array
    high: Array
    mean: Array
    scale: Array
    constant: float
    slopes: Array
    least: float
    most: float
    penalty: float
    used: bool
    gain: float
    gain_error: float

    def predict(self, X: Array) -> Array:
        """What to add, (n,); zeros where the model is not used. X : (n, p), NaN where missing."""
        if not self.used:
            return np.zeros(len(X))
        added: Array = (
            self.constant + _standard(self.drawn_in(X), self.mean, self.scale) @ self.slopes
        )
        return np.clip(added, self.least, self.most)

    def document(self) -> dict[str, Any]:
        """Everything as plain values, ready for JSON; None where a bound or scale is infinite."""
        found = asdict(self)
        for name in ("low", "high", "mean", "scale", "slopes"):
            found[name] = [x if np.isfinite(x) else None for x in found[name].tolist()]
        return {**found, "features": list(self.features),
                "penalty": self.penalty if np.isfinite(self.penalty) else None}  # fmt: skip

    @classmethod
    def from_document(cls, document: Mapping[str, Any]) -> ResidualModel:
        """What `document` gave. Raises KeyError, TypeError or ValueError where it is not that."""
        blank = {"low": -np.inf, "high": np.inf, "mean": 0.0, "scale": np.inf, "slopes": 0.0}
        arrays = {
            name: np.array([missing if x is None else float(x) for x in document[name]])
            for name, missing in blank.items()
        }
        features = tuple(str(name) for name in document["features"])
        if any(array.shape != (len(features),) for array in arrays.values()):
            raise ValueError("as many numbers as features are needed")
        penalty = document["penalty"]
        return cls(
            features=features,
            **arrays,
            constant=float(document["constant"]),
            least=float(document["least"]),
            most=float(document["most"]),
            penalty=np.inf if penalty is None else float(penalty),
            used=bool(document["used"]),
            gain=float(document["gain"]),
            gain_error=float(document["gain_error"]),
        )

    def drawn_in(self, X: Array) -> Array:
        """Features within the range that the model knows; a typing error must not carry it off."""
        return np.clip(X, self.low, self.high)


def fit_residual(features: list[str], X: Array, y: Array) -> ResidualModel:
    """Fit what is left of one quantity; heats in time order.

    Parameters
    ----------
    features : names. X : (n, p), NaN where missing (counts as the mean). y : (n,), NaN where
        not observed.

    Returns
    -------
    ResidualModel; `used` only if its error on later heats beat that of zero clearly.
    """
    seen = np.flatnonzero(np.isfinite(y))
    X, y = X[seen], y[seen]
    if seen.size < LEAST_HEATS or X.shape[1] == 0:
        nothing = np.zeros(X.shape[1])
        return ResidualModel(
            tuple(features),
            nothing - np.inf,
            nothing + np.inf,
            nothing,
            nothing + 1.0,
            0.0,
            nothing,
            0.0,
            0.0,
            float("inf"),
            used=False,
            gain=0.0,
            gain_error=0.0,
        )
    low, high = usual_range(X)
    X = np.clip(X, low, high)
    edges = np.linspace(seen.size // (FOLDS + 1), seen.size, FOLDS + 1).astype(int)
    errors: list[list[Array]] = [[] for _ in PENALTIES]
    plain: list[Array] = []
    for first, last in itertools.pairwise(edges.tolist()):
        mean, scale = _moments(X[:first])
        Z, later = _standard(X[:first], mean, scale), _standard(X[first:last], mean, scale)
        for row, (constant, slopes) in zip(errors, _ridges(Z, y[:first], PENALTIES), strict=True):
            row.append(np.abs(y[first:last] - constant - later @ slopes))
        plain.append(np.abs(y[first:last]))
    far = FAR * _robust_scale(np.concatenate(plain))
    saved = np.array(
        [np.minimum(np.concatenate(plain), far) - np.minimum(np.concatenate(r), far)
         for r in errors]
    )  # fmt: skip
    best = int(np.argmax(saved.mean(axis=1)))
    gain = float(saved[best].mean())
    error = float(saved[best].std(ddof=1) / np.sqrt(saved.shape[1]))
    mean, scale = _moments(X)
    ((constant, slopes),) = _ridges(_standard(X, mean, scale), y, PENALTIES[best : best + 1])
    added = constant + _standard(X, mean, scale) @ slopes
    least, most = np.quantile(added, [OUTERMOST, 1.0 - OUTERMOST]).tolist()
    return ResidualModel(
        tuple(features), low, high, mean, scale, constant, slopes, least, most,
        float(PENALTIES[best]), gain > CLEARLY * error, gain, error,
    )  # fmt: skip


def usual_range(X: Array) -> tuple[Array, Array]:
    """Lowest and highest of each feature with `OUTERMOST` of the heats left out at either end."""
    low, high = np.full(X.shape[1], -np.inf), np.full(X.shape[1], np.inf)
    for j, column in enumerate(X.T):
        given = column[np.isfinite(column)]
        if given.size:
            low[j], high[j] = np.quantile(given, [OUTERMOST, 1.0 - OUTERMOST])
    return low, high


def _robust_scale(size: Array) -> float:
    """Standard deviation as the median of absolute values tells it; 0 only if most are zero."""
    return float(np.median(size)) / 0.6745 or float(size.mean())


def _moments(X: Array) -> tuple[Array, Array]:
    """Mean and standard deviation of each feature over what is given."""
    given = np.isfinite(X)
    count = np.maximum(given.sum(axis=0), 1)
    mean = np.where(given, X, 0.0).sum(axis=0) / count
    var = np.square(np.where(given, X - mean, 0.0)).sum(axis=0) / count
    scale = np.sqrt(var)
    return mean, np.where(scale > 1e-9 * (np.abs(mean) + 1e-30), scale, np.inf)


def _standard(X: Array, mean: Array, scale: Array) -> Array:
    Z: Array = np.where(np.isfinite(X), (X - mean) / scale, 0.0)
    return Z


def _ridges(Z: Array, y: Array, penalties: Array) -> list[tuple[float, Array]]:
    """Constant and slopes for each penalty; gross errors of y drawn in first."""
    middle = float(np.median(y))
    far = FAR * _robust_scale(np.abs(y - middle))
    near = np.clip(y, middle - far, middle + far)
    centre, level = Z.mean(axis=0), float(near.mean())
    values, vectors = np.linalg.eigh((Z - centre).T @ (Z - centre))
    right = vectors.T @ ((Z - centre).T @ (near - level))
    found = []
    for penalty in penalties:
        slopes = vectors @ (right / (np.maximum(values, 0.0) + penalty))
        found.append((level - float(centre @ slopes), slopes))
    return found
