"""What must hold for every ordinary heat. Kind of check: property.

Heats are drawn within the trade's normal ranges, a small table at a time, with hypothesis.
"""

from __future__ import annotations

import copy
from typing import Any

import numpy as np
import pandas as pd
import pytest
from hypothesis import HealthCheck, given, settings
from hypothesis import strategies as st

import converter_calc
from converter_calc.balance.closures import lime_limit
from converter_calc.balance.heats import HeatTable, heats_from_frame
from converter_calc.planning.outcome import Outcome, spread
from converter_calc.planning.plan import plan_heats, predict_heats
from converter_calc.planning.solving import complete_charge, with_masses, with_values
from tests.conftest import PLAIN_HEAT

#: Normal ranges of the trade (common practice, no source).
RANGES = {
    "hot_metal_kg": (60e3, 300e3),
    "hot_metal_temp_C": (1280.0, 1420.0),
    "hm_C_pct": (4.1, 4.8),
    "hm_Si_pct": (0.20, 0.90),
    "hm_Mn_pct": (0.15, 0.80),
    "hm_P_pct": (0.05, 0.12),
    "hm_S_pct": (0.003, 0.03),
    "hm_Ti_pct": (0.02, 0.12),
    "aim_temp_C": (1630.0, 1690.0),
    "aim_C_pct": (0.03, 0.10),
    "aim_P_pct": (0.014, 0.03),
    "aim_basicity": (2.8, 3.8),
    "wait_min": (5.0, 60.0),
}
SHOP = {"choice": copy.deepcopy(PLAIN_HEAT["choice"])}
ROWS = 6

tables = st.lists(
    st.fixed_dictionaries({name: st.floats(*limits) for name, limits in RANGES.items()}),
    min_size=ROWS,
    max_size=ROWS,
).map(pd.DataFrame)
quick = settings(max_examples=6, deadline=None, suppress_health_check=[HealthCheck.too_slow])


def table_of(frame: pd.DataFrame) -> HeatTable:
    return heats_from_frame(frame, shop=SHOP)


def planned(frame: pd.DataFrame) -> Outcome:
    """One group of planned heats; those that no charge can make are left in."""
    ((_, outcome),) = plan_heats(table_of(frame))
    return outcome


def solved(outcome: Outcome) -> Any:
    return np.array([status == "solved" for status in outcome.status])


def scrap(outcome: Outcome) -> Any:
    return spread(outcome.kind_kg("scrap"), outcome.n)


def same(one: pd.DataFrame, two: pd.DataFrame, rel: float = 1e-10) -> None:
    """Two tables of results hold the same: numbers to `rel`, text exactly."""
    assert list(one["status"]) == list(two["status"])
    for name in one.columns:
        if pd.api.types.is_numeric_dtype(one[name]):
            a, b = one[name].to_numpy(), two[name].to_numpy()
            # a mass that is nothing but rounding (undissolved lime) has no relative error
            np.testing.assert_allclose(a, b, rtol=rel, atol=1e-10, err_msg=name)


@quick
@given(tables)
def test_ordinary_heats_are_solved_and_close(frame: pd.DataFrame) -> None:
    outcome = planned(frame)
    assert outcome.converged.all()
    assert outcome.check_closures().all()
    ((_, again),) = predict_heats(complete_charge(outcome))
    assert again.check_closures().all()


@quick
@given(tables)
def test_plan_then_predict_gives_the_aim_back(frame: pd.DataFrame) -> None:
    outcome = planned(frame)
    ((_, again),) = predict_heats(complete_charge(outcome))
    good = solved(outcome)
    assert again.converged[good].all()
    ours, theirs = outcome.columns(), again.columns()
    aim_T, aim_C = frame["aim_temp_C"].to_numpy(), frame["aim_C_pct"].to_numpy()
    np.testing.assert_allclose(theirs["end_temp_C"][good], aim_T[good], rtol=1e-6)
    np.testing.assert_allclose(theirs["end_C_pct"][good], aim_C[good], rtol=1e-6)
    for name in ("end_P_pct", "end_Mn_pct", "end_S_pct", "steel_kg", "slag_kg", "basicity"):
        np.testing.assert_allclose(theirs[name][good], ours[name][good], rtol=1e-6, err_msg=name)


@quick
@given(tables)
def test_the_aims_are_met_and_one_sets_the_lime(frame: pd.DataFrame) -> None:
    outcome = planned(frame)
    good, table = solved(outcome), outcome.columns()
    P, B = (frame[name].to_numpy() for name in ("aim_P_pct", "aim_basicity"))
    over_P, over_B = table["end_P_pct"] / P - 1.0, 1.0 - table["basicity"] / B
    assert (over_P[good] < 1e-6).all()
    assert (over_B[good] < 1e-6).all()
    # no more lime than the stricter of the two asks for
    assert (np.maximum(over_P, over_B)[good] > -1e-6).all()


@quick
@given(tables, st.floats(0.01, 0.2))
def test_more_silicon_never_lowers_scrap(frame: pd.DataFrame, more: float) -> None:
    richer = frame.assign(hm_Si_pct=frame["hm_Si_pct"] + more)
    one, two = planned(frame), planned(richer)
    good = solved(one) & solved(two)
    assert (scrap(two)[good] >= scrap(one)[good]).all()


@quick
@given(tables, st.floats(1.0, 60.0))
def test_hotter_hot_metal_never_lowers_scrap(frame: pd.DataFrame, more: float) -> None:
    hotter = frame.assign(hot_metal_temp_C=frame["hot_metal_temp_C"] + more)
    one, two = planned(frame), planned(hotter)
    good = solved(one) & solved(two)
    assert (scrap(two)[good] > scrap(one)[good]).all()


@quick
@given(tables, st.floats(0.5, 5.0), st.booleans())
def test_more_lime_never_raises_phosphorus_while_it_dissolves(
    frame: pd.DataFrame, kg_per_t: float, same_oxygen: bool
) -> None:
    """Lime added to a complete charge; oxygen as it was, or enough for the same carbon."""
    charge = complete_charge(planned(frame))
    lime = charge.masses_kg["burnt_lime"]
    more = with_masses(charge, {"burnt_lime": lime + kg_per_t * 1e-3 * frame["hot_metal_kg"]})
    if not same_oxygen:
        charge = with_values(charge, oxygen_Nm3=np.nan)
        more = with_values(more, oxygen_Nm3=np.nan)
    ((_, one),), ((_, two),) = predict_heats(charge), predict_heats(more)
    dissolves = spread(lime_limit(two.p, two.x, two.state), two.n) < 0.0
    good = one.converged & two.converged & dissolves
    P = (spread(out.steel_pct()["P"], out.n)[good] for out in (one, two))
    before, after = P
    assert (after <= before).all()


def test_the_lime_property_is_not_empty() -> None:
    """Lime of the plain heat still dissolves with 2 kg/t more, so the property looks at it."""
    planned_heat = converter_calc.plan(copy.deepcopy(PLAIN_HEAT))
    charge = complete_charge(planned_heat)
    more = with_masses(charge, {"burnt_lime": charge.masses_kg["burnt_lime"] + 360.0})
    outcome = converter_calc.predict(more)
    assert float(spread(lime_limit(outcome.p, outcome.x, outcome.state), 1)[0]) < 0.0


@quick
@given(tables, st.floats(0.01, 50.0))
def test_scaling_every_mass_scales_every_extensive_result(frame: pd.DataFrame, k: float) -> None:
    """The heat lost per minute belongs to the vessel, so it is scaled along."""
    vessel = frame.assign(heat_loss_MJ_per_min=60.0)
    big = vessel.assign(hot_metal_kg=vessel["hot_metal_kg"] * k, heat_loss_MJ_per_min=60.0 * k)
    big["hot_metal_kg"] = big["hot_metal_kg"].clip(upper=6e5)
    factor = (big["hot_metal_kg"] / vessel["hot_metal_kg"]).to_numpy()
    big["heat_loss_MJ_per_min"] = 60.0 * factor
    big = big[big["heat_loss_MJ_per_min"] <= 2000.0]
    if big.empty:
        return
    factor = factor[big.index]
    one = converter_calc.plan(vessel.loc[big.index], SHOP)
    two = converter_calc.plan(big, SHOP)
    for name in one.columns:
        if not pd.api.types.is_numeric_dtype(one[name]):
            continue
        extensive = name.endswith(("_kg", "_Nm3", "_MJ"))
        expected = one[name].to_numpy() * (factor if extensive else 1.0)
        scale = 1e-10 * (two["steel_kg"].max() if extensive else 1.0)
        np.testing.assert_allclose(
            two[name].to_numpy(), expected, rtol=1e-9, atol=scale, err_msg=name
        )


@quick
@given(tables, st.randoms(use_true_random=False))
def test_order_of_rows_and_columns_changes_nothing(frame: pd.DataFrame, chance: Any) -> None:
    order, columns = list(range(ROWS)), list(frame.columns)
    chance.shuffle(order)
    chance.shuffle(columns)
    mixed = converter_calc.plan(frame.iloc[order][columns], SHOP)
    same(converter_calc.plan(frame, SHOP), mixed.sort_index())


def test_order_of_materials_changes_nothing(plain_heat: dict[str, Any]) -> None:
    own = {"kind": "scrap", "pct": {"C": 0.1, "Cu": 0.3}}
    plain_heat["materials"] = {"a_scrap": own, "b_scrap": {**own, "pct": {"Mn": 1.0}}}
    mix = {"heavy_scrap": 40.0, "a_scrap": 25.0, "light_scrap": 20.0, "b_scrap": 15.0}
    plain_heat["choice"]["scrap_mix"] = mix
    plain_heat["charge"] = {"cold_pig_iron_kg": 3000.0, "fluorspar_kg": 200.0, "DRI_kg": 1000.0}
    other = copy.deepcopy(plain_heat)
    for table in (other["materials"], other["choice"]["scrap_mix"], other["charge"]):
        items = list(table.items())[::-1]
        table.clear()
        table.update(items)
    other = dict(reversed(other.items()))
    one, two = (converter_calc.plan(heat).columns() for heat in (plain_heat, other))
    assert set(one) == set(two)
    same(pd.DataFrame(one), pd.DataFrame(two)[list(one)])


@quick
@given(tables)
def test_one_heat_is_a_table_of_one_is_a_row_of_a_table(frame: pd.DataFrame) -> None:
    table = converter_calc.plan(frame, SHOP)
    for row in (0, ROWS - 1):
        alone = converter_calc.plan(frame.iloc[[row]], SHOP)
        same(table.iloc[[row]], alone)
    if table["status"].iloc[0] == "solved":
        values = frame.iloc[0].to_dict()
        heat = copy.deepcopy(PLAIN_HEAT)
        for section, key, name in (
            *(("hot_metal", n.removeprefix("hm_"), n) for n in values if n.startswith("hm_")),
            ("hot_metal", "mass_kg", "hot_metal_kg"),
            ("hot_metal", "temp_C", "hot_metal_temp_C"),
            *(("aim", n.removeprefix("aim_"), n) for n in values if n.startswith("aim_")),
            ("practice", "wait_min", "wait_min"),
        ):
            heat.setdefault(section, {})[key] = float(values[name])
        del heat["hot_metal"]["V_pct"]
        one = pd.DataFrame(converter_calc.plan(heat).columns())
        same(one, table.iloc[[0]][list(one.columns)])


def test_a_row_of_a_big_table_is_the_heat_alone() -> None:
    """Chunks and shared starts of the solver do not show: no row depends on its company."""
    chance = np.random.default_rng(7)
    n = 10_000
    frame = pd.DataFrame({name: chance.uniform(*ends, n) for name, ends in RANGES.items()})
    table = converter_calc.plan(frame, SHOP)
    unsolved = np.flatnonzero(table["status"] == "not converged")
    rows = [0, 1, 2047, 2048, 4095, 4096, 8191, 8192, n // 2, n - 1, *unsolved[:5].tolist()]
    for row in rows:
        same(table.iloc[[row]], converter_calc.plan(frame.iloc[[row]], SHOP))
    assert not unsolved.size


#: Heats that have no answer, each of its own kind.
BAD = {
    "ice cold": {"hot_metal_temp_C": 1100.0, "hm_C_pct": 2.5, "hm_Si_pct": 0.0},
    "no phosphorus": {"aim_P_pct": 0.0005, "hm_P_pct": 0.4, "aim_C_pct": 0.5},
    "no room in the slag": {"pin_slag_FeO_pct": 60.0, "pin_slag_Fe2O3_pct": 39.0},
}


@pytest.mark.parametrize("kind", BAD)
def test_a_bad_neighbour_disturbs_nobody(kind: str) -> None:
    chance = np.random.default_rng(11)
    n = 40
    frame = pd.DataFrame({name: chance.uniform(*ends, n) for name, ends in RANGES.items()})
    good = converter_calc.plan(frame, SHOP)
    spoilt = frame.copy()
    bad_rows = [3, 17, n - 1]
    for name, x in BAD[kind].items():
        spoilt.loc[bad_rows, name] = x
    table = converter_calc.plan(spoilt, SHOP)
    assert (table["status"].iloc[bad_rows] != "solved").all()
    # what an unsolved heat shows is blank, and says why
    assert table["steel_kg"].iloc[bad_rows].isna().all()
    assert (table["binding"].iloc[bad_rows].str.len() > 0).all()
    others = [row for row in range(n) if row not in bad_rows]
    same(good.iloc[others], table.iloc[others])
