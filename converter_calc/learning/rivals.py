"""Plain statistics to hold our predictions against, where the package for it is installed."""

from __future__ import annotations

from converter_calc.basis.dual import Array
from converter_calc.learning.proof import Competitor

BOOSTING = "gradient boosting"


def rivals() -> dict[str, Competitor]:
    """Gradient boosting by scikit-learn; nothing where scikit-learn is not installed."""
    from importlib.util import find_spec

    return {BOOSTING: gradient_boosting} if find_spec("sklearn") else {}


def gradient_boosting(X: Array, y: Array, later: Array) -> Array:
    """Boosted trees on histograms; blanks are a branch of their own.

    X : (n, p). y : (n,). later : (l, p). Returns predicted (l,). Source: J.H. Friedman, Ann.
    Stat. 29 (2001) 1189; scikit-learn's HistGradientBoostingRegressor with slower learning and
    smaller trees than its defaults, as suits some hundred heats.
    """
    from sklearn.ensemble import HistGradientBoostingRegressor

    model = HistGradientBoostingRegressor(
        max_iter=200, learning_rate=0.05, max_leaf_nodes=15, min_samples_leaf=15, random_state=0
    )
    found: Array = model.fit(X, y).predict(later)
    return found
