"""Heats of the stages of a practice: what one stage hands to the next, and how it is asked.

What the shop states for a whole heat (dust, ejections, lining, heat loss per tonne, time of the
blow, sulphur to the gas) is split between the stages by their share of the blow.
"""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass, replace
from typing import Any

import numpy as np

from converter_calc.balance.charge import (
    ENTHALPY,
    SLAG_OXIDES,
    TEMPERATURE,
    oxide_factor,
    slag_enthalpy,
)
from converter_calc.balance.heats import HeatTable
from converter_calc.balance.schema import parameters
from converter_calc.balance.state import State
from converter_calc.basis.dual import Array
from converter_calc.basis.errors import Fault, InputError
from converter_calc.basis.units import ZERO_C_K
from converter_calc.planning.outcome import Outcome, spread
from converter_calc.planning.solving import with_values
from converter_calc.thermo.enthalpy import enthalpy_J_kg
from converter_calc.thermo.metal import MetalEnthalpy

#: The law that carries the carbon of the metal.
SLAG_OFF_LAW = "ogawa_2001"
#: Of a whole heat, in proportion to the blow.
SPLIT = (
    *("dust_kg_per_t", "ejections_kg_per_t", "lining_wear_kg_per_t", "heat_loss_MJ_per_t"),
    *("stirring_gas_Nm3", "blow_min", "pin_heat_loss_MJ", "pin_heat_loss_MJ_per_t"),
    *("pin_dust_kg", "pin_ejections_kg", "pin_lining_wear_kg"),
)
#: Pins that hold for a stage as they do for the whole.
PINS_OF_ALL_STAGES = ("pin_heat_loss_MJ_per_min", "pin_heat_loss_share_pct", "pin_off_gas_temp_C")
#: Streams in which slag comes back; see `streams.RETURNED_KIND`.
SLAG_KEPT, LIME_KEPT, METAL_KEPT = "slag_kept", "lime_kept", "metal_kept"
#: Elements that a pre-treatment takes out, and the input that says what it leaves.
TREATED = {"P": "pretreated_P_pct", "Si": "pretreated_Si_pct", "S": "pretreated_S_pct"}


def blow_share(heats: HeatTable) -> Array:
    """Share of the blow before slag-off, (n,), 0 to 1.

    Given, or the oxygen that silicon and carbon (to CO) of the hot metal take by then, of what
    they take in all. Raises InputError for a slag-off carbon that is not between the hot metal
    and the aim.
    """
    values, carbon = heats.values, heats.hm_pct["C"]
    off, end = values["slag_off_C_pct"], values["aim_C_pct"]
    for wrong, limit, side in (
        (off >= carbon, carbon, "below the carbon of the hot metal"),
        (off <= end, end, "above the aim carbon"),
    ):
        for row in np.flatnonzero(wrong)[:1].tolist():
            where = "" if heats.n == 1 else f" (heat {heats.ids[row]})"
            message = f"must be {side} ({limit[row]:g} %), given {off[row]:g}{where}"
            raise InputError([Fault("slag_off.C_pct", message)])
    by_C = oxide_factor("CO", "C") - 1.0
    silicon = heats.hm_pct.get("Si", np.zeros(heats.n)) * (oxide_factor("SiO2", "Si") - 1.0)
    share = (silicon + (carbon - off) * by_C) / (silicon + (carbon - end) * by_C)
    given = values["slag_off_blow_share_pct"] * 0.01
    return np.where(np.isfinite(given), given, share)


def _split(heats: HeatTable, share: Array) -> dict[str, Array]:
    found = {name: heats.values[name] * share for name in SPLIT}
    to_gas = heats.values["S_to_gas_pct"] * 0.01
    # both stages together then leave 1 - to_gas of the sulphur
    found["S_to_gas_pct"] = 100.0 * (1.0 - (1.0 - to_gas) ** share)
    return found


def to_slag_off(heats: HeatTable, *, free_scrap: bool) -> HeatTable:
    """The first stage: to slag-off temperature and carbon, lime by the basicity of its slag.

    free_scrap : whether scrap is what the heat leaves open. All materials that the heat gives
    are charged here, except its lime and magnesia flux. Raises InputError as `blow_share`, and
    where scrap is given both for the heat and for this stage.
    """
    values, choices = heats.values, heats.choices
    changes: dict[str, Any] = _split(heats, blow_share(heats))
    for name in parameters():
        if name.startswith("pin_") and name not in (*SPLIT, *PINS_OF_ALL_STAGES):
            changes[name] = np.nan
    changes |= {
        "aim_temp_C": values["slag_off_temp_C"],
        "aim_C_pct": values["slag_off_C_pct"],
        "aim_P_pct": np.nan,
        "aim_S_pct": np.nan,
        "aim_Mn_pct": np.nan,
        "aim_basicity": values["slag_off_basicity"],
        "aim_MgO_pct": values["slag_off_MgO_pct"],
        "pin_slag_T_Fe_pct": values["slag_off_T_Fe_pct"],
        "pin_undissolved_lime_kg": 0.0,  # the rule for lime holds at the end of the blow only
        "P_approach": values["slag_off_P_approach"],
    }
    before = values["slag_off_scrap_kg"]
    ask = "scrap" if choices.ask in ("scrap", "steel") else None
    if np.isfinite(before).any():
        if not free_scrap:
            message = (
                "given beside the scrap of the charge, all of which is charged before slag-off"
            )
            raise InputError([Fault("slag_off.scrap_kg", message)])
        changes["scrap_kg"], ask = before, None
    elif not free_scrap:
        ask = "trim"
    first = with_values(heats, **changes)
    for name in (choices.lime, choices.magnesia_flux):
        first.masses_kg.pop(name, None)
    laws = {**choices.laws, "phosphorus": SLAG_OFF_LAW}
    return replace(first, choices=replace(choices, laws=laws, ask=ask), grade=None)


def after_slag_off(heats: HeatTable, first: Outcome, *, free_scrap: bool) -> HeatTable:
    """The second stage: the metal of the first, what is left of its slag, and the heat's aims."""
    s, n, values = first.state, heats.n, heats.values
    kept = 1.0 - values["slag_off_share_pct"] * 0.01
    temp_C = spread(s.T_K, n) - ZERO_C_K
    returned = kept_slag(s, n, kept, temp_C)
    for key in [key for key in returned if key.startswith(METAL_KEPT)]:
        del returned[key]  # droplets that stay fall back into the metal
    pct = {el: spread(kg * (100.0 / s.metal_kg), n) for el, kg in s.metal_species_kg.items()}
    changes: dict[str, Any] = _split(heats, 1.0 - blow_share(heats))
    changes |= {f"hm_{el}_pct": x for el, x in pct.items() if f"hm_{el}_pct" in values}
    price = values["price_hot_metal_per_t"]
    changes |= {
        "hot_metal_kg": s.steel_kg + s.droplets_kg * kept,
        "hot_metal_temp_C": temp_C,
        "hot_metal_weight_error_pct": 0.0,
        "hot_metal_temp_error_C": 0.0,
        "price_hot_metal_per_t": np.where(np.isfinite(price), 0.0, np.nan),
        "carryover_slag_pct": 0.0,
        "retained_slag_kg": 0.0,
        "wait_min": values["slag_off_pause_min"],
        "scrap_kg": np.nan if free_scrap else 0.0,
        "scrap_share_pct": np.nan,
    }
    second = with_values(heats, **changes)
    charged = first.charged_kg
    for name in list(second.masses_kg):
        if name in (heats.choices.lime, heats.choices.magnesia_flux):
            second.masses_kg[name] = second.masses_kg[name] - spread(charged.get(name, 0.0), n)
        else:
            second.masses_kg[name] = np.full(n, np.nan)
    choices = replace(heats.choices, ask=None)
    materials = dict(heats.materials)
    if n == 1:  # materials are those of the table; see `practices._over_the_whole` for more heats
        for name, kg in charged.items():
            stock = materials[name].stock_kg
            if stock is not None:
                left = max(0.0, stock - float(np.ravel(kg)[0]))
                materials[name] = replace(materials[name], stock_kg=left)
    return replace(second, choices=choices, materials=materials, hm_pct=pct, returned=returned)


def kept_slag(s: State, n: int, share: Any, temp_C: Any) -> dict[str, Array]:
    """Slag of a heat that stays in the vessel, as `HeatTable.returned`.

    Parameters
    ----------
    s : state of n solved heats. share : part of the slag that stays, with the droplets and the
    undissolved lime in it, 0 to 1. temp_C : its temperature when it takes part again [C].

    Returns
    -------
    Species [kg], enthalpy [J] and temperature of the streams slag_kept, lime_kept and
    metal_kept. The enthalpy is worked out anew at temp_C, slag and metal as liquids.
    """
    streams = {
        SLAG_KEPT: s.slag_species_kg,
        LIME_KEPT: {"CaO": s.undissolved_kg},
        METAL_KEPT: {
            el: kg * (s.droplets_kg / s.metal_kg) for el, kg in s.metal_species_kg.items()
        },
    }
    species = {
        f"{name}:{item}": spread(kg * share, n)
        for name, items in streams.items()
        for item, kg in items.items()
    }
    return with_enthalpy(species, spread(temp_C, n))


def with_enthalpy(species: Mapping[str, Array], temp_C: Array) -> dict[str, Array]:
    """Returned streams from their species [kg] alone: enthalpy at temp_C [C] added."""
    T_K = temp_C + ZERO_C_K
    parts: dict[str, dict[str, Array]] = {}
    for key, kg in species.items():
        name, _, item = key.partition(":")
        parts.setdefault(name, {})[item] = kg
    returned = dict(species)
    for name, items in parts.items():
        if name == SLAG_KEPT:
            oxides = tuple(oxide for oxide in SLAG_OXIDES if oxide in items)
            heat = slag_enthalpy(oxides).enthalpy_J({key: items[key] for key in oxides}, T_K)
        elif name == METAL_KEPT:
            h = MetalEnthalpy(tuple(items)).evaluate_dual(T_K)
            heat = sum(kg * h[el] for el, kg in items.items())
        else:
            heat = sum(kg * enthalpy_J_kg(item, T_K) for item, kg in items.items())
        returned[f"{name}:{ENTHALPY}"] = np.array(heat, dtype=float)
        returned[f"{name}:{TEMPERATURE}"] = temp_C
    return returned


def keep_slag(heats: HeatTable, previous: Outcome, share_pct: Any, temp_C: Any) -> HeatTable:
    """Heats that start on the slag of solved heats, row by row.

    share_pct : part of the slag that stays [%]. temp_C : its temperature at charging [C].
    """
    returned = kept_slag(previous.state, previous.n, np.asarray(share_pct) * 0.01, temp_C)
    return replace(with_values(heats, retained_slag_kg=0.0), returned=returned)


@dataclass(frozen=True)
class Treatment:
    """What a pre-treatment of n hot metals did.

    hot_metal_kg : before. removed_kg : by element, taken out or lost. heat_J : enthalpy of the
    hot metal before less that of the treated metal. not_lowered : elements that were below what
    the treatment leaves already, by where this is so.
    """

    hot_metal_kg: Array
    hot_metal_pct: dict[str, Array]
    hot_metal_temp_C: Array
    hot_metal_J: Array
    removed_kg: dict[str, Array]
    heat_J: Array
    not_lowered: dict[str, Any]


def pretreat(heats: HeatTable) -> tuple[HeatTable, Treatment]:
    """Heats with pre-treated hot metal, and what the treatment took.

    The analysis after treatment is given for P, Si and S, carbon falls by C_loss_pct, iron and
    all else stay in proportion; iron_loss_pct of the hot metal goes with the slag of the
    treatment as it is. Oxygen and fluxes of the treatment are not followed: its heat shows as
    temp_drop_C, its cost and CO2 are given.
    """
    values, n, before = heats.values, heats.n, heats.hm_pct
    not_lowered, after = {}, dict(before)
    for element, name in TREATED.items():
        if element in before:
            not_lowered[element] = before[element] < values[name]
            after[element] = np.minimum(before[element], values[name])
    after["C"] = before["C"] - values["pretreated_C_loss_pct"]
    moved = [*(el for el in TREATED if el in before), "C"]
    rest_before = 100.0 - sum(before[el] for el in moved)
    rest_after = 100.0 - sum(after[el] for el in moved)
    scale = rest_after / rest_before
    after = {el: pct if el in moved else pct * scale for el, pct in after.items()}
    left = (1.0 - values["pretreated_iron_loss_pct"] * 0.01) / scale
    mass = values["hot_metal_kg"]
    temp_C = values["hot_metal_temp_C"]
    treated_C = temp_C - values["pretreated_temp_drop_C"]
    price, cost = values["price_hot_metal_per_t"], values["pretreated_cost_per_t"]
    known = np.isfinite(price) | np.isfinite(cost)
    price = np.where(known, np.nan_to_num(price) + np.nan_to_num(cost), np.nan) / left
    heat_before = _hot_metal_J(before, mass, temp_C)
    treatment = Treatment(
        hot_metal_kg=np.array(mass),
        hot_metal_pct=before,
        hot_metal_temp_C=np.array(temp_C),
        hot_metal_J=heat_before,
        removed_kg={el: mass * 0.01 * (before[el] - left * after[el]) for el in before},
        heat_J=heat_before - _hot_metal_J(after, mass * left, treated_C),
        not_lowered=not_lowered,
    )
    changes = {f"hm_{el}_pct": x for el, x in after.items() if f"hm_{el}_pct" in values}
    table = with_values(
        heats,
        hot_metal_kg=mass * left,
        hot_metal_temp_C=treated_C,
        price_hot_metal_per_t=price,
        **changes,
    )
    return replace(table, hm_pct={el: spread(x, n) for el, x in after.items()}), treatment


def _hot_metal_J(pct: Mapping[str, Array], kg: Array, temp_C: Array) -> Array:
    h = MetalEnthalpy(tuple(pct)).evaluate_dual(temp_C + ZERO_C_K)
    return np.asarray(sum(kg * 0.01 * pct[el] * h[el] for el in pct))
