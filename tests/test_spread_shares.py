"""Shares of variance and intervals. Kinds of check: closed form (Ishigami function), identity,
reference (scipy for Wilson's interval)."""

from __future__ import annotations

import numpy as np
import pytest
import scipy.stats
from hypothesis import given, settings
from hypothesis import strategies as st

from converter_calc.learning.spread_numbers import interval, wilson
from converter_calc.learning.spread_shares import (
    design,
    fit_chaos,
    hermite,
    legendre,
    multi_indices,
)


def test_shares_of_the_ishigami_function() -> None:
    """sin x1 + 7 sin^2 x2 + 0.1 x3^4 sin x1, each x uniform on -pi to pi: T. Ishigami, T. Homma,
    Proc. ISUMA (1990) 398 (function); its variances follow in closed form."""
    a, b, pi = 7.0, 0.1, np.pi
    V1 = 0.5 * (1.0 + b * pi**4 / 5.0) ** 2
    V2 = a * a / 8.0
    V13 = b * b * pi**8 * (1.0 / 18.0 - 1.0 / 50.0)
    V = V1 + V2 + V13
    u = 2.0 * scipy.stats.qmc.Sobol(3, rng=np.random.default_rng(1)).random_base2(13) - 1.0
    x = pi * u
    y = np.sin(x[:, 0]) + a * np.sin(x[:, 1]) ** 2 + b * x[:, 2] ** 4 * np.sin(x[:, 0])
    chaos = fit_chaos(u, y[:, None], 10, "legendre")
    first, total = chaos.shares([[0], [1], [2]])
    assert chaos.explained[0] > 0.9999
    assert chaos.variance[0] == pytest.approx(V, rel=1e-3)
    np.testing.assert_allclose(first[:, 0], [V1 / V, V2 / V, 0.0], atol=5e-4)
    np.testing.assert_allclose(total[:, 0], [(V1 + V13) / V, V2 / V, V13 / V], atol=5e-4)
    # groups: what two variables do together belongs to their group alone
    first, total = chaos.shares([[0, 2], [1]])
    np.testing.assert_allclose(first[:, 0], [(V1 + V13) / V, V2 / V], atol=5e-4)
    np.testing.assert_allclose(total[:, 0], first[:, 0], atol=5e-4)


def test_what_the_polynomials_cannot_follow_is_said() -> None:
    """A degree too low: a line has nothing to say about a parabola, whose share is its own."""
    z = np.random.default_rng(2).standard_normal((4000, 2))
    y = np.stack([z[:, 0] + z[:, 1] ** 2, z[:, 0]], axis=1)
    straight = fit_chaos(z, y, 1)
    assert straight.explained[0] == pytest.approx(1.0 / 3.0, abs=0.06)  # var 1 of 1 + 2
    assert straight.explained[1] == pytest.approx(1.0, abs=1e-12)
    bent = fit_chaos(z, y, 2)
    np.testing.assert_allclose(bent.shares([[0], [1]])[0][:, 0], [1 / 3, 2 / 3], atol=1e-9)


@pytest.mark.parametrize(("basis", "weight"), [(hermite, "normal"), (legendre, "uniform")])
def test_polynomials_are_orthonormal(basis: object, weight: str) -> None:
    """By Gauss quadrature of numpy."""
    if weight == "normal":
        x, w = np.polynomial.hermite_e.hermegauss(20)
        w = w / np.sqrt(2 * np.pi)
    else:
        x, w = np.polynomial.legendre.leggauss(20)
        w = w / 2.0
    table = np.stack(basis(x, 8))  # type: ignore[operator]
    np.testing.assert_allclose((table * w) @ table.T, np.eye(9), atol=1e-10)


@given(st.integers(1, 5), st.integers(1, 4))
@settings(max_examples=20, deadline=None)
def test_number_of_polynomials(dimensions: int, degree: int) -> None:
    from math import comb

    indices = multi_indices(dimensions, degree)
    assert len(indices) == comb(dimensions + degree, degree)
    assert len({tuple(row) for row in indices.tolist()}) == len(indices)
    assert indices.sum(axis=1).max() == degree


def test_moved_draws_are_the_polynomials_at_the_moved_numbers() -> None:
    dice = np.random.default_rng(3)
    z = dice.standard_normal((3000, 4))
    y = np.stack([z @ [1, 2, 0, -1] + z[:, 0] * z[:, 1], z[:, 3] ** 2 + z[:, 2]], axis=1)
    chaos = fit_chaos(z, y + 0.1 * np.sin(z[:, :1]))
    moved = chaos.moved(z.T)
    np.testing.assert_allclose(np.stack(moved.plain, axis=1), chaos.at(z), atol=1e-9)
    for matrix in (np.diag([0.5, 1, 1, 1]), np.diag([1, 0, 1, 0.2]), dice.standard_normal((4, 4))):
        np.testing.assert_allclose(
            np.stack(moved.scaled(matrix), axis=1), chaos.at(z @ matrix.T), atol=1e-9
        )


def test_minor_variables_keep_their_own_share() -> None:
    z = np.random.default_rng(4).standard_normal((4000, 3))
    y = (z[:, 0] + z[:, 0] * z[:, 1] + 2 * z[:, 1] + 0.01 * z[:, 2])[:, None]
    chaos = fit_chaos(z, y, minor=(0.01,))
    assert len(chaos.indices) == len(multi_indices(3, 2)) - 2
    first, _ = chaos.shares([[0], [1], [2]])
    np.testing.assert_allclose(first[:, 0], np.array([1, 4, 1e-4]) / 6.0001, atol=1e-9)


def test_too_few_draws_lower_the_degree_and_then_are_refused() -> None:
    dice = np.random.default_rng(5)
    z, y = dice.standard_normal((100, 10)), dice.standard_normal((100, 1))
    assert fit_chaos(z, y).indices.sum(axis=1).max() == 1
    with pytest.raises(ValueError, match="too few"):
        fit_chaos(z[:12], y[:12])


def test_design_holds_products() -> None:
    z = np.array([[2.0, 3.0]])
    table = design(z, np.array([[0, 0], [1, 0], [1, 1], [2, 0]]))
    np.testing.assert_allclose(table[0], [1.0, 2.0, 6.0, (4.0 - 1.0) / np.sqrt(2.0)])


@pytest.mark.parametrize(("hits", "n"), [(0, 50), (50, 50), (7, 31), (450, 1000)])
def test_interval_by_count_is_that_of_scipy(hits: int, n: int) -> None:
    peer = scipy.stats.binomtest(hits, n).proportion_ci(0.95, method="wilson")
    assert wilson(hits, n) == pytest.approx((peer.low, peer.high), abs=1e-12)


def test_interval_by_scatter_is_that_of_scipy() -> None:
    parts = np.random.default_rng(6).normal(0.4, 0.02, 16)
    low, high = scipy.stats.t.interval(0.95, 15, loc=parts.mean(), scale=scipy.stats.sem(parts))
    middle, half = interval(parts)
    assert (middle - half, middle + half) == pytest.approx((low, high), rel=1e-12)
