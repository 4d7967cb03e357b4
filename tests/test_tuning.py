"""Tuning of the model on logs whose true parameters are known.

Kinds of check: recovery of the parameters that made a log (identity); optimum against
scipy.optimize.least_squares and ridge regression of scikit-learn (outside references); closed
form of the design effect (Kish, Survey Sampling, 1965; from memory); coverage of the stated
errors by the binomial distribution. The logs are made by the model, their charges are invented.
"""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import replace
from functools import cache
from typing import Any

import numpy as np
import pandas as pd
import pytest
from scipy import optimize, stats
from sklearn.linear_model import Ridge

from converter_calc.balance.documents import read_shop
from converter_calc.basis.errors import InputError
from converter_calc.learning import tuning
from converter_calc.learning.parameters import ParameterSet, TuningParameter, parameter_set
from converter_calc.learning.replay import HeatLog, Replay, read_heats, replay
from converter_calc.learning.replay_quantities import quantities
from converter_calc.learning.tuned import Tuned
from converter_calc.learning.tuning import report, search, summed, tune
from converter_calc.learning.tuning_equations import (
    HUBER,
    NormalEquations,
    Point,
    normal_equations,
)
from tests.heat_logs import NOISE, SHOP, made_log

TRUTH = {
    "heat_loss_MJ_per_t": 52.0,
    "heat_loss_MJ_per_min": 75.0,
    "post_combustion_ratio": 0.12,
    "oxygen_utilisation_pct": 98.2,
    "iron_oxide_factor": 1.15,
    "P_approach": 0.55,
    "Mn_approach": 0.8,
    "S_approach": 0.7,
    "heavy_scrap_yield_factor": 0.985,
    "shop_scrap_yield_factor": 1.01,
    "galvanised_bundles_yield_factor": 0.97,
    "hot_metal_temp_error_C": 6.0,
    "hot_metal_weight_error_pct": 0.5,
    "oxygen_meter_error_pct": -1.0,
}
FEW = ("heat_loss_MJ_per_t", "iron_oxide_factor", "P_approach", "Mn_approach", "S_approach")


@cache
def shop() -> dict[str, Any]:
    return read_shop(SHOP)


def tuned_values(log: pd.DataFrame, **options: Any) -> dict[str, float]:
    return tune(log, SHOP, shared_error=0.0, **options).practice_values()


def assert_recovered(found: Mapping[str, float], rel: float = 1e-6) -> None:
    for name, value in found.items():
        assert value == pytest.approx(TRUTH[name], rel=rel), name


def test_all_parameters_come_out_of_a_log_without_noise() -> None:
    """Weak prior: ten times the usual standard deviation. The weight of scrap is left out: no log
    tells it from the yields of all scraps at once."""
    frame = made_log(250, TRUTH)
    entries = parameter_set(shop(), frame.columns, without=["scrap_weight_error_pct"])
    assert set(entries.names) == set(TRUTH)
    weak = replace(entries, entries=tuple(replace(e, sd=10.0 * e.sd) for e in entries.entries))
    found = search(weak, summed([read_heats(frame, shop())]), shared_error=0.0)
    assert found.settled
    assert_recovered(weak.values(found.point.z))


def test_missing_outcomes_are_missing() -> None:
    """A log of which half of the outcomes are blank, each heat its own, gives the same."""
    frame = made_log(120, {name: TRUTH[name] for name in FEW})
    gaps = np.random.default_rng(3).random((120, len(NOISE))) < 0.5
    frame[list(NOISE)] = frame[list(NOISE)].mask(gaps)
    assert_recovered(tuned_values(frame, only=FEW))


def test_gross_errors_are_found_listed_and_not_used() -> None:
    truth = {name: TRUTH[name] for name in FEW}
    clean = made_log(200, truth, noise=1.0)
    frame = clean.copy()
    wrong = np.arange(5, 200, 20)  # 5 % of the heats
    frame.loc[wrong, "end_temp_C"] += np.where(np.arange(10) % 2, 150.0, -120.0)
    frame.loc[wrong + 1, "end_P_pct"] *= 10.0  # a decimal point in the wrong place
    first = tune(clean, SHOP, only=FEW, shared_error=0.0)
    second = tune(frame, SHOP, only=FEW, shared_error=0.0)
    listed = {(error.heat_id, error.field) for error in second.gross_errors}
    assert listed == {(f"H{row:05d}", "end_temp_C") for row in wrong} | {
        (f"H{row + 1:05d}", "end_P_pct") for row in wrong
    }
    assert (second.gross_heats, second.gross_outcomes, second.heats) == (10, 10, 190)
    for name in FEW:
        error = first.standard_errors()[name]
        # a tenth of the heats carry less: their values may move by what 10 % of the data tells
        assert abs(second.practice_values()[name] - first.practice_values()[name]) < 0.6 * error


def test_the_optimum_is_that_of_scipy() -> None:
    """Same loss, the scatter as found; least_squares with its Huber loss starts from the prior."""
    frame = made_log(60, {"heat_loss_MJ_per_t": 50.0, "P_approach": 0.5}, noise=1.0)
    only = ("heat_loss_MJ_per_t", "iron_oxide_factor", "P_approach", "S_approach")
    entries = replace(parameter_set(shop(), frame.columns, only), offsets=())
    log = read_heats(frame, shop())
    found = search(entries, summed([log]), shared_error=0.0)
    assert not found.there.gross
    sd = np.array([found.point.sd[name] for name in log.names])

    def residuals(z: Any) -> Any:
        off = replay(log, values=entries.values(z)).residuals / sd
        return np.concatenate([off[np.isfinite(off)], z])

    reference = optimize.least_squares(
        residuals, np.zeros(len(only)), loss="huber", f_scale=HUBER, xtol=1e-12, ftol=1e-14,
        gtol=1e-12, diff_step=1e-5,
    )  # fmt: skip
    assert np.abs(reference.x).max() < HUBER, "the prior is quadratic there, as ours is"
    error = np.sqrt(np.diag(np.linalg.inv(found.there.curvature + np.eye(len(only)))))
    assert np.abs(found.point.z - reference.x).max() < 1e-4 * error.min()
    assert found.there.cost + 0.5 * found.point.z @ found.point.z == pytest.approx(
        reference.cost, rel=1e-9
    )


# a linear toy: the model is X b, so that every step has a closed form


def toy(y: Any, X: Any) -> Any:
    n, k = X.shape
    log = HeatLog(
        [str(i) for i in range(n)],
        ("end_temp_C",),
        y[:, None],
        np.ones(n, dtype=bool),
        pd.DataFrame(columns=["row", "heat_id", "field", "given", "reason"]),
        (),
    )
    entries = ParameterSet(
        tuple(
            TuningParameter(f"b{i}", "identity", 0.0, 2.0, -1e3, 1e3, "", "", "") for i in range(k)
        )
    )

    def accumulate(point: Point) -> NormalEquations:
        b = np.array(list(point.parameters.values(point.z).values()))
        every = np.ones(n, dtype=bool)
        answer = Replay(
            log.ids, log.names, log.observed, (X @ b)[:, None], entries.names, X[:, None, :],
            every, every,
        )  # fmt: skip
        return normal_equations(log, point, answer)

    return entries, accumulate


def test_a_linear_model_is_ridge_regression() -> None:
    """Errors of one size stay inside the corner of the loss, so it is scikit-learn's Ridge."""
    rng = np.random.default_rng(5)
    X = rng.normal(size=(80, 3))
    y = X @ np.array([1.0, -3.0, 0.5]) + 4.0 * rng.choice([-1.0, 1.0], 80)
    entries, accumulate = toy(y, X)
    found = search(entries, accumulate, shared_error=0.0)
    sd = found.point.sd["end_temp_C"]
    ridge = Ridge(alpha=(sd / 2.0) ** 2, fit_intercept=False).fit(X, y)
    assert list(entries.values(found.point.z).values()) == pytest.approx(ridge.coef_, rel=1e-6)


def test_errors_that_heats_share_widen_by_the_design_effect() -> None:
    """Mean of n outcomes, correlation r between any two: variance s^2 (1 + (n - 1) r) / n."""
    n, r = 400, 0.02
    y = np.where(np.arange(n) % 2, 3.0, -3.0)
    entries, accumulate = toy(y, np.ones((n, 1)))
    flat = replace(entries, entries=tuple(replace(e, sd=1e4, high=1e6, low=-1e6)
                                          for e in entries.entries))  # fmt: skip
    found = report(search(flat, accumulate, shared_error=r), {}, rows=n)
    variance = 9.0 * (n / (n - 1)) * (1.0 + (n - 1) * r) / n
    assert found.parameters[0].standard_error ** 2 == pytest.approx(variance, rel=1e-3)


def test_sums_of_parts_are_those_of_the_whole(monkeypatch: pytest.MonkeyPatch) -> None:
    frame = made_log(90, {"P_approach": 0.5}, noise=1.0)
    entries = parameter_set(shop(), frame.columns, FEW)
    sd = {name: quantity.first_sd for name, quantity in quantities().items()}
    at = Point(entries, np.full(len(entries.coordinates), 0.1), sd)
    whole = summed([read_heats(frame, shop())])(at)
    parts = summed([read_heats(frame.iloc[part], shop()) for part in (slice(0, 37), slice(37, 90))])
    both = parts(at)
    assert both.information == pytest.approx(whole.information, rel=1e-9)
    assert both.scores == pytest.approx(whole.scores, rel=1e-6, abs=1e-9)
    assert both.scatter() == pytest.approx(whole.scatter())
    assert (both.heats, both.used) == (whole.heats, whole.used)
    monkeypatch.setattr(tuning, "ROWS_AT_ONCE", 40)
    in_parts = tune(frame, SHOP, only=FEW, shared_error=0.0)
    monkeypatch.undo()
    at_once = tune(frame, SHOP, only=FEW, shared_error=0.0)
    assert in_parts.practice_values() == pytest.approx(at_once.practice_values(), rel=1e-7)
    assert in_parts.covariance == pytest.approx(at_once.covariance, rel=1e-4, abs=1e-12)


def test_scatter_is_the_median_absolute_deviation() -> None:
    """From counts in bins against scipy.stats.median_abs_deviation: bins are 0.4 % wide."""
    rng = np.random.default_rng(2)
    y = 5.0 + 3.0 * rng.standard_t(3, 2001)
    entries, accumulate = toy(y, np.ones((2001, 1)))
    sums = accumulate(Point(entries, np.zeros(1), {"end_temp_C": 16.0}))
    expected = stats.median_abs_deviation(y, scale="normal")
    assert sums.scatter()["end_temp_C"] == pytest.approx(expected, rel=5e-3)
    assert sums.middle()["end_temp_C"] == pytest.approx(np.median(y), rel=5e-3)


@pytest.mark.parametrize("half", [0, 1])
def test_stated_errors_cover_the_truth(half: int) -> None:
    """12 logs, truths drawn from the prior, 5 parameters each: 95 % intervals hold the truth.

    Of 30 intervals a file half, 28.5 are expected; fewer than 25 come up in 1.5 % of all draws
    (binomial, p = 0.95), and the seeds are fixed.
    """
    hits, z = 0, []
    for seed in range(6 * half, 6 * half + 6):
        rng = np.random.default_rng([seed, 11])
        entries = parameter_set(shop(), [], FEW)
        truth = entries.values(rng.standard_normal(len(FEW)))
        log = made_log(80, truth, noise=1.0, seed=seed + 100)
        found = tune(log, SHOP, only=FEW, shared_error=0.0, step_settled=1e-2)
        off = [(e.value - truth[e.name]) / e.standard_error for e in found.parameters]
        hits += int(np.sum(np.abs(off) < 1.96))
        z += off
    assert hits >= 25
    assert 0.6 < float(np.std(z)) < 1.5  # chi-square, 30 values: 0.1 % to 99.9 %


def test_what_the_log_cannot_tell_stays_as_it_was() -> None:
    frame = made_log(60, {"heat_loss_MJ_per_t": 60.0}, noise=1.0).drop(columns=["end_S_pct"])
    frame["wait_min"], frame["blow_min"] = 20.0, 17.0
    names = ("heat_loss_MJ_per_t", "heat_loss_MJ_per_min", "S_approach")
    found = tune(frame, SHOP, only=names, shared_error=0.0)
    sulphur = found.parameters[found.names.index("S_approach")]
    assert sulphur.held
    assert sulphur.value == sulphur.prior == 0.5
    assert sulphur.told_by_data < 0.01
    assert sulphur.standard_error == pytest.approx(0.25, rel=1e-6)  # 0.5 of 0.5, as before
    # loss by minutes and by tonne are one where all heats wait and blow alike
    assert {*found.collinear[0][:2]} == {"heat_loss_MJ_per_t", "heat_loss_MJ_per_min"}
    loss = {entry.name: entry for entry in found.parameters}
    total = loss["heat_loss_MJ_per_t"].value * 213.4 + loss["heat_loss_MJ_per_min"].value * 37.0
    assert total == pytest.approx(60.0 * 213.4 + 60.0 * 37.0, rel=0.1)


def test_a_start_elsewhere_ends_at_the_same_place() -> None:
    frame = made_log(60, {name: TRUTH[name] for name in FEW}, noise=1.0)
    first = tune(frame, SHOP, only=FEW)
    assert isinstance(first, Tuned)
    again = tune(frame, SHOP, only=FEW, start={"P_approach": 0.8, "heat_loss_MJ_per_t": 90.0})
    for entry, other in zip(first.parameters, again.parameters, strict=True):
        assert other.value == pytest.approx(entry.value, abs=0.02 * entry.standard_error)


@pytest.mark.parametrize(
    ("options", "words"),
    [
        ({"only": ["P_aproach"]}, "P_aproach: is no parameter to tune; nearest: P_approach"),
        ({"without": ["x"]}, "x: is no parameter to tune"),
        ({"shared_error": 2.0}, "shared_error: must be 0 to 1, given 2"),
        ({"only": ["wait_min"]}, "wait_min: is no parameter to tune"),
    ],
)
def test_wrong_calls_are_told(options: dict[str, Any], words: str) -> None:
    with pytest.raises(InputError, match=words):
        tune(made_log(5), SHOP, **options)


def test_a_log_of_which_nothing_can_be_used_is_told() -> None:
    frame = made_log(5)
    frame["hm_C_pct"] = np.nan
    with pytest.raises(InputError, match="no heat can be used: in all 5 part of the charge"):
        tune(frame, SHOP)


def test_a_parameter_that_stands_in_the_log_is_not_tuned() -> None:
    frame = made_log(5).assign(iron_oxide_factor=1.1)
    assert "iron_oxide_factor" not in parameter_set(shop(), frame.columns).names
    with pytest.raises(InputError, match="stands in the log, heat by heat"):
        tune(frame, SHOP, only=["iron_oxide_factor"])
