"""Approach factors from measured heats, and the ranking of the laws.

Kinds of check: "reference" = scipy finds the same minimum of Huber's loss, or a closed form;
"recovery" = heats made here from a law with a known factor give it back; "worked" = errors
summed up here by hand; "contract" = what is missing stays missing, refusals, the command.
"""

from __future__ import annotations

import json
from typing import Any

import numpy as np
import pandas as pd
import pytest
from click.testing import CliRunner
from hypothesis import given, settings
from hypothesis import strategies as st
from scipy import optimize, special

from converter_calc.basis.errors import InputError
from converter_calc.cli import main
from converter_calc.laws import phosphorus
from converter_calc.laws.slag_measures import share_of
from converter_calc.metallurgy.approach import HUBER, fit_pairs, ln_ratios, needs, robust_mean
from converter_calc.metallurgy.law_ranking import rank_laws
from converter_calc.reporting.phosphorus_tables import ranking_text

from .conftest import DEMO

TRUE_LAW, TRUE_APPROACH = "suito_inoue_1995", 0.55


def made_log(n: int = 120, scatter: float = 0.0, seed: int = 7) -> pd.DataFrame:
    """Heats (invented) whose phosphorus obeys TRUE_LAW times TRUE_APPROACH, with scatter of ln."""
    rng = np.random.default_rng(seed)
    log = pd.DataFrame({
        "heat_id": [f"{k}" for k in range(n)],
        "tapped_at": pd.date_range("2026-01-01", periods=n, freq="40min", tz="UTC").astype(str),
        "end_temp_C": rng.uniform(1625.0, 1690.0, n),
        "end_C_pct": rng.uniform(0.025, 0.08, n),
        "end_O_ppm": rng.uniform(400.0, 900.0, n),
        "slag_CaO_pct": rng.uniform(41.0, 50.0, n),
        "slag_SiO2_pct": rng.uniform(11.0, 16.0, n),
        "slag_MgO_pct": rng.uniform(6.0, 10.0, n),
        "slag_FeO_pct": rng.uniform(15.0, 28.0, n),
        "slag_MnO_pct": rng.uniform(2.0, 6.0, n),
        "slag_P2O5_pct": rng.uniform(1.2, 2.6, n),
        "slag_Al2O3_pct": rng.uniform(1.0, 2.5, n),
    })  # fmt: skip
    slag = {oxide: log[f"slag_{oxide}_pct"].to_numpy()
            for oxide in ("CaO", "SiO2", "MgO", "FeO", "MnO", "P2O5", "Al2O3")}  # fmt: skip
    L = phosphorus.partition_ratio(TRUE_LAW, slag, log["end_temp_C"].to_numpy() + 273.15, 0.0, 0.0)
    noise = np.exp(scatter * rng.standard_normal(n))
    P = share_of("P", "P2O5") * slag["P2O5"] / (TRUE_APPROACH * L * noise)
    log["end_P_pct"] = P
    return log


@settings(max_examples=40, deadline=None)
@given(st.lists(st.floats(-3.0, 3.0), min_size=3, max_size=30))
def test_robust_mean_is_the_least_of_hubers_loss(values):
    """reference: scipy.special.huber and a bounded search over its sum.

    The loss is flat to rounding around its minimum, so the losses are compared, not the places.
    """
    mean, error, scale = robust_mean(values)
    if scale == 0.0:
        assert mean == np.median(values)
        assert error == 0.0
        return

    def loss(centre: float) -> float:
        return float(special.huber(HUBER, (np.array(values) - centre) / scale).sum())

    found = optimize.minimize_scalar(loss, bounds=(-3.0, 3.0), options={"xatol": 1e-10})
    assert loss(mean) <= loss(found.x) + 1e-9


def test_robust_mean_of_a_normal_sample():
    """reference: mean and standard error of a normal sample, efficiency 95 % (Huber 1964)."""
    sample = np.random.default_rng(3).normal(0.4, 0.25, 20000)
    mean, error, scale = robust_mean(sample)
    assert mean == pytest.approx(0.4, abs=4 * 0.25 / np.sqrt(20000))
    assert scale == pytest.approx(0.25, rel=0.03)
    assert error == pytest.approx(0.25 / np.sqrt(20000) / np.sqrt(0.95), rel=0.03)


def test_an_outlier_moves_the_mean_little():
    """property: one wrong analysis in 41 moves the mean by 24, the robust one hardly."""
    clean = np.linspace(-1.0, 1.0, 41)
    spoilt = np.append(clean[:-1], 1000.0)
    assert abs(robust_mean(spoilt)[0] - robust_mean(clean)[0]) < 0.05
    assert np.mean(spoilt) > 20.0


def test_the_factor_comes_back_exactly_without_scatter():
    """recovery"""
    log = made_log()
    slag = {oxide: log[f"slag_{oxide}_pct"] for oxide in ("CaO", "MgO", "FeO", "MnO", "P2O5")}
    fit = fit_pairs(TRUE_LAW, slag, log["end_temp_C"], log["end_P_pct"])
    assert fit.approach == pytest.approx(TRUE_APPROACH, rel=1e-12)
    assert fit.scatter_log10 < 1e-12
    assert (fit.heats, fit.in_range) == (120, 120)
    assert any("ISIJ Int. 35" in term.source for term in fit.terms())


def test_the_factor_comes_back_with_scatter_within_its_error():
    """recovery: 400 heats, scatter 0.1 in log10; within three standard errors."""
    ranking = rank_laws(made_log(400, scatter=0.23))
    fit = ranking.fits[TRUE_LAW]
    assert abs(np.log(fit.approach / TRUE_APPROACH)) < 3.0 * fit.ln_error
    assert fit.scatter_log10 == pytest.approx(0.23 / np.log(10.0), rel=0.15)
    assert fit.ln_error == pytest.approx(0.23 / np.sqrt(400 * 0.95), rel=0.2)
    assert fit.approach_low < fit.approach < fit.approach_high


def test_total_iron_as_FeO_is_the_same_as_iron_in_two_oxides():
    """worked: FetO = FeO + 0.8998 Fe2O3 by atomic weights; every law sees the same slag."""
    slag = {"CaO": 46.0, "SiO2": 13.0, "MgO": 8.0, "MnO": 4.0, "P2O5": 2.0, "Al2O3": 1.5}
    two = {**slag, "FeO": 16.0, "Fe2O3": 6.0}
    one = {**slag, "FeO": 16.0 + 6.0 * 2.0 * 71.844 / 159.687}
    for law in phosphorus.laws():
        a, b = (ln_ratios(law, s, 1660.0, 0.012, 0.04, 0.06) for s in (two, one))
        if law != "turkdogan_pearson_1953":  # whose N counts all iron as FeO in any case
            assert a == pytest.approx(b, abs=1e-4)
        assert np.isfinite(a)


@pytest.mark.parametrize("scheme", ["forward", "folds"])
def test_the_true_law_is_ranked_first(scheme):
    """recovery; its error out of sample is that of the scatter, E|P (e^x - 1)|."""
    ranking = rank_laws(made_log(300, scatter=0.1), scheme=scheme)
    assert ranking.best == ranking.offered == TRUE_LAW
    table = ranking.table
    assert table["rank"].to_list() == list(range(1, len(table) + 1))
    assert (np.diff(table["error_P_pct"]) >= 0.0).all()
    assert table["error_P_share_pct"].iloc[0] == pytest.approx(
        100.0 * 0.1 * np.sqrt(2.0 / np.pi), rel=0.15
    )  # mean of |normal|
    second = table.iloc[1]
    assert second["beside_best_pct"] > 0.0
    assert second["beside_best_error_pct"] > 0.0


def test_errors_are_of_heats_not_fitted_to():
    """worked: two folds; each half by the factor of the other, summed up here."""
    log = made_log(40, scatter=0.2)
    ranking = rank_laws(log, [TRUE_LAW], scheme="folds", folds=2)
    slag = {oxide: log[f"slag_{oxide}_pct"] for oxide in ("CaO", "MgO", "FeO", "MnO", "P2O5")}
    ratios = ln_ratios(TRUE_LAW, slag, log["end_temp_C"], log["end_P_pct"])
    P = log["end_P_pct"].to_numpy()
    errors = []
    for test, fit in ((slice(0, 20), slice(20, 40)), (slice(20, 40), slice(0, 20))):
        errors += list(P[test] * np.exp(ratios[test] - robust_mean(ratios[fit])[0]) - P[test])
    row = ranking.table.iloc[0]
    assert row["error_P_pct"] == pytest.approx(np.abs(errors).mean(), rel=1e-12)
    assert row["rms_P_pct"] == pytest.approx(np.sqrt(np.mean(np.square(errors))), rel=1e-12)
    assert row["bias_P_pct"] == pytest.approx(np.mean(errors), rel=1e-9)


def test_forward_tests_only_look_back():
    """property: changing the last sixth of the log changes no test but its own."""
    log = made_log(60, scatter=0.2)
    late = log.copy()
    late.loc[50:, "end_P_pct"] *= 2.0
    a, b = (rank_laws(x, [TRUE_LAW], folds=5).tests for x in (log, late))
    early = a["heat"] < 50
    np.testing.assert_array_equal(
        a.loc[early, "calculated_P_pct"], b.loc[early, "calculated_P_pct"]
    )
    assert len(a) == 50  # the first sixth is only fitted to


def test_order_is_that_of_tapping():
    """property: shuffled rows with tapped_at give the same ranking."""
    log = made_log(90, scatter=0.2)
    shuffled = log.sample(frac=1.0, random_state=4).reset_index(drop=True)
    a, b = rank_laws(log).table, rank_laws(shuffled).table
    pd.testing.assert_frame_equal(a, b, rtol=1e-12)


def test_missing_is_missing():
    """contract: a heat without an oxide drops out of the laws that name it, and only of those;
    without any measured oxygen the laws that need it are listed without rank."""
    log = made_log(100, scatter=0.1)
    log.loc[:9, "slag_Al2O3_pct"] = np.nan
    log.loc[10:14, "slag_P2O5_pct"] = np.nan
    log.loc[15:16, "end_P_pct"] = 0.0
    log["end_O_ppm"] = np.nan
    ranking = rank_laws(log)
    heats = ranking.table.set_index("law")["heats"]
    assert heats["suito_inoue_1995"] == 100 - 5 - 2
    assert heats["assis_2019"] == 100 - 5 - 2 - 10
    assert heats["turkdogan_2000"] == 0
    assert ranking.table.set_index("law").loc["turkdogan_2000", "rank"] == 0
    assert ranking.table.set_index("law").loc["assis_2019", "tested"] > 0
    assert len(set(ranking.table.loc[ranking.table["rank"] > 0, "tested"])) == 1  # same heats
    notes = " | ".join(ranking.notes)
    assert "2 heats have end_P_pct of 0 or less" in notes
    assert "turkdogan_2000 is not ranked" in notes
    assert "end_O_ppm" in notes


def test_needs_of_the_laws():
    """contract: what each law looks at, read off its formula."""
    assert needs("healy_1970_linear") == (("CaO", "P2O5", "FeO"), False, False)
    assert needs("ogawa_2001")[1:] == (True, False)
    assert needs("turkdogan_2000") == (("CaO", "P2O5", "MgO"), False, True)
    assert "Al2O3" in needs("assis_2019")[0]


@pytest.mark.parametrize(
    ("change", "match"),
    [
        ({"slag_CaO_pct": None}, "slag_CaO_pct: no such column"),
        ({"end_temp_C": "hot"}, "end_temp_C: row 1 is no number: 'hot'"),
    ],
)
def test_wrong_logs_are_refused(change: dict[str, Any], match: str):
    """contract"""
    log = made_log(20)
    for name, given_value in change.items():
        if given_value is None:
            del log[name]
        else:
            log[name] = given_value
    with pytest.raises(InputError, match=match):
        rank_laws(log)


def test_too_few_heats():
    """contract: pairs are refused, a short log has no ranked law and says so."""
    log = made_log(6)
    slag = {oxide: log[f"slag_{oxide}_pct"] for oxide in ("CaO", "MgO", "FeO", "MnO", "P2O5")}
    with pytest.raises(InputError, match="6 heats have all that"):
        fit_pairs(TRUE_LAW, slag, log["end_temp_C"], log["end_P_pct"])
    ranking = rank_laws(log)
    assert ranking.best is None
    assert ranking.offered is None
    with pytest.raises(InputError, match="folds 2 to 20"):
        rank_laws(log, folds=1)


def test_command_ranks_by_a_log_and_plans_with_its_factors(tmp_path):
    """contract: the ranked order, and the plan with the fitted factor."""
    log = tmp_path / "log.csv"
    made_log(80, scatter=0.1).to_csv(log, index=False)
    heat = str(DEMO / "high_phosphorus.toml")
    arguments = ["phosphorus", heat, "--log", str(log), "--no-marginal", "--json", "-"]
    result = CliRunner().invoke(main, arguments)
    assert result.exit_code == 0, result.output
    found = json.loads(result.output)
    assert found["ranking"][0]["law"] == found["laws"][0]["law"] == TRUE_LAW
    assert found["laws"][0]["approach"] == found["ranking"][0]["approach"]
    assert found["laws"][0]["approach"] == pytest.approx(TRUE_APPROACH, rel=0.05)
    text = ranking_text(rank_laws(made_log(80, scatter=0.1)))
    assert f'phosphorus = "{TRUE_LAW}"' in text
    missing = CliRunner().invoke(main, ["phosphorus", heat, "--log", str(tmp_path / "no.csv")])
    assert missing.exit_code == 2
