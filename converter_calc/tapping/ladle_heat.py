"""The tap as a heat balance: temperature in the ladle, loss by loss and addition by addition.

Enthalpies are those of the charge calculation: pure elements at 298.15 K are zero, so heats of
solution and of deoxidation come out as differences. Losses by stream and standing are stated
as cooling rates (common practice); the lining soaks heat as a semi-infinite solid does whose
face is brought to the steel temperature (Carslaw & Jaeger, Conduction of Heat in Solids,
2nd ed., 1959, sec. 2.5, from memory).
"""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass
from functools import cache

import numpy as np

from converter_calc.balance.charge import charged_species_enthalpy_J_kg, slag_enthalpy
from converter_calc.balance.streams import Closure, Stream, closures_of
from converter_calc.basis.dual import Array
from converter_calc.basis.units import T_REF_K, ZERO_C_K
from converter_calc.tapping.pouring import OXIDE, Poured, TapCase, bound_oxygen
from converter_calc.tapping.tap_practice import TapPractice
from converter_calc.thermo.enthalpy import enthalpy_J_kg
from converter_calc.thermo.metal import MetalEnthalpy

#: Weight to which the cooling rate of the stream belongs [kg].
REFERENCE_KG = 200e3
STEEL_DENSITY_KG_M3 = 7000.0
AIR_K = 298.15
#: The enthalpy is nearly straight in T: with one slope each step gains three digits and more.
NEWTON_STEPS = 20


@dataclass
class LadleHeat:
    """Temperatures and heats of the tap, arrays (n,).

    T_K : in the ladle after standing. losses_J : stream and open ladle, lining, standing.
    steps_K : what each step adds to the temperature [K]; they add up to T_K less the tap
    temperature. streams, closures : mass and heat of everything in and out.
    """

    T_K: Array
    losses_J: dict[str, Array]
    steps_K: dict[str, Array]
    streams: list[Stream]
    closures: dict[str, Closure]


@cache
def _metal(elements: tuple[str, ...]) -> MetalEnthalpy:
    return MetalEnthalpy(elements)


def metal_J(kg: Mapping[str, Array], T_K: Array) -> Array:
    """Enthalpy of a liquid metal [J]; kg by element, T (n,)."""
    h = _metal(tuple(kg)).evaluate_dual(T_K)
    return sum((mass * h[element] for element, mass in kg.items()), np.zeros_like(T_K))


def slag_J(kg: Mapping[str, Array], T_K: Array) -> Array:
    """Enthalpy of a molten slag [J]; kg by species, T (n,)."""
    if not kg:
        return np.zeros_like(T_K)
    return np.asarray(slag_enthalpy(tuple(kg)).enthalpy_J(kg, T_K)) + np.zeros_like(T_K)


def addition_J_kg(practice: TapPractice, name: str) -> float:
    """Enthalpy of an addition as it is thrown in [J/kg]: elements, oxides and its compounds."""
    addition = practice.additions[name]
    temp_C = practice.additions_temp_C if addition.temp_C is None else addition.temp_C
    parts = {**addition.elements_pct(), **addition.all_oxides_pct()}
    heat = sum(
        0.01 * pct * charged_species_enthalpy_J_kg(species, temp_C + ZERO_C_K)
        for species, pct in parts.items()
    )
    return heat + addition.heat_kJ_kg * 1e3


def lining_soak_J(practice: TapPractice, steel_kg: Array, T_K: Array) -> Array:
    """Heat that the lining takes up during the tap [J].

    2 e (T_steel - T_lining) sqrt(t/pi) per area, e the effusivity; the ladle is a cylinder as
    high as wide, full at the end. Its wall is reached bit by bit: by the mean of sqrt(1 - u),
    2/3 of what the bottom takes.
    """
    volume = steel_kg / STEEL_DENSITY_KG_M3
    diameter = np.cbrt(4.0 * volume / np.pi)
    area = np.pi * diameter**2 * (0.25 + 2.0 / 3.0)
    gap = np.maximum(T_K - (practice.lining_start_C + ZERO_C_K), 0.0)
    depth = np.sqrt(practice.tap_min * 60.0 / np.pi)
    soak: Array = 2.0 * practice.lining_effusivity * gap * depth * area
    return soak


def losses_J(case: TapCase) -> dict[str, Array]:
    """Heat lost from the tap to the ladle sample [J]: stream, lining, standing."""
    practice, steel = case.practice, case.steel_kg
    kg = {e: steel * pct * 0.01 for e, pct in case.steel_pct.items()}
    per_K = metal_J(kg, case.T_K + 0.5) - metal_J(kg, case.T_K - 0.5)
    stream_K = practice.stream_K_per_min * practice.tap_min * np.cbrt(REFERENCE_KG / steel)
    standing_K = practice.standing_K_per_min * practice.standing_min
    return {
        "stream and open ladle": stream_K * per_K,
        "lining of the ladle": lining_soak_J(practice, steel, case.T_K),
        "standing": standing_K * per_K,
    }


def _liquid_J(poured: Poured, T_K: Array) -> Array:
    """Enthalpy of steel, slag and undissolved metal at one temperature [J]."""
    metal = dict(poured.steel)
    for element, kg in poured.undissolved.items():
        metal[element] = metal.get(element, 0.0) + kg
    return metal_J(metal, T_K) + slag_J(poured.slag, T_K)


def _available_J(case: TapCase, into: list[Stream], poured: Poured, lost: Array) -> Array:
    entering: Array = sum((s.enthalpy_J for s in into), np.zeros(case.n))
    gas: Array = poured.gas["CO"] * enthalpy_J_kg("CO", case.T_K)
    return entering - gas - lost


def ladle_T_K(case: TapCase, poured: Poured, into: list[Stream] | None = None) -> Array:
    """Temperature in the ladle from the heat balance of the tap [K], (n,).

    into : the streams that enter, if they are at hand.
    """
    into = _streams_in(case, poured) if into is None else into
    lost = sum(losses_J(case).values(), np.zeros(case.n))
    available = _available_J(case, into, poured, lost)
    T = case.T_K - 25.0
    slope = _liquid_J(poured, T + 0.5) - _liquid_J(poured, T - 0.5)
    for _ in range(NEWTON_STEPS):
        step = (available - _liquid_J(poured, T)) / slope
        T = T + step
        if np.all(np.abs(step) < 1e-9):
            break
    return T


def ladle_heat(case: TapCase, poured: Poured) -> LadleHeat:
    """Temperature in the ladle from the heat balance of the tap; see `LadleHeat`."""
    into = _streams_in(case, poured)
    losses = losses_J(case)
    T, T_tap = ladle_T_K(case, poured, into), case.T_K
    lost = sum(losses.values(), np.zeros(case.n))
    available = _available_J(case, into, poured, lost)

    def liquid(T_K: Array) -> Array:
        return _liquid_J(poured, T_K)

    moved = T - T_tap
    small = np.abs(moved) < 1e-6
    per_K = np.where(
        small,
        liquid(T_tap + 0.5) - liquid(T_tap - 0.5),
        (liquid(T) - liquid(T_tap)) / np.where(small, 1.0, moved),
    )
    heats = _heats_J(case, poured)
    rest = (available + lost - liquid(T_tap)) - sum(heats.values())
    heats["slags mixed"] = rest
    heats |= {name: -loss for name, loss in losses.items()}
    streams = [*into, *_streams_out(case, poured, T)]
    return LadleHeat(
        T,
        losses,
        {name: heat / per_K for name, heat in heats.items() if np.any(heat != 0.0)},
        streams,
        closures_of(streams, sum(losses.values()), case.n),
    )


def _heats_J(case: TapCase, poured: Poured) -> dict[str, Array]:
    """Heat set free at the tap temperature by each addition and each reaction [J]."""
    T, zero = case.T_K, np.zeros(case.n)
    elements = dict.fromkeys([*poured.steel, *poured.undissolved, *poured.lost, *OXIDE, "O"])
    h = _metal(tuple(elements)).evaluate_dual(T)

    def oxide(name: str) -> Array:
        if name == "CO":
            return np.asarray(enthalpy_J_kg("CO", T))
        return slag_J({name: zero + 1.0}, T)

    heats: dict[str, Array] = {}
    for name, kg in poured.added.items():
        addition = case.practice.additions[name]
        hot = sum((0.01 * pct * h[e] for e, pct in addition.elements_pct().items()), zero)
        hot = hot + sum((0.01 * x * oxide(o) for o, x in addition.all_oxides_pct().items()), zero)
        heats[f"{name}, melted and dissolved"] = kg * (addition_J_kg(case.practice, name) - hot)
    for part in (poured.lost, poured.first, poured.killed):
        for element, kg in part.items():
            if element in OXIDE:
                per = bound_oxygen(element)
                heat = kg * (h[element] + per * h["O"] - (1.0 + per) * oxide(OXIDE[element]))
                key = f"{element} oxidised"
                heats[key] = heats.get(key, zero) + heat
    reduced = poured.reduced
    heat = zero - sum((kg * h[e] for e, kg in reduced.metal.items()), zero)
    heat = heat - reduced.oxygen * h["O"]
    heat = heat + sum((kg * oxide(s) for s, kg in reduced.taken.items()), zero)
    heats["slag reduced"] = heat - sum((kg * oxide(s) for s, kg in reduced.made.items()), zero)
    heats["oxygen of the air dissolved"] = poured.air_kg * (enthalpy_J_kg("O2", AIR_K) - h["O"])
    return heats


def _streams_in(case: TapCase, poured: Poured) -> list[Stream]:
    practice, temp_C = case.practice, case.T_K - ZERO_C_K
    steel = {e: case.steel_kg * pct * 0.01 for e, pct in case.steel_pct.items()}
    streams = [
        Stream("steel at the end of the blow", "in", "metal", temp_C,
               metal_J(steel, case.T_K), steel),
        Stream("slag carried over", "in", "slag", temp_C,
               slag_J(poured.carried, case.T_K), dict(poured.carried)),
    ]  # fmt: skip
    for name, kg in poured.added.items():
        addition = practice.additions[name]
        parts = {**addition.elements_pct(), **addition.all_oxides_pct()}
        cold = practice.additions_temp_C if addition.temp_C is None else addition.temp_C
        heat = kg * addition_J_kg(practice, name)
        species = {s: kg * (0.01 * pct) for s, pct in parts.items()}
        streams.append(Stream(name, "in", "solid", cold, heat, species))
    heat = poured.air_kg * enthalpy_J_kg("O2", AIR_K)
    streams.append(
        Stream("oxygen of the air", "in", "gas", T_REF_K - ZERO_C_K, heat, {"O2": poured.air_kg})
    )
    return streams


def _streams_out(case: TapCase, poured: Poured, T_K: Array) -> list[Stream]:
    temp_C = T_K - ZERO_C_K
    streams = [
        Stream("steel in the ladle", "out", "metal", temp_C,
               metal_J(poured.steel, T_K), dict(poured.steel)),
        Stream("slag in the ladle", "out", "slag", temp_C,
               slag_J(poured.slag, T_K), dict(poured.slag)),
    ]  # fmt: skip
    if poured.undissolved:
        heat = metal_J(poured.undissolved, T_K)
        streams.append(
            Stream("lost undissolved", "out", "metal", temp_C, heat, dict(poured.undissolved))
        )
    gas = poured.gas["CO"] * enthalpy_J_kg("CO", case.T_K)
    streams.append(Stream("gas", "out", "gas", case.T_K - ZERO_C_K, gas, dict(poured.gas)))
    return streams


def worst_gap(closures: Mapping[str, Closure]) -> float:
    """Largest relative gap of any element or the heat, over all heats."""
    return max(float(np.max(np.abs(closure.relative))) for closure in closures.values())
