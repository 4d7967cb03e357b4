"""Materials. Kind of check: stoichiometry with weights from the periodictable package, guards of
the library, ranges of common practice (no source), contract (text of each message)."""

import math

import pytest

from converter_calc.balance.materials import (
    compile_material,
    known_species,
    library_fields,
    library_material,
    override_fields,
)
from converter_calc.basis.elements import mass_fractions
from converter_calc.basis.errors import InputError

periodictable = pytest.importorskip("periodictable")


def weight(formula):
    return periodictable.formula(formula).mass


def element_kg(material):
    """kg of each element per kg, worked out with the weights of periodictable."""
    totals = {}
    for species, kg in material.species_kg.items():
        for element, share in periodictable.formula(species).mass_fraction.items():
            totals[str(element)] = totals.get(str(element), 0.0) + kg * share
    return totals


def faults_of(fields, name="m"):
    with pytest.raises(InputError) as caught:
        compile_material(name, fields)
    return str(caught.value).splitlines()


# ---- from the stated analysis to species -------------------------------------------------


def test_scrap_is_filled_up_with_iron():
    scrap = compile_material("s", {"kind": "scrap", "pct": {"C": 0.2, "Mn": 0.8}})
    assert scrap.species_kg == pytest.approx({"C": 0.002, "Mn": 0.008, "Fe": 0.99}, abs=1e-15)
    assert not scrap.warnings
    assert scrap.temp_K == 298.15


def test_hematite_holds_seventy_percent_iron():
    """Hematite holds 70 % iron by mass: common practice, no source."""
    ore = compile_material("ore", {"pct": {"Fe2O3": 100.0}})
    assert element_kg(ore)["Fe"] == pytest.approx(0.70, abs=0.001)


def test_loss_on_ignition_is_bound_as_carbonate_and_hydroxide():
    """Stoichiometry: CaCO3 and Ca(OH)2 from the weights of periodictable."""
    lime = compile_material(
        "lime",
        {"kind": "flux", "pct": {"CaO": 95.0}, "loss_on_ignition_pct": 5.0,
         "loss_on_ignition_water_pct": 20.0},
    )  # fmt: skip
    CaCO3 = 0.04 * weight("CaCO3") / weight("CO2")
    hydroxide = 0.01 * weight("Ca(OH)2") / weight("H2O")
    assert lime.species_kg["CaCO3"] == pytest.approx(CaCO3, rel=1e-4)
    assert lime.species_kg["Ca(OH)2"] == pytest.approx(hydroxide, rel=1e-4)
    assert lime.species_kg["CaO"] == pytest.approx(1.0 - CaCO3 - hydroxide, rel=1e-4)
    assert element_kg(lime)["Ca"] == pytest.approx(0.95 * 40.078 / weight("CaO"), rel=1e-4)


def test_carbon_dioxide_of_dolomite_takes_lime_first_then_magnesia():
    stone = compile_material("d", {"pct": {"CaO": 30.4, "MgO": 21.9, "CO2": 47.7}})
    assert set(stone.species_kg) == {"CaCO3", "MgCO3", "MgO"}
    assert element_kg(stone)["C"] == pytest.approx(0.477 * 12.011 / weight("CO2"), rel=1e-4)


def test_water_of_an_ore_sits_on_its_iron():
    ore = compile_material("ore", {"pct": {"Fe2O3": 96.0, "H2O": 4.0}})
    FeOOH = 0.04 * 2.0 * weight("FeOOH") / weight("H2O")
    assert ore.species_kg["FeOOH"] == pytest.approx(FeOOH, rel=1e-4)
    assert element_kg(ore)["H"] == pytest.approx(0.04 * 2.016 / weight("H2O"), rel=1e-3)


def test_lime_of_the_hand_worked_heat():
    """Lime as printed in the hand method of converter-shop design textbooks (from memory): its
    elements must come out whatever compounds hold them. Its sulphur is counted on calcium, which
    takes half its mass of oxygen out of the sum (0.03 %): bound 0.1 %."""
    pct = {"CaO": 88.0, "SiO2": 2.5, "MgO": 2.6, "Al2O3": 1.5, "Fe2O3": 0.5, "P2O5": 0.1,
           "S": 0.06, "CO2": 4.64, "H2O": 0.1}  # fmt: skip
    lime = compile_material("lime", {"kind": "flux", "pct": pct})
    stated = {}
    for species, part in pct.items():
        for element, share in periodictable.formula(species).mass_fraction.items():
            stated[str(element)] = stated.get(str(element), 0.0) + part * share / 100.0
    found = element_kg(lime)
    for element in set(stated) - {"O"}:
        assert found[element] == pytest.approx(stated[element], rel=1e-3), element
    assert "S" not in lime.species_kg


def test_scrap_as_weighed():
    """100 kg as weighed: 1 water, 2 oil, 3 rust, 90 clean, the rest dirt; sums worked by hand."""
    scrap = compile_material(
        "s",
        {"kind": "scrap", "pct": {"Zn": 2.0}, "moisture_pct": 1, "oil_pct": 2, "rust_pct": 3,
         "yield_pct": 90, "dirt_pct": {"SiO2": 3, "Al2O3": 1}},
    )  # fmt: skip
    assert scrap.species_kg == pytest.approx(
        {"H2O": 0.01, "C16H34": 0.02, "FeOOH": 0.03, "Zn": 0.018, "Fe": 0.882, "SiO2": 0.03,
         "Al2O3": 0.01},
        abs=1e-15,
    )  # fmt: skip


def test_moisture_dilutes_where_no_yield_is_given():
    wet = compile_material("s", {"pct": {"CaO": 100.0}, "moisture_pct": 4})
    assert wet.species_kg == pytest.approx({"CaO": 0.96, "H2O": 0.04})


def test_rest_species_of_choice():
    ore = compile_material("ore", {"pct": {"SiO2": 5.0}, "rest": "Fe2O3"})
    assert ore.species_kg == pytest.approx({"SiO2": 0.05, "Fe2O3": 0.95})


def test_slag_is_molten_when_hot():
    fields = {"kind": "slag", "pct": {"CaO": 60.0, "SiO2": 40.0}}
    assert compile_material("s", {**fields, "temp_C": 1400}).molten
    assert not compile_material("s", {**fields, "temp_C": 900}).molten
    assert not compile_material("s", {**fields, "kind": "flux", "temp_C": 1400}).molten


@pytest.mark.parametrize(
    ("total", "warns"), [(100.4, False), (99.6, False), (99.4, True), (90.0, True)]
)
def test_sum_near_100_is_scaled(total, warns):
    found = compile_material("m", {"pct": {"CaO": total - 10.0, "SiO2": 10.0}})
    assert found.species_kg["SiO2"] == pytest.approx(10.0 / total)
    assert bool(found.warnings) == warns
    if warns:
        assert found.warnings == (f"m: analysis adds up to {total:g} %, scaled to 100 %",)


# ---- messages ----------------------------------------------------------------------------


@pytest.mark.parametrize(
    ("fields", "line"),
    [
        ({"pct": {"CaO": 90, "SiO2": 12}}, "materials.m.pct: adds up to 102 %, above 100"),
        (
            {"pct": {"CaO": 80}},
            'materials.m.pct: adds up to 80 % only; state what is missing, or rest = "<species>"',
        ),
        (
            {"pct": {"CA0": 100}},
            "materials.m.pct.CA0: 'CA0' is not a species known here; nearest: CaO",
        ),
        (
            {"pct": {"cao": 100}},
            "materials.m.pct.cao: 'cao' is not a species known here; nearest: CaO",
        ),
        (
            {"pct": {"Fe2O": 100}},
            "materials.m.pct.Fe2O: 'Fe2O' is not a species known here; nearest: Fe2O3",
        ),
        ({"pct": {"CaO": -5}}, "materials.m.pct.CaO: must not be negative (0 to 1e+06), given -5"),
        ({"pct": {"CaO": "all"}}, "materials.m.pct.CaO: must be a number, given 'all'"),
        ({"pct": 7}, "materials.m.pct: must be a table, given 7"),
        ({"pct": {}}, "materials.m.pct: holds no species above zero"),
        ({}, "materials.m.pct: not given; state the analysis as {species = mass %}"),
        (
            {"pct": {"CaO": 100}, "moistur_pct": 1},
            "materials.m.moistur_pct: unknown field; nearest: moisture_pct",
        ),
        (
            {"pct": {"CaO": 100}, "kind": "stone"},
            (
                "materials.m.kind: 'stone' is not known (allowed: scrap, flux, coolant, fuel, "
                "slag, lining, other)"
            ),
        ),
        (
            {"pct": {"CaO": 96, "CO2": 2}, "loss_on_ignition_pct": 2},
            (
                "materials.m.loss_on_ignition_pct: given beside CO2 or H2O in pct; leave one of "
                "the two out"
            ),
        ),
        (
            {"pct": {"SiO2": 60, "CaO": 20}, "loss_on_ignition_pct": 20},
            "materials.m.pct: 4.3 % CO2 is more than its CaO and MgO can hold",
        ),
        (
            {"pct": {"CaO": 100}, "yield_pct": 98, "moisture_pct": 3},
            "materials.m.yield_pct: leaves 2 % for moisture, oil and rust of 3 %",
        ),
        ({"pct": {"CaO": 90}, "rest": "Xx"}, "materials.m.rest: 'Xx' is not a species known here"),
    ],
)
def test_message_names_field_and_fault(fields, line):
    assert faults_of(fields) == [line]


def test_material_that_is_no_table():
    assert faults_of(["CaO"]) == ["materials.m: must be a table, given ['CaO']"]


# ---- the library -------------------------------------------------------------------------


@pytest.mark.parametrize("name", library_fields())
def test_library_material_closes_and_has_a_source(name):
    material = library_material(name)
    assert abs(math.fsum(material.species_kg.values()) - 1.0) <= 1e-12
    assert min(material.species_kg.values()) > 0.0
    assert not material.warnings
    assert material.source
    assert material.description
    assert material.kind != "other"
    assert set(material.species_kg) <= set(known_species())
    assert sum(element_kg(material).values()) == pytest.approx(1.0, abs=1e-9)


def test_every_known_species_has_a_formula_and_an_enthalpy():
    """Guard: a material that is accepted must also have a heat content when charged."""
    enthalpy = pytest.importorskip("converter_calc.thermo.enthalpy")
    for species in known_species():
        assert math.fsum(mass_fractions(species).values()) == pytest.approx(1.0)
        if species not in ("P2O5", "CO2"):  # half of P4O10; always bound to an oxide
            assert math.isfinite(float(enthalpy.enthalpy_J_kg(species, 298.15)))


#: Analyses of common practice (no source): material, element or oxide, range in mass %.
TYPICAL = [
    ("burnt_lime", "CaO", 90, 94),
    ("burnt_lime", "SiO2", 1, 3),
    ("burnt_lime", "MgO", 1, 3),
    ("carryover_slag", "CaO", 38, 40),
    ("carryover_slag", "SiO2", 34, 36),
    ("carryover_slag", "Al2O3", 10, 14),
    ("carryover_slag", "MgO", 7, 9),
    ("carryover_slag", "S", 1, 1),
]


@pytest.mark.parametrize(("name", "species", "low", "high"), TYPICAL)
def test_library_analysis_lies_in_the_range_of_common_practice(name, species, low, high):
    material, formula = library_material(name), periodictable.formula(species)
    metal = next(iter(formula.atoms))
    found = 100.0 * element_kg(material)[str(metal)] / formula.mass_fraction[metal]
    assert low - 0.05 <= found <= high + 0.05  # analyses that do not add up to 100 are scaled


def test_ferrosilicon_holds_three_quarters_silicon():
    """ISO 5445 FeSi75: 72 to 80 % Si (from memory)."""
    assert 0.72 <= element_kg(library_material("ferrosilicon_75"))["Si"] <= 0.80


def test_direct_reduced_iron_is_as_metallised_as_described():
    """93 % of all iron metallic, as the description says; weights from periodictable."""
    for name in ("DRI", "HBI"):
        material = library_material(name)
        share = material.species_kg["Fe"] / element_kg(material)["Fe"]
        assert share == pytest.approx(0.93, abs=0.01)


def test_library_covers_the_stock_of_a_converter_shop():
    kinds = {library_material(name).kind for name in library_fields()}
    assert kinds == {"scrap", "flux", "coolant", "fuel", "slag", "lining"}


# ---- overriding --------------------------------------------------------------------------


def test_new_analysis_replaces_the_whole_composition_and_nothing_else():
    below = library_fields()["burnt_lime"]
    above = override_fields(below, {"pct": {"CaO": 100.0}})
    assert "loss_on_ignition_pct" not in above
    assert above["bulk_density_kg_per_m3"] == below["bulk_density_kg_per_m3"]
    assert override_fields(below, {"price_per_t": 5.0})["pct"] == below["pct"]
