"""A whole heat against what the trade knows. Kind of check: common practice, no source.

Exceptions name their source. Ranges are the trade's and are not widened: where the model
falls outside for a reason that lies in the rule, the check is marked as an expected failure
(strict) with the size of the difference and the reason.

Coolants and fuels are compared with clean scrap (iron at 25 °C). As in the trade's figures
what does not belong to the material itself is left as it is: iron in the slag, dust,
ejections, droplets, wear and heat loss. (With all of these following, scrap takes 1.30 in
place of 1.40 MJ/kg: its share of dust and iron oxide gives heat back.)
"""

from __future__ import annotations

from functools import cache
from typing import Any

import numpy as np
import pytest

import converter_calc
from converter_calc.balance.heats import HeatTable
from converter_calc.planning.outcome import Outcome
from converter_calc.planning.solving import complete_charge, with_masses, with_values
from tests.demo import ordinary

STEP_KG = 100.0


def number(x: Any) -> float:
    return float(np.ravel(x)[0])


@cache
def demo_heat() -> Outcome:
    """The ordinary heat as the demo plans it."""
    return converter_calc.plan(ordinary())


def clean_document(**changes: Any) -> dict[str, Any]:
    """The ordinary heat with clean scrap in place of the demo's mix."""
    heat = ordinary(materials={"clean_scrap": {"kind": "scrap", "pct": {"Fe": 100.0}}}, **changes)
    heat["choice"]["scrap_mix"] = {"clean_scrap": 1.0}
    heat["choice"]["ask"] = "scrap"
    return heat


@cache
def held() -> dict[str, float]:
    """Pins that leave dust, ejections, droplets, wear and heat loss as in the clean heat."""
    s = converter_calc.plan(clean_document()).state
    return {
        "dust_kg": number(s.laws["dust_kg"]),
        "ejections_kg": number(s.ejections_kg),
        "droplets_kg": number(s.droplets_kg),
        "lining_wear_kg": number(s.charged_kg["lining"]),
        "heat_loss_MJ": number(s.heat_loss_J) / 1e6,
    }


@cache
def iron_in_slag_kg() -> float:
    """Iron that the slag of the clean heat holds as oxide."""
    slag = converter_calc.plan(clean_document()).state.slag_species_kg
    return 0.7773 * number(slag["FeO"]) + 0.6994 * number(slag["Fe2O3"])


def share_for(outcome: Outcome) -> float:
    """Share of the iron charged that makes up iron_in_slag_kg [%]."""
    return 100.0 * iron_in_slag_kg() / number(outcome.state.totals.of("Fe"))


@cache
def charge() -> HeatTable:
    """The clean heat as a complete charge; the carbon is held and oxygen follows."""
    planned = converter_calc.plan(clean_document())
    pins = {f"pin_{name}": x for name, x in held().items()}
    return with_values(
        complete_charge(planned), oxygen_Nm3=np.nan, pin_iron_to_slag_pct=share_for(planned), **pins
    )


def end_temp_C(heats: HeatTable, iron_kg: float | None = None) -> float:
    """End temperature with the iron in the slag held at a mass."""
    iron_kg = iron_in_slag_kg() if iron_kg is None else iron_kg
    first = converter_calc.predict(heats)  # for the iron charged, which is what it is
    share = 100.0 * iron_kg / number(first.state.totals.of("Fe"))
    again = converter_calc.predict(with_values(heats, pin_iron_to_slag_pct=share))
    return number(again.state.T_K) - 273.15


def cooling_K_per_kg(name: str, heats: HeatTable) -> float:
    have = number(np.nan_to_num(heats.masses_kg.get(name, 0.0)))
    more = with_masses(heats, {name: have + STEP_KG})
    return (end_temp_C(heats) - end_temp_C(more)) / STEP_KG


def equivalent(name: str, **practice: float) -> float:
    """Cooling of 1 kg against 1 kg of clean scrap, lime and flux left as they are."""
    heats = with_values(charge(), **practice)
    return cooling_K_per_kg(name, heats) / cooling_K_per_kg("clean_scrap", heats)


def scrap_asked_kg(charged: dict[str, float], **pins: float) -> float:
    """Clean scrap that the plan asks for, the iron in the slag held."""
    share = share_for(converter_calc.plan(clean_document()))
    for _ in range(3):  # iron charged depends a little on the scrap asked for
        pin = {**held(), "iron_to_slag_pct": share, **pins}
        planned = converter_calc.plan(clean_document(charge=charged, pin=pin))
        share = share_for(planned)
    return number(planned.x["scrap_kg"])


def more_scrap(name: str) -> float:
    """Extra clean scrap per kg of a material, lime and magnesia flux following their aims."""
    key = f"{name}_kg"
    return (scrap_asked_kg({key: STEP_KG}) - scrap_asked_kg({key: 0.0})) / STEP_KG


def true_gap(reason: str) -> Any:
    return pytest.mark.xfail(strict=True, reason=reason)


#: Where the rule and the model part: what the model finds, kept true by a test below.
STATED = {
    "lump_ore": 4.48,
    "pellets": 4.22,
    "mill_scale": 3.73,
    "sinter": 3.60,
    "limestone, all reacted": 4.20,
    "C": 96.6,
    "Mn": 68.6,
    "P": 217.6,
    "Fe": 44.0,
}
#: 1 kg of Fe2O3 taken apart and its iron heated takes 6.15 MJ (JANAF), 4.4 times scrap: see
#: test_ore_follows_from_thermochemistry. The trade's figures leave part of the ore's iron in
#: the slag as FeO, and do not count that water splits on the bath.
ORE = "thermochemistry gives {}, the rule's upper end is {}: it leaves ore iron in the slag"


@pytest.mark.parametrize(
    ("name", "low", "high"),
    [
        ("cold_pig_iron", 0.6, 0.75),
        ("DRI", 1.1, 1.4),
        ("HBI", 1.1, 1.4),
        ("burnt_lime", 0.8, 1.5),
        pytest.param(
            "lump_ore", 3.0, 4.4,
            marks=true_gap(ORE.format("4.48 (4.17 were its 5 % water to leave as steam)", "4.4")),
        ),
        pytest.param("pellets", 3.3, 3.8, marks=true_gap(ORE.format("4.22", "3.8"))),
        pytest.param("mill_scale", 2.7, 3.5, marks=true_gap(ORE.format("3.73", "3.5"))),
        pytest.param("sinter", 2.8, 3.2, marks=true_gap(ORE.format("3.60", "3.2"))),
    ],
)  # fmt: skip
def test_coolant_equivalents(name: str, low: float, high: float) -> None:
    """Common practice, no source."""
    found = equivalent(name)
    print(f"{name}: {found:.3f}")
    assert low <= found <= high


@pytest.mark.parametrize(
    ("name", "reacted_pct", "low", "high"),
    [
        ("limestone", 0.0, 2.2, 3.0),
        ("raw_dolomite", 0.0, 2.0, 2.8),
        ("limestone", 30.0, 2.2, 3.5),
        pytest.param(
            "limestone", 100.0, 2.2, 3.5,
            marks=true_gap(
                "4.20, 0.7 above: CO2 to CO takes 283 kJ/mol (JANAF), 2.7 MJ/kg of limestone if "
                "all of it reacts; 3.5 is reached at 59 %"
            ),
        ),
    ],
)  # fmt: skip
def test_carbonates(name: str, reacted_pct: float, low: float, high: float) -> None:
    """Common practice, no source: 2.2 to 3.0, up to 3.5 where CO2 reacts with carbon."""
    found = equivalent(name, carbonate_CO2_reacted_pct=reacted_pct)
    print(f"{name}, {reacted_pct} % reacted: {found:.3f}")
    assert low <= found <= high


@pytest.mark.parametrize(
    ("name", "low", "high"),
    [
        ("coke", 3.0, 5.0),
        ("anthracite", 3.0, 5.0),
        ("ferrosilicon_75", 7.0, 12.0),
        ("silicon_carbide", 5.0, 8.0),
        # taken as coolants, the lime that they bring is saved
        ("limestone", -3.0, -2.2),
        ("raw_dolomite", -2.8, -2.0),
        ("cold_pig_iron", -0.75, -0.6),
        ("HBI", -1.4, -1.1),
    ],
)
def test_extra_scrap_per_kg(name: str, low: float, high: float) -> None:
    """Common practice, no source: extra scrap per kg of fuel, lime following."""
    found = more_scrap(name)
    print(f"{name}: {found:.3f}")
    assert low <= found <= high


def test_ore_follows_from_thermochemistry() -> None:
    """JANAF: Fe2O3 -825.5 kJ/mol; steel 1.355 MJ/kg at 1600 °C and 0.82 kJ/(kg K) above.

    Pellets as the library has them: 94.5 % Fe2O3, 0.5 % FeO (-272 kJ/mol), the rest heated
    like slag (1.9 MJ/kg), 1 % water split or boiled (13.4 and 2.4 MJ/kg, heated by 2.9).
    """
    end_C = end_temp_C(charge())
    steel = 1.355 + 0.82e-3 * (end_C - 1600.0)
    iron = 0.99 * (0.945 * 0.6994 + 0.005 * 0.7773)
    apart = 0.99 * (0.945 * 0.8255 / 0.15969 + 0.005 * 0.272 / 0.07184)
    water = 0.01 * (0.7 * 13.4 + 2.4 + 2.9)
    by_hand = (apart + iron * steel + 0.99 * 0.05 * 1.9 + water) / steel
    assert equivalent("pellets") == pytest.approx(by_hand, rel=0.02)


def test_scrap_takes_1_42_MJ_per_kg() -> None:
    """Encyclopaedia Britannica, "Steel": 1.42 MJ to melt 1 kg of scrap (temperature not given)."""
    loss = held()["heat_loss_MJ"] + 100.0
    taken = 100.0 / (scrap_asked_kg({}) - scrap_asked_kg({}, heat_loss_MJ=loss))
    print(f"scrap takes {taken:.3f} MJ/kg")
    # taps from 1630 to 1700 °C move the heat content of iron by 0.03 to either side
    assert taken == pytest.approx(1.42, abs=0.03)


# --- heat of oxidation ----------------------------------------------------------------------


@cache
def bare_charge() -> HeatTable:
    """The clean heat with all else held: analysis pinned, carbon to CO only, lime dissolved."""
    steel = converter_calc.predict(charge()).steel_pct()
    pins = {f"pin_end_{el}_pct": number(steel[el]) for el in ("Mn", "P", "S", "Si")}
    return with_values(
        charge(), post_combustion_ratio=0.0, ferric_share_pct=0.0,
        carbonate_CO2_reacted_pct=0.0, pin_undissolved_lime_kg=0.0, **pins,
    )  # fmt: skip


def capacity_MJ_per_K_t() -> float:
    """Heat that warms the bath with slag and gas by 1 K, per tonne of metal."""
    heats = bare_charge()
    outcome = converter_calc.predict(heats)
    loss = number(outcome.state.heat_loss_J) / 1e6
    less, more = (with_values(heats, pin_heat_loss_MJ=x) for x in (loss, loss + 100.0))
    return 100.0 / (end_temp_C(less) - end_temp_C(more)) / number(outcome.state.metal_kg) * 1e3


def rise_K(element: str, lime_kg_per_kg: float = 0.0) -> float:
    """Bath rise for 1 % of an element oxidised, lime added for it if asked."""
    heats, pct = bare_charge(), 0.02
    metal = number(converter_calc.predict(heats).state.metal_kg)
    kg = pct * 0.01 * number(heats.values["hot_metal_kg"])
    more, iron = with_values(heats), iron_in_slag_kg()
    if element == "Fe":
        iron += kg
    else:
        more.hm_pct = {**heats.hm_pct, element: heats.hm_pct[element] + pct}
        more.hm_pct["Fe"] = heats.hm_pct["Fe"] - pct
    lime = heats.masses_kg["burnt_lime"] + kg * lime_kg_per_kg
    more = with_masses(more, {"burnt_lime": lime})
    return (end_temp_C(more, iron) - end_temp_C(heats)) / (100.0 * kg / metal)


#: Burnt lime (92 % CaO) per kg: CaO/SiO2 = 3.5 for Si; 4 CaO.P2O5 for P.
LIME_FOR_SI = 60.084 / 28.085 * 3.5 / (0.92 - 3.5 * 0.015)
LIME_FOR_P = 2.0 * 56.077 / 30.974 / 0.9
#: The rule warms slag of 15 % and a lining of 10 % of the metal along with the bath; in a
#: whole heat only what is there is warmed (0.97 MJ/K per tonne of metal), the lining's share
#: being part of the heat loss. The heats themselves agree (test below).
RULE = "{}: the rule also warms slag of 15 % and a lining of 10 % of the metal"


@pytest.mark.parametrize(
    ("element", "lime", "low", "high"),
    [
        ("Si", LIME_FOR_SI, 132.0, 142.0),
        pytest.param("C", 0.0, 82.0, 84.0, marks=true_gap(RULE.format("96.6 K, 15 % above 84"))),
        pytest.param("Mn", 0.0, 47.0, 47.9, marks=true_gap(RULE.format("68.6 K, 46 % above 47"))),
        pytest.param(
            "P", LIME_FOR_P, 173.0, 173.9, marks=true_gap(RULE.format("217.6 K, 26 % above 173"))
        ),
        pytest.param("Fe", 0.0, 29.0, 30.0, marks=true_gap(RULE.format("44.0 K, 47 % above 30"))),
    ],
)  # fmt: skip
def test_bath_rise_for_1_pct_oxidised(element: str, lime: float, low: float, high: float) -> None:
    """Common practice, no source: K for 1 % oxidised at 1400 to 1600 °C, oxygen at 25 °C."""
    found = rise_K(element, lime)
    print(f"{element}: {found:.1f} K")
    assert low <= found <= high


@pytest.mark.parametrize(
    ("element", "MJ_per_kg", "rel"),
    [
        ("C", 9.4, 0.02),
        # the oxides also form silicates and lie 65 K above 1600 °C
        ("Fe", 4.1, 0.06),
        ("Mn", 6.2, 0.08),
    ],
)
def test_heat_of_oxidation_in_a_whole_heat(element: str, MJ_per_kg: float, rel: float) -> None:
    """NASA polynomials (McBride et al. 2002), solution heats of Sigworth & Elliott 1974.

    Element dissolved in iron, oxygen at 25 °C, products at 1600 °C (computed from these).
    """
    found = rise_K(element) * capacity_MJ_per_K_t() / 10.0
    print(f"{element}: {found:.2f} MJ/kg")
    assert found == pytest.approx(MJ_per_kg, rel=rel)


@pytest.mark.parametrize("item", STATED)
def test_stated_differences_are_true(item: str) -> None:
    """What stands in STATED is what the model finds, to 1 %. Kind of check: property."""
    if item == "limestone, all reacted":
        found = equivalent("limestone", carbonate_CO2_reacted_pct=100.0)
    elif len(item) <= 2:
        found = rise_K(item, LIME_FOR_P if item == "P" else 0.0)
    else:
        found = equivalent(item)
    assert found == pytest.approx(STATED[item], rel=0.01)


# --- consumption figures --------------------------------------------------------------------


def figures() -> dict[str, float]:
    """The ordinary heat of the demo shop, per tonne of steel."""
    outcome = demo_heat()
    s, recipe = outcome.state, outcome.recipe()
    t = number(s.steel_kg) * 1e-3
    Mn = number(outcome.steel_pct()["Mn"]) * number(s.metal_kg) * 0.01
    return {
        "oxygen, Nm3/t": number(recipe["oxygen_Nm3"]) / t,
        "lime and dolomitic lime, kg/t": (
            number(recipe["burnt_lime_kg"]) + number(recipe["dolomitic_lime_kg"])
        ) / t,
        "slag, kg/t": number(s.slag_kg) / t,
        "hot metal, kg/t": number(recipe["hot_metal_kg"]) / t,
        "scrap, kg/t": number(recipe["scrap_total_kg"]) / t,
        "metallic yield, %": number(outcome.columns()["yield_pct"]),
        "end Mn of charged, %": 100.0 * Mn / number(s.totals.of("Mn")),
        "L_S": number(s.laws["L_S"]),
        "heat loss, % of input": number(s.heat_loss_J) / 1e4 / number(outcome.heat_input_MJ()),
        "tap, C": number(s.T_K) - 273.15,
        "basicity": number(s.basicity),
        "MgO, %": number(s.slag_pct["MgO"]),
    }  # fmt: skip


#: "M": EU reference document on iron and steel, 2013, from memory; else common practice.
@pytest.mark.parametrize(
    ("item", "low", "high"),
    [
        ("oxygen, Nm3/t", 45.0, 60.0),  # M
        ("lime and dolomitic lime, kg/t", 30.0, 67.0),  # M
        ("slag, kg/t", 60.0, 165.0),  # M
        ("hot metal, kg/t", 788.0, 931.0),  # M
        ("scrap, kg/t", 101.0, 340.0),  # M
        ("metallic yield, %", 90.0, 92.0),
        ("end Mn of charged, %", 25.0, 40.0),
        ("L_S", 4.0, 8.0),
        ("heat loss, % of input", 2.0, 5.0),
        ("tap, C", 1630.0, 1700.0),
        ("basicity", 3.0, 4.5),
        ("MgO, %", 7.0, 10.0),
    ],
)  # fmt: skip
def test_figures_of_an_ordinary_heat(item: str, low: float, high: float) -> None:
    found = figures()[item]
    print(f"{item}: {found:.2f}")
    assert low <= found <= high


def test_off_gas_after_the_hood() -> None:
    """80 to 100 Nm3/t at 8.4 to 9 MJ/Nm3 (EU reference document 2013, from memory).

    That is gas behind the hood, with some air drawn in; ours is gas at the mouth. One amount
    of air has to bring volume and heating value into their ranges together.
    """
    outcome = demo_heat()
    t = number(outcome.state.steel_kg) * 1e-3
    gas = {name: number(x) / t for name, x in outcome.gas_Nm3().items()}
    heating = 12.63 * gas["CO"] + 10.8 * gas["H2"]  # JANAF: 283.0 and 241.8 kJ/mol
    # each Nm3 of CO burnt takes 0.5 of O2 and brings 79/21 of that as nitrogen
    for burnt in np.linspace(0.0, 0.5, 501) * gas["CO"]:
        volume = sum(gas.values()) + burnt * 0.5 * 79.0 / 21.0 - gas["O2"]
        if (heating - 12.63 * burnt) / volume <= 8.7:
            break
    print(f"mouth {sum(gas.values()):.1f} Nm3/t; {100 * burnt / gas['CO']:.0f} % of CO burnt: "
          f"{volume:.1f} Nm3/t at 8.7 MJ/Nm3")  # fmt: skip
    assert 80.0 <= volume <= 100.0
    # suppressed combustion lets some 5 to 15 % of the carbon monoxide burn
    assert 0.03 <= burnt / gas["CO"] <= 0.2
