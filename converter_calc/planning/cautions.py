"""Warnings that a practitioner would want to see, each with the numbers that raise it."""

from __future__ import annotations

from collections.abc import Callable

import numpy as np

from converter_calc.balance.closures import magnesia_aim_pct
from converter_calc.basis.units import ZERO_C_K
from converter_calc.laws import magnesia, manganese, phosphorus, sulphur
from converter_calc.laws.catalogue import Outside
from converter_calc.planning.outcome import Caution, Outcome, spread

#: Thresholds of slopping and reversion: common practice, no source.
SLOPPING_SI_PCT = 0.9
SLOPPING_SLAG_KG_PER_T = 130.0
UNDISSOLVED_PCT_OF_SLAG = 2.0
LEAST_BASICITY = 2.5


def cautions_of(outcome: Outcome) -> list[Caution]:
    """All warnings of a group of solved heats."""
    with np.errstate(all="ignore"):
        return [
            *_end_point(outcome),
            *_slag(outcome),
            *_slopping(outcome),
            *_charge(outcome),
            *_law_ranges(outcome),
        ]


def _end_point(outcome: Outcome) -> list[Caution]:
    s, values = outcome.state, outcome.heats.values
    found = []
    temp_C = s.T_K - ZERO_C_K
    found.append(
        Caution(
            "end-temperature-range",
            "end_point.temperature_C",
            (temp_C < 1550.0) | (temp_C > 1750.0),
            "the end temperature {T:.0f} C is outside 1550 to 1750 C, where the slag laws hold",
            {"T": temp_C},
        )
    )
    found.append(
        Caution(
            "end-carbon-range",
            "end_point.steel_pct.C",
            (np.asarray(s.C_pct) < 0.015) | (np.asarray(s.C_pct) > 0.8),
            "the end carbon {C:.4f} % is outside 0.015 to 0.8 %, where the iron-oxide table holds",
            {"C": s.C_pct},
        )
    )
    for element, code in (("P", "phosphorus"), ("S", "sulphur")):
        aim = values[f"aim_{element}_pct"]
        have = outcome.steel_pct().get(element)
        if have is None or not np.isfinite(aim).any():
            continue
        have = spread(have, outcome.n)
        over = np.nan_to_num(have - aim * (1.0 + 1e-6), nan=-1.0) > 0.0
        found.append(
            Caution(
                code + "-above-aim",
                f"end_point.steel_pct.{element}",
                over,
                "the steel ends at {have:.4f} % " + element + ", above the aim of {aim:.4f} %",
                {"have": have, "aim": aim},
            )
        )
    negative = np.zeros(outcome.n, dtype=bool)
    for species in (s.slag_species_kg, s.metal_species_kg, s.gas_kg):
        for kg in species.values():
            negative |= np.broadcast_to(np.asarray(kg) < -1e-9 * outcome.p.scale_kg, (outcome.n,))
    found.append(
        Caution(
            "negative-species",
            "streams",
            negative,
            "a species comes out with a negative mass: pins or dust take more than was charged",
        )
    )
    return found


def _slag(outcome: Outcome) -> list[Caution]:
    p, s = outcome.p, outcome.state
    sat = magnesia.saturation_pct(s.liquid_basicity, s.T_K)
    undissolved = 100.0 * s.undissolved_kg / s.slag_kg
    MgO = s.slag_pct.get("MgO", 0.0)
    lime_bound = outcome.ask.lime
    return [
        Caution(
            "lining-attack",
            "end_point.slag_pct.MgO",
            np.asarray(MgO) < 0.98 * np.minimum(sat, magnesia_aim_pct(p, s)),
            "the slag holds {MgO:.1f} % MgO, below saturation ({sat:.1f} %): it dissolves lining",
            {"MgO": MgO, "sat": sat},
        ),
        Caution(
            "undissolved-lime",
            "streams.undissolved_lime",
            np.asarray(undissolved) > UNDISSOLVED_PCT_OF_SLAG,
            "{kg:.0f} kg of lime do not dissolve ({pct:.1f} % of the slag) and do not "
            "dephosphorise; free lime makes slag swell",
            {"kg": s.undissolved_kg, "pct": undissolved},
        ),
        Caution(
            "low-basicity",
            "end_point.basicity",
            np.asarray(s.basicity) < LEAST_BASICITY if not lime_bound else np.zeros(1, dtype=bool),
            "CaO/SiO2 is {B:.2f}; below 2.5 the slag attacks a basic lining and holds little P",
            {"B": s.basicity},
        ),
    ]


def _slopping(outcome: Outcome) -> list[Caution]:
    s, p = outcome.state, outcome.p
    per_t = 1e3 * s.slag_kg / s.steel_kg
    Si = p.hot_metal_pct.get("Si", 0.0)
    return [
        Caution(
            "slopping-silicon",
            "hot_metal.Si_pct",
            np.asarray(Si) > SLOPPING_SI_PCT,
            "hot metal with {Si:.2f} % Si (above 0.9 %): slopping risk, watch slag and lance "
            "height; see the shop's slopping practice",
            {"Si": Si},
        ),
        Caution(
            "slopping-slag",
            "end_point.slag_kg",
            np.asarray(per_t) > SLOPPING_SLAG_KG_PER_T,
            "{slag:.0f} kg of slag per tonne of steel (above 130): slopping risk; check the "
            "freeboard",
            {"slag": per_t},
        ),
    ]


def _charge(outcome: Outcome) -> list[Caution]:
    found = []
    water = hidden = 0.0
    for name, kg in outcome.charged_kg.items():
        material = outcome.heats.materials[name]
        if material.kind == "scrap":
            water = water + kg * material.species_kg.get("H2O", 0.0)
            hidden = hidden + kg * material.species_kg.get("C16H34", 0.0)
    found.append(
        Caution(
            "wet-scrap",
            "charge",
            np.asarray(water) > 0.0,
            "the scrap carries {kg:.0f} kg of water: hot metal on wet scrap or ice explodes; "
            "dry it or leave it out, and follow the shop's charging rules",
            {"kg": water},
        )
    )
    found.append(
        Caution(
            "oily-scrap",
            "charge",
            np.asarray(hidden) > 0.0,
            "the scrap carries {kg:.0f} kg of oil: flame and fume at charging",
            {"kg": hidden},
        )
    )
    found += [
        Caution(
            "analysis-blank",
            f"hot_metal.{element}_pct",
            np.isnan(outcome.heats.values[f"hm_{element}_pct"]),
            f"no {element} is given for the hot metal: it is taken as 0",
        )
        for element in ("Si", "Mn", "P", "S")
    ]
    oxygen = outcome.heats.values["oxygen_Nm3"]
    if outcome.ask.end == "oxygen_Nm3":
        found.append(
            Caution(
                "oxygen-ignored",
                "charge.oxygen_Nm3",
                np.isfinite(oxygen),
                "charge.oxygen_Nm3 = {given:.0f} is not used: the plan solves for the oxygen",
                {"given": oxygen},
            )
        )
    lime = outcome.charged_kg.get(outcome.heats.choices.lime, 0.0)
    found += [
        Caution(
            f"no-{what}",
            f"charge.{field}",
            np.asarray(kg) <= 0.0,
            f"no {what} is charged: what is not given counts as none when a heat is predicted",
        )
        for what, field, kg in (
            ("scrap", "scrap_kg", outcome.kind_kg("scrap")),
            ("lime", f"{outcome.heats.choices.lime}_kg", lime),
        )
        if outcome.ask.heat == "T_K"
    ]
    fluorspar = outcome.state.slag_species_kg.get("CaF2", 0.0)
    found.append(
        Caution(
            "fluoride",
            "charge",
            np.asarray(fluorspar) > 0.0,
            "{kg:.0f} kg of CaF2 in the slag: it attacks the lining and gives off fluorides; "
            "check the environmental permit",
            {"kg": fluorspar},
        )
    )
    return found


def _law_ranges(outcome: Outcome) -> list[Caution]:
    """Named laws used outside the range that their source gives, unless pinned away."""
    s, p = outcome.state, outcome.p
    slag = {name: np.asarray(pct) for name, pct in s.slag_pct.items()}
    outside: dict[str, tuple[str, Callable[[str], list[Outside]]]] = {
        "P": ("phosphorus", lambda law: phosphorus.out_of_range(law, slag, s.T_K, s.C_pct)),
        "Mn": ("manganese", lambda law: manganese.out_of_range(law, slag, s.T_K)),
        "S": ("sulphur", lambda law: sulphur.out_of_range(law, slag, s.T_K)),
    }
    found: list[Caution] = []
    for element, (topic, ranges) in outside.items():
        if p.mask(f"pin_L_{element}") is True or p.mask(f"pin_end_{element}_pct") is True:
            continue
        law = p.laws[topic]
        for quantity, low, high, mask in ranges(law):
            found.append(
                Caution(
                    "law-range",
                    f"law.{topic}",
                    mask,
                    f"the {topic} law {law} is used outside its range of {quantity} "
                    f"({low:g} to {high:g})",
                )
            )
    return found
