"""Enthalpies of all outputs, heat loss, and the energy balance."""

from __future__ import annotations

from collections.abc import Iterable, Mapping
from functools import cache
from typing import Any

from converter_calc.balance.charge import SLAG_OXIDES, slag_enthalpy
from converter_calc.balance.problem import Problem
from converter_calc.balance.state import GASES, State
from converter_calc.basis import dual as ad
from converter_calc.basis.dual import Num
from converter_calc.basis.elements import molar_mass
from converter_calc.basis.units import MJ, ZERO_C_K
from converter_calc.thermo.enthalpy import (
    STEELMAKING_K,
    EnthalpySet,
    Phase,
    enthalpy_J_kg,
    heat_of,
)
from converter_calc.thermo.metal import MetalEnthalpy
from converter_calc.thermo.slag_compounds import compound_heat_J

#: Between these temperatures [K] off-gas leaves the bath; dust is followed in one piece there.
GAS_LEAVES_K = (1500.0, 2300.0)


@cache
def gas_enthalpies() -> EnthalpySet:
    """Enthalpy functions of the gases, in the order of GASES; built once."""
    return EnthalpySet([(name, "stable") for name in GASES])


@cache
def _bath_set(elements: tuple[str, ...], oxides: tuple[str, ...]) -> EnthalpySet:
    """Elements in the metal, oxides of the slag and solid lime, at the end temperature."""
    metal, slag = MetalEnthalpy(elements), slag_enthalpy(oxides)
    members = [*metal.members, *slag.members, ("CaO", "top solid")]
    return EnthalpySet(members, [*metal.offsets_J_kg, *slag.offsets_J_kg, 0.0], STEELMAKING_K)


@cache
def _gas_and_dust_set(dust: tuple[str, ...]) -> EnthalpySet:
    """Gases and dust at the temperature of the gas; dust without jumps at transitions."""
    members: list[tuple[str, Phase]] = [(name, "stable") for name in GASES]
    members += [("P4O10" if name == "P2O5" else name, "top solid") for name in dust]
    return EnthalpySet(members, None, GAS_LEAVES_K)


def add_heat(p: Problem, x: Mapping[str, Num], s: State) -> None:
    """Enthalpies of all outputs and the energy residual."""
    given, H = p.values, s.enthalpy_J
    metal, slag = s.metal_species_kg, s.slag_species_kg
    oxides = tuple(name for name in SLAG_OXIDES if name in slag)
    h, cp = _bath_set(tuple(metal), oxides).at(s.T_K)
    H["metal"] = _heat_rows(metal.values(), s.T_K, h, cp, 0)
    H["slag"] = _heat_rows([slag[name] for name in oxides], s.T_K, h, cp, len(metal))
    H["slag"] = H["slag"] + compound_heat_J(slag)
    H["undissolved"] = _heat_rows([s.undissolved_kg], s.T_K, h, cp, len(metal) + len(oxides))

    start = given["hot_metal_temp_C"] + ZERO_C_K
    base = start + given["gas_path_share"] * (s.T_K - start)
    if "pin_off_gas_temp_C" in given:
        base = p.pinned("off_gas_temp_C", lambda: base - ZERO_C_K) + ZERO_C_K
    s.gas_base_K = base
    h, cp = _gas_and_dust_set(tuple(s.dust_kg)).at(base)
    H["gas"] = _heat_rows([s.gas_kg[gas] for gas in GASES], base, h, cp, 0)
    H["dust"] = _heat_rows(s.dust_kg.values(), base, h, cp, len(GASES))
    # CO + 1/2 O2 = CO2 at the temperature of the gas, per kg of carbon
    moles = {"CO": 1.0, "O2": 0.5, "CO2": -1.0}
    carbon = s.laws["post_burnt_C_kg"]
    parts = [
        carbon * (moles.get(gas, 0.0) * molar_mass(gas) / molar_mass("C")) if gas in moles else 0.0
        for gas in GASES
    ]
    s.post_combustion_J = _heat_rows(parts, base, h, cp, 0)
    leaves = 1.0 - given["post_combustion_heat_share_pct"] * 0.01
    if p.mask("pin_off_gas_temp_C") is not False:
        leaves = ad.where(p.mask("pin_off_gas_temp_C"), 0.0, leaves)
    H["gas"] = H["gas"] + s.post_combustion_J * leaves

    out = H["metal"] + H["slag"] + H["undissolved"] + H["gas"] + H["dust"]
    s.heat_loss_J = x["heat_loss_J"] if "heat_loss_J" in x else heat_loss_J(p, s)
    s.residuals["heat"] = (s.totals.enthalpy_J - out - s.heat_loss_J) / (p.scale_kg * MJ)


def _heat_rows(kg: Iterable[Num], T_K: Num, h: Any, cp: Any, first: int) -> Num:
    """Heat of some masses whose enthalpies stand in the rows from `first` on."""
    masses = list(kg)
    rows = slice(first, first + len(masses))
    return heat_of(masses, T_K, h[rows], None if cp is None else cp[rows])


def heat_loss_J(p: Problem, s: State) -> Num:
    """Heat lost through shell, mouth and cooling water, from the pins or the practice."""
    given = p.values
    minutes = given["wait_min"] + given["blow_min"]

    def by_practice() -> Num:
        loss = given["heat_loss_MJ_per_t"] * 1e-3 * s.steel_kg
        return loss + given["heat_loss_MJ_per_min"] * minutes

    def by_minute() -> Num:
        name = "pin_heat_loss_MJ_per_min"
        if name not in given:
            return by_practice()
        if p.mask(name) is True:
            return given[name] * minutes
        return ad.where(p.mask(name), given[name] * minutes, by_practice())

    def by_tonne() -> Num:
        name = "pin_heat_loss_MJ_per_t"
        if name not in given:
            return by_minute()
        per_heat = given[name] * 1e-3 * s.steel_kg
        return per_heat if p.mask(name) is True else ad.where(p.mask(name), per_heat, by_minute())

    loss = p.pinned("heat_loss_MJ", by_tonne) * MJ
    share = given.get("pin_heat_loss_share_pct")
    if share is None:
        return loss
    part = share * 0.01
    by_share = sensible_heat_out_J(s) * (part / (1.0 - part))
    mask = p.mask("pin_heat_loss_share_pct")
    return by_share if mask is True else ad.where(mask, by_share, loss)


def sensible_heat_out_J(s: State) -> Num:
    """Heat content of all outputs above 25 °C, compounds taken as formed at 25 °C [J]."""
    H = s.enthalpy_J
    heat = H["metal"] + H["slag"] + H["undissolved"] + H["gas"] + H["dust"]
    return heat - formation_heat_out_J(s)


def formation_heat_out_J(s: State) -> Num:
    """Heat of formation at 25 °C of all outputs, slag compounds included [J]."""
    names = tuple(name for name in SLAG_OXIDES if name in s.slag_species_kg)
    heat = slag_enthalpy(names).formation_J(s.slag_species_kg)
    heat = heat + s.undissolved_kg * enthalpy_J_kg("CaO", 298.15)
    for stream in (s.gas_kg, s.dust_kg):
        for name, kg in stream.items():
            heat = heat + kg * enthalpy_J_kg(name, 298.15)
    return heat
