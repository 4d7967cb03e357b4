"""The state filter against published estimates and plain conditioning; drift and jumps found."""

from __future__ import annotations

from dataclasses import replace

import numpy as np
import pytest

from converter_calc.learning.drift import estimate_walk, follow_drift, still_log_likelihood
from converter_calc.learning.state_filter import (
    GROSS_TIMES,
    Walk,
    log_likelihoods,
    look_back,
    run_filter,
)

#: Annual flow of the Nile at Aswan, 1871 to 1970, 1e8 m3: G.W. Cobb, Biometrika 65 (1978) 243
#: (from memory; the mean of 919.35 is the one usually printed).
NILE = np.fromstring(
    """1120 1160 963 1210 1160 1160 813 1230 1370 1140 995 935 1110 994 1020 960 1180 799 958 1140
    1100 1210 1150 1250 1260 1220 1030 1100 774 840 874 694 940 833 701 916 692 1020 1050 969 831
    726 456 824 702 1120 1100 832 764 821 768 845 864 862 698 845 744 796 1040 759 781 865 845 944
    984 897 822 1010 771 676 649 846 812 742 801 1040 860 874 848 890 744 749 838 1050 918 986 797
    923 975 815 1020 906 901 1170 912 746 919 718 714 740""",
    sep=" ",
)[:, None]
ONES = np.ones((100, 1, 1))
VAGUE = Walk(np.array([30.0]), np.array([120.0]), np.zeros(1), np.array([[1e7]]), {})


def test_speed_and_noise_of_the_nile(monkeypatch: pytest.MonkeyPatch) -> None:
    """Source: J. Durbin, S.J. Koopman (2012), chapter 2: variances 1469.1 and 15099."""
    assert NILE.mean() == pytest.approx(919.35)
    # the published estimates know no gross errors
    monkeypatch.setattr("converter_calc.learning.state_filter.GROSS_SHARE", 1e-12)
    monkeypatch.setattr("converter_calc.learning.state_filter.HUBER", 1e9)
    found = estimate_walk(NILE, ONES, VAGUE)
    assert found.speed[0] ** 2 == pytest.approx(1469.1, rel=3e-3)
    assert found.noise[0] ** 2 == pytest.approx(15099.0, rel=3e-3)


def test_the_fall_of_1899_is_the_most_telling_jump() -> None:
    """Source: the dam at Aswan; Cobb (1978) and de Jong, Penzer (1998) find the break at 1899."""
    still = replace(VAGUE, speed=np.zeros(1))
    back = look_back(NILE, ONES, run_filter(NILE, ONES, estimate_walk(NILE, ONES, still)))
    score = back.push[1:, 0] / np.sqrt(back.push_information[1:, 0])
    assert 1871 + 1 + int(np.argmax(np.abs(score))) == 1899
    size = back.push[28, 0] / back.push_information[28, 0]
    means = NILE[28:].mean() - NILE[:28].mean()  # a level that only jumps: the means differ so
    assert size == pytest.approx(means, rel=1e-2)


def plain(walk: Walk, y: np.ndarray, H: np.ndarray) -> tuple[np.ndarray, np.ndarray, float]:
    """Mean, covariance of the last offsets, and density, by conditioning one big Gaussian."""
    n, m, k = H.shape
    cov = np.zeros((n * k, n * k))
    sums = np.zeros((n, k, k))
    total = walk.start_cov.copy()
    for t in range(n):
        if t:
            total = total + np.diag(walk.speed**2)
        total = total + np.diag(walk.shocks.get(t, np.zeros(k)))
        sums[t] = total
    for a in range(n):
        for b in range(n):
            cov[a * k : (a + 1) * k, b * k : (b + 1) * k] = sums[min(a, b)]
    big = np.zeros((n * m, n * k))
    for t in range(n):
        big[t * m : (t + 1) * m, t * k : (t + 1) * k] = H[t]
    seen = np.isfinite(y.ravel())
    A, v = big[seen], y.ravel()[seen] - big[seen] @ np.tile(walk.start, n)
    S = A @ cov @ A.T + np.diag(np.tile(walk.noise**2, n)[seen])
    G = cov[-k:] @ A.T @ np.linalg.inv(S)
    _, log_det = np.linalg.slogdet(2.0 * np.pi * S)
    density = -0.5 * (log_det + v @ np.linalg.solve(S, v))
    return walk.start + G @ v, cov[-k:, -k:] - G @ A @ cov[:, -k:], float(density)


def made(seed: int, n: int = 12) -> tuple[np.ndarray, np.ndarray, Walk]:
    rng = np.random.default_rng(seed)
    H = rng.normal(0.0, 1.0, (n, 3, 2))
    y = rng.normal(0.0, 1.0, (n, 3))
    y[rng.random((n, 3)) < 0.3] = np.nan
    cov = np.array([[1.0, 0.3], [0.3, 0.5]])
    shocks = {5: np.array([2.0, 0.0])}
    return y, H, Walk(np.array([0.3, 0.1]), np.array([1.0, 0.5, 2.0]), np.ones(2), cov, shocks)


@pytest.mark.parametrize("seed", range(4))
def test_the_filter_is_plain_conditioning(seed: int) -> None:
    """Identity: mean, covariance and density of a Gaussian conditioned all at once."""
    y, H, walk = made(seed)
    mean, cov, density = plain(walk, y, H)
    forward = run_filter(y, H, walk, robust=False)
    np.testing.assert_allclose(forward.after[-1], mean, rtol=1e-9, atol=1e-12)
    np.testing.assert_allclose(forward.after_cov[-1], cov, rtol=1e-9, atol=1e-12)
    assert forward.log_likelihood == pytest.approx(density, rel=1e-10)
    back = look_back(y, H, forward)
    np.testing.assert_allclose(back.smoothed[-1], forward.after[-1], rtol=1e-9)


def test_smoothed_offsets_are_those_of_the_log_turned_round() -> None:
    """Identity: for a walk without shocks that starts vague, time may run either way."""
    y, H, walk = made(7)
    vague = replace(walk, start=np.zeros(2), start_cov=np.eye(2) * 1e6, shocks={})
    back = look_back(y, H, run_filter(y, H, vague, robust=False))
    turned = run_filter(y[::-1], H[::-1], vague, robust=False)
    np.testing.assert_allclose(back.smoothed[0], turned.after[-1], rtol=1e-3, atol=1e-4)


@pytest.mark.parametrize("robust", [True, False])
def test_many_guesses_at_once_are_as_one_by_one(*, robust: bool) -> None:
    """Identity."""
    y, H, walk = made(3)
    y[4, 0] = 40.0  # a gross error takes the other branch
    guesses = replace(
        walk,
        speed=np.outer([1.0, 2.0, 0.5], walk.speed),
        noise=np.outer([1.0, 0.7, 3.0], walk.noise),
    )
    together = log_likelihoods(y, H, guesses, robust=robust)
    for row in range(3):
        one = replace(walk, speed=guesses.speed[row], noise=guesses.noise[row])
        alone = run_filter(y, H, one, robust=robust)
        assert together[row] == pytest.approx(alone.log_likelihood, rel=1e-12)


def test_a_gross_error_moves_the_offset_little() -> None:
    """Property: an innovation of 50 deviations moves the offset as far as one of about HUBER."""
    y, H = np.zeros((30, 1)), np.ones((30, 1, 1))
    y[20] = 50.0
    walk = Walk(np.array([0.2]), np.array([1.0]), np.zeros(1), np.eye(1), {})
    steady = 0.5 * (0.04 + np.sqrt(0.04**2 + 4.0 * 0.04))  # J.F. Muth, JASA 55 (1960) 299
    gain = steady / (steady + 1.0)
    plain_pass = run_filter(y, H, walk, robust=False)
    assert plain_pass.gain[19, 0, 0] == pytest.approx(gain, rel=1e-2)
    assert plain_pass.after[20, 0] == pytest.approx(50.0 * gain, rel=2e-2)
    assert abs(run_filter(y, H, walk).after[20, 0]) < 0.1 * 50.0 * gain


def wandering(seed: int, n: int, jump: float) -> tuple[np.ndarray, np.ndarray, np.ndarray]:
    """Two offsets that walk (speeds 0.05 and 0.02), the first with a jump at heat 200."""
    rng = np.random.default_rng(seed)
    s = np.cumsum(rng.normal(0.0, [0.05, 0.02], (n, 2)), axis=0)
    s[200:, 0] += jump
    H = np.eye(2) + rng.normal(0.0, 0.1, (n, 2, 2))
    y = np.einsum("nmk,nk->nm", H, s) + rng.normal(0.0, 1.0, (n, 2))
    y[rng.random((n, 2)) < 0.2] = np.nan
    gross = rng.random((n, 2)) < 0.01
    return np.where(gross, y + 25.0, y), H, s


def test_a_jump_is_found_and_dated_and_sized() -> None:
    """Closed case: known speeds, one jump of four deviations, 1 % gross errors, a fifth missing."""
    y, H, s = wandering(5, 400, 4.0)
    drift = follow_drift(y, H, ("heat", "phosphorus"), ("T", "P"), np.eye(2))
    assert [jump.offset for jump in drift.jumps] == ["heat"]
    (jump,) = drift.jumps
    assert abs(jump.row - 200) <= 3
    assert abs(jump.size - 4.0) < 3.0 * jump.standard_error
    assert drift.forward.log_likelihood > still_log_likelihood(y, H, drift.walk) + 20.0
    today, cov = drift.today
    assert np.all(np.abs(today - s[-1]) < 3.5 * np.sqrt(np.diag(cov)))
    assert drift.walk.noise == pytest.approx([1.0, 1.0], rel=0.15)


def test_no_jump_is_called_where_there_is_none() -> None:
    """Property: false alarms stay rare (level 1 % a log)."""
    alarms = sum(
        len(follow_drift(*wandering(seed, 300, 0.0)[:2], ("a", "b"), ("T", "P"), np.eye(2)).jumps)
        for seed in (11, 12, 13)
    )
    assert alarms == 0


def test_constant_offsets_are_told_as_such() -> None:
    """Limit case: without drift the speed found is next to nothing."""
    rng = np.random.default_rng(2)
    y, H = 0.7 + rng.normal(0.0, 1.0, (300, 1)), np.ones((300, 1, 1))
    drift = follow_drift(y, H, ("heat",), ("T",), np.eye(1) * 4.0)
    assert drift.walk.speed[0] < 0.02
    assert drift.today[0][0] == pytest.approx(float(y.mean()), abs=0.1)
    assert GROSS_TIMES > 1.0


def test_shapes_that_do_not_fit_are_refused() -> None:
    with pytest.raises(ValueError, match="do not fit"):
        follow_drift(np.zeros((3, 2)), np.zeros((3, 2, 1)), ("a", "b"), ("T", "P"), np.eye(2))
