"""Sweeps against single plans, and against sums worked here.

Kinds of check: "closure" = a point of a sweep is the plan of that heat alone, to 1e-9;
"worked" = a sum of masses worked here from the result document and the shop file;
"property" = the line read off does what it says when the heat is planned there;
"contract" = refusals.
"""

from __future__ import annotations

import tomllib
from typing import Any

import numpy as np
import pytest

from converter_calc.balance.heats import heats_from_dict, heats_from_frame
from converter_calc.basis.errors import ConverterError, DataError, InputError
from converter_calc.laws import magnesia, phosphorus
from converter_calc.planning.lime_sweeps import lime_curve, lime_lines, phosphorus_effects
from converter_calc.planning.plan import as_heats, plan, plan_heats
from converter_calc.planning.solving import with_masses, with_values
from converter_calc.planning.sweeps import map_columns, scrap_ratio_map, today_point, with_silicon

from .conftest import DEMO

TIGHT = {"rtol": 1e-9}
#: Atomic weights, IUPAC 2021 abridged (from memory): carbon 12.011, oxygen 15.999.
CO2_PER_C = (12.011 + 2 * 15.999) / 12.011


def demo(name: str) -> Any:
    return as_heats(DEMO / f"{name}.toml")


@pytest.fixture(scope="module")
def ordinary() -> Any:
    return demo("ordinary_low_carbon")


@pytest.fixture(scope="module")
def scrap_map(ordinary: Any) -> Any:
    return scrap_ratio_map(ordinary, [8.0, 20.0, 28.0], [1280.0, 1380.0], [0.3, 0.6])


def alone(heats: Any, row: Any) -> Any:
    """The heat of one point of the map, planned by itself."""
    one = with_silicon(heats, np.array([row.hm_Si_pct]))
    one = with_values(
        one, scrap_share_pct=row.scrap_share_pct, hot_metal_temp_C=row.hot_metal_temp_C
    )
    ((_, outcome),) = plan_heats(one)
    return outcome


def test_every_map_point_is_the_plan_of_that_heat(ordinary, scrap_map):
    """closure; both coolant and fuel points occur."""
    assert (scrap_map["coolant_kg"] > 0.0).any()
    assert (scrap_map["fuel_kg"] > 0.0).any()
    for row in scrap_map.itertuples():
        outcome = alone(ordinary, row)
        document = outcome.document()
        recipe, end = document["recipe"], document["end_point"]
        assert row.feasible == (document["status"] == "solved")
        assert row.binding == outcome.binding[0]
        for mine, theirs in (
            (row.oxygen_Nm3, recipe["oxygen_Nm3"]),
            (row.scrap_kg, recipe["scrap_total_kg"]),
            (row.coolant_kg, recipe["lump_ore_kg"]),
            (row.fuel_kg, recipe["ferrosilicon_75_kg"]),
            (row.lime_kg, recipe["burnt_lime_kg"]),
            (row.flux_kg, recipe["dolomitic_lime_kg"]),
            (row.slag_kg, end["slag_kg"]),
            (row.steel_kg, end["steel_kg"]),
            (row.end_P_pct, end["steel_pct"]["P"]),
        ):
            np.testing.assert_allclose(mine, theirs, atol=1e-6, **TIGHT)
        charge = recipe["hot_metal_kg"] + recipe["scrap_total_kg"]
        np.testing.assert_allclose(row.yield_pct, 100.0 * end["steel_kg"] / charge, **TIGHT)


def test_cost_and_CO2_are_sums_over_the_recipe(ordinary, scrap_map):
    """worked: prices and CO2 from the shop file, carbon from the element balance."""
    whole = tomllib.loads((DEMO / "shop.toml").read_text("utf-8"))
    shop, price = whole["materials"], whole["price"]
    row = next(scrap_map.itertuples())
    document = alone(ordinary, row).document()
    steel_t = document["end_point"]["steel_kg"] / 1000.0
    kg = {key[:-3]: x for key, x in document["recipe"].items() if key.endswith("_kg")}
    cost = sum(kg.get(name, 0.0) * row.get("price_per_t", 0.0) for name, row in shop.items()) / 1e3
    cost += kg["hot_metal"] / 1e3 * price["hot_metal_per_t"]
    cost += document["recipe"]["oxygen_Nm3"] * price["oxygen_per_Nm3"]
    making = sum(kg.get(name, 0.0) * row.get("CO2_kg_per_t", 0.0) for name, row in shop.items())
    np.testing.assert_allclose(row.cost_per_t, cost / steel_t, **TIGHT)
    np.testing.assert_allclose(row.CO2_materials_kg_per_t, making / 1e3 / steel_t, **TIGHT)
    left = sum(stream["species_kg"].get("C", 0.0)
               for stream in document["streams"] if stream["side"] == "out")  # fmt: skip
    burnt = document["balance"]["elements"]["C"]["in_kg"] - left
    np.testing.assert_allclose(row.CO2_gas_kg_per_t, burnt * CO2_PER_C / steel_t, rtol=1e-4)
    total = row.CO2_gas_kg_per_t + row.CO2_materials_kg_per_t
    np.testing.assert_allclose(row.CO2_kg_per_t, total, **TIGHT)


def test_columns_say_what_cost_and_CO2_count(ordinary, scrap_map):
    """contract: label and unit of every column; counted materials named."""
    columns = map_columns(ordinary)
    assert list(columns) == list(scrap_map.columns)
    assert "burnt lime, dolomitic lime" in columns["CO2_kg_per_t"].note
    assert "lump ore" not in columns["CO2_kg_per_t"].note
    assert "lump ore" in columns["cost_per_t"].note
    assert "hot metal, oxygen" in columns["cost_per_t"].note
    unpriced = {"price_hot_metal_per_t": np.nan, "price_oxygen_per_Nm3": np.nan}
    assert "hot metal" not in map_columns(with_values(ordinary, **unpriced))["cost_per_t"].note


def test_today_lies_on_the_map_where_no_coolant_is_needed(ordinary):
    """property: a heat whose scrap takes all heat needs neither coolant nor fuel there."""
    point = today_point(plan(ordinary))
    frame = scrap_ratio_map(ordinary, [point["scrap_share_pct"]], [point["hot_metal_temp_C"]])
    assert abs(frame["trim_kg"][0]) < 0.01
    assert frame["hm_Si_pct"][0] == point["hm_Si_pct"] == pytest.approx(ordinary.hm_pct["Si"][0])


def test_named_scrap_coolant_and_pinned_end_are_let_go(plain_heat):
    """property: the share holds for all scrap; the mix is that of the masses named."""
    plain_heat["charge"] = {"heavy_scrap_kg": 30000.0, "light_scrap_kg": 10000.0,
                            "lump_ore_kg": 500.0}  # fmt: skip
    plain_heat["pin"] = {"end_temp_C": 1655.0}
    heats = heats_from_dict(plain_heat)
    frame = scrap_ratio_map(heats, [10.0, 24.0], [1340.0])
    share = frame["scrap_kg"] / (frame["scrap_kg"] + frame["hot_metal_kg"])
    np.testing.assert_allclose(100.0 * share, [10.0, 24.0], **TIGHT)
    plain_heat["choice"]["scrap_mix"] = {"heavy_scrap": 0.75, "light_scrap": 0.25}
    plain_heat["charge"] = {"scrap_share_pct": 24.0}
    del plain_heat["pin"]
    outcome = plan(plain_heat)
    np.testing.assert_allclose(frame["oxygen_Nm3"][1], outcome.state.oxygen_Nm3[0], **TIGHT)
    trim = outcome.x["trim_kg"][0]
    np.testing.assert_allclose(frame["trim_kg"][1], trim, **TIGHT)


def test_cost_is_blank_where_nothing_has_a_price(plain_heat):
    """contract: no price is not a price of zero."""
    frame = scrap_ratio_map(heats_from_dict(plain_heat), [20.0], [1340.0])
    assert frame["cost_per_t"].isna().all()


@pytest.mark.parametrize(
    ("share", "temp", "silicon", "field"),
    [
        ([90.0], [1340.0], None, "scrap_share_pct"),
        ([10.0], [900.0], None, "hot_metal_temp_C"),
        ([10.0], [np.nan], None, "hot_metal_temp_C"),
        ([10.0], [1340.0], [-0.1], "hm_Si_pct"),
        ([], [1340.0], None, "scrap_share_pct"),
        (np.linspace(0, 40, 200), np.linspace(1250, 1400, 200), None, "sweep"),
    ],
)
def test_map_refuses_what_is_out_of_range(ordinary, share, temp, silicon, field):
    """contract"""
    with pytest.raises(InputError, match=field):
        scrap_ratio_map(ordinary, share, temp, silicon)


def test_map_refuses_a_table_of_heats(ordinary):
    """contract"""
    two = ordinary.take(np.array([0, 0]))
    with pytest.raises(InputError, match="one heat"):
        scrap_ratio_map(two, [10.0], [1340.0])


def test_lime_curve_is_the_plan_with_that_lime_and_law(ordinary):
    """closure; and every published law is there, the chosen one first."""
    lime = np.array([4000.0, 6500.0, 9000.0])
    curve = lime_curve(ordinary, lime)
    chosen = ordinary.choices.laws["phosphorus"]
    assert curve["law"].iloc[0] == chosen
    assert sorted(curve["law"].unique()) == sorted(phosphorus.laws())
    assert set(curve.loc[curve["chosen"], "law"]) == {chosen}
    np.testing.assert_allclose(curve["end_temp_C"], ordinary.values["aim_temp_C"][0], rtol=1e-12)
    for law in (chosen, "healy_1970_log", "spooner_2016"):
        part = curve[curve["law"] == law]
        for kg, row in zip(lime, part.itertuples(), strict=True):
            one = with_masses(ordinary, {"burnt_lime": kg})
            one.choices = type(one.choices)(
                **{**vars(one.choices), "laws": {**one.choices.laws, "phosphorus": law}}
            )
            outcome = plan(one)
            end = outcome.document()["end_point"]
            np.testing.assert_allclose(row.end_P_pct, end["steel_pct"]["P"], **TIGHT)
            np.testing.assert_allclose(row.basicity, end["basicity"], **TIGHT)
            np.testing.assert_allclose(row.slag_kg, end["slag_kg"], **TIGHT)


def test_lime_lines_do_what_they_say(ordinary):
    """property: plan the heat with the lime read off and look."""
    lines = lime_lines(ordinary, lime_curve(ordinary, np.linspace(2000.0, 12000.0, 25)))
    laws = list(lines.for_aim_kg)
    assert sorted(laws) == sorted(phosphorus.laws())
    marks = [lines.least_basicity_kg, lines.MgO_saturation_kg, lines.dissolution_stops_kg]
    assert all(np.isfinite(marks))
    at = lime_curve(ordinary, marks, [])
    np.testing.assert_allclose(at["basicity"].iloc[0], lines.aim_basicity, rtol=1e-6)
    np.testing.assert_allclose(
        at["slag_MgO_pct"].iloc[1], at["MgO_saturation_pct"].iloc[1], rtol=1e-5
    )
    beside = lines.dissolution_stops_kg + np.array([-1500.0, -1000.0, 1000.0, 1500.0])
    solid = lime_curve(ordinary, beside, [])["undissolved_lime_kg"]
    assert (solid[1] - solid[0]) / 500.0 < 0.05  # a little, since the corner is rounded
    assert (solid[3] - solid[2]) / 500.0 > 0.75  # most of it; the slag also grows
    known = {law: kg for law, kg in lines.for_aim_kg.items() if np.isfinite(kg)}
    assert lines.law in known
    assert laws[0] == lines.law
    for law, kg in known.items():
        part = lime_curve(ordinary, [kg], [law])
        end = part.loc[part["law"] == law, "end_P_pct"].iloc[0]
        # solved for the chosen law, read off a curve for the others
        rtol = 1e-6 if law == lines.law else 2e-3
        np.testing.assert_allclose(end, lines.aim_P_pct, rtol=rtol, err_msg=law)
        assert kg <= lines.dissolution_stops_kg * 1.01
    most = lime_curve(ordinary, [lines.dissolution_stops_kg])
    for law in set(laws) - set(known):
        assert most.loc[most["law"] == law, "end_P_pct"].iloc[0] > lines.aim_P_pct


def test_lime_lines_carry_back_to_the_plan(ordinary):
    """property: the lime for the aim, charged, ends at the aim by the planner itself."""
    lines = lime_lines(ordinary)
    outcome = plan(with_masses(ordinary, {lines.lime: lines.for_aim_kg[lines.law]}))
    np.testing.assert_allclose(outcome.steel_pct()["P"][0], lines.aim_P_pct, rtol=1e-6)


def test_no_aim_and_free_magnesia_have_no_line(plain_heat):
    """contract: NaN, not a number made up."""
    del plain_heat["aim"]["P_pct"]
    lines = lime_lines(heats_from_dict(plain_heat))
    assert np.isnan(lines.for_aim_kg[lines.law])
    assert np.isnan(lines.MgO_saturation_kg)  # the flux follows saturation by itself
    assert np.isfinite(lines.least_basicity_kg)


def test_magnesia_line_agrees_with_the_saturation_law(ordinary):
    """property: just under the line the slag attacks, just above it does not."""
    kg = lime_lines(ordinary).MgO_saturation_kg
    for change, attacks in ((-50.0, True), (50.0, False)):
        state = plan(with_masses(ordinary, {"burnt_lime": kg + change})).state
        saturation = magnesia.saturation_pct(state.liquid_basicity, state.T_K)
        assert bool(state.slag_pct["MgO"][0] < saturation[0]) is attacks


@pytest.mark.parametrize(
    ("lime", "laws", "error"),
    [([-1.0], None, InputError), ([np.nan], None, InputError), ([], None, InputError),
     (np.zeros(3000), None, InputError), ([5000.0], ["no_such_law"], DataError)],
)  # fmt: skip
def test_lime_curve_refuses(ordinary, lime, laws, error):
    """contract"""
    with pytest.raises(error):
        lime_curve(ordinary, lime, laws)


def test_effects_hold_basicity_and_are_plans(ordinary):
    """closure and property: lower temperature and more slag hold more phosphorus.

    Direction of both: Healy, JISI 208 (1970) 664 (from memory): log L_P rises with 1/T; more
    slag at equal L_P by mass balance.
    """
    tables = phosphorus_effects(ordinary)
    today = plan(ordinary)
    B = float(today.state.basicity[0])
    for table in tables.values():
        np.testing.assert_allclose(table["basicity"], B, rtol=1e-6)
        assert (np.abs(table["end_P_pct"] / today.steel_pct()["P"][0] - 1.0) < 1e-6).any()
    assert (np.diff(tables["tap_temperature"]["end_P_pct"]) > 0.0).all()
    assert (np.diff(tables["slag_weight"]["end_P_pct"]) < 0.0).all()
    assert (np.diff(tables["slag_weight"]["slag_kg_per_t"]) > 0.0).all()
    assert (np.diff(tables["iron_oxide"]["slag_T_Fe_pct"]) > 0.0).all()
    row = tables["tap_temperature"].iloc[1]
    one = with_values(ordinary, aim_temp_C=row.end_temp_C, aim_basicity=B, aim_P_pct=np.nan)
    np.testing.assert_allclose(plan(one).steel_pct()["P"][0], row.end_P_pct, **TIGHT)


def test_sweeps_of_every_demo_heat_run(demo_path):
    """property: no demo heat breaks a sweep, and what is found is finite where it is feasible."""
    heats = as_heats(demo_path)
    try:
        frame = scrap_ratio_map(heats, [10.0, 20.0], [1300.0, 1380.0])
    except ConverterError as error:
        pytest.fail(str(error))
    made = frame[frame["feasible"]]
    assert np.isfinite(made.select_dtypes("number").drop(columns="cost_per_t")).all(axis=None)
    assert np.isfinite(lime_lines(heats).dissolution_stops_kg)


@pytest.fixture(params=sorted(p.name for p in DEMO.glob("*.toml") if p.name != "shop.toml"))
def demo_path(request):
    return DEMO / request.param


def test_frame_row_can_be_swept(ordinary):
    """contract: one row of a table of heats is as good as a file."""
    import pandas as pd

    frame = pd.DataFrame({"hot_metal_kg": [1.8e5], "hot_metal_temp_C": [1340.0],
                          "hm_C_pct": [4.5], "hm_Si_pct": [0.4], "aim_C_pct": [0.04]})  # fmt: skip
    heats = heats_from_frame(frame, shop=DEMO / "shop.toml")
    assert scrap_ratio_map(heats, [18.0], [1340.0])["feasible"].all()
