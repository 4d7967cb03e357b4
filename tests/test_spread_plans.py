"""Margins, tables and the command of the spread. Kinds of check: closed form (normal theory),
identity (a table of one, a plan drawn anew). Heats are invented."""

from __future__ import annotations

import json
from dataclasses import fields
from functools import cache
from pathlib import Path
from typing import Any

import numpy as np
import pandas as pd
import pytest
import scipy.stats
from click.testing import CliRunner

from converter_calc.balance.heats import heats_from_dict
from converter_calc.basis.errors import InputError
from converter_calc.cli import main
from converter_calc.learning.spread import Spread, spread
from converter_calc.learning.spread_margin import margin
from converter_calc.learning.spread_table import spread_table
from converter_calc.planning.plan import plan
from tests.conftest import DEMO, PLAIN_HEAT
from tests.demo import ordinary, unlimited

HEAT = str(DEMO / "ordinary_low_carbon.toml")


@cache
def one_sided() -> Spread:
    """Never colder than the aim, as hot as it likes."""
    window = {"temp_below_C": 0.0, "temp_above_C": 300.0, "below_C_pct": 3.0, "above_C_pct": 3.0}
    return spread(ordinary(window=window), 8192, needs=False)


def test_margin_of_a_one_sided_window_is_the_quantile() -> None:
    """End temperature is nearly normal: 1.2816 standard deviations for 90 %."""
    found = one_sided()
    moved = margin(found, 0.9)
    shift = next(s for s in moved.shifts if s.window.name == "end_temp_C")
    sd = found.results["end_temp_C"].sd
    assert shift.shift == pytest.approx(scipy.stats.norm.ppf(0.9) * sd, rel=0.03)
    assert moved.reached  # phosphorus too, although a hotter end lets it rise
    assert moved.checked is not None
    chance = {c.name: c.probability for c in moved.checked.chances}
    assert chance["end_temp_C"] == pytest.approx(0.9, abs=0.006)
    # planned with the aim moved, the end lies where it was aimed at
    assert moved.planned is not None
    assert moved.aims["aim_temp_C"] == pytest.approx(1665.0 + shift.shift, abs=1.0)
    assert moved.checked.results["end_temp_C"].as_read == pytest.approx(moved.aims["aim_temp_C"])


def test_margin_of_phosphorus_costs_lime() -> None:
    found = spread(unlimited("high_phosphorus"), 8192, needs=False)
    moved = margin(found, 0.6)
    assert moved.checked is not None
    assert moved.planned is not None
    chance = {c.name: c.probability for c in moved.checked.chances}
    assert chance["end_P_pct"] == pytest.approx(0.6, abs=0.01)
    assert moved.aims["aim_P_pct"] < found.windows[2].aim
    lime = [float(np.ravel(o.recipe()["burnt_lime_kg"])[0]) for o in (found.planned, moved.planned)]
    assert lime[1] > lime[0]
    # the window stays where it was: it is the aim that moves
    assert moved.checked.windows[2].high == found.windows[2].high


def test_a_margin_out_of_reach_says_what_binds_and_what_makes_the_scatter() -> None:
    found = spread(unlimited("high_phosphorus"), 8192, needs=False)
    moved = margin(found, 0.97)
    assert not moved.reached
    assert "phosphorus" in moved.binding
    assert moved.frees
    temperature = next(s for s in moved.shifts if s.window.name == "end_temp_C")
    assert temperature.shift is None
    assert temperature.largest[0][0] == "oxygen meter"
    # normal theory: the chance of a window of +- 12 K about its aim
    sd = found.results["end_temp_C"].sd
    assert temperature.best == pytest.approx(2 * scipy.stats.norm.cdf(12.0 / sd) - 1, abs=0.01)


def test_no_margin_where_the_chance_is_there() -> None:
    moved = margin(spread(ordinary(), 2048, needs=False), 0.5)
    assert all(s.shift == 0.0 for s in moved.shifts)
    assert moved.reached
    assert moved.aims["aim_temp_C"] == 1665.0


@pytest.mark.parametrize("probability", [0.3, 1.0])
def test_probability_is_bounded(probability: float) -> None:
    with pytest.raises(InputError, match=r"probability: must be 50 to 99\.9 %"):
        margin(one_sided(), probability)


def test_no_margin_for_a_charge_that_is_given() -> None:
    found = spread(one_sided().charge, 512, charged=True, shares=False)
    with pytest.raises(InputError, match="margin: needs a heat that is planned"):
        margin(found)


def test_a_table_of_one_is_the_heat() -> None:
    """Same seed, so the same draws: the same numbers to rounding."""
    alone = spread(ordinary(), 512, shares=False, needs=False)
    row = spread_table(heats_from_dict(ordinary()), draws=512).iloc[0]
    assert row["chance_all"] == pytest.approx(alone.all_windows.probability, abs=1e-12)
    assert row["end_temp_C_mean"] == pytest.approx(alone.results["end_temp_C"].mean, rel=1e-9)
    assert row["end_P_pct_sd"] == pytest.approx(alone.results["end_P_pct"].sd, rel=1e-6)


def frame() -> pd.DataFrame:
    return pd.DataFrame(
        {
            "heat_id": ["a", "b", "never"],
            "hot_metal_kg": 180000.0,
            "hot_metal_temp_C": [1340.0, 1370.0, 1340.0],
            "hm_C_pct": 4.45,
            "hm_Si_pct": [0.45, 0.6, 0.45],
            "hm_Mn_pct": 0.35,
            "hm_P_pct": [0.085, 0.09, 0.30],
            "aim_temp_C": 1655.0,
            "aim_C_pct": 0.045,
            "aim_P_pct": [0.015, 0.015, 0.001],
        },
        index=[7, 8, 9],
    )


def test_each_heat_of_a_table_is_that_heat_alone() -> None:
    shop: dict[str, Any] = {"choice": PLAIN_HEAT["choice"], "errors": {"hm_Si_pct": 0.02}}
    table = spread_table(frame(), shop=shop, draws=512, seed=4)
    assert list(table.index) == [7, 8, 9]
    assert list(table["heat_id"]) == ["a", "b", "never"]
    assert list(table["status"]) == ["solved", "solved", "infeasible"]
    assert np.isnan(table["chance_all"].iloc[2])
    for row in (0, 1):
        one = {k: float(v) for k, v in frame().drop(columns="heat_id").iloc[row].items()}
        heat = {
            "hot_metal": {
                "mass_kg": one["hot_metal_kg"],
                "temp_C": one["hot_metal_temp_C"],
                **{f"{el}_pct": one[f"hm_{el}_pct"] for el in ("C", "Si", "Mn", "P")},
            },
            "aim": {"temp_C": 1655.0, "C_pct": 0.045, "P_pct": one["aim_P_pct"]},
            **shop,
        }
        alone = spread(heat, 512, seed=4, needs=False, shares=False)
        found = table.iloc[row]
        assert found["chance_all"] == pytest.approx(alone.all_windows.probability, abs=1e-12)
        assert found["end_C_pct_mean"] == pytest.approx(alone.results["end_C_pct"].mean, rel=1e-8)
    assert np.isnan(table["chance_end_Mn_pct"]).all()


def test_windows_and_aims_of_the_file_count() -> None:
    heat = ordinary(aim={"Mn_pct": 0.12, "S_pct": 0.009}, window={"temp_above_C": 20.0})
    found = spread(heat, 2048, needs=False)
    names = [w.name for w in found.windows]
    assert names == ["end_temp_C", "end_C_pct", "end_P_pct", "end_Mn_pct", "end_S_pct"]
    assert found.windows[0].high == 1685.0
    assert found.windows[0].low == 1653.0
    each = [c.probability for c in found.chances]
    assert found.all_windows.probability <= min(each) + 1e-12
    assert found.all_windows.probability >= 1.0 - sum(1.0 - p for p in each) - 1e-12  # Bonferroni


def run(*args: str) -> Any:
    return CliRunner().invoke(main, ["spread", *args])


def test_the_command_shows_what_the_functions_say() -> None:
    result = run(HEAT, "--draws", "2048", "--seed", "3", "--probability", "80")
    assert result.exit_code == 0, result.output
    found = spread(plan(HEAT), 2048, seed=3)
    text = result.stdout
    assert f"{100 * found.all_windows.probability:.1f} %" in text
    assert f"{found.results['end_temp_C'].sd:.1f}" in text
    assert "Margin to plan with for 80 % in each window" in text
    assert "oxygen meter" in text
    assert "licensed engineers decide" in text


def test_the_command_writes_json(tmp_path: Path) -> None:
    result = run(HEAT, "--draws", "1024", "--json", "-")
    assert result.exit_code == 0, result.output
    document = json.loads(result.stdout)
    found = spread(plan(HEAT), 1024)
    assert document["all_windows"]["probability"] == found.all_windows.probability
    assert document["end_point"]["end_temp_C"]["mean"] == found.results["end_temp_C"].mean
    assert document["windows"]["end_P_pct"]["low"] is None
    assert document["margin"]["wanted_probability"] == 0.9
    assert set(document["charge_needed"]) >= {"scrap_kg", "lime_kg"}
    assert document["errors"]["hot_metal_temp_C"]["sd"] == 8.0


@pytest.mark.parametrize(
    ("args", "line"),
    [
        (["--draws", "3"], "draws: must be 256 to 1000000, given 3"),
        (["--seed", "-1"], "seed: must not be negative, given -1"),
        (["--probability", "120"], "probability: must be 50 to 99.9 %, given 120"),
        (["--tuned", "/nowhere.json"], "/nowhere.json: cannot be read"),
    ],
)
def test_wrong_wishes_get_a_line_and_code_2(args: list[str], line: str) -> None:
    result = run(HEAT, *args)
    assert result.exit_code == 2
    assert result.stderr.startswith(line)
    assert not result.stdout


def test_wrong_errors_and_windows_of_a_file_get_a_line_and_code_2(tmp_path: Path) -> None:
    text = Path(HEAT).read_text("utf-8").replace('"shop.toml"', f'"{DEMO / "shop.toml"}"')
    for more, line in (
        (
            "[errors]\noxygen_metre_pct = 1\n",
            "errors.oxygen_metre_pct: unknown error; nearest: o",
        ),
        (
            "[errors]\noxygen_meter_pct = 50\n",
            "errors.oxygen_meter_pct: must be 0 to 10 %, give",
        ),
        ("errors = 3\n", "errors: must be a table, given 3"),
        ("[window]\ntemp_below_C = -5\n", "window.temp_below_C: must not be negative"),
        ("[window]\ntemp_C = 5\n", "window.temp_C: unknown field; nearest: temp_"),
    ):
        path = tmp_path / "heat.toml"
        path.write_text(more + text if "=" in more.split("\n")[0] else text + "\n" + more, "utf-8")
        result = run(str(path))
        assert result.exit_code == 2, more
        assert result.stderr.startswith(line), result.stderr


def test_a_heat_that_cannot_be_made_has_no_spread(tmp_path: Path) -> None:
    text = Path(HEAT).read_text("utf-8").replace("P_pct = 0.013", "P_pct = 0.001")
    path = tmp_path / "heat.toml"
    path.write_text(text.replace('"shop.toml"', f'"{DEMO / "shop.toml"}"'), "utf-8")
    result = run(str(path))
    assert result.exit_code == 3
    assert "phosphorus" in result.stderr


def test_tuned_parameters_move_the_plan_and_widen_the_spread(tmp_path: Path) -> None:
    from converter_calc.learning.tuned import Tuned, TunedParameter

    heats = heats_from_dict(ordinary())
    loss = TunedParameter(
        "heat_loss_MJ_per_t", "MJ/t", 55.0, 10.0, 45.0, 15.0, 0.9,
        held=False, at_bound=False, acts_on="heat loss",
    )  # fmt: skip
    blank = {f.name: 0 for f in fields(Tuned) if f.type in ("int", "float")}
    tuned = Tuned(
        **blank, shop="invented", parameters=(loss,), covariance=np.array([[100.0]]),
        fitted=(), collinear=(), settled=True, laws=heats.choices.laws,
        blowing=heats.choices.blowing,
    )  # fmt: skip
    path = tmp_path / "tuned.json"
    tuned.save(path)
    plain = json.loads(run(HEAT, "--draws", "1024", "--json", "-").stdout)
    result = run(HEAT, "--draws", "1024", "--tuned", str(path), "--json", "-")
    assert result.exit_code == 0, result.output
    wide = json.loads(result.stdout)
    assert wide["end_point"]["end_temp_C"]["sd"] > 1.1 * plain["end_point"]["end_temp_C"]["sd"]
    scrap = [d["charge_needed"]["scrap_kg"]["as_read"] for d in (plain, wide)]
    assert scrap[1] < scrap[0]
