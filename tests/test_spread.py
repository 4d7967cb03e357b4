"""Spread of a heat. Kinds of check: closed forms (delta method on tiny errors, normal theory),
brute force (pseudo-random draws of numpy through the table of predictions), references (scipy:
sobol_indices), common practice (no source) for the size of it all. Heats are invented.
"""

from __future__ import annotations

import os
from functools import cache
from typing import Any

import numpy as np
import pytest
import scipy.stats

import converter_calc
from converter_calc.basis.errors import DataError, InputError
from converter_calc.learning.errors_of_inputs import error_model, known_correlations, known_errors
from converter_calc.learning.spread import PREDICT, Spread, charge_of, planned_heat, spread
from converter_calc.learning.spread_draws import draw, end_points, normal_draws, plan_draws
from converter_calc.learning.spread_numbers import chance
from converter_calc.learning.spread_truth import true_heats
from converter_calc.planning.plan import predict_heats
from converter_calc.planning.sensitivities import derivatives
from converter_calc.planning.solving import with_values
from converter_calc.planning.sweeps import repeated
from tests.demo import ordinary, unlimited

NONE = dict.fromkeys(known_errors(), 0.0)
UNCORRELATED = [["hm_C_pct", "hm_Si_pct", 0.0], ["hm_Si_pct", "hm_Mn_pct", 0.0]]
MAIN = ("end_temp_C", "end_C_pct", "end_P_pct")


@cache
def found() -> Spread:
    return spread(ordinary())


def only(**sizes: float) -> dict[str, float]:
    """[errors] with nothing but these."""
    return NONE | sizes


def gradient(sp: Spread) -> dict[str, Any]:
    """Derivative of each result by the inputs that the terms act on, from the residuals."""
    heats = sp.charge
    names = list(dict.fromkeys(term.target for term in sp.model.terms))
    missing = {k: 1.0 for k in names if k.endswith("_yield_factor") and k not in heats.values}
    heats = with_values(heats, **missing)
    x = predict_heats(heats)[0][1].x
    return derivatives(heats, PREDICT, x, names)


def delta_sd(sp: Spread) -> dict[str, float]:
    """Standard deviation of each result to first order: sqrt(g' S g)."""
    table = gradient(sp)
    correlation = sp.model.root @ sp.model.root.T
    sizes = {}
    for result in MAIN:
        g = []
        for term in sp.model.terms:
            value = {"absolute": 1.0}.get(term.kind)
            if value is None:
                name = term.target
                kg = sp.charge.masses_kg.get(name.removesuffix("_kg"))
                have = (
                    float(kg[0]) if kg is not None else float(sp.charge.values.get(name, [1.0])[0])
                )
                value = have if term.kind == "factor" else 0.01 * have
            g.append(float(table[result][term.target][0]) * value * float(np.ravel(term.sd)[0]))
        sizes[result] = float(np.sqrt(np.array(g) @ correlation @ np.array(g)))
    return sizes


def test_tiny_errors_agree_with_the_delta_method() -> None:
    """First-order theory is exact in the limit; 1e-3 of the usual errors is near enough."""
    tiny = {name: error.sd * 1e-3 for name, (error, _) in known_errors().items()}
    sp = spread(ordinary(errors=tiny), needs=False, shares=False)
    expected = delta_sd(sp)
    for name in MAIN:
        d = sp.results[name]
        assert d.sd == pytest.approx(expected[name], rel=3e-3), name
        assert abs(d.mean - d.as_read) < 5e-3 * d.sd, name
        assert d.quantiles[0.95] - d.quantiles[0.5] == pytest.approx(1.6449 * d.sd, rel=0.02)


def test_usual_errors_stay_near_the_delta_method_for_the_temperature() -> None:
    assert found().results["end_temp_C"].sd == pytest.approx(
        delta_sd(found())["end_temp_C"], rel=0.02
    )


def test_a_heat_state_of_so_many_kelvin_moves_the_end_by_as_many() -> None:
    d = spread(ordinary(errors=only(vessel_heat_C=5.0)), needs=False, shares=False)
    assert d.results["end_temp_C"].sd == pytest.approx(5.0, rel=5e-3)


def brute(n: int, seed: int) -> Any:
    """Truths drawn by numpy, laid on here by hand, through the table of predictions."""
    import pandas as pd

    sp, dice = found(), np.random.default_rng(seed)
    sd = {name: error.sd for name, (error, _) in known_errors().items()}
    z = {name: dice.standard_normal(n) for name in sd}
    charge, read = sp.charge, {k: float(v[0]) for k, v in sp.charge.values.items()}
    # C, Si and Mn of one sample: conditional normals for correlations -0.3 and 0.3
    pairs = known_correlations()
    a = pairs[frozenset(("hm_C_pct", "hm_Si_pct"))]
    b = pairs[frozenset(("hm_Si_pct", "hm_Mn_pct"))]
    Si = z["hm_Si_pct"]
    part = {"Si": Si, "C": a * Si + np.sqrt(1 - a * a) * z["hm_C_pct"]}
    # Mn has b with Si and nothing with C: solve for its coefficients on Si and on the rest of C
    rest = -a * b / np.sqrt(1 - a * a)
    part["Mn"] = b * Si + rest * z["hm_C_pct"] + np.sqrt(1 - b * b - rest * rest) * z["hm_Mn_pct"]
    part |= {el: z[f"hm_{el}_pct"] for el in ("P", "S")}
    frame = {
        f"hm_{el}_pct": np.full(n, float(pct[0])) + sd.get(f"hm_{el}_pct", 0.0) * part.get(el, 0.0)
        for el, pct in charge.hm_pct.items()
        if el != "Fe"
    }
    frame["hot_metal_temp_C"] = (
        read["hot_metal_temp_C"] - sd["hot_metal_temp_C"] * z["hot_metal_temp_C"]
    )
    for name, meter in (
        ("hot_metal_kg", "hot_metal_weight_pct"),
        ("oxygen_Nm3", "oxygen_meter_pct"),
    ):
        frame[name] = read[name] / (1.0 + 0.01 * sd[meter] * z[meter])
    per_K = gradient(sp)["end_temp_C"]["heat_loss_MJ_per_t"][0]
    frame["heat_loss_MJ_per_t"] = read["heat_loss_MJ_per_t"] + 5.0 / per_K * z["vessel_heat_C"]
    for name, law in (("iron_oxide_factor", "iron_oxide_pct"), ("P_approach", "P_law_pct"),
                      ("Mn_approach", "Mn_law_pct"), ("S_approach", "S_law_pct"),
                      ("carryover_slag_pct", "carryover_slag_pct")):  # fmt: skip
        frame[name] = read[name] * (1.0 + 0.01 * sd[law]) ** z[law]
    common = dice.standard_normal(n)
    for name, kg in charge.masses_kg.items():
        own = dice.standard_normal(n)
        if charge.materials[name].kind == "scrap":
            gain = 1.0 + 0.01 * sd["scrap_yield_pct"] * np.sqrt(0.5) * (common + own)
            error = 1.0 + 0.01 * sd["scrap_weight_pct"] * z["scrap_weight_pct"]
            frame[f"{name}_kg"] = float(kg[0]) * gain / error
        else:
            frame[f"{name}_kg"] = float(kg[0]) * (1.0 + 0.01 * sd["flux_weight_pct"] * own)
    shop = {k: v for k, v in ordinary().items() if k not in ("hot_metal", "aim", "why")}
    return converter_calc.predict(pd.DataFrame(frame), shop=shop)


def test_chances_agree_with_brute_force() -> None:
    """20,000 independent draws: four of their standard errors, and ours."""
    n = 20000
    table, sp = brute(n, 7), found()
    hits = np.ones(n, dtype=bool)
    for c in sp.chances:
        assert c.window is not None
        mine = c.window.holds(table[c.name].to_numpy())
        hits &= mine
        error = np.sqrt(c.probability * (1 - c.probability) / n)
        assert abs(mine.mean() - c.probability) < 4.0 * error + (c.high - c.low) / 2, c.name
    error = np.sqrt(0.25 / n)
    assert abs(hits.mean() - sp.all_windows.probability) < 4.0 * error + 0.005
    for name in MAIN:
        d = sp.results[name]
        assert table[name].mean() == pytest.approx(d.mean, abs=4.0 * d.sd / np.sqrt(n))
        assert table[name].std() == pytest.approx(d.sd, rel=0.02)  # 4 / sqrt(2 n), skewness


def test_shares_agree_with_the_estimator_of_scipy() -> None:
    """scipy.stats.sobol_indices (Saltelli's design) on the same heat with five errors that are
    independent. P bends where lime stops dissolving: 2 % of its variance is left to no
    polynomial, and each error has a part in that."""
    names = ("oxygen_meter_pct", "hm_C_pct", "hm_Si_pct", "iron_oxide_pct", "P_law_pct")
    sizes = {name: known_errors()[name][0].sd for name in names}
    sp = spread(ordinary(errors=only(**sizes) | {"correlations": UNCORRELATED}), needs=False)
    x = predict_heats(sp.charge)[0][1].x
    assert sp.model.size == len(names)

    def model(z: Any) -> Any:
        values = draw(sp.charge, PREDICT, x, sp.model, np.asarray(z), end_points).values
        return np.stack([values[name] for name in MAIN])

    normal = [scipy.stats.norm()] * sp.model.size
    peer = scipy.stats.sobol_indices(func=model, n=8192, dists=normal, rng=np.random.default_rng(3))
    mine = {tuple(share.errors): share for share in sp.shares}
    for (place,) in sp.model.groups:
        share = mine[sp.model.names_of((place,))]
        for k, name in enumerate(MAIN):
            total, first = float(peer.total_order[k, place]), float(peer.first_order[k, place])
            near = 0.02 if name == "end_P_pct" else 0.01
            assert share.total[name] == pytest.approx(total, abs=near), (share.label, name)
            assert share.first[name] == pytest.approx(first, abs=2 * near), (share.label, name)
    assert sp.explained["end_temp_C"] > 0.999
    assert sp.explained["end_P_pct"] > 0.97


def test_shares_of_the_first_order_add_up() -> None:
    for name in MAIN:
        assert sum(share.first[name] for share in found().shares) <= 1.0 + 1e-9
        assert sum(share.total[name] for share in found().shares) >= 1.0 - 1e-9
        for share in found().shares:
            assert share.total[name] >= share.first[name] - 1e-12


@pytest.mark.parametrize("name", ["oxygen_meter_pct", "hm_C_pct", "P_law_pct"])
def test_what_a_measurement_is_worth_is_what_a_run_without_the_error_says(name: str) -> None:
    """The gain by polynomials against heats predicted anew with the error switched off."""
    worth = next(w for w in found().worth if w.error == name)
    for factor, (gain, half) in ((0.5, worth.halved), (0.0, worth.removed)):
        again = spread(ordinary(errors={name: worth.sd * factor}), needs=False, shares=False)
        change = again.all_windows.probability - found().all_windows.probability
        assert gain == pytest.approx(change, abs=half + 0.008)


def test_draws_are_predictions() -> None:
    """Any draw, put through `predict` on its own, ends where the spread says."""
    sp = found()
    rows = np.array([0, 777, 12345, sp.draws.solved.size - 1])
    heats, _ = true_heats(repeated(sp.charge, rows.size), sp.model, sp.draws.z[:, rows])
    outcome = predict_heats(heats)[0][1]
    np.testing.assert_allclose(
        outcome.state.T_K - 273.15, sp.draws.values["end_temp_C"][rows], rtol=1e-10
    )
    np.testing.assert_allclose(
        outcome.steel_pct()["P"], sp.draws.values["end_P_pct"][rows], rtol=1e-8
    )


def test_the_charge_just_planned_ends_where_the_plan_does() -> None:
    """Solved anew by `predict`: the same end point, to rounding."""
    charge, x = charge_of(found().planned)
    again = predict_heats(charge)[0][1].x
    for name in PREDICT.unknowns:
        np.testing.assert_allclose(x[name], again[name], rtol=1e-10, err_msg=name)


def test_same_seed_same_numbers_whatever_the_processes(monkeypatch: pytest.MonkeyPatch) -> None:
    other = spread(ordinary(), seed=2)
    assert other.all_windows.probability != found().all_windows.probability
    monkeypatch.setattr(os, "cpu_count", lambda: 1)
    alone = spread(ordinary())
    for name, values in found().draws.values.items():
        np.testing.assert_allclose(alone.draws.values[name], values, rtol=1e-9, err_msg=name)
    assert alone.needs["scrap_kg"].mean == pytest.approx(found().needs["scrap_kg"].mean, rel=1e-9)


def test_intervals_cover_a_closed_form() -> None:
    """P(w z < 1) = Phi(1 / |w|): of 95 % intervals of 100 seeds 87 to 100 (binomial, 1e-3)."""
    w = np.array([1.0, 0.8, 0.6, 0.4, 0.3, 0.3, 0.2, 0.2, 0.1, 0.1])
    true = scipy.stats.norm.cdf(1.0 / np.sqrt(w @ w))
    inside = 0
    for seed in range(100):
        plan = plan_draws(1024, seed)
        hits = w @ normal_draws(plan, w.size, 0, plan.replicates) < 1.0
        c = chance("", "", hits, plan.replicates)
        inside += c.low <= true <= c.high
    assert 87 <= inside <= 100


def test_needed_charge_is_what_plans_of_the_truth_ask_for() -> None:
    """The plan of a drawn truth, made by `plan` alone, against the draws of the need."""
    sp = found()
    plan = plan_draws(2048, sp.seed)
    z = normal_draws(plan, sp.model.size, 0, plan.replicates)[:, :400]
    heats, _ = true_heats(repeated(sp.planned.heats, 400), sp.model, z)
    from converter_calc.planning.solving import solve_heats

    outcome = solve_heats(heats, sp.planned.ask)
    d = sp.needs["scrap_kg"]
    assert np.mean(outcome.kind_kg("scrap")) == pytest.approx(d.mean, abs=4 * d.sd / 20.0)
    assert np.std(outcome.kind_kg("scrap")) == pytest.approx(d.sd, rel=0.15)
    assert d.as_read == pytest.approx(47727, abs=1)


def test_together_as_large_as_common_practice_has_it() -> None:
    """Together 12 to 20 K, about 0.015 % C, and a static charge that hits C and T together in 40
    to 60 % of heats: common practice, no source."""
    sp = found()
    assert 12.0 <= sp.results["end_temp_C"].sd <= 20.0
    assert 0.010 <= sp.results["end_C_pct"].sd <= 0.020
    values = sp.draws.values
    both = sp.windows[0].holds(values["end_temp_C"]) & sp.windows[1].holds(values["end_C_pct"])
    assert 0.40 <= both.mean() <= 0.60


def test_what_is_learnt_but_unsure_adds_its_variance() -> None:
    heat = ordinary(errors=only(vessel_heat_C=5.0))
    slope = gradient(found())["end_temp_C"]["heat_loss_MJ_per_t"][0]
    names, covariance = ["heat_loss_MJ_per_t", "P_approach"], [[4.0, 0.02], [0.02, 1e-3]]
    d = spread(heat, extra=(names, covariance), needs=False).results
    wider = np.sqrt(5.0**2 + 4.0 * slope**2)
    assert d["end_temp_C"].sd == pytest.approx(wider, rel=0.01)
    singular = [[4.0, 4.0], [4.0, 4.0]]
    d = spread(heat, extra=(["heat_loss_MJ_per_t", "heat_loss_MJ_per_t"], singular), needs=False)
    assert d.results["end_temp_C"].sd == pytest.approx(np.sqrt(25 + 16 * slope**2), rel=0.01)


@pytest.mark.parametrize(
    ("names", "covariance", "text"),
    [
        (["heat_loss"], [[1.0]], "no input"),
        (["P_approach"], [[-1.0]], "semidefinite"),
        (["P_approach"], [[1.0, 0.0]], "1 x 1"),
    ],
)
def test_wrong_extra_is_told(names: list[str], covariance: Any, text: str) -> None:
    with pytest.raises(InputError, match=text):
        spread(ordinary(), 512, extra=(names, covariance))


def test_errors_of_a_heat_go_before_those_of_the_shop() -> None:
    sp = spread(ordinary(errors={"hot_metal_temp_C": 15.0}), 512, needs=False, shares=False)
    thermometer = next(e for e in sp.model.errors if e.name == "hot_metal_temp_C")
    assert thermometer.given
    assert thermometer.sd == 15.0
    assert not next(e for e in sp.model.errors if e.name == "hm_C_pct").given


@pytest.mark.parametrize(
    ("errors", "line"),
    [
        (
            {"hot_metal_tmp_C": 3.0},
            "errors.hot_metal_tmp_C: unknown error; nearest: hot_metal_temp",
        ),
        ({"hm_C_pct": -0.1}, "errors.hm_C_pct: must not be negative (0 to 0.5 mass %), given -0.1"),
        ({"hm_C_pct": "much"}, "errors.hm_C_pct: must be a number, given 'much'"),
        (
            {"correlations": [["hm_C_pct", "hm_Si_pct"]]},
            'errors.correlations: must be a list of ["e',
        ),
        (
            {"correlations": [["hm_C_pct", "Si", 0.1]]},
            "errors.correlations: 'Si' is no error known",
        ),
        (
            {"correlations": [["hm_C_pct", "hm_C_pct", 0.1]]},
            "errors.correlations: names 'hm_C_pct'",
        ),
        (
            {"correlations": [["hm_C_pct", "hm_Si_pct", 1.5]]},
            "errors.correlations: must be -0.99 to",
        ),
    ],
)
def test_wrong_errors_are_told(errors: dict[str, Any], line: str) -> None:
    with pytest.raises(InputError) as caught:
        spread(ordinary(errors=errors), 512)
    assert str(caught.value).startswith(line)


def test_correlations_that_contradict_each_other_are_told() -> None:
    three = [["hm_C_pct", "hm_Si_pct", 0.9], ["hm_Si_pct", "hm_Mn_pct", 0.9],
             ["hm_C_pct", "hm_Mn_pct", -0.9]]  # fmt: skip
    with pytest.raises(DataError, match="not positive definite"):
        spread(ordinary(errors={"correlations": three}), 512)


@pytest.mark.parametrize("draws", [0, 255, 1_000_001])
def test_number_of_draws_is_bounded(draws: int) -> None:
    with pytest.raises(InputError, match="draws: must be 256 to 1000000"):
        spread(ordinary(), draws)


def test_draws_have_the_correlations_asked_for() -> None:
    sp, z = found(), found().draws.z
    e = sp.model.root @ z
    np.testing.assert_allclose(np.corrcoef(e), sp.model.root @ sp.model.root.T, atol=0.01)
    assert sp.draws.solved.all()
    np.testing.assert_allclose(e.std(axis=1), 1.0, rtol=0.01)


def test_small_contents_never_go_below_zero_unsaid() -> None:
    sp = spread(ordinary(errors={"hm_S_pct": 0.01}), 512, needs=False, shares=False)
    assert sp.below_zero > 0
    assert (sp.draws.values["end_S_pct"] >= 0.0).all()


def test_a_pinned_end_temperature_is_the_aim_and_its_heat_loss_stays() -> None:
    heat = ordinary(pin={"end_temp_C": 1660.0}, charge={"scrap_kg": 46000.0})
    heat["aim"].pop("temp_C")
    planned = planned_heat(heat, charged=False)
    charge, _ = charge_of(planned)
    loss = float(np.ravel(planned.state.heat_loss_J)[0]) * 1e-6
    assert charge.values["pin_heat_loss_MJ"][0] == pytest.approx(loss)
    sp = spread(heat, 2048, needs=False, shares=False)
    assert sp.results["end_temp_C"].as_read == pytest.approx(1660.0, abs=1e-6)
    assert sp.windows[0].aim == 1660.0
    assert 10.0 < sp.results["end_temp_C"].sd < 20.0


def test_a_charge_that_is_given_is_predicted() -> None:
    heats = found().charge
    sp = spread(heats, 2048, charged=True, shares=False)
    assert not sp.needs
    assert sp.results["end_temp_C"].as_read == pytest.approx(1665.0, abs=1e-6)


@pytest.mark.parametrize("name", ["scrap_by_preference", "scrap_short_needs_ore", "cold_hot_metal"])
def test_other_questions_have_a_spread(name: str) -> None:
    sp = spread(unlimited(name), 2048)
    assert sp.unsolved == 0
    assert set(sp.needs) >= {"oxygen_Nm3", "lime_kg", "flux_kg"}
    for d in sp.needs.values():
        assert d.quantiles[0.05] <= d.as_read <= d.quantiles[0.95], d.name


#: One standard deviation: common practice, no source.
PRACTICE = {
    "hot_metal_weight_pct": (0.3, 1.0), "hot_metal_temp_C": (5.0, 15.0), "hm_Si_pct": (0.02, 0.04),
    "hm_C_pct": (0.05, 0.1), "scrap_weight_pct": (1.0, 2.0), "scrap_yield_pct": (1.0, 3.0),
    "oxygen_meter_pct": (1.0, 2.0), "vessel_heat_C": (2.0, 8.0),
}  # fmt: skip


@pytest.mark.parametrize("name", known_errors())
def test_rows_of_the_table_of_errors(name: str) -> None:
    error, bounds = known_errors()[name]
    low, high = PRACTICE.get(name, (bounds.low, bounds.high))
    assert low <= error.sd <= high
    assert error.source
    assert error.kind in ("absolute", "relative", "factor")


def test_the_usual_correlations_can_all_be_had() -> None:
    names = list(known_errors())
    table = np.eye(len(names))
    for pair, size in known_correlations().items():
        i, j = (names.index(name) for name in pair)
        table[i, j] = table[j, i] = size
    assert np.linalg.eigvalsh(table).min() > 0.1
    sp = found()
    again = error_model(sp.charge, PREDICT, predict_heats(sp.charge)[0][1].x)
    assert again.size == sp.model.size
