"""Whole heats against published and hand-worked balances; source of each in its case file.

Kind of check: a named source (the `source` line of tests/cases/*.toml), its data pinned.

Each row is (item, ours, source, stated, bound): `stated` is the difference ours/source - 1
in %, kept true by the test to 0.02 points, `bound` the largest that the reason beside it
allows. The reasons:

masses  the sources use integer atomic masses (Fe 56, C 12, O 16 ...), which move a mass of
        oxide or oxygen by up to 0.8 % (Si 28 for 28.085: SiO2 by 0.2; Al 27, P 31: 0.1).
digits  half a unit of the last printed digit.
basis   the hand method books the end analysis on 100 kg of hot metal, ours on the 92.1 kg
        of metal that there is at the end.
"""

from __future__ import annotations

from collections.abc import Iterable
from typing import Any

import numpy as np
import pytest

import converter_calc
from converter_calc.planning.heat_terms import heat_terms, oxygen_terms
from converter_calc.planning.outcome import Outcome
from tests import published
from tests.test_closure import assert_closed

#: Integer atomic masses and rounding to the printed digit.
INTEGER_MASSES_PCT = 0.8
STATED_POINTS = 0.02

Row = tuple[str, float, float, float, float]


def stream(document: dict[str, Any], name: str) -> dict[str, float]:
    return next(s for s in document["streams"] if s["name"] == name)["species_kg"]


def compare(rows: Iterable[Row]) -> None:
    """Print every difference, then hold each against the stated one and its bound."""
    listed = list(rows)
    lines = [
        f"{item:<28}{ours:>12.4f}{source:>12.4f}{100 * (ours / source - 1):>9.3f} %"
        f"  (stated {stated}, bound {bound})"
        for item, ours, source, stated, bound in listed
    ]
    print("\n".join(lines))
    for item, ours, source, stated, bound in listed:
        gap = 100.0 * (ours / source - 1.0)
        assert abs(gap) <= bound, f"{item}: {gap:.3f} %"
        assert gap == pytest.approx(stated, abs=STATED_POINTS), item


def oxygen_Nm3(outcome: Outcome) -> dict[str, float]:
    return {label: float(np.ravel(x)[0]) for label, x in oxygen_terms(outcome)}


def moles_of(terms: dict[str, float], start: str) -> float:
    """mol O2 of the terms whose label starts so; 22.414 L/mol (the ideal gas at 0 C, 1 atm)."""
    return sum(x for label, x in terms.items() if label.startswith(start)) / 0.022414


def test_charge_four_to_one() -> None:
    data = published.case("charge_four_to_one")
    printed, computed = data["printed"], data["computed"]
    outcome = converter_calc.plan(published.charge_four_to_one())
    document = outcome.document()
    assert_closed(document)
    recipe, slag, gas = document["recipe"], stream(document, "slag"), stream(document, "off_gas")
    hot_metal = recipe["hot_metal_kg"]
    iron = hot_metal * data["input"]["hot_metal_pct"]["Fe"] / 100.0 + recipe["scrap_total_kg"]
    carbon = gas["CO"] * 12.011 / 28.010 + gas["CO2"] * 12.011 / 44.009
    gone, moles, terms = printed["oxidised_kg"], printed["oxygen_mol"], oxygen_Nm3(outcome)
    silicon = hot_metal * data["input"]["hot_metal_pct"]["Si"] / 100.0
    manganese = slag["MnO"] * 54.938 / 70.937
    phosphorus = slag["P2O5"] * 61.948 / 141.943
    whole = INTEGER_MASSES_PCT
    compare(
        [
            # digits: 0.05 in 214.1 and four times that in 856.4, and so 0.023 in carbon,
            # whose own last digit is 0.016 %
            ("iron charged, kg", iron, printed["iron_charged_kg"], 0.0, 0.001),
            ("scrap, kg", recipe["scrap_total_kg"], printed["scrap_kg"], -0.02, 0.024),
            ("hot metal, kg", hot_metal, printed["hot_metal_kg"], -0.02, 0.024),
            ("C oxidised, kg", carbon, gone["C"], -0.035, 0.039),
            ("Si oxidised, kg", silicon, gone["Si"], -0.02, 0.03),
            ("Mn oxidised, kg", manganese, gone["Mn"], -0.03, 0.04),
            ("P oxidised, kg", phosphorus, gone["P"], -0.01, 0.04),
            ("O2 for C, mol", moles_of(terms, "oxidation of carbon"), moles["C"], -0.12, whole),
            ("O2 for Si, mol", moles_of(terms, "oxidation of silicon"), moles["Si"], 0.0, whole),
            ("O2 for Mn, mol", moles_of(terms, "oxidation of manganese"), moles["Mn"], 0.04, whole),
            ("slag FeO, kg", slag["FeO"], computed["slag_FeO_kg"], 0.105, whole),
            ("slag Fe2O3, kg", slag["Fe2O3"], computed["slag_Fe2O3_kg"], 0.105, whole),
            ("oxygen blown, Nm3", recipe["oxygen_Nm3"], computed["oxygen_blown_Nm3"], 0.0, whole),
            ("lime, kg", recipe["lime_of_the_problem_kg"], computed["lime_kg"], 0.0, whole),
            ("slag, kg", document["end_point"]["slag_kg"], computed["slag_kg"], 0.0, whole),
        ]
    )


def test_complete_oxidation() -> None:
    computed = published.case("complete_oxidation")["computed"]
    outcome = converter_calc.predict(published.complete_oxidation())
    document = outcome.document()
    assert_closed(document)
    slag, oxygen = stream(document, "slag"), stream(document, "oxygen")["O2"]
    by_element, terms = computed["oxygen_by_element_kg"], oxygen_Nm3(outcome)
    kg = {name: moles_of(terms, name) * 31.998e-3 for name in terms}
    blown = document["recipe"]["oxygen_Nm3"]
    whole = INTEGER_MASSES_PCT
    labels = {
        "C_to_CO": ("oxidation of carbon to CO (net of oxide charged)", -0.1),
        "C_to_CO2": ("oxidation of carbon to CO2 (net of oxide charged)", -0.09),
        "Si": ("oxidation of silicon (net of oxide charged)", -0.34),
        "Mn": ("oxidation of manganese (net of oxide charged)", 0.19),
        "Fe": ("oxidation of iron to FeO (net of oxide charged)", 0.17),
    }
    compare(
        [
            ("oxygen, kg", oxygen, computed["oxygen_kg"], -0.118, whole),
            ("oxygen, Nm3", blown, computed["oxygen_Nm3"], -0.046, whole),
            *(
                (f"O2 {name}, kg", sum(kg[n] for n in kg if n == label), by_element[name], s, whole)
                for name, (label, s) in labels.items()
            ),
            ("slag SiO2, kg", slag["SiO2"], computed["slag_kg"]["SiO2"], -0.181, whole),
            ("slag MnO, kg", slag["MnO"], computed["slag_kg"]["MnO"], 0.043, whole),
            ("slag FeO, kg", slag["FeO"], computed["slag_kg"]["FeO"], 0.038, whole),
        ]
    )


def test_nptel_material_balance() -> None:
    data = published.case("nptel_material_balance")
    printed, formed = data["printed"], data["computed"]["oxides_formed_kg"]
    document = converter_calc.predict(published.nptel_material_balance()).document()
    assert_closed(document)
    slag, gas = stream(document, "slag"), stream(document, "off_gas")
    carbon = gas["CO"] * 12.011 / 28.010 + gas["CO2"] * 12.011 / 44.009
    end, whole = document["end_point"], INTEGER_MASSES_PCT
    iron = slag["FeO"] * 55.845 / 71.844
    compare(
        [
            ("steel, kg", end["steel_kg"], printed["steel_kg"], 0.002, 0.1),
            ("slag, kg", end["slag_kg"], printed["slag_kg"], -0.018, whole),
            ("carbon in gas, kg", carbon, printed["carbon_in_gas_kg"], -0.002, 0.013),
            ("iron in slag, kg", iron, data["computed"]["iron_in_slag_kg"], -0.145, whole),
            ("SiO2 formed, kg", slag["SiO2"], formed["SiO2"], -0.148, whole),
            ("P2O5 formed, kg", slag["P2O5"], formed["P2O5"], 0.058, whole),
            ("MnO formed, kg", slag["MnO"], formed["MnO"], -0.060, whole),
            ("FeO formed, kg", slag["FeO"], formed["FeO"], 0.008, whole),
        ]
    )


def hand_basis(element: str, kg: float, oxide_per_kg: float) -> float:
    """An oxide of the hand method [kg] with the end analysis booked on the metal there is."""
    data = published.case("hand_method_heat")
    hand = data["hand_method"]
    ejected = data["input"]["ejected_iron_kg"]
    metal = hand["metal_without_scrap_kg"] + hand["droplets_kg"] + ejected
    end_pct = data["input"]["end_metal"][element]
    return kg + end_pct * (1.0 - metal / 100.0) * oxide_per_kg


def test_hand_method_masses() -> None:
    data = published.case("hand_method_heat")
    hand = data["hand_method"]
    document = converter_calc.plan(published.hand_method_heat()).document()
    assert_closed(document)
    slag, gas, end = stream(document, "slag"), stream(document, "off_gas"), document["end_point"]
    recipe, by_hand = document["recipe"], hand["slag_kg_by_oxide"]
    whole = INTEGER_MASSES_PCT
    compare(
        [
            # lime: the method takes basicity on lime free of CaS and CaF2; ours keeps
            # CaS apart and starts from Si 28.085
            ("lime, kg", recipe["lime_of_the_method_kg"], hand["lime_kg"], -0.523, whole),
            # basis: manganese 3.4 % more oxidised; carbon 0.2 %
            ("oxygen, Nm3", recipe["oxygen_Nm3"], hand["oxygen_blown_Nm3"], 0.214, whole),
            ("metal, kg", end["steel_kg"], hand["metal_without_scrap_kg"], -0.023, 0.1),
            ("slag, kg", end["slag_kg"], hand["slag_kg"], -0.114, whole),
            ("gas, kg", sum(gas.values()), hand["gas_kg"], 0.116, whole),
            ("droplets, kg", stream_kg(document, "iron_droplets"), hand["droplets_kg"], -0.07, 0.1),
            ("slag CaO, kg", slag["CaO"], by_hand["CaO"], -0.471, whole),
            ("slag SiO2, kg", slag["SiO2"], by_hand["SiO2"], -0.192, whole),
            ("slag MgO, kg", slag["MgO"], by_hand["MgO"], -0.055, whole),
            # digits on top of lime: 0.0005 kg of 0.138 is 0.36 %
            ("slag Al2O3, kg", slag["Al2O3"], by_hand["Al2O3"], -0.858, whole + 0.36),
            ("slag CaF2, kg", slag["CaF2"], by_hand["CaF2"], -0.200, whole),
            ("slag FeO, kg", slag["FeO"], by_hand["FeO"], -0.066, whole),
            ("slag Fe2O3, kg", slag["Fe2O3"], by_hand["Fe2O3"], -0.168, whole),
            # basis
            ("slag MnO, kg", slag["MnO"], by_hand["MnO"], 3.439, 3.5),
            ("slag P2O5, kg", slag["P2O5"], by_hand["P2O5"], 0.993, 1.1),
            ("slag CaS, kg", slag["CaS"], by_hand["CaS"], 11.07, 13.0),
        ]
    )


def stream_kg(document: dict[str, Any], name: str) -> float:
    return sum(stream(document, name).values())


def test_hand_method_differences_come_from_its_basis() -> None:
    """MnO, P2O5 and CaS agree once the end analysis is booked on the metal there is."""
    data = published.case("hand_method_heat")
    hand = data["hand_method"]["slag_kg_by_oxide"]
    slag = stream(converter_calc.plan(published.hand_method_heat()).document(), "slag")
    MnO, P2O5 = hand_basis("Mn", hand["MnO"], 71 / 55), hand_basis("P", hand["P2O5"], 142 / 62)
    # two thirds of the sulphur removed go to the slag; that of fluorspar is left out by the
    # method; 0.030 is printed to 1.7 %
    spar = data["input"]["fluorspar_kg"] * data["input"]["fluorspar_pct"]["S"] / 100.0
    CaS = hand_basis("S", hand["CaS"], 72 / 32 * 2 / 3) + spar * 72 / 32
    compare(
        [
            ("MnO", slag["MnO"], MnO, 0.065, INTEGER_MASSES_PCT),
            ("P2O5", slag["P2O5"], P2O5, 0.14, INTEGER_MASSES_PCT),
            ("CaS", slag["CaS"], CaS, -0.84, 1.7),
        ]
    )


#: Ours - hand method [kJ per 100 kg hot metal]. The sums agree, the books differ:
#: oxidation   ours starts from pure carbon, silicon ... at 25 °C and counts their heat of
#:             solution with the hot metal; the method from the dissolved elements. It takes
#:             11.64 MJ/kg for carbon to CO, 5 % above 11.08 (110.5 + 22.6 kJ/mol at 25 °C).
#: iron oxides ours at 25 °C as solids; their fusion and heating is in the slag.
#: steel       the method's two constant heat capacities give 1.459 MJ/kg at 1690 °C; the
#:             1.355 MJ/kg at 1600 °C of the NASA polynomials and 0.82 kJ/(kg K) give 1.429.
#: slag        the method takes 1.248 kJ/(kg K) and 209 kJ/kg of fusion: 2.287 MJ/kg. Heat
#:             contents of the oxides plus the same fusion give 1.9.
HEAT_DIFFERENCES_kJ = {
    "hot metal, oxidation of C, Si, Mn, P, slag compounds": -3327,
    "oxidation of iron, slag and dust": 1640,
    "steel": 2586,
    "slag": 5002,
    "gas and dust": 78,
    "droplets and ejections": 51,
    "carbonates and water": 371,
}


def our_heat_groups(outcome: Outcome) -> dict[str, float]:
    """Our terms in the groups of HEAT_DIFFERENCES_kJ [kJ]."""
    place = {
        "heat content of steel": "steel",
        "heat content of slag": "slag",
        "heat content of off gas": "gas and dust",
        "heat content of dust": "gas and dust",
        "heat content of iron droplets": "droplets and ejections",
        "heat content of ejections": "droplets and ejections",
        "taking carbonates, hydroxides and rust apart": "carbonates and water",
        "other reactions (sulphur, water, fluorspar)": "carbonates and water",
        "oxidation of iron to FeO": "oxidation of iron, slag and dust",
        "oxidation of iron to Fe2O3": "oxidation of iron, slag and dust",
        "heat loss": "loss",
    }
    groups: dict[str, float] = {}
    for term in heat_terms(outcome):
        group = place.get(term.label, "hot metal, oxidation of C, Si, Mn, P, slag compounds")
        groups[group] = groups.get(group, 0.0) + float(np.ravel(term.heat_MJ)[0]) * 1e3
    return groups


def hand_heat_groups() -> dict[str, float]:
    """The hand method's terms in the same groups [kJ]."""
    hand = published.case("hand_method_heat")["hand_method"]
    brought, taken = hand["heat_in_kJ"], hand["heat_out_kJ"]
    iron = ("Fe_to_FeO", "Fe_to_Fe2O3", "dust_oxidation")
    rest = [x for name, x in brought.items() if name not in (*iron, "total")]
    return {
        "hot metal, oxidation of C, Si, Mn, P, slag compounds": sum(rest),
        "oxidation of iron, slag and dust": sum(brought[name] for name in iron),
        "steel": -taken["metal"],
        "slag": -taken["slag"],
        "gas and dust": -taken["gas"] - taken["dust"],
        "droplets and ejections": -taken["droplets"] - taken["ejected"],
        "carbonates and water": -taken["lime_CO2"] - taken["dolomite_CO2"] - taken["moisture"],
        "loss": -taken["loss"] - taken["left_for_scrap"],
    }


def test_hand_method_heat_terms() -> None:
    """Every group of the heat balance differs by what is stated, and the sums agree."""
    outcome = converter_calc.plan(published.hand_method_heat())
    ours, hand = our_heat_groups(outcome), hand_heat_groups()
    assert set(ours) == set(hand)
    assert sum(ours.values()) == pytest.approx(0.0, abs=1e-3)
    assert sum(hand.values()) == pytest.approx(0.0, abs=10.0)  # printed to 1 kJ
    for group, stated in HEAT_DIFFERENCES_kJ.items():
        gap = ours[group] - hand[group]
        print(f"{group:<55}{ours[group]:>10.0f}{hand[group]:>10.0f}{gap:>8.0f}")
        assert gap == pytest.approx(stated, abs=30.0), group
    total = published.case("hand_method_heat")["hand_method"]["heat_in_kJ"]["total"]
    # reactions and what they start from: no more than 2 % of the heat supplied
    supplied = ("hot metal, oxidation of C, Si, Mn, P, slag compounds",)
    assert all(abs(ours[g] - hand[g]) < 0.02 * total for g in supplied)


def test_carbon_to_CO_of_the_hand_method_is_5_pct_high() -> None:
    """JANAF -110.5 kJ/mol and 22.6 of solution (Sigworth & Elliott 1974, from memory)."""
    data = published.case("hand_method_heat")
    hand, share = data["hand_method"]["heat_in_kJ"]["C_to_CO"], data["input"]["carbon_to_CO_pct"]
    burnt = (data["input"]["hot_metal"]["C"] - data["input"]["end_metal"]["C"]) * share / 100.0
    outcome = converter_calc.plan(published.hand_method_heat())
    terms = {t.label: float(np.ravel(t.heat_MJ)[0]) for t in heat_terms(outcome)}
    gas = stream(outcome.document(), "off_gas")
    ours = terms["oxidation of carbon to CO"] / (gas["CO"] * 12.011 / 28.010)
    assert ours == pytest.approx(110.5 / 12.011, rel=2e-3)
    assert hand / burnt / 1e3 == pytest.approx(1.05 * (ours + 22.6 / 12.011), rel=0.005)


def test_hand_method_scrap() -> None:
    """We melt 38 % more scrap; with the method's steel and slag heat it is 7 % less heat.

    What is left for scrap is a small difference of large terms. Its two large causes are the
    heat contents of steel and slag (above); without them the rest agrees within 1 % of the
    heat supplied, which is what ten hand constants good to some per cent each can promise.
    """
    hand = published.case("hand_method_heat")["hand_method"]
    taken, total = hand["heat_out_kJ"], hand["heat_in_kJ"]["total"]
    ours = our_heat_groups(converter_calc.plan(published.hand_method_heat()))
    theirs = hand_heat_groups()
    left = -ours["loss"] - taken["loss"]
    with_theirs = left + sum(theirs[name] - ours[name] for name in ("steel", "slag"))
    assert left == pytest.approx(23287.0, rel=1e-3)
    assert abs(with_theirs - taken["left_for_scrap"]) < 0.01 * total
    assert with_theirs / taken["left_for_scrap"] - 1.0 == pytest.approx(-0.07, abs=0.01)

    scrap = converter_calc.plan(published.hand_method_heat(None)).document()["recipe"]
    melted = scrap["scrap_total_kg"]
    compare([("scrap melted, kg", melted, hand["scrap_melted_kg"], 37.99, 38.5)])
    # kJ per kg of scrap: the method heats it to 1.459 MJ/kg; ours also makes some slag of it
    assert left / melted == pytest.approx(
        taken["left_for_scrap"] / hand["scrap_melted_kg"], rel=0.02
    )
