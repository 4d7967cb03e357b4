"""Where each element goes. Kind of check: conservation with atomic weights of periodictable,
identities, common practice (no source) where a test says so."""

from __future__ import annotations

import copy
import json
import math

import numpy as np
import pytest
from click.testing import CliRunner

from converter_calc.basis.errors import InputError
from converter_calc.cli import main
from converter_calc.metallurgy.element_shares import PLACES, element_shares
from converter_calc.planning.outcome import at
from converter_calc.planning.plan import plan
from tests.conftest import DEMO, PLAIN_HEAT, demo_files

periodictable = pytest.importorskip("periodictable")


def heat(**sections):
    document = copy.deepcopy(PLAIN_HEAT)
    for section, fields in sections.items():
        document.setdefault(section, {}).update(fields)
    return document


@pytest.mark.parametrize("path", demo_files(), ids=lambda path: path.stem)
def test_every_element_sums_to_its_input(path):
    found = element_shares(plan(path))
    assert {"P", "Mn", "S", "Cr", "Si", "C", "Fe", "O", "Ca"} <= set(found.elements)
    for element, shares in found.elements.items():
        taken = sum(shares.taken_kg.values())
        assert float(taken[0]) == pytest.approx(float(shares.input_kg[0]), rel=1e-9), element
        assert math.fsum(float(x[0]) for x in shares.pct().values()) == pytest.approx(
            100.0, rel=1e-9
        ), element
        assert set(shares.taken_kg) == set(PLACES.values()), element
        assert min(float(x[0]) for x in shares.taken_kg.values()) >= 0.0, element


def test_manganese_by_hand():
    """Kg of manganese in and out with the weights of periodictable."""
    outcome = plan(DEMO / "ordinary_low_carbon.toml")
    shares = element_shares(outcome).elements["Mn"]
    share = periodictable.formula("MnO").mass_fraction[periodictable.Mn]
    slag = float(at(outcome.state.slag_species_kg["MnO"], 0)) * share
    assert float(shares.taken_kg["slag"][0]) == pytest.approx(slag, rel=1e-6)
    assert float(shares.brought_kg["hot_metal"][0]) == pytest.approx(185000.0 * 0.0035, rel=1e-9)
    steel = float(at(outcome.state.steel_kg, 0)) * float(at(outcome.steel_pct()["Mn"], 0)) * 0.01
    assert float(shares.taken_kg["steel"][0]) == pytest.approx(steel, rel=1e-9)


@pytest.mark.parametrize("element", ["P", "Mn", "V", "Cr", "Ti", "S"])
def test_the_ratio_shown_is_that_of_slag_and_metal(element):
    outcome = plan(DEMO / "high_phosphorus.toml")
    shares = element_shares(outcome).elements[element]
    slag, metal = float(at(outcome.state.slag_kg, 0)), float(at(outcome.state.metal_kg, 0))
    in_metal = sum(float(shares.taken_kg[k][0]) for k in ("steel", "droplets", "ejections"))
    have = (float(shares.taken_kg["slag"][0]) / slag) / (in_metal / metal)
    assert float(at(shares.law.ratio, 0)) == pytest.approx(have, rel=1e-8)


def test_shares_of_practice():
    """Common practice, no source: Ti more than 98 % to slag; end [Mn] 25 to 40 % of the charged at
    0.04 to 0.08 % C; copper, nickel, molybdenum, tin stay with the metal; zinc to dust; 10 to
    20 % of sulphur to the gas."""
    found = element_shares(plan(DEMO / "ordinary_low_carbon.toml")).elements
    pct = {el: {k: float(x[0]) for k, x in shares.pct().items()} for el, shares in found.items()}
    assert pct["Ti"]["slag"] > 98.0
    assert 25.0 <= pct["Mn"]["steel"] <= 40.0
    assert 10.0 <= pct["S"]["gas"] <= 20.0
    for element in ("Cu", "Ni", "Mo", "Sn"):
        metal = pct[element]["steel"] + pct[element]["droplets"] + pct[element]["ejections"]
        assert metal == pytest.approx(100.0, rel=1e-9)
    assert pct["Zn"]["dust"] == pytest.approx(100.0, rel=1e-9)
    assert 80.0 <= float(found["V"].law.ratio[0]) <= 200.0


def test_pinned_and_out_of_range_are_told():
    found = element_shares(plan(heat(pin={"L_P": 90.0, "L_V": 250.0}))).elements
    assert found["P"].law.name == "pinned"
    assert found["P"].law.source == "pin.L_P"
    hot = element_shares(plan(heat(aim={"temp_C": 1740.0, "C_pct": 0.6, "P_pct": 0.05}))).elements
    assert "temperature_C outside 1550 to 1700" in hot["P"].range_note(0)
    assert "C_pct outside 0.02 to 0.4" in hot["Fe"].range_note(0)
    ordinary = element_shares(plan(heat())).elements
    assert ordinary["P"].range_note(0) == ""
    assert ordinary["Fe"].range_note(0) == ""


def test_elements_can_be_named_and_unknown_ones_are_refused():
    outcome = plan(heat())
    assert list(element_shares(outcome, ["Cr", "Mn"]).elements) == ["Cr", "Mn"]
    with pytest.raises(InputError, match="'Au' is not charged"):
        element_shares(outcome, ["Au"])


def test_tables():
    found = element_shares(plan(heat()))
    frame = found.frame()
    places = [f"{place}_kg" for place in PLACES.values()]
    assert frame[places].sum(axis=1).to_numpy() == pytest.approx(
        frame["input_kg"].to_numpy(), rel=1e-9
    )
    assert len(found.table()) == len(frame)
    assert set(found.main().elements) <= {"Mn", "S", "P", "V", "Cr", "Ti", "Si", "C", "Fe"}
    assert np.isnan(frame.set_index("element").loc["C", "ratio"])


def test_command_line():
    run = CliRunner().invoke
    path = str(DEMO / "ordinary_low_carbon.toml")
    text = run(main, ["shares", path])
    assert text.exit_code == 0
    assert "park_dzo" in text.output
    assert "Cu " not in text.output
    assert "stays in steel" in run(main, ["shares", path, "--all"]).output
    found = json.loads(run(main, ["shares", path, "V", "--json", "-"]).output)
    assert list(found["elements"]) == ["V"]
    assert math.fsum(found["elements"]["V"]["taken_pct"].values()) == pytest.approx(100.0, rel=1e-9)
    wrong = run(main, ["shares", path, "Xx"])
    assert wrong.exit_code == 2
    assert "element: 'Xx' is not charged" in wrong.output
