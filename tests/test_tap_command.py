"""The tap of whole heats: command, JSON, table of heats, converter aims that follow the tap.

Kinds of check: "contract" = formats, exit codes, texts; "property" = holds whatever the numbers.
"""

from __future__ import annotations

import json
from typing import Any

import numpy as np
import pandas as pd
import pytest
from click.testing import CliRunner, Result

from converter_calc.basis.errors import InfeasibleError, InputError
from converter_calc.cli import main
from converter_calc.planning.plan import plan
from converter_calc.planning.tap import tap
from converter_calc.planning.tap_report import TOPICS, TapResult, liquidus_C
from tests.conftest import DEMO
from tests.demo import ordinary, whole

HEAT = str(DEMO / "structural_grade_to_ladle.toml")


def run(*words: str) -> Result:
    return CliRunner().invoke(main, list(words))


def graded(name: str, **changes: Any) -> dict[str, Any]:
    """The ordinary demo heat for a grade, its own aims of carbon and phosphorus left out."""
    heat = ordinary(aim={"grade": name}, **changes)
    del heat["aim"]["C_pct"], heat["aim"]["P_pct"]
    return heat


@pytest.fixture(scope="module")
def result() -> TapResult:
    return tap(HEAT)


# ---------------------------------------------------------------- command


def test_sheet_shows_additions_temperature_analysis_and_cautions() -> None:
    """Contract."""
    told = run("tap", HEAT)
    assert told.exit_code == 0, told.output
    for text in ("TAP SHEET", "FeNb", "stream and open ladle", "stays dissolved", "[Nb]",
                 "phosphorus given back", "Additions dry and warm", "boils violently",
                 "local codes"):  # fmt: skip
        assert text in told.output, text
    us = run("tap", HEAT, "--units", "us")
    assert "short ton" in us.output
    assert " F\n" in us.output


def test_json_alone_on_standard_output_closes(result: TapResult) -> None:
    """Contract: plain numbers with units in the keys; every element and the heat to 1e-9."""
    told = run("tap", HEAT, "--json", "-")
    assert told.exit_code == 0
    found = json.loads(told.output)["tap"]
    assert found["grade"] == "S355MC"
    assert found["temperature_C"] == pytest.approx(float(result.ladle.ladle_temp_C[0]), abs=1e-6)
    assert all(abs(x) < 1e-9 for x in found["closure"].values())
    mass: dict[str, float] = {"in": 0.0, "out": 0.0}
    heat = {"in": 0.0, "out": found["heat_loss_MJ"]}
    for stream in found["streams"]:
        mass[stream["side"]] += stream["mass_kg"]
        heat[stream["side"]] += stream["enthalpy_MJ"]
    assert mass["in"] == pytest.approx(mass["out"], rel=1e-12)
    assert heat["in"] == pytest.approx(heat["out"], rel=1e-9)
    drop = found["tap_temperature_C"] - found["temperature_C"]
    assert -sum(found["temperature_steps_K"].values()) == pytest.approx(drop, abs=1e-6)
    assert {row["mark"] for row in found["limits"]} <= {
        "below", "near lower limit", "inside", "near upper limit", "above"
    }  # fmt: skip


def test_slag_carried_over_is_the_end_slag_of_the_heat(result: TapResult) -> None:
    """Property: 4 kg/t of this heat's own slag, not of a default one."""
    (slag,) = (s for s in result.ladle.heat.streams if s.name == "slag carried over")
    steel = float(np.ravel(result.outcome.state.steel_kg)[0])
    assert slag.mass_kg[0] == pytest.approx(4e-3 * steel, rel=1e-12)
    for name, pct in result.outcome.slag_pct().items():
        share = slag.species_kg[name][0] / slag.mass_kg[0]
        assert share == pytest.approx(float(np.ravel(pct)[0]) / 100.0, rel=1e-9)


def test_every_figure_opens_its_terms(result: TapResult) -> None:
    """Contract: sums shown are sums."""
    for topic in TOPICS:
        told = result.explain(topic)
        assert told.terms, topic
        assert run("tap", HEAT, "--why", topic).exit_code == 0
    phosphorus = result.explain("phosphorus")
    assert sum(t.value for t in phosphorus.terms) == pytest.approx(phosphorus.value, rel=1e-9)
    temperature = result.explain("temperature")
    assert sum(t.value for t in temperature.terms) == pytest.approx(temperature.value, rel=1e-9)
    oxygen = result.explain("oxygen")
    kg = sum(t.value for t in oxygen.terms if t.unit == "kg")
    assert kg / result.ladle.poured.steel_kg[0] * 1e6 == pytest.approx(oxygen.value, rel=1e-6)
    wrong = run("tap", HEAT, "--why", "nitrogen")
    assert wrong.exit_code == 2
    assert "topic: 'nitrogen' cannot be explained" in wrong.stderr


def test_predict_then_tap_is_plan_then_tap(tmp_path: Any) -> None:
    """Property: the planned charge, given as a complete one, is tapped alike."""
    planned = tap(HEAT)
    recipe = planned.document()["recipe"]
    heat = whole("structural_grade_to_ladle")
    heat["charge"] = {k: v for k, v in recipe.items() if k.endswith("_kg") and v > 0
                      and k not in ("hot_metal_kg", "scrap_total_kg")}  # fmt: skip
    heat["charge"]["oxygen_Nm3"] = recipe["oxygen_Nm3"]
    predicted = tap(heat, predicted=True)
    np.testing.assert_allclose(predicted.ladle.ladle_temp_C, planned.ladle.ladle_temp_C, rtol=1e-8)
    np.testing.assert_allclose(
        predicted.ladle.added_kg["FeNb"], planned.ladle.added_kg["FeNb"], rtol=1e-7
    )


def test_wrong_practice_is_told_by_field_and_wrong_grade_too(tmp_path: Any) -> None:
    """Contract: exit code 2, one line a fault."""
    path = tmp_path / "heat.toml"
    text = (DEMO / "structural_grade_to_ladle.toml").read_text(encoding="utf-8")
    text = text.replace('"shop.toml"', f'"{DEMO / "shop.toml"}"')
    path.write_text(text.replace("standing_min = 8", "standing_min = -8"), encoding="utf-8")
    told = run("tap", str(path))
    assert told.exit_code == 2
    assert "tap.standing_min: must be 0 to 300 min, given -8" in told.stderr
    path.write_text(text.replace("S355MC", "S355ZZ"), encoding="utf-8")
    assert run("tap", str(path)).exit_code == 2


def test_grade_out_of_reach_is_exit_code_3(tmp_path: Any) -> None:
    """Contract: what binds, and what would free it."""
    grades = {"tight": {"limits": {"C": {"max": 0.06}, "P": {"max": 0.03}, "Mn": [0.9, 1.1]}}}
    heat = graded("tight", grades=grades, tap={"use": ["FeMn HC", "Al"]})
    with pytest.raises(InfeasibleError, match="no additions reach tight") as caught:
        tap(heat)
    assert "at most 0.06 % of tight" in caught.value.binding
    assert caught.value.frees
    assert caught.value.nearest["ladle_C_pct"] > 0.0


# ---------------------------------------------------------------- table of heats


def test_a_table_of_heats_is_the_loop() -> None:
    """Property: rows of a table are the heats one by one; an unsolved row is blank."""
    heat = graded("S355MC", tap={"price_per_t": {"FeMn HC": 1000, "Al": 2400, "FeNb": 30000}})
    heat.pop("why", None)
    frame = pd.DataFrame({"hot_metal_kg": [180e3, 186e3, 183e3], "hm_Si_pct": [0.4, 0.5, 0.45],
                          "hot_metal_temp_C": [1340.0, 1350.0, 1345.0],
                          "aim_P_pct": [np.nan, np.nan, 0.0006]})  # fmt: skip
    shop = {k: v for k, v in heat.items() if k != "heat_id"}
    shop["hot_metal"] = {k: v for k, v in heat["hot_metal"].items()
                         if k not in ("mass_kg", "temp_C", "Si_pct")}  # fmt: skip
    table = tap(frame, shop=shop)
    assert list(table["tap_status"][:2]) == ["solved", "solved"]
    for row in range(2):
        one = dict(shop)
        one["hot_metal"] = {**shop["hot_metal"], "mass_kg": frame["hot_metal_kg"][row],
                            "temp_C": frame["hot_metal_temp_C"][row],
                            "Si_pct": frame["hm_Si_pct"][row]}  # fmt: skip
        single = tap(one).ladle
        assert table["ladle_temp_C"][row] == pytest.approx(single.ladle_temp_C[0], rel=1e-9)
        assert table["add_Al_kg"][row] == pytest.approx(single.added_kg["Al"][0], rel=1e-6)
        assert table["ladle_P_pct"][row] == pytest.approx(
            single.poured.steel_pct()["P"][0], rel=1e-8
        )
    assert table["status"][2] == "infeasible"
    assert np.isnan(table["ladle_temp_C"][2])
    assert table["tap_status"][2] == ""


def test_a_table_derives_its_tap_temperatures() -> None:
    """Property: each row taps as hot as its own ladle asks; a row with its own aim keeps it."""
    heat = graded("S355MC", tap={"ladle_temp_C": 1590.0})
    shop = {k: v for k, v in heat.items() if k not in ("heat_id", "why")}
    shop["hot_metal"] = {k: v for k, v in heat["hot_metal"].items() if k != "mass_kg"}
    del shop["aim"]["temp_C"]
    frame = pd.DataFrame({"hot_metal_kg": [120e3, 185e3, 185e3],
                          "aim_temp_C": [np.nan, np.nan, 1670.0]})  # fmt: skip
    table = tap(frame, shop=shop)
    np.testing.assert_allclose(table["ladle_temp_C"][:2], 1590.0, atol=0.01)
    assert table["tap_temp_C"][0] > table["tap_temp_C"][1]  # a small ladle cools more
    assert table["tap_temp_C"][2] == pytest.approx(1670.0)


def test_nitrogen_is_not_said_to_be_inside() -> None:
    """Contract: what the balance does not carry is marked so."""
    limits = {"C": {"max": 0.1}, "N": {"max": 0.009}, "P": {"max": 0.03}}
    found = tap(graded("gas", grades={"gas": {"limits": limits}})).document()["tap"]
    marks = {row["element"]: (row["mark"], row["pct"]) for row in found["limits"]}
    assert marks["N"] == ("not worked out", None)


# ---------------------------------------------------------------- converter aims


def test_tap_temperature_follows_the_ladle() -> None:
    """Property: planned at the derived tap temperature, the ladle is as warm as wanted."""
    heat = graded("S355MC", tap={"ladle_temp_C": 1595.0})
    del heat["aim"]["temp_C"]
    found = tap(heat)
    assert found.ladle.ladle_temp_C[0] == pytest.approx(1595.0, abs=0.01)
    hotter = graded("S355MC", tap={"ladle_temp_C": 1595.0, "standing_min": 30})
    del hotter["aim"]["temp_C"]
    later = float(np.ravel(plan(hotter).end_point()["temperature_C"])[0])
    # 20 minutes more at 1.5 K/min; a hotter tap makes a little more slag and oxygen
    assert later - found.ladle.tap_temp_C[0] == pytest.approx(30.0, abs=3.0)
    given = graded("S355MC", tap={"ladle_temp_C": 1595.0})
    assert tap(given).ladle.tap_temp_C[0] == pytest.approx(1665.0)
    assert "ladle-temperature" in {w["code"] for w in tap(given).warnings()}


def test_price_changes_the_carbon_aim() -> None:
    """Property: manganese by the dearer low-carbon alloy leaves more carbon to the converter."""
    grades = {"Mn": {"limits": {"C": {"max": 0.14}, "P": {"max": 0.03}, "Mn": [0.9, 1.1]}}}
    rich = {"FeMn HC": 1000, "FeMn LC": 3000, "Al": 2000}
    lean = {"FeMn HC": 3000, "FeMn LC": 1000, "Al": 2000}
    aims = [
        float(
            np.ravel(plan(graded("Mn", grades=grades, tap={"price_per_t": prices})).state.C_pct)[0]
        )
        for prices in (rich, lean)
    ]
    carbon = 0.9 * (0.07 * 1.0 / (0.76 * 0.9) - 0.004 * 1.0 / (0.82 * 0.9))
    # 0.9 % Mn more by an alloy of 7 % or of 0.4 % C, 90 % recovered
    assert aims[1] - aims[0] == pytest.approx(0.9 * carbon, rel=0.05)


def test_steel_of_no_grade_is_killed_with_aluminium() -> None:
    """Contract: no limits, the usual soluble aluminium, and nothing else added."""
    found = tap(ordinary()).ladle
    assert set(found.added_kg) == {"Al"}
    assert found.poured.steel_pct()["Al"][0] == pytest.approx(0.035, rel=1e-6)
    assert tap(ordinary(tap={"kill": "none"})).ladle.added_kg == {}
    with pytest.raises(InputError, match=r"tap\.kill"):
        tap(ordinary(tap={"kill": "Mg"}))


def test_liquidus_of_known_steels() -> None:
    """Iron melts at 1538 C (handbook value); 0.1 % C lowers it by 8 K, 0.45 % C by 30 to 40 K."""
    pure = {"C": np.array([0.0, 0.1, 0.45])}
    assert liquidus_C(pure)[0] == 1538.0
    assert 1538.0 - liquidus_C(pure)[1] == pytest.approx(8.0, abs=0.5)
    assert 30.0 < 1538.0 - liquidus_C(pure)[2] < 40.0


def test_warnings_tell_boil_freezing_and_heavy_additions() -> None:
    """Contract."""
    cold = tap(graded("S355MC", tap={"standing_min": 75}))
    assert "little-superheat" in {w["code"] for w in cold.warnings()}
    many = tap(graded("S355MC", tap={"additions_kg_per_t": {"FeSi75": 2.0, "Ni": 25.0}}))
    assert {"many-additions", "carbon-boil"} <= {w["code"] for w in many.warnings()}
    assert all(w["field"] and w["message"] for w in many.warnings())
