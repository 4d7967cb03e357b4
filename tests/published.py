"""The published heats of tests/cases as heat documents of ours, with their data pinned.

What a source does not give (temperatures, in material balances) is filled with a plain
value and marked; it does not enter the numbers that are compared.
"""

from __future__ import annotations

import tomllib
from pathlib import Path
from typing import Any

CASES = Path(__file__).resolve().parent / "cases"

#: No stream but those that the source names.
BARE = {
    "carryover_slag_pct": 0.0,
    "lining_wear_kg_per_t": 0.0,
    "dust_kg_per_t": 0.0,
    "ejections_kg_per_t": 0.0,
    "droplets_pct": 0.0,
    "S_to_gas_pct": 0.0,
    "oxygen_utilisation_pct": 100.0,
    "undissolved_lime_pct": 0.0,
}
#: Not in a material balance; with the end temperature pinned the heat loss closes the energy.
NOT_GIVEN = {"temp_C": 1300.0}
END_C = 1650.0


def case(name: str) -> dict[str, Any]:
    """A case file as it stands."""
    return tomllib.loads((CASES / f"{name}.toml").read_text(encoding="utf-8"))


def analysis(pct: dict[str, float]) -> dict[str, float]:
    """A metal analysis in the names of a heat file; iron is the rest."""
    return {f"{element}_pct": x for element, x in pct.items() if element != "Fe"}


def charge_four_to_one() -> dict[str, Any]:
    """AF-1: hot metal and scrap 4 : 1 for 1000 kg of steel."""
    given = case("charge_four_to_one")["input"]
    ferrous, ferric = 55.845 / 71.844, 2 * 55.845 / 159.687
    return {
        "hot_metal": {**NOT_GIVEN, **analysis(given["hot_metal_pct"])},
        "aim": {"steel_kg": 1000.0, "C_pct": given["steel_pct"]["C"]},
        "charge": {"scrap_share_pct": 20.0, "magnesite_kg": 0.0},
        "choice": {
            "scrap_mix": {"pure_iron": 1.0},
            "lime": "lime_of_the_problem",
            "magnesia_flux": "magnesite",
            "coolant": "lump_ore",
            "fuel": "coke",
        },
        "practice": {
            **BARE,
            "oxygen_purity_pct": given["oxygen_purity_pct"],
            "oxygen_utilisation_pct": given["oxygen_utilisation_pct"],
            "post_combustion_ratio": 0.5,
            "ferric_share_pct": 100.0 * ferric / (ferrous + ferric),
        },
        "pin": {
            "end_temp_C": END_C,
            "iron_to_slag_pct": given["charged_iron_to_slag_pct"],
            "slag_CaO_pct": given["slag_CaO_pct"],
            "end_Mn_pct": given["steel_pct"]["Mn"],
            "end_Si_pct": 0.0,
            "end_P_pct": 0.0,
            "end_S_pct": 0.0,
            "end_O_ppm": 0.0,
            "undissolved_lime_kg": 0.0,
        },
        "materials": {
            "pure_iron": {"kind": "scrap", "pct": given["scrap_pct"]},
            "lime_of_the_problem": {"kind": "flux", "pct": given["lime_pct"]},
        },
    }


def complete_oxidation() -> dict[str, Any]:
    """EX-1: all carbon, silicon and manganese of 10 t hot metal, and 100 kg of iron."""
    given = case("complete_oxidation")["input"]
    iron = given["hot_metal_kg"] * (1.0 - sum(given["hot_metal_pct"].values()) / 100.0)
    return {
        "hot_metal": {"mass_kg": given["hot_metal_kg"], **NOT_GIVEN}
        | analysis(given["hot_metal_pct"]),
        "aim": {"C_pct": 0.0},
        "practice": {**BARE, "post_combustion_ratio": 0.4, "ferric_share_pct": 0.0}
        | {"oxygen_purity_pct": 100.0},
        "pin": {
            "end_temp_C": END_C,
            "iron_to_slag_pct": 100.0 * given["iron_to_FeO_kg"] / iron,
            "end_Si_pct": 0.0,
            "end_Mn_pct": 0.0,
            "end_S_pct": 0.0,
            "end_O_ppm": 0.0,
            "undissolved_lime_kg": 0.0,
        },
    }


def nptel_material_balance() -> dict[str, Any]:
    """NPTEL-1: 1000 kg hot metal and 150 kg scrap; flux brings the slag to its printed mass."""
    data = case("nptel_material_balance")
    given, printed, oxides = data["input"], data["printed"], data["computed"]["oxides_formed_kg"]
    return {
        "hot_metal": {"mass_kg": given["hot_metal_kg"], **NOT_GIVEN}
        | analysis(given["hot_metal_pct"]),
        "aim": {"C_pct": given["steel_pct"]["C"]},
        "charge": {
            "scrap_of_the_problem_kg": given["scrap_kg"],
            "flux_of_the_problem_kg": printed["slag_kg"] - sum(oxides.values()),
        },
        "practice": {**BARE, "post_combustion_ratio": 0.1, "ferric_share_pct": 0.0},
        "pin": {
            "end_temp_C": END_C,
            "slag_FeO_pct": given["slag_FeO_pct"],
            "slag_Fe2O3_pct": 0.0,
            "end_Si_pct": 0.0,
            "end_Mn_pct": 0.0,
            "end_P_pct": 0.0,
            "end_S_pct": 0.0,
            "end_O_ppm": 0.0,
            "undissolved_lime_kg": 0.0,
        },
        "materials": {
            "scrap_of_the_problem": {"kind": "scrap", "pct": given["scrap_pct"], "rest": "Fe"},
            "flux_of_the_problem": {"kind": "flux", "pct": {"CaO": 100.0}},
        },
    }


def hand_method_heat(scrap_kg: float | None = 0.0) -> dict[str, Any]:
    """REF-A: 100 kg hot metal by a hand method; without scrap, or (None) with scrap free."""
    data = case("hand_method_heat")
    given, hand = data["input"], data["hand_method"]
    removed_S = 0.035 - hand["metal_without_scrap_kg"] * given["end_metal"]["S"] / 100.0
    total_S = 0.035 + hand["lime_kg"] * 0.0006 + given["fluorspar_kg"] * 0.001
    utilised = 1.0 - 0.005 * hand["gas_Nm3"] / (hand["oxygen_blown_Nm3"] * 0.99)
    hot_metal = {k: v for k, v in given["hot_metal"].items() if k != "temperature_C"}
    heat = {
        "hot_metal": {
            "mass_kg": 100.0,
            "temp_C": given["hot_metal"]["temperature_C"],
            **analysis(hot_metal),
        },
        "aim": {"C_pct": given["end_metal"]["C"], "temp_C": given["end_metal"]["temperature_C"]},
        "charge": {
            "fluorspar_of_the_method_kg": given["fluorspar_kg"],
            "raw_dolomite_of_the_method_kg": given["raw_dolomite_kg"],
        },
        "choice": {
            "scrap_mix": {"pure_iron": 1.0},
            "lime": "lime_of_the_method",
            "magnesia_flux": "raw_dolomite_of_the_method",
            "coolant": "lump_ore",
            "fuel": "coke",
        },
        "practice": {
            **BARE,
            "oxygen_purity_pct": given["oxygen_purity_vol_pct"],
            "oxygen_impurity_argon_pct": 0.0,
            "oxygen_utilisation_pct": 100.0 * utilised,
            "post_combustion_ratio": 1.0 - given["carbon_to_CO_pct"] / 100.0,
            "carbonate_CO2_reacted_pct": 0.0,
            "hydrogen_burnt_pct": 100.0,
            "S_to_gas_pct": 100.0 * given["removed_sulphur_to_gas_share"] * removed_S / total_S,
            "droplets_pct": given["droplets_pct_of_slag"],
            "dust_pct": {
                "FeO": given["dust"]["FeO_pct"],
                "Fe2O3": given["dust"]["Fe2O3_pct"],
            },
        },
        "pin": {
            "basicity": given["basicity"],
            "slag_FeO_pct": given["slag_FeO_pct"],
            "slag_Fe2O3_pct": given["slag_Fe2O3_pct"],
            "end_Si_pct": given["end_metal"]["Si"],
            "end_Mn_pct": given["end_metal"]["Mn"],
            "end_P_pct": given["end_metal"]["P"],
            "end_S_pct": given["end_metal"]["S"],
            "end_O_ppm": 0.0,
            "off_gas_temp_C": given["gas_and_dust_temperature_C"],
            "dust_kg": given["dust"]["mass_kg"]
            * (given["dust"]["FeO_pct"] + given["dust"]["Fe2O3_pct"])
            / 100.0,
            "ejections_kg": given["ejected_iron_kg"],
            "lining_wear_kg": given["lining_wear_kg"],
            "undissolved_lime_kg": 0.0,
        },
        "materials": {
            "pure_iron": {"kind": "scrap", "pct": {"Fe": 100.0}},
            "lime_of_the_method": {"kind": "flux", "pct": given["lime_pct"]},
            "fluorspar_of_the_method": {"kind": "flux", "pct": given["fluorspar_pct"]},
            "raw_dolomite_of_the_method": {"kind": "flux", "pct": given["raw_dolomite_pct"]},
            "lining": {"kind": "lining", "pct": given["lining_pct"]},
        },
    }
    if scrap_kg is None:
        heat["pin"]["heat_loss_MJ"] = hand["heat_out_kJ"]["loss"] / 1000.0
    else:
        heat["pin"]["end_temp_C"] = given["end_metal"]["temperature_C"]
        heat["charge"]["pure_iron_kg"] = scrap_kg
    return heat
