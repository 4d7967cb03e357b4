"""Sensitivities against heats solved anew. Kind of check: closure.

Implicit derivatives have to agree with central differences of whole heats, solved again with
the input moved: 1e-4 relative (a difference itself is good to about 1e-6).
"""

from __future__ import annotations

from functools import cache
from pathlib import Path
from typing import Any

import numpy as np
import pytest
from click.testing import CliRunner

import converter_calc
from converter_calc.cli import main
from converter_calc.planning.outcome import Outcome
from converter_calc.planning.sensitivities import INPUTS, Sensitivity, sensitivities
from converter_calc.planning.solving import complete_charge, with_masses, with_values
from tests.conftest import DEMO
from tests.demo import unlimited

REL = 1e-4


@cache
def planned(name: str = "ordinary_low_carbon") -> Outcome:
    return converter_calc.plan(unlimited(name))


@cache
def found(name: str = "ordinary_low_carbon") -> dict[str, list[Sensitivity]]:
    return sensitivities(planned(name))


def moved(heats: Any, name: str, by: float) -> Any:
    """The heats with one input moved; iron follows where it is an analysis."""
    if name.startswith("hm_"):
        element = name.removeprefix("hm_").removesuffix("_pct")
        copy = with_values(heats)
        copy.hm_pct = {**heats.hm_pct, element: heats.hm_pct[element] + by}
        copy.hm_pct["Fe"] = heats.hm_pct["Fe"] - by
        return copy
    if name.removesuffix("_kg") in heats.masses_kg:
        material = name.removesuffix("_kg")
        return with_masses(heats, {material: heats.masses_kg[material] + by})
    return with_values(heats, **{name: heats.values[name] + by})


def results(outcome: Outcome) -> dict[str, float]:
    s = outcome.state
    numbers = {
        "end_temp_C": s.T_K,
        "end_C_pct": s.C_pct,
        "end_P_pct": outcome.steel_pct()["P"],
        "steel_kg": s.steel_kg,
        **outcome.x,
    }
    return {name: float(np.ravel(x)[0]) for name, x in numbers.items()}


def assert_agrees(heats: Any, solve: Any, listed: list[Sensitivity]) -> None:
    """Each sensitivity against a central difference over a hundredth of its step."""
    middle = results(solve(heats))
    for row in listed:
        h = 0.01 * row.step
        up, down = (results(solve(moved(heats, row.input, x))) for x in (h, -h))
        for label, change in row.change.items():
            difference = (up[label] - down[label]) / (2.0 * h) * row.step
            # what does not move by a millionth of itself is lost in the rounding of two solves
            floor = 1e-7 * abs(middle[label])
            assert change == pytest.approx(difference, rel=REL, abs=floor), (row.input, label)


@pytest.mark.parametrize("name", ["high_phosphorus", "high_silicon"])
def test_planned_sensitivities_are_those_of_heats_solved_anew(name: str) -> None:
    rows = found(name)["plan"]
    assert {row.input for row in rows} >= {"hot_metal_temp_C", "hm_Si_pct", "aim_temp_C"}
    assert_agrees(planned(name).heats, converter_calc.plan, rows)


@pytest.mark.parametrize("name", ["scrap_short_needs_ore"])
def test_predicted_sensitivities_are_those_of_heats_solved_anew(name: str) -> None:
    rows = found(name)["predict"]
    assert {row.input for row in rows} >= {"oxygen_Nm3", "hm_Si_pct", "burnt_lime_kg"}
    assert_agrees(complete_charge(planned(name)), converter_calc.predict, rows)


def test_every_input_given_is_looked_at() -> None:
    heats = planned().heats
    given = {
        name for name in INPUTS if name in heats.values and np.isfinite(heats.values[name]).all()
    }
    given |= {f"hm_{el}_pct" for el in ("C", "Si", "Mn", "P")}
    assert {row.input for row in found()["plan"]} >= given - {"oxygen_Nm3"}


def test_directions_known_to_every_blower() -> None:
    """Common practice, no source: which way each of these turns."""
    plan = {row.input: row.change for row in found()["plan"]}
    predict = {row.input: row.change for row in found()["predict"]}
    assert plan["hot_metal_temp_C"]["scrap_kg"] > 0.0
    assert plan["hm_Si_pct"]["scrap_kg"] > 0.0
    assert plan["hm_Si_pct"]["lime_kg"] > 0.0
    assert plan["aim_temp_C"]["scrap_kg"] < 0.0
    assert plan["wait_min"]["scrap_kg"] < 0.0
    assert predict["oxygen_Nm3"]["end_temp_C"] > 0.0
    assert predict["oxygen_Nm3"]["end_C_pct"] < 0.0
    assert predict["heavy_scrap_kg"]["end_temp_C"] < 0.0
    assert predict["burnt_lime_kg"]["end_P_pct"] < 0.0


def test_the_command_line_shows_both_tables() -> None:
    result = CliRunner().invoke(main, ["sensitivity", str(Path(DEMO) / "ordinary_low_carbon.toml")])
    assert result.exit_code == 0
    first, second = result.stdout.split("Where the blow would end")
    row = next(line for line in first.splitlines() if "0.1 % more Si" in line)
    heats = converter_calc.plan(DEMO / "ordinary_low_carbon.toml")
    listed = sensitivities(heats)["plan"]
    scrap = next(r for r in listed if r.input == "hm_Si_pct").change["scrap_kg"]
    assert f"{scrap:+.0f}" in row
    assert "100 Nm3 more oxygen" in second
