"""The demo heats show what their `why` says. Kind of check: contract (each demo answers with a
solved plan), common practice (no source) for the ordinary heat."""

import math
from pathlib import Path

import pytest

from converter_calc.balance.heats import read_heat_file

FOLDER = Path(__file__).parents[1] / "demo_heats"
HEATS = [path for path in sorted(FOLDER.glob("*.toml")) if path.name != "shop.toml"]


@pytest.fixture(scope="module")
def planned():
    from converter_calc.planning.plan import plan

    found = {}

    def get(name):
        if name not in found:
            found[name] = plan(FOLDER / f"{name}.toml").document()
        return found[name]

    return get


def test_at_least_six_demo_heats():
    assert len(HEATS) >= 6


@pytest.mark.parametrize("path", HEATS, ids=lambda path: path.stem)
def test_demo_heat_is_read_and_says_why(path):
    table = read_heat_file(path)
    assert len(table.why) > 30
    assert table.warnings == []
    assert math.isfinite(table.values["aim_C_pct"][0])


@pytest.mark.parametrize("path", HEATS, ids=lambda path: path.stem)
def test_demo_heat_reaches_its_aim(planned, path):
    table, end = read_heat_file(path), planned(path.stem)["end_point"]
    assert end["temperature_C"] == pytest.approx(table.values["aim_temp_C"][0], abs=1e-6)
    assert end["steel_pct"]["C"] == pytest.approx(table.values["aim_C_pct"][0], rel=1e-6)
    assert end["steel_pct"]["P"] <= table.values["aim_P_pct"][0] * (1.0 + 1e-6)


#: Consumption per tonne of steel, ranges of the EU reference document on iron and steel (2013),
#: from memory; metallic yield left out, it is no printed consumption.
PER_TONNE = {
    "oxygen_Nm3": (45.0, 60.0),
    "burnt_lime_kg": (30.0, 67.0),
    "hot_metal_kg": (788.0, 931.0),
    "scrap_total_kg": (101.0, 340.0),
}


@pytest.mark.parametrize("name", PER_TONNE)
def test_ordinary_heat_takes_what_ordinary_heats_take(planned, name):
    low, high = PER_TONNE[name]
    heat = planned("ordinary_low_carbon")
    assert low <= 1000.0 * heat["recipe"][name] / heat["end_point"]["steel_kg"] <= high


def test_ordinary_heat_makes_the_slag_of_ordinary_heats(planned):
    """60 to 165 kg/t, same source; tapped about 210 t, as the shop file says."""
    end = planned("ordinary_low_carbon")["end_point"]
    assert 60.0 <= 1000.0 * end["slag_kg"] / end["steel_kg"] <= 165.0
    assert end["steel_kg"] == pytest.approx(210e3, rel=0.05)


def test_high_silicon_makes_more_slag_and_melts_more_scrap(planned):
    rich, usual = planned("high_silicon"), planned("ordinary_low_carbon")
    for of in (
        lambda heat: heat["end_point"]["slag_kg"],
        lambda heat: heat["recipe"]["scrap_total_kg"],
    ):
        share = [of(heat) / heat["end_point"]["steel_kg"] for heat in (rich, usual)]
        assert share[0] > share[1]
    assert rich["end_point"]["steel_kg"] == pytest.approx(205000.0, rel=1e-9)


def test_cold_hot_metal_takes_fuel_and_no_coolant(planned):
    recipe = planned("cold_hot_metal")["recipe"]
    assert recipe["ferrosilicon_75_kg"] > 100.0
    assert recipe.get("lump_ore_kg", 0.0) == 0.0


def test_short_scrap_takes_ore_and_no_fuel(planned):
    recipe = planned("scrap_short_needs_ore")["recipe"]
    assert recipe["lump_ore_kg"] > 1000.0
    assert recipe.get("ferrosilicon_75_kg", 0.0) == 0.0
    assert recipe["scrap_total_kg"] == pytest.approx(22000.0)


def test_lime_of_the_high_phosphorus_heat_follows_phosphorus(planned):
    end = planned("high_phosphorus")["end_point"]
    assert end["steel_pct"]["P"] == pytest.approx(0.010, rel=1e-6)
    assert end["slag_pct"]["CaO"] / end["slag_pct"]["SiO2"] > 3.2  # above the least basicity


def test_catch_carbon_heat_has_less_iron_oxide(planned):
    caught, usual = planned("medium_carbon_catch"), planned("ordinary_low_carbon")
    assert caught["end_point"]["slag_pct"]["FeO"] < usual["end_point"]["slag_pct"]["FeO"]
    assert caught["end_point"]["steel_pct"]["C"] == pytest.approx(0.22, rel=1e-6)


def test_preferred_scrap_is_used_up_first(planned):
    table = read_heat_file(FOLDER / "scrap_by_preference.toml")
    recipe = planned("scrap_by_preference")["recipe"]
    first, second, last = table.choices.scrap_order
    for name in (first, second):
        assert recipe[name + "_kg"] == pytest.approx(table.materials[name].stock_kg)
    assert 0.0 < recipe[last + "_kg"] < table.materials[last].stock_kg
