"""Limits and aims out of reach. Kind of check: contract (exit 3 says what binds and what frees).

The nearest end point is checked by going there: a heat that aims at it must be solvable, sit
at the limit, and predict it.
"""

from __future__ import annotations

from pathlib import Path
from typing import Any

import numpy as np
import pytest
from click.testing import CliRunner

import converter_calc
from converter_calc.basis.errors import InfeasibleError, InputError
from converter_calc.cli import main
from converter_calc.planning.outcome import Outcome
from converter_calc.planning.solving import complete_charge
from tests.demo import merged, unlimited

MIX = {"heavy_scrap": 0.5, "shop_scrap": 0.3, "galvanised_bundles": 0.2}


def heat(name: str = "ordinary_low_carbon", **changes: Any) -> dict[str, Any]:
    return merged(unlimited(name), changes)


def refused(document: dict[str, Any]) -> InfeasibleError:
    with pytest.raises(InfeasibleError) as caught:
        converter_calc.plan(document)
    return caught.value


def number(x: Any) -> float:
    return float(np.ravel(x)[0])


def assert_reached(planned: Outcome, nearest: dict[str, float]) -> None:
    """Predicting the planned charge ends at the nearest end point."""
    end = converter_calc.predict(complete_charge(planned)).document()["end_point"]
    found = {
        "end_temp_C": end["temperature_C"],
        "end_C_pct": end["steel_pct"]["C"],
        "end_P_pct": end["steel_pct"]["P"],
        "steel_kg": end["steel_kg"],
        "slag_kg": end["slag_kg"],
    }
    for name, value in found.items():
        assert nearest[name] == pytest.approx(value, rel=1e-6), name


def at_temperature(document: dict[str, Any], nearest: dict[str, float]) -> Outcome:
    """The heat aimed at the temperature of the nearest end point, limits lifted."""
    free = merged(document, {"aim": {"temp_C": nearest["end_temp_C"]}})
    free.pop("limit", None)
    for material in free["materials"].values():
        material.pop("stock_kg", None)
    return converter_calc.plan(free)


#: change, scrap that it allows [kg], name of the limit
SCRAP_LIMITS = [
    ({"limit": {"scrap_box_kg": 42000.0}}, 42000.0, "limit.scrap_box_kg"),
    ({"limit": {"charge_kg": 228000.0}}, 43000.0, "limit.charge_kg"),
    (
        {"materials": {"heavy_scrap": {"stock_kg": 21500.0}}},
        43000.0,
        "materials.heavy_scrap.stock_kg",
    ),
    (
        {"limit": {"scrap_box_m3": 38.0}},
        38.0 / (0.5 / 1000.0 + 0.3 / 1200.0 + 0.2 / 1300.0),
        "limit.scrap_box_m3",
    ),
]


@pytest.mark.parametrize(("change", "allowed_kg", "name"), SCRAP_LIMITS)
def test_scrap_beyond_a_limit(change: dict[str, Any], allowed_kg: float, name: str) -> None:
    document = heat(**change)
    error = refused(document)
    assert error.binding.startswith(name)
    assert f"{allowed_kg:.0f} kg are allowed" in error.binding
    planned = at_temperature(document, error.nearest)
    assert number(planned.x["scrap_kg"]) == pytest.approx(allowed_kg, rel=1e-6)
    assert_reached(planned, error.nearest)


@pytest.mark.parametrize(("change", "allowed_kg", "name"), SCRAP_LIMITS)
def test_the_coolant_named_frees_the_heat(
    change: dict[str, Any], allowed_kg: float, name: str
) -> None:
    """What the message offers is what a plan with that scrap asks for."""
    document = heat(**change)
    offer = refused(document).frees[0]
    planned = converter_calc.plan(
        merged(document, {"charge": {"scrap_kg": allowed_kg * (1.0 - 1e-9)}})
    )
    assert f"about {number(planned.x['trim_kg']):.0f} kg of lump_ore" in offer


def test_stock_of_scraps_in_order() -> None:
    document = heat(
        "scrap_by_preference",
        materials={
            "ladle_skulls": {"stock_kg": 15000.0},
            "shop_scrap": {"stock_kg": 18000.0},
            "heavy_scrap": {"stock_kg": 6000.0},
        },
    )
    error = refused(document)
    assert error.binding.startswith("stock of all scrap in choice.scrap_order")
    assert "39000 kg are allowed" in error.binding


def test_short_of_heat() -> None:
    document = heat(
        hot_metal={"temp_C": 1200.0, "Si_pct": 0.05, "C_pct": 3.6}, aim={"temp_C": 1700.0}
    )
    error = refused(document)
    assert error.binding.startswith("heat:")
    kg = float(error.frees[0].split()[1])
    assert "ferrosilicon_75" in error.frees[0]
    # the fuel named brings the heat to its aim without scrap
    fuelled = converter_calc.plan(merged(document, {"charge": {"scrap_kg": 0.0}}))
    assert -number(fuelled.x["trim_kg"]) == pytest.approx(kg, abs=0.5)
    assert error.nearest["end_temp_C"] < 1700.0
    cooler = heat(
        hot_metal={"temp_C": 1200.0, "Si_pct": 0.05, "C_pct": 3.6},
        aim={"temp_C": error.nearest["end_temp_C"], "P_pct": 0.1},
    )
    planned = converter_calc.plan(
        merged(cooler, {"aim": {"temp_C": cooler["aim"]["temp_C"] - 0.1}})
    )
    assert 0.0 < number(planned.x["scrap_kg"]) < 200.0


def test_phosphorus_out_of_reach() -> None:
    """An aim a little above the nearest can be met, one a little below cannot."""
    for change in (
        {"aim": {"P_pct": 0.002}},
        {"hot_metal": {"P_pct": 0.4}, "aim": {"P_pct": 0.006}},
    ):
        document = heat(**change)
        error = refused(document)
        assert error.binding.startswith("phosphorus (aim.P_pct)")
        best = error.nearest["end_P_pct"]
        planned = converter_calc.plan(merged(document, {"aim": {"P_pct": best * 1.001}}))
        assert number(planned.steel_pct()["P"]) == pytest.approx(best * 1.001, rel=1e-5)
        again = refused(merged(document, {"aim": {"P_pct": best * 0.99}}))
        assert again.nearest["end_P_pct"] == pytest.approx(best, rel=1e-6)


def test_phosphorus_out_of_reach_is_not_met_by_lime_that_stays_solid() -> None:
    """Medium carbon, little iron oxide: undissolved lime must not stand in for scrap."""
    error = refused(heat("medium_carbon_catch", aim={"P_pct": 0.01}))
    assert error.binding.startswith("phosphorus (aim.P_pct)")
    assert error.nearest["end_P_pct"] > 0.01
    assert error.nearest["steel_kg"] > 186000.0  # scrap was charged


@pytest.mark.parametrize(
    ("change", "name"),
    [
        ({"limit": {"slag_kg": 14000.0}}, "limit.slag_kg"),
        ({"limit": {"charge_kg": 220000.0}, "charge": {"scrap_kg": 50000.0}}, "limit.charge_kg"),
        (
            {"limit": {"scrap_box_kg": 40000.0}, "charge": {"scrap_kg": 50000.0}},
            "limit.scrap_box_kg",
        ),
        ({"limit": {"scrap_box_m3": 36.0}, "charge": {"scrap_kg": 50000.0}}, "limit.scrap_box_m3"),
    ],
)
def test_weights_and_volumes(change: dict[str, Any], name: str) -> None:
    document = heat(**change)
    error = refused(document)
    assert error.binding.startswith(name)
    assert "reaches the same aim" in error.frees[0]
    percent = float(error.frees[0].split("smaller by ")[1].split(" %")[0])
    k = 1.0 - percent / 100.0
    small = merged(document, {"hot_metal": {"mass_kg": document["hot_metal"]["mass_kg"] * k}})
    small["practice"]["stirring_gas_Nm3"] *= k
    if "scrap_kg" in small.get("charge", {}):
        small["charge"]["scrap_kg"] *= k
    small.pop("limit")
    planned = converter_calc.plan(small)
    for key, value in error.nearest.items():
        # the message gives the factor to 0.1 %
        assert value == pytest.approx(number(planned.columns()[key]), rel=2e-3), key


def test_charge_weight_where_the_steel_is_asked_for() -> None:
    error = refused(heat("high_silicon", limit={"charge_kg": 200000.0}))
    assert error.binding.startswith("limit.charge_kg")
    assert error.nearest["end_temp_C"] == pytest.approx(1665.0)


def test_largest_share_of_a_scrap() -> None:
    document = heat(materials={"galvanised_bundles": {"max_share_pct": 10.0}})
    error = refused(document)
    assert error.binding.startswith("materials.galvanised_bundles.max_share_pct")
    assert "20.0 %" in error.binding
    assert "10.0 %" in error.frees[0]
    document["choice"]["scrap_mix"] = {
        "heavy_scrap": 0.9 * 0.5 / 0.8,
        "shop_scrap": 0.9 * 0.3 / 0.8,
        "galvanised_bundles": 0.1,
    }
    assert_reached(converter_calc.plan(document), error.nearest)


def test_stock_of_the_coolant() -> None:
    document = heat(charge={"scrap_kg": 42000.0}, materials={"lump_ore": {"stock_kg": 300.0}})
    error = refused(document)
    assert error.binding.startswith("stock: the heat needs")
    assert "lump_ore" in error.binding
    assert "materials.lump_ore.stock_kg" in error.frees[0]
    planned = at_temperature(document, error.nearest)
    assert number(planned.x["trim_kg"]) == pytest.approx(300.0, rel=1e-5)
    assert_reached(planned, error.nearest)


def test_stock_of_the_fuel() -> None:
    document = heat("cold_hot_metal", materials={"ferrosilicon_75": {"stock_kg": 1000.0}})
    error = refused(document)
    assert "ferrosilicon_75" in error.binding
    assert "1000 kg are at hand" in error.binding
    assert error.nearest["end_temp_C"] < 1665.0


@pytest.mark.parametrize(("name", "stock_kg"), [("burnt_lime", 4000.0), ("dolomitic_lime", 1000.0)])
def test_stock_of_lime_and_flux(name: str, stock_kg: float) -> None:
    document = heat(materials={name: {"stock_kg": stock_kg}})
    error = refused(document)
    assert error.binding.startswith(f"materials.{name}.stock_kg")
    planned = converter_calc.plan(merged(document, {"charge": {f"{name}_kg": stock_kg}}))
    assert_reached(planned, error.nearest)


def test_tramp_element_of_the_grade() -> None:
    """The share that is said to fit does fit, and half a per cent more does not."""
    own = {"soft": {"standard": "own", "limits": {"C": {"max": 0.08}, "Cu": {"max": 0.03}}}}
    document = heat(
        aim={"grade": "soft"},
        grades=own,
        materials={"heavy_scrap": {"pct": {"Cu": 0.4}}},
    )
    error = refused(document)
    assert "tramp limit of grade soft" in error.binding
    assert "Cu" in error.binding
    assert "heavy_scrap" in error.binding
    fits = float(error.frees[0].split("more than ")[1].split(" %")[0]) / 100.0
    rest = 1.0 - fits

    def mixed(share: float) -> dict[str, Any]:
        others = {"shop_scrap": 0.6, "galvanised_bundles": 0.4}
        mix = {"heavy_scrap": share, **{k: x * (1.0 - share) for k, x in others.items()}}
        return merged(document, {"choice": {"scrap_mix": mix}})

    assert 0.0 < fits < 0.5
    assert rest > 0.5
    # the scrap asked for moves a little with the mix, so the share holds to some per cent
    converter_calc.plan(mixed(fits * 0.97))
    assert "Cu" in refused(mixed(fits * 1.03)).binding


@pytest.mark.parametrize(
    ("name", "change", "field"),
    [
        ("ordinary_low_carbon", {"aim": {"steel_kg": 200000.0}}, "hot_metal.mass_kg"),
        ("ordinary_low_carbon", {"choice": {"ask": "steel"}}, "aim.steel_kg"),
        ("ordinary_low_carbon", {"choice": {"ask": "trim"}}, "charge.scrap_kg"),
        (
            "ordinary_low_carbon",
            {"choice": {"ask": "scrap"}, "charge": {"scrap_share_pct": 20.0}},
            "charge.scrap_share_pct",
        ),
        (
            "ordinary_low_carbon",
            {"choice": {"ask": "scrap"}, "charge": {"scrap_kg": 1000.0}},
            "charge.scrap_kg",
        ),
        ("ordinary_low_carbon", {"pin": {"end_temp_C": 1665.0}}, "pin.end_temp_C"),
    ],
)
def test_questions_that_contradict_themselves(
    name: str, change: dict[str, Any], field: str
) -> None:
    with pytest.raises(InputError) as caught:
        converter_calc.plan(heat(name, **change))
    assert field in [fault.field for fault in caught.value.faults]


def test_steel_asked_for_with_scrap_given_closes() -> None:
    """Hot metal and coolant are solved for; scrap given is not counted twice."""
    document = heat("high_silicon", charge={"scrap_kg": 30000.0}, choice={"ask": "steel"})
    planned = converter_calc.plan(document)
    assert planned.check_closures().all()
    assert number(planned.kind_kg("scrap")) == pytest.approx(30000.0)
    assert number(planned.state.steel_kg) == pytest.approx(205000.0, rel=1e-9)


def test_scrap_given_by_name_comes_on_top_of_free_scrap() -> None:
    document = heat(charge={"cold_pig_iron_kg": 5000.0}, choice={"ask": "scrap"})
    planned = converter_calc.plan(document)
    assert planned.check_closures().all()
    assert number(planned.kind_kg("scrap")) == pytest.approx(number(planned.x["scrap_kg"]) + 5000.0)


def test_the_command_line_says_what_binds_and_what_frees(tmp_path: Path) -> None:
    shop = Path(__file__).resolve().parents[1] / "demo_heats" / "shop.toml"
    text = (shop.parent / "ordinary_low_carbon.toml").read_text(encoding="utf-8")
    text = text.replace('"shop.toml"', f"'{shop}'") + "\n[limit]\nscrap_box_kg = 42000\n"
    file = tmp_path / "boxed.toml"
    file.write_text(text, encoding="utf-8")
    result = CliRunner().invoke(main, ["plan", str(file)])
    assert result.exit_code == 3
    assert result.stdout == ""
    lines = result.stderr.splitlines()
    assert "limit.scrap_box_kg" in lines[0]
    assert any(line.startswith("  it would be freed by: ") for line in lines)
    assert any("nearest reachable end point: end_temp_C 17" in line for line in lines)
