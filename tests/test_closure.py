"""Closure: every element and the energy, worked out again from the JSON by this file alone.

Formulas are taken apart with periodictable's own parser, not with ours.
"""

from __future__ import annotations

from typing import Any

import periodictable
import pytest

import converter_calc
from tests.conftest import demo_files

CLOSURE = 1e-9


def element_masses(species_kg: dict[str, float]) -> dict[str, float]:
    """kg of each element, by periodictable's formula parser."""
    found: dict[str, float] = {}
    for name, kg in species_kg.items():
        formula = periodictable.formula(name)
        for atom, share in formula.mass_fraction.items():
            found[atom.symbol] = found.get(atom.symbol, 0.0) + kg * share
    return found


def assert_closed(document: dict[str, Any]) -> None:
    """Mass, each element and energy close to 1e-9 relative (contract)."""
    sums = {"in": {}, "out": {}}
    mass = {"in": 0.0, "out": 0.0}
    heat = {"in": 0.0, "out": document["heat_loss_MJ"]}
    for stream in document["streams"]:
        side = stream["side"]
        assert stream["mass_kg"] == pytest.approx(sum(stream["species_kg"].values()), rel=1e-12)
        mass[side] += stream["mass_kg"]
        heat[side] += stream["enthalpy_MJ"]
        for element, kg in element_masses(stream["species_kg"]).items():
            sums[side][element] = sums[side].get(element, 0.0) + kg
    assert mass["in"] == pytest.approx(mass["out"], rel=CLOSURE)
    assert heat["in"] == pytest.approx(heat["out"], rel=CLOSURE)
    for element in set(sums["in"]) | set(sums["out"]):
        there = sums["in"].get(element, 0.0), sums["out"].get(element, 0.0)
        # atomic weights of periodictable differ from ours in the last digits
        assert there[0] == pytest.approx(there[1], rel=CLOSURE, abs=1e-9 * mass["in"]), element
    for closure in (*document["balance"]["elements"].values(), document["balance"]["energy"]):
        assert abs(closure["relative_closure"]) <= CLOSURE


@pytest.mark.parametrize("path", demo_files(), ids=lambda p: p.stem)
def test_demo_heats_close(path: Any) -> None:
    planned = converter_calc.plan(path)
    assert_closed(planned.document())


def test_plain_heat_closes_in_plan_and_prediction(plain_heat: dict[str, Any]) -> None:
    planned = converter_calc.plan(plain_heat)
    assert_closed(planned.document())
    from converter_calc.planning.solving import complete_charge

    assert_closed(converter_calc.predict(complete_charge(planned)).document())
