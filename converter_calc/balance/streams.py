"""Every kilogram that crosses the control volume, in exactly one stream.

Read off a solved state. The closures are worked out anew from the species of the streams,
not from the residuals that the solver drove to zero.
"""

from __future__ import annotations

from collections.abc import Iterable, Mapping
from dataclasses import dataclass, field
from typing import Any

import numpy as np

from converter_calc.balance.charge import ENTHALPY, TEMPERATURE, Content, elements_of
from converter_calc.balance.heat import gas_enthalpies
from converter_calc.balance.problem import Problem
from converter_calc.balance.state import GASES, State
from converter_calc.basis.dual import Array, Num
from converter_calc.basis.units import MJ, ZERO_C_K
from converter_calc.thermo.enthalpy import enthalpy_J_kg

#: Newton on a nearly straight line: 400 K, 8 K, 3 mK, then below 1e-9 K.
GAS_TEMPERATURE_STEPS = 3


@dataclass
class Stream:
    """One stream of n heats.

    side : "in" or "out"; kind : "metal", "slag", "gas" or "solid"; temperature_C and
    enthalpy_J : (n,) or one number; species_kg : formula to mass [kg].
    """

    name: str
    side: str
    kind: str
    temperature_C: Num
    enthalpy_J: Num
    species_kg: dict[str, Num] = field(default_factory=dict)

    @property
    def mass_kg(self) -> Num:
        """Mass of the stream [kg]."""
        return sum(self.species_kg.values())


def streams_of(p: Problem, s: State) -> list[Stream]:
    """All streams of a solved state; streams that carry nothing in any heat are left out."""
    streams = [*_streams_in(p, s), *_streams_out(p, s)]
    return [stream for stream in streams if np.any(np.asarray(stream.mass_kg) != 0.0)]


def _streams_in(p: Problem, s: State) -> Iterable[Stream]:
    hot_metal = {el: s.hot_metal_kg * (pct * 0.01) for el, pct in p.hot_metal_pct.items()}
    temp_C = p.values["hot_metal_temp_C"]
    heat = s.hot_metal_kg * p.hot_metal_J_kg
    yield Stream("hot_metal", "in", "metal", temp_C, heat, hot_metal)
    for name, kg in charged_masses(p, s).items():
        yield _material_stream(name, kg, p.contents[name])
    yield from _returned_streams(p)
    temp_C = p.values["oxygen_temp_C"]
    yield gas_stream("oxygen", "in", temp_C, s.oxygen_kg)
    if s.stirring_kg:
        yield gas_stream("stirring_gas", "in", 25.0, s.stirring_kg)


def charged_masses(p: Problem, s: State) -> dict[str, Num]:
    """True mass of every material charged [kg], free scrap split into its kinds."""
    masses = {name: kg for name, kg in s.charged_kg.items() if name in p.contents}
    if isinstance(p.roles["scrap"], Content):
        for name, share in p.roles["scrap_mix"].items():
            true = p.truth(name)
            kg = s.scrap_free_kg * (share if true is None else share * true)
            masses[name] = masses.get(name, 0.0) + kg
    return masses


def _material_stream(name: str, kg: Num, part: Content) -> Stream:
    kind = "slag" if name in ("carryover_slag", "retained_slag") else "solid"
    species = {formula: kg * share for formula, share in part.species_kg.items()}
    return Stream(name, "in", kind, part.temp_K - ZERO_C_K, kg * part.enthalpy_J_kg, species)


#: Kind of a returned stream; any other is a solid.
RETURNED_KIND = {"slag_kept": "slag", "metal_kept": "metal"}


def _returned_streams(p: Problem) -> Iterable[Stream]:
    """What comes back into the vessel from a stage or heat before."""
    parts: dict[str, dict[str, Num]] = {}
    for key, x in p.returned.items():
        name, _, item = key.partition(":")
        parts.setdefault(name, {})[item] = x
    for name, items in parts.items():
        heat, temp_C = items.pop(ENTHALPY), items.pop(TEMPERATURE)
        yield Stream(name, "in", RETURNED_KIND.get(name, "solid"), temp_C, heat, items)


def gas_stream(name: str, side: str, temp_C: Num, species_kg: Mapping[str, Num]) -> Stream:
    """A gas at a given temperature."""
    T_K = np.atleast_1d(np.asarray(temp_C, dtype=float)) + ZERO_C_K
    heat = sum(kg * enthalpy_J_kg(gas, T_K) for gas, kg in species_kg.items())
    return Stream(name, side, "gas", temp_C, heat, dict(species_kg))


def _streams_out(p: Problem, s: State) -> Iterable[Stream]:
    end_C = s.T_K - ZERO_C_K
    for name, kg in (
        ("steel", s.steel_kg),
        ("iron_droplets", s.droplets_kg),
        ("ejections", s.ejections_kg),
    ):
        share = kg / s.metal_kg
        species = {el: part * share for el, part in s.metal_species_kg.items()}
        yield Stream(name, "out", "metal", end_C, s.enthalpy_J["metal"] * share, species)
    yield Stream("slag", "out", "slag", end_C, s.enthalpy_J["slag"], dict(s.slag_species_kg))
    lime = {"CaO": s.undissolved_kg}
    yield Stream("undissolved_lime", "out", "solid", end_C, s.enthalpy_J["undissolved"], lime)
    temp_C = off_gas_temperature_C(p, s)
    yield Stream("off_gas", "out", "gas", temp_C, s.enthalpy_J["gas"], dict(s.gas_kg))
    base_C = s.gas_base_K - ZERO_C_K
    yield Stream("dust", "out", "solid", base_C, s.enthalpy_J["dust"], dict(s.dust_kg))


def off_gas_temperature_C(p: Problem, s: State) -> Array:
    """Temperature at which the off-gas holds the enthalpy that the balance gives it [C].

    Newton on the gas enthalpies from the temperature at which it leaves the bath.
    """
    T_K = np.array(np.broadcast_to(s.gas_base_K, (p.n,)), dtype=float)
    for _ in range(GAS_TEMPERATURE_STEPS):
        h, cp = gas_enthalpies().evaluate(T_K)
        heat = sum(s.gas_kg[gas] * h[row] for row, gas in enumerate(GASES))
        rise = sum(s.gas_kg[gas] * cp[row] for row, gas in enumerate(GASES))
        with np.errstate(all="ignore"):
            T_K = T_K + np.nan_to_num((s.enthalpy_J["gas"] - heat) / rise)
    return T_K - ZERO_C_K


@dataclass
class Closure:
    """In, out and relative gap of one conserved quantity, arrays (n,)."""

    inflow: Any
    outflow: Any

    @property
    def relative(self) -> Any:
        """(in - out) / the larger of the two; 0 where there is none of it."""
        size = np.maximum(np.abs(self.inflow), np.abs(self.outflow))
        with np.errstate(all="ignore"):
            return np.where(size > 0.0, (self.inflow - self.outflow) / size, 0.0)


def closures_of(streams: Iterable[Stream], heat_loss_J: Num, n: int) -> dict[str, Closure]:
    """Closure of every element [kg] and, under "energy", of enthalpy with the heat loss [MJ]."""
    sums: dict[str, dict[str, Any]] = {}
    heat = {"in": np.zeros(n), "out": np.zeros(n) + heat_loss_J / MJ}
    for stream in streams:
        heat[stream.side] = heat[stream.side] + stream.enthalpy_J / MJ
        for element, kg in elements_of(stream.species_kg).items():
            sides = sums.setdefault(element, {"in": np.zeros(n), "out": np.zeros(n)})
            sides[stream.side] = sides[stream.side] + kg
    closures = {el: Closure(sides["in"], sides["out"]) for el, sides in sorted(sums.items())}
    closures["energy"] = Closure(heat["in"], heat["out"])
    return closures
