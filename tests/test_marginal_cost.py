"""Marginal cost of phosphorus: implicit derivatives against plans made anew.

Kinds of check: "derivative" = central difference of two plans; "worked" = sums made here;
"property" = what must hold of any heat; "contract" = refusals.
"""

from __future__ import annotations

import tomllib
from typing import Any

import numpy as np
import pytest

from converter_calc.balance.heats import heats_from_dict
from converter_calc.basis.errors import InputError
from converter_calc.metallurgy.marginal_cost import QUANTITIES, marginal_cost, marginal_table
from converter_calc.planning.plan import as_heats, plan
from converter_calc.planning.solving import with_values

from .conftest import DEMO
from .demo import whole


@pytest.fixture(scope="module")
def rich() -> Any:
    return as_heats(DEMO / "high_phosphorus.toml")


def quantities(outcome: Any) -> dict[str, float]:
    """What the marginal cost speaks of, read off the result document of one plan."""
    document = outcome.document()
    recipe, end = document["recipe"], document["end_point"]
    slag = end["slag_pct"]
    iron = slag["FeO"] * 55.845 / 71.844 + slag["Fe2O3"] * 2 * 55.845 / 159.687
    streams = {stream["name"]: stream["mass_kg"] for stream in document["streams"]}
    return {
        "lime_kg": recipe["burnt_lime_kg"],
        "flux_kg": recipe["dolomitic_lime_kg"],
        "slag_kg": end["slag_kg"],
        "iron_to_slag_kg": end["slag_kg"] * iron / 100.0,
        "droplets_kg": streams["iron_droplets"],
        "scrap_kg": recipe["scrap_total_kg"],
        "coolant_kg": float(outcome.x["trim_kg"][0]) if "trim_kg" in outcome.x else 0.0,
        "oxygen_Nm3": recipe["oxygen_Nm3"],
        "steel_kg": end["steel_kg"],
        "cost_per_t": float(np.ravel(outcome.cost())[0]),
        "materials_cost": float(np.ravel(outcome.cost())[0]) * end["steel_kg"] / 1e3,
    }


def differences(heats: Any, aim: float, step: float = 2e-6) -> dict[str, float]:
    high, low = (quantities(plan(with_values(heats, aim_P_pct=aim + x))) for x in (step, -step))
    return {key: (low[key] - high[key]) / (2.0 * step) for key in high}


def test_against_plans_made_anew(rich):
    """derivative: plans with the aim 2e-6 % up and down; the cost per heat is worked from them."""
    found, by_plans = marginal_cost(rich), differences(rich, 0.010)
    assert found.binding
    assert set(by_plans) == set(QUANTITIES)
    for key, slope in by_plans.items():
        assert found.change[key] == pytest.approx(slope * 0.001, rel=2e-5, abs=1e-7), key
    today = quantities(plan(rich))
    tonne = today["cost_per_t"]
    worked = by_plans["materials_cost"] - tonne * by_plans["steel_kg"] / 1e3
    assert found.cost == pytest.approx(worked * 0.001, rel=1e-4)


def test_with_scrap_given_the_coolant_answers():
    """derivative: less coolant where the scrap is given (invented share)."""
    document = whole("high_phosphorus")
    document["charge"] = {"scrap_share_pct": 18.0}
    heats = heats_from_dict(document)
    found, by_plans = marginal_cost(heats), differences(heats, 0.010)
    assert found.change["coolant_kg"] < 0.0
    assert found.change["coolant_kg"] == pytest.approx(by_plans["coolant_kg"] * 0.001, rel=2e-5)
    assert found.change["lime_kg"] == pytest.approx(by_plans["lime_kg"] * 0.001, rel=2e-5)


def test_nothing_where_the_basicity_sets_the_lime():
    """property: the aim of the ordinary heat does not bind."""
    found = marginal_cost(as_heats(DEMO / "ordinary_low_carbon.toml"))
    assert not found.binding
    assert found.end_P_pct < found.aim_P_pct
    assert max(abs(x) for x in [*found.change.values(), found.cost]) < 1e-6  # kg


def test_the_table_adds_up_to_the_difference_of_plans(rich):
    """worked: Simpson over the marginal lime between two aims is the lime between their plans."""
    aims = np.linspace(0.008, 0.013, 21)
    table = marginal_table(rich, aims)
    weights = np.array([1, *[4, 2] * 9, 4, 1]) * (aims[1] - aims[0]) / 3.0
    for column in ("lime_kg", "slag_kg", "scrap_kg", "cost_per_t"):
        whole_change = float(weights @ table["d_" + column]) / 0.001
        between = table[column].iloc[0] - table[column].iloc[-1]
        assert whole_change == pytest.approx(between, rel=1e-4), column
    assert (np.diff(table["d_lime_kg"]) < 0.0).all()  # the lower the aim, the dearer
    assert table["aim_binds"].all()


def test_default_table_reaches_from_no_cost_to_no_plan(rich):
    """property: NaN where no lime reaches the aim, 0 where the least basicity is enough."""
    table = marginal_table(rich)
    assert table["status"].iloc[0] == "infeasible"
    assert table["d_lime_kg"].iloc[0] != table["d_lime_kg"].iloc[0]
    assert table["binding"].iloc[0].startswith("phosphorus (aim.P_pct)")
    assert not table["aim_binds"].iloc[-1]
    assert abs(table["d_lime_kg"].iloc[-1]) < 1e-6  # kg; what the smooth corner leaves


def test_step_scales(rich):
    """property: a derivative times the step."""
    one, half = marginal_cost(rich), marginal_cost(rich, 0.0005)
    for key, x in one.change.items():
        assert half.change[key] == pytest.approx(0.5 * x, rel=1e-12)


def test_cost_without_prices(plain_heat):
    """contract: no price, no cost, and what has none is named."""
    plain_heat["aim"]["P_pct"] = 0.007
    found = marginal_cost(heats_from_dict(plain_heat))
    assert np.isnan(found.cost)
    assert {"hot_metal", "oxygen", "burnt_lime", "heavy_scrap"} <= set(found.unpriced)
    assert found.change["lime_kg"] > 0.0
    assert next(term.label for term in found.terms()) == "lime"


def test_refusals(rich, plain_heat):
    """contract"""
    with pytest.raises(InputError, match="one heat"):
        marginal_cost(rich.take(np.array([0, 0])))
    with pytest.raises(InputError, match="step_pct"):
        marginal_cost(rich, 0.0)
    with pytest.raises(InputError, match=r"aim\.P_pct"):
        marginal_table(rich, [0.9])
    with pytest.raises(InputError, match="this aim has no plan"):
        marginal_cost(with_values(rich, aim_P_pct=0.004))
    del plain_heat["aim"]["P_pct"]
    with pytest.raises(InputError, match="needs an aim"):
        marginal_cost(heats_from_dict(plain_heat))


def test_demo_prices_are_all_there():
    """contract: the demo shop prices all that the marginal cost counts."""
    shop = tomllib.loads((DEMO / "shop.toml").read_text("utf-8"))
    assert marginal_cost(as_heats(DEMO / "ordinary_low_carbon.toml")).unpriced == ()
    assert shop["price"]["hot_metal_per_t"] > 0
