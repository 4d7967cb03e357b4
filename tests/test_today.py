"""The drift of a log followed, the offsets of the day, and the proof out of sample."""

from __future__ import annotations

import json
from dataclasses import replace
from functools import cache
from pathlib import Path
from typing import Any

import numpy as np
import pandas as pd
import pytest
from click.testing import CliRunner
from scipy.stats import norm

from converter_calc.balance.heats import read_heat_file
from converter_calc.basis.errors import InputError
from converter_calc.cli import main
from converter_calc.heatlog.reading import read_log
from converter_calc.learning.features import features_of
from converter_calc.learning.following import Followed, follow_log, top_up
from converter_calc.learning.proof import OURS, Proof, linear_regression, walk_forward, windows
from converter_calc.learning.residual import ResidualModel
from converter_calc.learning.today import (
    Today,
    expected_end,
    in_time_order,
    learn,
    load_today,
    plan_one,
    plan_today,
    today_from,
)
from converter_calc.learning.tuned import Tuned
from converter_calc.learning.tuning import tune
from converter_calc.planning.plan import plan
from converter_calc.reporting.charge_sheet import charge_sheet
from tests.conftest import DEMO

SHOP = str(DEMO / "shop.toml")
ORDINARY = DEMO / "ordinary_low_carbon.toml"
FEW = (
    "heat_loss_MJ_per_t", "oxygen_meter_error_pct", "iron_oxide_factor", "P_approach",
    "Mn_approach",
)  # fmt: skip


@cache
def log() -> pd.DataFrame:
    """The first 240 heats of the demo log in time order."""
    return in_time_order(read_log(DEMO / "heat_log.csv", SHOP).frame).head(240)


@cache
def tuned() -> Tuned:
    return tune(log().head(150), SHOP, only=FEW)


@cache
def followed() -> Followed:
    return follow_log(log(), SHOP, tuned(), learn_from=150)


@cache
def today() -> Today:
    return learn(log(), SHOP, tuned=tuned())[0]


def plain_model(constant: float, *, used: bool = True) -> ResidualModel:
    """A model of what is left that adds a constant."""
    one = np.ones(1)
    return ResidualModel(
        ("hm_Si_pct",), 0.0 * one, 2.0 * one, 0.0 * one, one, constant, 0.0 * one, -9.0, 9.0, 1.0,
        used=used, gain=1.0, gain_error=0.1,
    )  # fmt: skip


def test_an_offset_knows_only_heats_before_it() -> None:
    """Contract: other outcomes later on change nothing that was expected until then."""
    other = log().copy()
    other.loc[200:, "end_temp_C"] = other.loc[200:, "end_temp_C"] + 25.0
    changed = follow_log(other, SHOP, tuned(), learn_from=150)
    ours, theirs = followed().drift.forward.expected, changed.drift.forward.expected
    np.testing.assert_allclose(theirs[:201], ours[:201], rtol=1e-12, atol=1e-15)
    assert np.abs(theirs[201:, 0] - ours[201:, 0]).max() > 0.5


def test_offsets_are_slopes_of_the_balance() -> None:
    """Derivative: what an offset of the heat loss does to the temperature, by replaying anew."""
    found = followed()
    j = found.drift.offsets.index("heat_loss_MJ_per_t")
    step = np.zeros(len(found.drift.offsets))
    step[j] = 0.5
    moved = found.at(step, np.eye(len(step)))
    again = follow_log(log().head(60), SHOP, moved, learn_from=50, before=found)
    T = found.names.index("end_temp_C")
    slope = (again.predicted[:, T] - found.predicted[:60, T]) / 0.5
    solved = np.isfinite(slope)
    assert solved.sum() > 50
    np.testing.assert_allclose(slope[solved], found.H[:60, T, j][solved], rtol=1e-3)


def test_log_offsets_are_shares() -> None:
    """Identity: an offset of ln 1.1 makes the approach factor a tenth higher, and no other."""
    found = followed()
    offset = np.zeros(len(found.drift.offsets))
    offset[found.drift.offsets.index("P_approach")] = np.log(1.1)
    moved = found.at(offset, np.diag([4.0, 0.01, 0.0025, 0.0025]))
    before, after = found.tuned.practice_values(), moved.practice_values()
    assert after["P_approach"] == pytest.approx(1.1 * before["P_approach"], rel=1e-12)
    assert after["heat_loss_MJ_per_t"] == before["heat_loss_MJ_per_t"]
    for name, alone in (("P_approach", 0.05 * after["P_approach"]), ("heat_loss_MJ_per_t", 2.0)):
        # what the fixed parameters carry over comes on top, but no more than tuning knew
        most = np.hypot(alone, found.tuned.standard_errors()[name])
        assert alone <= moved.standard_errors()[name] <= most


def test_what_is_left_makes_the_scatter_smaller() -> None:
    """Property on the demo log: less noise is left, and none of it is learnt from later heats."""
    names, X = features_of(log(), ["heavy_scrap", "burnt_lime"])
    topped = top_up(followed(), names, X, learn_from=150)
    used = [name for name, model in topped.models.items() if model.used]
    assert used
    for name in used:
        i = followed().names.index(name)
        assert topped.drift.walk.noise[i] < followed().drift.walk.noise[i]
    changed = replace(followed(), residuals=followed().residuals.copy())
    changed.residuals[200:] += 1.0
    again = top_up(changed, names, X, learn_from=150)
    np.testing.assert_allclose(again.expected[:200], topped.expected[:200], rtol=1e-9, atol=1e-12)


def test_without_anything_left_the_plan_is_that_of_the_tuned_shop() -> None:
    """Identity."""
    bare = Today(tuned(), {"end_temp_C": plain_model(5.0, used=False)}, {}, "", ())
    heats = read_heat_file(ORDINARY)
    ours, theirs = plan_one(heats, bare), plan(tuned().apply(heats))
    assert ours.document()["recipe"] == theirs.document()["recipe"]
    assert "learnt-aim" not in {w["code"] for w in ours.warnings(0)}


def test_the_balance_aims_past_what_is_left() -> None:
    """Closed case: heats that end 8 K hotter and a tenth higher in carbon than the balance says."""
    models = {"end_temp_C": plain_model(8.0), "end_C_pct": plain_model(np.log(1.1))}
    now = Today(tuned(), models, {"end_temp_C": 10.0, "end_C_pct": 0.2}, "", ())
    outcome = plan_one(read_heat_file(ORDINARY), now, move_aims=True)
    end = outcome.document()["end_point"]
    assert end["temperature_C"] == pytest.approx(1665.0 - 8.0, abs=1e-6)
    assert end["steel_pct"]["C"] == pytest.approx(0.04 / 1.1, rel=1e-9)
    assert outcome.wanted["aim_temp_C"] == pytest.approx([1665.0])
    sheet = charge_sheet(outcome).splitlines()
    (line,) = [text.split() for text in sheet if "± 10" in text]
    assert line == ["temperature", "1,665", "C", "±", "10", "aim", "1,665"]
    assert outcome.document()["expected_end"]["end_temp_C"]["value"] == pytest.approx(1665.0)
    assert outcome.document()["wanted"]["aim_C_pct"] == pytest.approx(0.04)
    expected = expected_end(outcome, now)
    assert expected["end_temp_C"][0] == pytest.approx([1665.0])
    assert expected["end_C_pct"][0] == pytest.approx([0.04])
    assert expected["end_C_pct"][1] == pytest.approx([0.04 * 0.2])
    told = [w["message"] for w in outcome.warnings(0) if w["code"] == "learnt-aim"]
    assert any("1657 C" in text and "1665 C" in text for text in told)


def test_what_is_expected_stands_beside_the_plan() -> None:
    """The aims stay where they are unless asked; a heat unlike the log is told."""
    now = Today(tuned(), {"end_temp_C": plain_model(8.0)}, {"end_temp_C": 10.0}, "", ())
    outcome = plan_one(read_heat_file(ORDINARY), now)
    assert outcome.document()["end_point"]["temperature_C"] == pytest.approx(1665.0, abs=1e-6)
    assert outcome.expected["end_temp_C"][0] == pytest.approx([1673.0])
    assert "unlike-log" not in {w["code"] for w in outcome.warnings(0)}
    narrow = replace(plain_model(8.0), high=np.array([0.3]))
    told = plan_one(read_heat_file(ORDINARY), replace(now, models={"end_temp_C": narrow}))
    (text,) = [w["message"] for w in told.warnings(0) if w["code"] == "unlike-log"]
    assert "hm_Si_pct" in text


def test_covariance_of_the_others_is_carried_over() -> None:
    """Limit case: offsets known exactly, given the others, keep what they share with these."""
    found = followed()
    k = len(found.drift.offsets)
    zero = found.at(np.zeros(k), np.zeros((k, k))).covariance
    places = [found.tuned.names.index(name) for name in found.drift.offsets]
    rest = [i for i in range(len(zero)) if i not in places]
    C = found.tuned.covariance
    np.testing.assert_allclose(zero[np.ix_(rest, rest)], C[np.ix_(rest, rest)])
    np.testing.assert_allclose(zero[np.ix_(places, rest)], C[np.ix_(places, rest)], rtol=1e-6)
    assert np.linalg.eigvalsh(zero / np.sqrt(np.outer(np.diag(C), np.diag(C)))).min() > -1e-9


def test_several_heats_are_planned_as_each_alone() -> None:
    """Identity: a table of three, one without an answer, as one by one."""
    heats = read_heat_file(ORDINARY)
    three = heats.take(np.zeros(3, dtype=int))
    three.values["hot_metal_temp_C"] = np.array([1300.0, 1345.0, 1380.0])
    rows, outcome = plan_today(three, today())[0]
    for row in range(3):
        ((_, alone),) = plan_today(three.take(np.array([row])), today())
        place = int(np.flatnonzero(rows == row)[0])
        assert outcome.state.oxygen_Nm3[place] == pytest.approx(
            float(np.asarray(alone.state.oxygen_Nm3).ravel()[0]), rel=1e-8
        )


def test_offsets_of_the_day_survive_the_file(tmp_path: Path) -> None:
    path = tmp_path / "today.json"
    today().save(path)
    again = load_today(path)
    assert again.document() == today().document()
    heats = read_heat_file(ORDINARY)
    ours, theirs = plan_one(heats, today()), plan_one(heats, again)
    assert ours.document()["recipe"] == theirs.document()["recipe"]


@pytest.mark.parametrize(
    ("change", "says"),
    [
        (lambda d: d.pop("left"), "incomplete"),
        (lambda d: d.update(version=99), "no file of offsets"),
        (lambda d: d["scatter"].update(end_Xx_pct=1.0), "incomplete"),
        (lambda d: d["left"].update(end_temp_C={"used": True}), "incomplete"),
        (lambda d: d.update(format="something else"), "no file of tuned parameters"),
        (lambda d: d["tuned"].update(covariance=[[1.0]]), "covariance"),
    ],
)
def test_a_broken_file_is_refused(change: Any, says: str) -> None:
    document = json.loads(json.dumps(today().document()))
    change(document)
    with pytest.raises(InputError, match=says):
        today_from(document)


def test_a_log_without_times_cannot_be_followed() -> None:
    with pytest.raises(InputError, match="need a time"):
        in_time_order(pd.DataFrame({"heat_id": ["1"], "tapped_at": [pd.NaT]}))
    with pytest.raises(InputError, match="holds no heat"):
        in_time_order(pd.DataFrame({"heat_id": []}))


def test_linear_regression_is_least_squares() -> None:
    """Source: numpy.linalg.lstsq on the raw features, nothing far out."""
    rng = np.random.default_rng(0)
    X = rng.uniform(0.0, 1.0, (300, 3))
    y = np.clip(X @ [1.0, -2.0, 0.5] + 3.0, 1.6, 4.4)
    low, high = np.quantile(X, [0.005, 0.995], axis=0)
    A = np.column_stack([np.ones(300), np.clip(X, low, high)])
    slopes, *_ = np.linalg.lstsq(A, y, rcond=None)
    later = rng.uniform(0.2, 0.8, (20, 3))
    np.testing.assert_allclose(
        linear_regression(X, y, later), slopes[0] + later @ slopes[1:], rtol=1e-9
    )


def made_proof(n: int = 4000) -> Proof:
    """Predictions whose errors are exactly as stated: 10 K and 20 % of the carbon."""
    rng = np.random.default_rng(3)
    T, C = np.full(n, 1650.0), np.full(n, 0.05)
    observed = np.column_stack([T + rng.normal(0, 10, n), C * np.exp(rng.normal(0, 0.2, n))])
    observed[::10, 1] = np.nan
    sd = np.tile([10.0, 0.2], (n, 1))
    return Proof(
        np.arange(n), [str(i) for i in range(n)], [pd.Timestamp("2026-01-01")] * n,
        ("end_temp_C", "end_C_pct"), observed, {"with residual": np.column_stack([T, C])},
        {"with residual": sd}, (0,), {"end_temp_C": 1.0, "end_C_pct": 0.0},
    )  # fmt: skip


def test_scores_of_known_errors() -> None:
    """Closed forms: mean absolute error and hits of normal errors."""
    proof = made_proof()
    rows = proof.scores().set_index("quantity")
    T = rows.loc["end_temp_C"]
    assert T["heats"] == 4000
    assert T["mae"] == pytest.approx(10.0 * np.sqrt(2.0 / np.pi), abs=4.0 * T["mae_error"])
    share = 2.0 * norm.cdf(windows()["end_temp_C"] / 10.0) - 1.0
    assert T["hit_pct"] == pytest.approx(100.0 * share, abs=4.0 * T["hit_error_pct"])
    assert rows.loc["end_C_pct", "heats"] == 3600


def test_stated_intervals_hold_where_errors_are_as_stated() -> None:
    """Closed form: a stated level is held but for chance (four standard errors)."""
    for table in (made_proof().calibration(), made_proof().hit_chances()):
        error = np.sqrt(table["stated"] * (1.0 - table["stated"]) / table["heats"])
        assert (np.abs(table["held"] - table["stated"]) < 4.0 * error + 1e-3).all()


def test_what_every_method_misses_is_left_out_and_told() -> None:
    proof = made_proof()
    proof.observed[7, 0] += 500.0
    assert proof.misread().sum(axis=0).tolist() == [1, 0]
    scores = proof.scores(without_misread=True).set_index("quantity")
    assert scores.loc["end_temp_C", "heats"] == 3999


@pytest.fixture(scope="module")
def proofs() -> tuple[Proof, Proof]:
    """Two walks through a short log: as it is, and with the outcome of heat 200 changed."""
    few = log().head(215)
    other = few.copy()
    other.loc[200, ["end_temp_C", "end_C_pct", "end_P_pct"]] = [1720.0, 0.15, 0.030]
    with pytest.MonkeyPatch.context() as patch:
        patch.setattr(
            "converter_calc.learning.proof.tune",
            lambda frame, shop, **more: tune(frame, shop, only=FEW, **more),
        )
        return tuple(  # type: ignore[return-value]
            walk_forward(frame, SHOP, start_share=0.8, stage=25) for frame in (few, other)
        )


def test_no_prediction_knows_the_heat_it_predicts(proofs: tuple[Proof, Proof]) -> None:
    """Contract: another outcome of heat 200 changes no prediction until after it, by any method."""
    first, second = proofs
    upto = first.rows <= 200
    assert upto.sum() > 20
    assert set(first.predicted) == {*OURS, "linear regression"}
    for method, values in first.predicted.items():
        np.testing.assert_allclose(second.predicted[method][upto], values[upto], rtol=1e-9)
    after = first.rows > 200
    moved = np.abs(second.predicted["with drift"][after] - first.predicted["with drift"][after])
    assert np.nanmax(moved) > 0.0


def test_tuning_helps_on_heats_not_seen(proofs: tuple[Proof, Proof]) -> None:
    """Property on the demo log, which another model made: errors fall from stage to stage."""
    error = proofs[0].scores().pivot_table(index="quantity", columns="method", values="mae")
    assert error.loc["end_C_pct", "tuned"] < 0.7 * error.loc["end_C_pct", "untuned"]
    assert error.loc["end_P_pct", "tuned"] < 0.7 * error.loc["end_P_pct", "untuned"]
    assert error.loc["end_temp_C", "with residual"] < error.loc["end_temp_C", "untuned"]


@pytest.mark.parametrize(
    ("share", "heats", "says"), [(0.05, 240, "start_share"), (0.4, 60, "a proof needs 50")]
)
def test_a_proof_needs_enough(share: float, heats: int, says: str) -> None:
    with pytest.raises(InputError, match=says):
        walk_forward(log().head(heats), SHOP, start_share=share)


def test_offsets_of_the_day_by_command(tmp_path: Path) -> None:
    """The two commands as a shop would use them."""
    short, kept, offsets = tmp_path / "log.csv", tmp_path / "tuned.json", tmp_path / "today.json"
    text = (DEMO / "heat_log.csv").read_text(encoding="utf-8").splitlines(keepends=True)
    short.write_text("".join(text[:160]), encoding="utf-8")
    tuned().save(kept)
    run = CliRunner().invoke
    done = run(main, ["follow", str(short), "--shop", SHOP, "--from", str(kept), "--out",
                      str(offsets)])  # fmt: skip
    assert done.exit_code == 0, done.output
    assert "heat_loss_MJ_per_t" in done.output
    planned = run(main, ["plan", str(ORDINARY), "--tuned", str(offsets), "--json", "-"])
    assert planned.exit_code == 0, planned.output
    assert json.loads(planned.output)["status"] == "solved"
    missing = run(main, ["follow", str(tmp_path / "none.csv"), "--shop", SHOP])
    assert missing.exit_code == 2
    assert missing.output.count("\n") == 1
