"""Property: exact derivatives, checked against central differences and closed forms."""

from __future__ import annotations

import numpy as np
import pytest

from converter_calc.basis import dual as ad

X = np.array([0.3, 1.7, 4.2])
Y = np.array([2.1, 0.4, 1.3])
FUNCTIONS = {
    "sum": lambda x, y: x + y + 2.0,
    "difference": lambda x, y: 3.0 - x - y,
    "product": lambda x, y: x * y * 1.5,
    "quotient": lambda x, y: x / y + 2.0 / x - y / 4.0,
    "negative": lambda x, y: -(x * y),
    "exp_log": lambda x, y: ad.exp(x * 0.3) * ad.log(y + 1.0),
    "powers": lambda x, y: ad.pow10(x * 0.1) + ad.log10(y) + ad.square(x) + ad.sqrt(y),
    "where": lambda x, y: ad.where(ad.value(x) > 1.0, x * y, y),
    "smooth_min": lambda x, y: ad.smooth_min(x, y, 0.05),
    "fischer_burmeister": lambda x, y: ad.fischer_burmeister(x, y, 1e-3),
}


@pytest.mark.parametrize("name", FUNCTIONS)
def test_derivatives_match_central_differences(name: str) -> None:
    f = FUNCTIONS[name]
    z = f(ad.seed(X, "x"), ad.seed(Y, "y"))
    step = 1e-6
    by_x = (f(X + step, Y) - f(X - step, Y)) / (2 * step)
    by_y = (f(X, Y + step) - f(X, Y - step)) / (2 * step)
    np.testing.assert_allclose(ad.value(z), f(X, Y), rtol=1e-14)
    np.testing.assert_allclose(np.broadcast_to(ad.slope(z, "x"), 3), by_x, rtol=1e-7, atol=1e-9)
    np.testing.assert_allclose(np.broadcast_to(ad.slope(z, "y"), 3), by_y, rtol=1e-7, atol=1e-9)


def test_array_leaves_mixed_products_to_dual() -> None:
    z = X * ad.seed(Y, "y")
    assert isinstance(z, ad.Dual)
    np.testing.assert_array_equal(z.d["y"], X)
    z = X / ad.seed(Y, "y")
    np.testing.assert_allclose(z.d["y"], -X / Y**2, rtol=1e-15)


def test_smooth_min_is_below_both_and_near_the_smaller() -> None:
    low = ad.smooth_min(X, Y, 0.01)
    assert (low <= np.minimum(X, Y)).all()
    np.testing.assert_allclose(low, np.minimum(X, Y), atol=0.005)


def test_complementarity_root_is_where_one_side_is_zero() -> None:
    # Fischer's function vanishes only where both are >= 0 and one is zero
    assert ad.fischer_burmeister(np.array([0.0, 3.0]), np.array([2.0, 0.0]), 0.0) == pytest.approx(
        [0.0, 0.0], abs=1e-15
    )
    assert (ad.fischer_burmeister(np.array([-1.0, 1.0]), np.array([2.0, -0.5]), 0.0) < 0.0).all()
