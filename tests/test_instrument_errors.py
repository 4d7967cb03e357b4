"""What instruments read against what is true. Kind of check: identity and closure.

A heat whose readings are off must come out as the heat with the true numbers does: the reading
is truth x (1 + error), truth + error for the thermometer, by the definition of the inputs. No
outside source is needed for that; the demo shop is invented.
"""

from __future__ import annotations

from typing import Any

import numpy as np
import pytest

import converter_calc
from converter_calc.balance.heats import heats_from_dict
from converter_calc.basis.errors import InputError
from converter_calc.planning.outcome import Outcome
from converter_calc.planning.solving import complete_charge

REL = 1e-10
ERRORS = {
    "hot_metal_temp_error_C": 7.0,
    "hot_metal_weight_error_pct": 0.8,
    "scrap_weight_error_pct": -1.5,
    "oxygen_meter_error_pct": 1.2,
    "scrap_yield_factor": 0.98,
}
SCRAP = 0.98 / (1.0 - 0.015)  # truth over reading of every scrap


def complete(plain_heat: dict[str, Any]) -> dict[str, Any]:
    heat = {**plain_heat, "charge": {}}
    heat["charge"] = {
        "heavy_scrap_kg": 30000.0,
        "light_scrap_kg": 12000.0,
        "burnt_lime_kg": 7000.0,
        "dolomitic_lime_kg": 3000.0,
        "oxygen_Nm3": 10500.0,
    }
    return heat


def as_read(heat: dict[str, Any]) -> dict[str, Any]:
    """The same heat as instruments with ERRORS show it."""
    metal, charge = dict(heat["hot_metal"]), dict(heat["charge"])
    metal["temp_C"] += 7.0
    metal["mass_kg"] *= 1.008
    charge["heavy_scrap_kg"] /= SCRAP
    charge["light_scrap_kg"] /= SCRAP
    charge["oxygen_Nm3"] *= 1.012
    return {**heat, "hot_metal": metal, "charge": charge, "practice": dict(ERRORS)}


def numbers(outcome: Outcome) -> dict[str, float]:
    s = outcome.state
    found = {"T": s.T_K, "C": s.C_pct, "steel": s.steel_kg, "slag": s.slag_kg}
    found |= {f"slag {name}": pct for name, pct in outcome.slag_pct().items()}
    found |= {f"steel {name}": pct for name, pct in outcome.steel_pct().items()}
    return {name: float(np.ravel(x)[0]) for name, x in found.items()}


def test_a_heat_read_wrongly_is_the_heat_that_it_is(plain_heat: dict[str, Any]) -> None:
    heat = complete(plain_heat)
    true, read = converter_calc.predict(heat), converter_calc.predict(as_read(heat))
    assert numbers(read) == pytest.approx(numbers(true), rel=REL)
    assert read.check_closures().all()


def test_streams_hold_truths_and_the_recipe_readings(plain_heat: dict[str, Any]) -> None:
    heat = complete(plain_heat)
    read = converter_calc.predict(as_read(heat))
    streams = {stream.name: float(np.ravel(stream.mass_kg)[0]) for stream in read.streams}
    assert streams["hot_metal"] == pytest.approx(heat["hot_metal"]["mass_kg"], rel=REL)
    assert streams["heavy_scrap"] == pytest.approx(30000.0, rel=REL)
    recipe = read.document()["recipe"]
    assert recipe["hot_metal_kg"] == pytest.approx(1.008 * heat["hot_metal"]["mass_kg"], rel=REL)
    assert recipe["heavy_scrap_kg"] == pytest.approx(30000.0 / SCRAP, rel=REL)
    assert recipe["oxygen_Nm3"] == pytest.approx(1.012 * 10500.0, rel=REL)


@pytest.mark.parametrize(
    "choice",
    [
        {"scrap_mix": {"heavy_scrap": 70.0, "light_scrap": 30.0}},
        {"scrap_order": ["light_scrap", "heavy_scrap"]},
    ],
)
def test_a_plan_is_told_in_readings_and_predicts_its_own_aim(
    plain_heat: dict[str, Any], choice: dict[str, Any]
) -> None:
    heat = {**plain_heat, "practice": dict(ERRORS), "choice": {**plain_heat["choice"], **choice}}
    if "scrap_order" in choice:
        del heat["choice"]["scrap_mix"]
        heat["materials"] = {"light_scrap": {"stock_kg": 9000.0, "yield_factor": 0.95}}
    planned = converter_calc.plan(heat)
    assert planned.check_closures().all()
    if "scrap_order" in choice:
        assert float(np.ravel(planned.charged_kg["light_scrap"])[0]) == pytest.approx(9000.0)
    again = converter_calc.predict(complete_charge(planned))
    assert float(again.state.T_K[0]) == pytest.approx(1655.0 + 273.15, abs=1e-6)
    assert float(again.state.C_pct[0]) == pytest.approx(0.045, rel=1e-8)


def test_steel_asked_for_gives_the_hot_metal_to_read(plain_heat: dict[str, Any]) -> None:
    heat = {**plain_heat, "hot_metal": dict(plain_heat["hot_metal"])}
    del heat["hot_metal"]["mass_kg"]
    heat["aim"] = {**heat["aim"], "steel_kg": 200000.0}
    true = converter_calc.plan(heat)
    read = converter_calc.plan({**heat, "practice": {"hot_metal_weight_error_pct": 1.0}})
    weight = [float(np.ravel(o.recipe()["hot_metal_kg"])[0]) for o in (true, read)]
    assert weight[1] == pytest.approx(1.01 * weight[0], rel=1e-9)


def test_one_scrap_may_have_a_yield_factor_of_its_own(plain_heat: dict[str, Any]) -> None:
    heat = complete(plain_heat)
    heat["charge"]["light_scrap_kg"] = 12000.0 / 0.9
    heat["materials"] = {"light_scrap": {"yield_factor": 0.9}}
    assert numbers(converter_calc.predict(heat)) == pytest.approx(
        numbers(converter_calc.predict(complete(plain_heat))), rel=REL
    )


def test_a_column_of_a_table_gives_each_heat_its_yield_factor(plain_heat: dict[str, Any]) -> None:
    import pandas as pd

    heat = complete(plain_heat)
    row = {f"hm_{key}" if key.endswith("_pct") else f"hot_metal_{key}": x
           for key, x in heat["hot_metal"].items()}  # fmt: skip
    row["hot_metal_kg"] = row.pop("hot_metal_mass_kg")
    frame = pd.DataFrame([{**row, **heat["charge"]}] * 2)
    frame["light_scrap_yield_factor"] = [0.9, None]
    frame.loc[0, "light_scrap_kg"] /= 0.9
    table = converter_calc.predict(frame, {"choice": plain_heat["choice"]})
    assert table["end_temp_C"][0] == pytest.approx(table["end_temp_C"][1], rel=1e-9)


@pytest.mark.parametrize(
    ("change", "field"),
    [
        ({"practice": {"oxygen_meter_error_pct": 30.0}}, "practice.oxygen_meter_error_pct"),
        ({"materials": {"burnt_lime": {"yield_factor": 0.9}}}, "materials.burnt_lime.yield_factor"),
        ({"materials": {"heavy_scrap": {"yield_factor": 3}}}, "materials.heavy_scrap.yield_factor"),
    ],
)
def test_impossible_errors_are_refused(
    plain_heat: dict[str, Any], change: dict[str, Any], field: str
) -> None:
    with pytest.raises(InputError, match=field):
        heats_from_dict({**plain_heat, **change})
