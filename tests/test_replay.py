"""Replay of a heat log. Kinds of check: identity (replay is the prediction of each heat) and
derivative (implicit derivatives against central differences of replays, 1e-5 of the largest;
a difference itself is good to about 1e-7).
"""

from __future__ import annotations

from functools import cache

import numpy as np
import pandas as pd
import pytest

import converter_calc
from converter_calc.basis.errors import InputError
from converter_calc.learning.parameters import parameter_set
from converter_calc.learning.replay import HeatLog, read_heats, replay
from converter_calc.learning.replay_quantities import quantities
from tests.heat_logs import SHOP, charges, made_log

#: Step of a central difference, in each parameter's own unit.
STEPS = {
    "heat_loss_MJ_per_t": 0.1,
    "heat_loss_MJ_per_min": 0.1,
    "post_combustion_ratio": 1e-5,
    "oxygen_utilisation_pct": 1e-3,
    "iron_oxide_factor": 1e-4,
    "P_approach": 1e-4,
    "Mn_approach": 1e-4,
    "S_approach": 1e-4,
    "heavy_scrap_yield_factor": 1e-4,
    "galvanised_bundles_yield_factor": 1e-4,
    "scrap_yield_factor": 1e-4,
    "hot_metal_temp_error_C": 0.02,
    "hot_metal_weight_error_pct": 2e-3,
    "scrap_weight_error_pct": 2e-3,
    "oxygen_meter_error_pct": 1e-3,
}


@cache
def log_frame() -> pd.DataFrame:
    return made_log(60, noise=1.0)


@cache
def ready() -> HeatLog:
    return read_heats(log_frame(), SHOP)


def test_replay_is_the_prediction_of_each_heat() -> None:
    found = replay(ready())
    table = converter_calc.predict(charges(60), SHOP)
    for name in ("end_temp_C", "end_C_pct", "end_P_pct", "end_Mn_pct", "end_O_ppm", "steel_kg"):
        expected = quantities()[name].transformed(table[name].to_numpy(dtype=float))
        column = found.predicted[:, found.names.index(name)]
        assert column == pytest.approx(expected, rel=1e-9)
    assert found.converged.all()


def test_slag_is_that_of_a_sample() -> None:
    """Undissolved lime and sulphide count as CaO, all iron as FeO: mass balance by molar masses
    of the standard atomic weights (CaO 56.08, CaS 72.14, FeO 71.84, Fe2O3 159.69)."""
    found = replay(ready())
    table = converter_calc.predict(charges(60), SHOP)
    iron = table["slag_FeO_pct"] + table["slag_Fe2O3_pct"] * 2 * 71.844 / 159.687
    share = table["slag_kg"] / (table["slag_kg"] + table["undissolved_lime_kg"])
    column = found.predicted[:, found.names.index("slag_FeO_pct")]
    assert column == pytest.approx((iron * share).to_numpy(), rel=1e-5)
    lime = table["slag_CaO_pct"] + table["slag_CaS_pct"] * 56.077 / 72.143
    lime = lime * share + 100.0 * (1.0 - share)
    column = found.predicted[:, found.names.index("slag_CaO_pct")]
    assert column == pytest.approx(lime.to_numpy(), rel=1e-5)


def test_no_tuning_parameter_is_left_out_of_the_derivative_check() -> None:
    shop = {"materials": {}}
    names = set(parameter_set(shop, log_frame().columns).names)
    assert names <= {*STEPS, "shop_scrap_yield_factor"}


@pytest.mark.parametrize("name", STEPS)
def test_jacobian_against_finite_differences(name: str) -> None:
    log = ready()
    J = replay(log, jacobian_of=[name]).jacobian[:, :, 0]
    values = log.parts[0].heats.values.get(name)
    middle = 1.0 if values is None else float(values[0])
    h = STEPS[name]
    up, down = (replay(log, values={name: middle + x}).predicted for x in (h, -h))
    difference = (up - down) / (2.0 * h)
    largest = np.abs(J).max(axis=0)
    # what hardly moves is lost in the rounding of two solves
    floor = np.abs(up).max(axis=0) * 1e-11 / h
    assert (np.abs(J - difference) <= 1e-5 * largest + floor).all()
    assert largest.max() > 0.0


def test_a_value_for_each_heat() -> None:
    """Heats with a value of their own come out as a log with that value for all does."""
    log = ready()
    own = np.where(np.arange(60) % 2, 30.0, 60.0)
    mixed = replay(log, values={"heat_loss_MJ_per_t": own}).predicted
    for value in (30.0, 60.0):
        alone = replay(log, values={"heat_loss_MJ_per_t": value}).predicted
        assert mixed[own == value] == pytest.approx(alone[own == value], rel=1e-9)


def test_the_order_of_replays_makes_no_difference() -> None:
    log = read_heats(log_frame(), SHOP)
    first = replay(log).predicted
    replay(log, values={"iron_oxide_factor": 1.5, "heat_loss_MJ_per_t": 90.0})
    assert replay(log).predicted == pytest.approx(first, rel=1e-9)


def test_what_cannot_be_replayed_is_told_and_the_rest_is_not_touched() -> None:
    frame = made_log(8, noise=1.0)
    frame.loc[1, "hm_Si_pct"] = np.nan
    frame.loc[2, "heavy_scrap_kg"] = np.nan
    frame.loc[3, "hot_metal_temp_C"] = 134.0
    frame.loc[4, "hm_S_pct"] = np.nan
    frame.loc[5, "end_P_pct"] = np.nan
    log = read_heats(frame, SHOP)
    told = dict(zip(log.faults["row"], log.faults["field"], strict=True))
    assert told == {1: "hm_Si_pct", 2: "heavy_scrap_kg", 3: "hot_metal_temp_C"}
    found = replay(log)
    assert found.usable.tolist() == [True, False, False, False, True, True, True, True]
    assert np.isnan(found.residuals[1]).all()
    S, P = found.names.index("end_S_pct"), found.names.index("end_P_pct")
    assert np.isnan(found.residuals[4, S]), "sulphur of a heat whose hot metal was not analysed"
    assert np.isnan(found.residuals[5, P])
    assert np.isfinite(found.predicted[5, P])
    clean = replay(made_log(8, noise=1.0), SHOP)
    assert found.predicted[7] == pytest.approx(clean.predicted[7], rel=1e-9)


def test_an_outcome_that_is_missing_is_not_zero() -> None:
    frame = made_log(4)
    frame["end_Mn_pct"] = np.nan
    assert "end_Mn_pct" not in replay(frame, SHOP).names


@pytest.mark.parametrize(
    ("change", "words"),
    [
        ({"drop": "oxygen_Nm3"}, "oxygen_Nm3: the log has no such column"),
        (
            {"values": {"iron_oxid": 3.0}},
            "iron_oxid: is no numeric input; nearest: iron_oxide_factor",
        ),
    ],
)
def test_wrong_calls_are_told_in_one_sentence(change: dict[str, object], words: str) -> None:
    frame = made_log(3)
    if "drop" in change:
        frame = frame.drop(columns=[change["drop"]])
    with pytest.raises(InputError, match=words):
        replay(frame, SHOP, values=change.get("values"))  # type: ignore[arg-type]
