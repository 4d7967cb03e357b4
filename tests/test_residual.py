"""The model of what is left: ridge regression against its closed form, used only if it wins."""

from __future__ import annotations

import numpy as np
import pandas as pd
import pytest
from sklearn.linear_model import Ridge

from converter_calc.learning.features import features_of
from converter_calc.learning.residual import _ridges, fit_residual


def drawn(seed: int, n: int = 400, slope: float = 0.0) -> tuple[np.ndarray, np.ndarray]:
    rng = np.random.default_rng(seed)
    X = rng.normal(5.0, 2.0, (n, 4))
    return X, slope * (X[:, 1] - 5.0) + rng.normal(0.0, 1.0, n)


@pytest.mark.parametrize("penalty", [1.0, 30.0, 1000.0])
def test_slopes_are_those_of_ridge_regression(penalty: float) -> None:
    """Source: scikit-learn's Ridge on the same numbers."""
    X, y = drawn(1, slope=0.5)
    y = np.clip(y, *np.quantile(y, [0.1, 0.9]))  # nothing far, so nothing is drawn in
    ((constant, slopes),) = _ridges(X, y, np.array([penalty]))
    reference = Ridge(alpha=penalty).fit(X, y)
    np.testing.assert_allclose(slopes, reference.coef_, rtol=1e-8)
    assert constant == pytest.approx(reference.intercept_, rel=1e-8)


def test_what_is_there_is_found_and_used() -> None:
    X, y = drawn(2, slope=0.5)
    y[::7] = np.nan
    model = fit_residual(["a", "b", "c", "d"], X, y)
    assert model.used
    assert model.gain > 2.0 * model.gain_error
    error = 1.0 / np.sqrt(np.isfinite(y).sum())  # of a slope by a feature of deviation one
    np.testing.assert_allclose(model.slopes, [0.0, 0.5 * model.scale[1], 0.0, 0.0], atol=4 * error)
    later, _ = drawn(3)
    within = np.clip(later, model.low, model.high)
    by_hand = model.constant + ((within - model.mean) / model.scale) @ model.slopes
    by_hand = np.clip(by_hand, model.least, model.most)
    np.testing.assert_allclose(model.predict(later), by_hand, rtol=1e-12)
    assert model.least < -2.0 < 2.0 < model.most


def test_noise_is_not_used() -> None:
    """Property: of ten logs of pure noise none or one is taken for a pattern."""
    used = [fit_residual(["a", "b", "c", "d"], *drawn(seed)).used for seed in range(20, 30)]
    assert sum(used) <= 1
    silent = fit_residual(["a", "b", "c", "d"], *drawn(20))
    assert not silent.used
    assert np.all(silent.predict(np.ones((3, 4))) == 0.0)


def test_gross_errors_do_not_turn_it() -> None:
    X, y = drawn(4, slope=0.5)
    y[::50] += 1000.0
    model = fit_residual(["a", "b", "c", "d"], X, y)
    error = 1.0 / np.sqrt(y.size)
    np.testing.assert_allclose(model.slopes, [0.0, 0.5 * model.scale[1], 0.0, 0.0], atol=5 * error)
    assert abs(model.constant) < 0.2


def test_missing_features_count_as_the_mean() -> None:
    X, y = drawn(6, slope=0.5)
    model = fit_residual(["a", "b", "c", "d"], X, y)
    blank = np.full((1, 4), np.nan)
    assert model.predict(blank)[0] == pytest.approx(model.predict(model.mean[None, :])[0])


def test_few_heats_teach_nothing() -> None:
    X, y = drawn(7, n=40, slope=2.0)
    assert not fit_residual(["a", "b", "c", "d"], X, y).used


def test_features_are_what_is_known_before_the_end() -> None:
    frame = pd.DataFrame(
        {
            "hot_metal_kg": [200e3, 100e3],
            "hm_Si_pct": [0.5, np.nan],
            "hm_V_pct": [np.nan, np.nan],
            "wait_min": [0.0, np.e - 1.0],
            "heavy_scrap_kg": [40e3, np.nan],
            "oxygen_Nm3": [10e3, 6e3],
            "end_temp_C": [1650.0, 1660.0],
        }
    )
    names, X = features_of(frame, ["heavy_scrap", "lump_ore"])
    assert names == [
        "hm_Si_pct", "wait_min", "log_wait", "hot_metal_t", "heavy_scrap_kg_per_t",
        "oxygen_Nm3_per_t",
    ]  # fmt: skip
    np.testing.assert_allclose(X[0], [0.5, 0.0, 0.0, 200.0, 200.0, 50.0])
    np.testing.assert_allclose(X[1], [np.nan, np.e - 1.0, 1.0, 100.0, 0.0, 60.0])
