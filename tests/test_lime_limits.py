"""Lime limits of one heat, and the saturation with dicalcium silicate behind one of them.

Kinds of check: "published" = diagram or practice, source beside it; "property" = the heat
planned at a mark does what the mark says; "derivative" = against differences of plans;
"contract" = refusals, the command.
"""

from __future__ import annotations

import json
from typing import Any

import numpy as np
import pytest
from click.testing import CliRunner

from converter_calc.basis.dual import seed, slope
from converter_calc.basis.errors import InputError
from converter_calc.cli import main
from converter_calc.data.tables import read_toml
from converter_calc.laws import saturation
from converter_calc.metallurgy.lime_limits import LEAST_GAIN_PCT, lime_limits
from converter_calc.planning.plan import as_heats, plan
from converter_calc.planning.solving import with_masses, with_values

from .conftest import DEMO

SLAG = {"CaO": 46.0, "SiO2": 14.0, "MgO": 8.0, "FeO": 18.0, "Fe2O3": 6.0, "MnO": 5.0, "P2O5": 2.0}


@pytest.fixture(scope="module")
def rich() -> Any:
    return as_heats(DEMO / "high_phosphorus.toml")


@pytest.fixture(scope="module")
def limits(rich: Any) -> Any:
    return lime_limits(rich)


def test_silicate_line_starts_at_the_binary_liquidus():
    """published: in CaO-SiO2 at 1600 C the melt is saturated with Ca2SiO4 at about 56 % CaO (phase
    diagram, from memory); the line is good to 4 % flux."""
    uncertain = read_toml("saturation.toml")["uncertainty_pct"]
    assert abs(saturation.least_flux_pct(56.0 / 44.0, 1873.15)) < uncertain


@pytest.mark.parametrize(
    ("basicity", "flux"), [(1.6, 19.0), (1.87, 29.0), (2.4, 34.0), (3.2, 28.0)]
)
def test_silicate_line_through_its_marks(basicity, flux):
    """published: marks of the section at 1600 C in contact with iron (from memory, data file)."""
    assert saturation.least_flux_pct(basicity, 1873.15) == pytest.approx(flux, abs=1.5)


def test_silicate_line_does_not_reach_the_melting_point():
    """published: pure Ca2SiO4 melts at 2130 C (from memory). Drawn out to no flux at all, the line
    ends at 1888 C: the join is steeper far from the nose. So its range stops at 1720 C."""
    at_1600 = saturation.least_flux_pct(1.867, 1873.15)
    assert 1600.0 + at_1600 / 0.1 == pytest.approx(1888.0, abs=5.0)
    assert max(limit.high for limit in saturation.ranges()) < 1888.0


@pytest.mark.parametrize(
    ("slag", "temp_C", "dry"),
    [
        (SLAG, 1660.0, False),
        (
            {"CaO": 44.0, "SiO2": 22.0, "FeO": 12.0, "MgO": 6.0, "MnO": 9.0, "P2O5": 3.0},
            1500.0,
            True,
        ),
        (
            {"CaO": 30.0, "SiO2": 24.0, "FeO": 28.0, "MgO": 5.0, "MnO": 9.0, "P2O5": 2.0},
            1400.0,
            False,
        ),
    ],
)
def test_silicate_in_practice(slag, temp_C, dry):
    """published: common practice, no source: the end slag is liquid; in mid-blow, iron oxide used
    up, it turns dry with dicalcium silicate; the first slag, rich in iron oxide, is liquid (that
    one at 1400 C, below the range: told by `out_of_range`)."""
    assert (saturation.silicate_margin_pct(slag, temp_C + 273.15) < 0.0) == dry
    assert bool(saturation.out_of_range(slag, temp_C + 273.15)) == (temp_C < 1500.0)


def test_silicate_margin_carries_exact_derivatives():
    """derivative: central differences, step 1e-4 %."""
    for oxide, pct in SLAG.items():
        dual = saturation.silicate_margin_pct({**SLAG, oxide: seed(pct, oxide)}, 1900.0)
        high, low = (
            saturation.silicate_margin_pct({**SLAG, oxide: pct + step}, 1900.0)
            for step in (1e-4, -1e-4)
        )
        assert slope(dual, oxide) == pytest.approx((high - low) / 2e-4, rel=1e-6)


def test_gain_is_the_slope_of_the_plan(rich, limits):
    """derivative: two plans 1 kg of lime apart on either side, at three points of the curve."""
    for place in (8, 20, 30):
        row = limits.curve.iloc[place]
        low, high = (
            plan(with_masses(rich, {"burnt_lime": row["lime_kg"] + step})) for step in (-1.0, 1.0)
        )
        by_kg = (low.steel_pct()["P"][0] - high.steel_pct()["P"][0]) / 2.0
        per_kg_t = by_kg * 0.5e-3 * (low.state.steel_kg[0] + high.state.steel_kg[0])
        assert row["gain_pct_per_kg_t"] == pytest.approx(per_kg_t, rel=1e-5)


def test_curve_falls_and_flattens(limits):
    """property: end phosphorus falls up to the most lime that dissolves, then hardly moves."""
    curve, stops = limits.curve, limits.mark("dissolution_stops").lime_kg
    before = curve[curve["lime_kg"] < stops]
    assert (np.diff(before["end_P_pct"]) < 0.0).all()
    last = curve.iloc[-1]
    assert last["gain_pct_per_kg_t"] < 0.02 * curve["gain_pct_per_kg_t"].max()
    assert last["undissolved_lime_kg"] > 500.0


def test_marks_do_what_they_say(rich, limits):
    """property: plan the heat with the lime of the mark and look."""
    for key, check in {
        "for_aim": lambda o: o.steel_pct()["P"][0] / 0.010 - 1.0,
        "least_basicity": lambda o: o.state.basicity[0] / 3.2 - 1.0,
    }.items():
        outcome = plan(with_masses(rich, {"burnt_lime": limits.mark(key).lime_kg}))
        assert abs(check(outcome)) < 1e-6, key
    vain = limits.mark("in_vain")
    gains = np.interp(vain.lime_kg, limits.curve["lime_kg"], limits.curve["gain_pct_per_kg_t"])
    assert gains == pytest.approx(LEAST_GAIN_PCT, rel=0.2)  # read off 40 straight pieces
    gain = next(term.value for term in vain.terms if term.label.startswith("gain"))
    assert gain == pytest.approx(LEAST_GAIN_PCT, rel=1e-3)
    order = [mark.lime_kg for mark in limits.marks if np.isfinite(mark.lime_kg)]
    assert order == sorted(order)
    assert limits.mark("dissolution_stops").lime_kg < vain.lime_kg


def test_silicate_mark_of_a_cool_end():
    """property: ended at 1600 C with little MgO the ordinary slag comes to hold dicalcium silicate;
    planned with the lime of the mark its margin is nil, with less lime it is above."""
    heats = as_heats(DEMO / "ordinary_low_carbon.toml")
    cool = with_values(heats, aim_temp_C=1600.0, iron_oxide_factor=0.9, aim_MgO_pct=5.0)
    found = lime_limits(cool, np.linspace(0.0, 9000.0, 5))
    mark = found.mark("silicate_comes")
    assert "dry" in mark.note
    assert {term.source for term in mark.terms if term.source}
    margins = []
    for lime in (mark.lime_kg, 0.9 * mark.lime_kg):
        outcome = plan(with_masses(with_values(cool, aim_P_pct=np.nan), {"burnt_lime": lime}))
        slag = {oxide: float(x[0]) for oxide, x in outcome.slag_pct().items()}
        margins.append(saturation.silicate_margin_pct(slag, 1873.15))
    assert abs(margins[0]) < 0.05  # a straight line between the last two points of the search
    assert margins[1] > 0.1


def test_absent_marks_say_why(limits):
    """contract: no number, a sentence."""
    mark = limits.mark("least_P")
    assert np.isnan(mark.lime_kg)
    assert mark.note


def test_refusals(rich):
    """contract"""
    with pytest.raises(InputError, match="one heat"):
        lime_limits(rich.take(np.array([0, 0])))
    with pytest.raises(InputError, match="0 kg or more"):
        lime_limits(rich, [-1.0, 2000.0])


def test_command(tmp_path):
    """contract: marks and curve as JSON and as text."""
    heat = str(DEMO / "high_phosphorus.toml")
    result = CliRunner().invoke(main, ["lime", heat, "--json", "-"])
    assert result.exit_code == 0, result.output
    found = json.loads(result.output)
    assert found["lime"] == "burnt_lime"
    marks = {mark["key"]: mark for mark in found["marks"]}
    assert marks["for_aim"]["end_P_pct"] == pytest.approx(0.010, rel=1e-6)
    assert marks["least_P"]["lime_kg"] is None
    text = CliRunner().invoke(main, ["lime", heat]).output
    assert "lime stops dissolving" in text
