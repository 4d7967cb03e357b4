"""The parameter table, published heats as input. Kind of check: guards of the
table, common practice (no source) for defaults, the named sources for published heats."""

import math

import numpy as np
import pytest

from converter_calc.balance.heats import heats_from_dict
from converter_calc.balance.schema import (
    allowed_texts,
    material_fields,
    number_names,
    parameters,
    parse_shares,
)


@pytest.mark.parametrize("table", [parameters(), material_fields()], ids=["inputs", "materials"])
def test_rows_of_the_schema(table):
    places = [row.place for row in table.values()]
    assert len(set(places)) == len(places)
    for name, row in table.items():
        assert row.source, name
        assert row.description, name
        assert row.kind in ("number", "text", "list", "table"), name
        assert row.low < row.high or row.kind != "number", name
        if row.kind == "number":
            assert math.isfinite(row.low), name
            assert math.isfinite(row.high), name
            unit = row.unit or "1"
            assert {"C": unit == "C", "kg": unit == "kg", "pct": "%" in unit}.get(
                row.key.rsplit("_", 1)[-1], True
            ), name  # the suffix of a name is its unit
            if row.default:
                assert row.low <= row.default_number <= row.high, name
        elif row.allowed and row.default:
            assert row.default in row.allowed, name
    assert all(len(set(row.allowed)) == len(row.allowed) for row in table.values())


def test_default_dust_and_laws_are_known():
    assert math.fsum(parse_shares(parameters()["dust_pct"].default).values()) == 100.0
    for row in parameters().values():
        if row.section == "law":
            assert row.default in allowed_texts(row.name), row.name


def test_default_dust_holds_the_iron_of_common_practice():
    """55 to 70 % iron in dust: common practice, no source. Weights from periodictable."""
    periodictable = pytest.importorskip("periodictable")
    iron = sum(
        share * periodictable.formula(species).mass_fraction.get(periodictable.Fe, 0.0)
        for species, share in parse_shares(parameters()["dust_pct"].default).items()
    )
    assert 55.0 <= iron <= 70.0


#: Defaults against the ranges of common practice (no source).
PRACTICE_RANGES = {
    "oxygen_purity_pct": (99.0, 99.9),
    "dust_kg_per_t": (10.0, 20.0),
    "droplets_pct": (3.0, 8.0),
    "post_combustion_ratio": (0.08, 0.15),
    "lining_wear_kg_per_t": (0.3, 3.0),
    "S_to_gas_pct": (10.0, 20.0),
    "carryover_slag_pct": (0.3, 1.0),
    "ferric_share_pct": (15.0, 35.0),
    "P_approach": (0.3, 0.8),
    "blow_min": (16.0, 18.0),
}


@pytest.mark.parametrize("name", PRACTICE_RANGES)
def test_default_lies_in_the_range_of_common_practice(name):
    low, high = PRACTICE_RANGES[name]
    assert low <= parameters()[name].default_number <= high


@pytest.mark.parametrize(("steel_t", "low", "high"), [(150, 2, 5), (300, 2, 5), (30, 5, 8)])
def test_default_heat_loss_is_that_of_common_practice(steel_t, low, high):
    """2-5 % of heat input for 150-300 t, 5-8 % for small vessels (common practice, no source).

    Heat input of 2.0 GJ/t steel: 218.5 MJ for 100 kg hot metal and 101.9 kg metal with the
    scrap, hand method of converter-shop design textbooks (from memory).
    """
    rows = parameters()
    minutes = rows["wait_min"].default_number + rows["blow_min"].default_number
    loss = rows["heat_loss_MJ_per_t"].default_number * steel_t
    loss += rows["heat_loss_MJ_per_min"].default_number * minutes
    assert low <= 100.0 * loss / (218.459 / 0.10192 * steel_t) <= high


def test_gas_path_share_follows_the_typical_course_of_the_blow():
    """Carbon and temperature over the blow, combined blown: common practice, no source."""
    C = np.array([3.8, 3.3, 2.4, 1.5, 0.6, 0.25, 0.05])
    temp = np.array([1275, 1390, 1470, 1540, 1600, 1635, 1665])
    middle = 0.5 * (temp[1:] + temp[:-1])
    share = ((middle - temp[0]) * -np.diff(C)).sum() / ((temp[-1] - temp[0]) * (C[0] - C[-1]))
    assert parameters()["gas_path_share"].default_number == pytest.approx(share, abs=0.01)


# ---- published heats as input ------------------------------------------------------------


def test_every_pinnable_quantity_of_the_contract_has_a_field():
    """Contract: any quantity that the model would estimate can be pinned."""
    wanted = (
        "pin_slag_FeO_pct pin_slag_Fe2O3_pct aim_MgO_pct pin_slag_MgO_pct MgO_saturation_factor "
        "pin_basicity post_combustion_ratio pin_dust_kg pin_droplets_kg pin_heat_loss_MJ "
        "pin_heat_loss_MJ_per_t pin_heat_loss_MJ_per_min pin_off_gas_temp_C pin_L_P pin_L_Mn "
        "pin_L_S"
    )
    assert set(wanted.split()) <= set(number_names())


PUBLISHED = {
    # Worked problem on oxygen-converter material balance, askfilo.com (printed data)
    "charge four to one": {
        "hot_metal": {"mass_kg": 856.4, "temp_C": 1300, "C_pct": 4.0, "Si_pct": 1.0, "Mn_pct": 1.0,
                      "P_pct": 0.3, "Fe_pct": 93.7},
        "charge": {"plain_scrap_kg": 214.1},
        "aim": {"temp_C": 1600, "C_pct": 0.2},
        "practice": {"oxygen_purity_pct": 99.5, "oxygen_utilisation_pct": 90.0,
                     "post_combustion_ratio": 0.5},
        "pin": {"iron_to_slag_pct": 2.0, "slag_CaO_pct": 50.0, "end_Mn_pct": 0.2, "end_P_pct": 0.0},
        "materials": {"plain_scrap": {"kind": "scrap", "pct": {"Fe": 100.0}},
                      "burnt_lime": {"pct": {"CaO": 95.0, "SiO2": 2.0, "MgO": 3.0}}},
    },
    # NPTEL course 113104059 Steelmaking, module 2, lecture 11 (printed data)
    "nptel": {
        "hot_metal": {"mass_kg": 1000, "temp_C": 1300, "C_pct": 4.0, "Si_pct": 0.8, "Mn_pct": 0.25,
                      "P_pct": 0.2},
        "charge": {"plain_scrap_kg": 150.0},
        "aim": {"C_pct": 0.1},
        "pin": {"slag_FeO_pct": 18.0, "slag_Fe2O3_pct": 0.0},
        "materials": {"plain_scrap": {"kind": "scrap", "pct": {"C": 0.1}}},
    },
    # Hand method of converter-shop design textbooks (constants from memory)
    "hand method": {
        "hot_metal": {"mass_kg": 100, "temp_C": 1250, "C_pct": 4.2, "Si_pct": 0.8, "Mn_pct": 0.6,
                      "P_pct": 0.2, "S_pct": 0.035},
        "aim": {"temp_C": 1690, "C_pct": 0.1},
        "charge": {"burnt_lime_kg": 6.688, "fluorspar_kg": 0.5, "raw_dolomite_kg": 2.5,
                   "oxygen_Nm3": 5.773},
        "practice": {"post_combustion_ratio": 0.1, "dust_pct": {"FeO": 75, "Fe2O3": 20},
                     "droplets_pct": 6.0, "oxygen_purity_pct": 99.0},
        "pin": {"slag_FeO_pct": 8.25, "slag_Fe2O3_pct": 5.0, "basicity": 3.5, "dust_kg": 1.5,
                "ejections_kg": 1.0, "off_gas_temp_C": 1450, "heat_loss_share_pct": 5.0,
                "lining_wear_kg": 0.3, "end_Si_pct": 0, "end_Mn_pct": 0.18, "end_P_pct": 0.02,
                "end_S_pct": 0.021},
        "materials": {
            "burnt_lime": {"pct": {"CaO": 88.0, "SiO2": 2.5, "MgO": 2.6, "Al2O3": 1.5,
                                   "Fe2O3": 0.5, "P2O5": 0.1, "S": 0.06, "CO2": 4.64,
                                   "H2O": 0.1}},
            "fluorspar": {"pct": {"CaF2": 88.0, "SiO2": 5.5, "MgO": 0.6, "Al2O3": 1.6,
                                  "Fe2O3": 1.5, "P2O5": 0.9, "S": 0.1, "H2O": 2.0}},
            "raw_dolomite": {"pct": {"CaO": 36.4, "MgO": 25.6, "SiO2": 0.8, "Al2O3": 1.0,
                                     "CO2": 36.2}},
            "lining": {"pct": {"MgO": 78.8, "SiO2": 3.0, "CaO": 1.2, "Al2O3": 1.4, "Fe2O3": 1.6,
                               "C": 14.0}},
        },
    },
}  # fmt: skip


@pytest.mark.parametrize("name", PUBLISHED)
def test_published_heat_is_accepted_as_printed(name):
    document = PUBLISHED[name]
    table = heats_from_dict(document)
    assert table.warnings == []
    for key, number in document["pin"].items():
        assert table.values["pin_" + key][0] == number
