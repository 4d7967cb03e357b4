"""Why this number? Kind of check: closure (terms add up to the result), contract for the rest."""

from __future__ import annotations

from functools import cache
from typing import Any

import numpy as np
import pytest

import converter_calc
from converter_calc.basis.errors import InputError
from converter_calc.planning.explain import QUANTITIES, Explanation, explain
from converter_calc.planning.heat_terms import heat_terms, oxygen_terms
from converter_calc.planning.outcome import Outcome
from converter_calc.planning.solving import complete_charge
from tests.conftest import demo_files
from tests.demo import ordinary, unlimited

NAMES = [path.stem for path in demo_files()]
#: A heat that takes fluorspar, limestone, coke, ore and retained slag all at once.
MIXED = {
    "charge": {"fluorspar_kg": 300.0, "limestone_kg": 900.0, "coke_kg": 200.0, "pellets_kg": 800.0},
    "practice": {"retained_slag_kg": 3000.0},
}


def number(x: Any) -> float:
    return float(np.ravel(x)[0])


@cache
def planned(name: str) -> Outcome:
    if name == "mixed":
        return converter_calc.plan(ordinary(**MIXED))
    document = unlimited(name)
    if name == "medium_carbon_catch":
        document["aim"]["P_pct"] = 0.05  # within reach whatever the demo asks for
    return converter_calc.plan(document)


def terms(name: str, quantity: str) -> tuple[Explanation, dict[str, float]]:
    found = explain(planned(name), quantity)
    return found, {term.label: term.value for term in found.terms}


@pytest.mark.parametrize("name", [*NAMES, "mixed"])
def test_heat_terms_add_up_to_nothing(name: str) -> None:
    listed = heat_terms(planned(name))
    size = sum(abs(number(term.heat_MJ)) for term in listed)
    assert abs(sum(number(term.heat_MJ) for term in listed)) < 1e-9 * size
    assert {term.group for term in listed} == {"brought in", "reactions", "carried away", "loss"}


@pytest.mark.parametrize("name", [*NAMES, "mixed"])
def test_oxygen_terms_add_up_to_the_oxygen_blown(name: str) -> None:
    outcome = planned(name)
    pure = number(outcome.state.oxygen_Nm3) * number(outcome.p.values["oxygen_purity_pct"]) / 100.0
    total = sum(number(x) for _, x in oxygen_terms(outcome))
    assert total == pytest.approx(pure, rel=1e-9)


@pytest.mark.parametrize("name", NAMES)
@pytest.mark.parametrize("quantity", QUANTITIES)
def test_every_quantity_of_every_demo_heat(name: str, quantity: str) -> None:
    found, listed = terms(name, quantity)
    assert found.reason.endswith((":", "."))
    assert listed
    text = found.text()
    assert found.quantity in text
    assert all(label in text for label in listed)
    assert all(np.isfinite(value) for value in listed.values())


@pytest.mark.parametrize("name", NAMES)
def test_oxygen(name: str) -> None:
    found, listed = terms(name, "oxygen")
    pure, purity = listed["oxygen needed, pure"], listed["purity of the oxygen"]
    assert found.value == pytest.approx(pure / purity * 100.0, rel=1e-9)
    assert found.value == number(planned(name).state.oxygen_Nm3)


@pytest.mark.parametrize("quantity", ["temperature", "scrap", "coolant"])
@pytest.mark.parametrize("name", NAMES)
def test_heat_lines_add_up(name: str, quantity: str) -> None:
    found, _ = terms(name, quantity)
    lines = [term.value for term in found.terms if term.unit == "MJ"]
    assert len(lines) > 15
    # lines below 1e-6 MJ are left out
    assert abs(sum(lines)) < 1e-4


@pytest.mark.parametrize("name", NAMES)
def test_lime_brings_what_the_slag_holds(name: str) -> None:
    """CaO brought = liquid slag + undissolved + dust; the reason is the rule that binds."""
    found, listed = terms(name, "lime")
    brought = sum(x for label, x in listed.items() if "brought by" in label)
    held = listed["CaO in the liquid slag (as analysed)"]
    held += listed["CaO left undissolved"] + listed["CaO lost with dust"]
    assert brought == pytest.approx(held, rel=1e-9)
    outcome = planned(name)
    at_P = number(outcome.steel_pct()["P"]) > 0.999999 * number(outcome.heats.values["aim_P_pct"])
    assert found.reason.startswith("The phosphorus aim" if at_P else "The least basicity")


def test_the_demo_holds_both_rules_of_lime() -> None:
    starts = {terms(name, "lime")[0].reason.split(" asks")[0] for name in NAMES}
    assert len(starts) >= 2


@pytest.mark.parametrize("name", NAMES)
def test_phosphorus(name: str) -> None:
    """[P] follows from the terms by the formula that the reason states."""
    found, listed = terms(name, "phosphorus")
    L, ratio = listed["L_P reached"], listed["liquid slag per kg of metal"]
    metal = number(planned(name).state.metal_kg)
    by_formula = 100.0 * listed["phosphorus charged"] / metal / (1.0 + L * ratio)
    assert found.value == pytest.approx(by_formula, rel=1e-8)
    equilibrium = next(term for term in found.terms if term.label.startswith("L_P at equilibrium"))
    assert equilibrium.value * listed["approach to equilibrium"] == pytest.approx(L, rel=1e-12)
    assert "Assis" in equilibrium.source


@pytest.mark.parametrize("name", NAMES)
def test_carbon(name: str) -> None:
    """What is charged leaves as CO, CO2 or stays in the metal."""
    _, listed = terms(name, "carbon")
    parts = sum(x for label, x in listed.items() if label != "carbon charged")
    assert listed["carbon charged"] == pytest.approx(parts, rel=1e-9)


@pytest.mark.parametrize("name", NAMES)
def test_magnesia(name: str) -> None:
    """MgO brought = slag + dust."""
    found, listed = terms(name, "magnesia")
    brought = sum(x for label, x in listed.items() if "brought by" in label)
    s = planned(name).state
    held = number(s.slag_species_kg["MgO"]) + number(s.dust_kg.get("MgO", 0.0))
    assert brought == pytest.approx(held, rel=1e-9)
    if found.value > 1.0:
        assert listed["MgO of the slag"] == pytest.approx(
            listed["MgO wanted in the slag"], rel=1e-6
        )


def test_a_prediction_is_explained_as_one() -> None:
    predicted = converter_calc.predict(complete_charge(planned("ordinary_low_carbon")))
    assert "is where heat supplied" in explain(predicted, "temperature").reason
    assert "was given" in explain(predicted, "scrap").reason
    assert "was given" in explain(predicted, "lime").reason
    assert "follows from the oxygen blown" in explain(predicted, "carbon").reason


def test_a_heat_without_phosphorus_or_lime_is_explained() -> None:
    document = ordinary()
    document["charge"] = {"burnt_lime_kg": 0.0, "scrap_kg": 20000.0}
    outcome = converter_calc.plan(document)
    for quantity in QUANTITIES:
        assert explain(outcome, quantity).terms


def test_unknown_quantity_names_the_nearest() -> None:
    with pytest.raises(InputError) as caught:
        explain(planned("ordinary_low_carbon"), "phosphorous")
    assert "did you mean phosphorus?" in str(caught.value)
