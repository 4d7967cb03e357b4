"""Where the elements go: dust, slag, metal and off-gas, by conservation and the chosen laws."""

from __future__ import annotations

from collections.abc import Mapping
from functools import cache

from converter_calc.balance.charge import oxide_factor
from converter_calc.balance.problem import SHARED, TO_DUST, TO_SLAG, Problem
from converter_calc.balance.state import State
from converter_calc.basis import dual as ad
from converter_calc.basis.dual import Num
from converter_calc.basis.elements import mass_fractions, molar_mass
from converter_calc.laws import (
    carbon_oxygen,
    iron_oxide,
    lime,
    manganese,
    minor,
    phosphorus,
    sulphur,
)
from converter_calc.laws.slag_measures import FetO_pct, total_iron_pct

#: Oxygen that the sulphur law sees at the least [mass %], 0.1 ppm: keeps a pinned zero finite.
LEAST_O_PCT = 1e-5
#: Rounding of the corner where lime stops dissolving, as a share of the slag mass.
LIME_CORNER = 0.01


def add_dust(p: Problem, s: State) -> None:
    """Dust and fume, with all zinc and lead."""
    per_t = p.values["dust_kg_per_t"] * 1e-3
    kg = p.pinned("dust_kg", lambda: s.steel_kg * per_t)
    s.dust_kg = {name: kg * share for name, share in p.dust.species_kg.items()}
    for element, oxide in TO_DUST.items():
        if element in p.elements:
            fume = s.totals.of(element) * oxide_factor(oxide, element)
            have = s.dust_kg.get(oxide)
            s.dust_kg[oxide] = fume if have is None else have + fume
    s.laws["dust_kg"] = kg


def _left(p: Problem, s: State, element: str) -> Num:
    """Kg of an element that does not leave with the dust."""
    share = p.dust.elements.get(element)
    total = s.totals.of(element)
    return total if share is None else total - s.laws["dust_kg"] * share


def _share_out(s: State, available: Num, ratio: Num) -> tuple[Num, Num]:
    """Split an element between slag and metal at (%X)/[%X] = ratio: (slag kg, metal kg)."""
    reach = ratio * (s.slag_kg / s.metal_kg)
    in_metal = available / (1.0 + reach)
    return available - in_metal, in_metal


def share_out(p: Problem, x: Mapping[str, Num], s: State) -> None:
    """Slag and metal: species by mass, and the residuals of slag, metal, Mn and P."""
    given, kg, metal, laws = p.values, s.slag_species_kg, s.metal_species_kg, s.laws
    law, to_pct, to_kg = p.laws, 100.0 / s.slag_kg, s.slag_kg * 0.01
    s.O_pct = (
        p.pinned(
            "end_O_ppm",
            lambda: (
                1e4
                * carbon_oxygen.dissolved_oxygen_pct(
                    law["carbon_oxygen"], s.C_pct, s.T_K, given.get("CO_pressure_atm"), p.blowing
                )
            ),
        )
        * 1e-4
    )
    FeO, Fe2O3 = _iron_oxides(p, s)
    kg["FeO"], kg["Fe2O3"] = FeO * to_kg, Fe2O3 * to_kg
    iron = total_iron_pct({"FeO": FeO, "Fe2O3": Fe2O3})
    laws["T_Fe_pct"] = iron

    for element in ("Mn", "P"):
        available = _left(p, s, element)
        in_slag = available * x["f_" + element]
        kg[SHARED[element]] = in_slag * oxide_factor(SHARED[element], element)
        metal[element] = available - in_slag
    _share_minor(p, s, iron)
    for element, oxide in TO_SLAG.items():
        if element in p.elements:
            kg[oxide] = _left(p, s, element) * oxide_factor(oxide, element)
    calcium = _left(p, s, "Ca")
    if "F" in p.elements:
        fluorine = s.totals.of("F")
        kg["CaF2"] = fluorine * oxide_factor("CaF2", "F")
        calcium = calcium - (kg["CaF2"] - fluorine)
    lime_kg = calcium * oxide_factor("CaO", "Ca")
    oxide_pct = FetO_pct({"FeO": FeO, "Fe2O3": Fe2O3})
    laws["lime_limit_pct"] = limit = lime.dissolution_limit_pct(oxide_pct, s.T_K)
    s.undissolved_kg = p.pinned(
        "undissolved_lime_kg", lambda: _undissolved(given, lime_kg, limit * to_kg, s.slag_kg)
    )
    kg["CaO"] = lime_kg - s.undissolved_kg
    s.slag_pct = {oxide: part * to_pct for oxide, part in kg.items()}
    s.slag_pct["FeO"], s.slag_pct["Fe2O3"] = FeO, Fe2O3
    _phosphorus_manganese(p, x, s)
    _sulphur(p, s)
    for element in p.steel_elements:
        metal[element] = _left(p, s, element)
    metal["C"], metal["O"] = s.metal_kg * (s.C_pct * 0.01), s.metal_kg * (s.O_pct * 0.01)
    in_slag = kg["FeO"] / oxide_factor("FeO", "Fe") + kg["Fe2O3"] / oxide_factor("Fe2O3", "Fe")
    metal["Fe"] = _left(p, s, "Fe") - in_slag
    s.residuals["metal"] = (sum(metal.values()) - s.metal_kg) / p.scale_kg
    s.residuals["slag"] = (sum(kg.values()) - s.slag_kg) / p.scale_kg


def _undissolved(given: Mapping[str, Num], lime_kg: Num, limit_kg: Num, slag_kg: Num) -> Num:
    """Lime left solid: a given share of it, and what is above the dissolution limit."""
    lumps = given["undissolved_lime_pct"] * 0.01
    dissolved = ad.smooth_min(lime_kg * (1.0 - lumps), limit_kg, slag_kg * LIME_CORNER)
    return lime_kg - dissolved


def _iron_oxides(p: Problem, s: State) -> tuple[Num, Num]:
    """(%FeO) and (%Fe2O3) of the liquid slag from the law or from pins."""
    ferric = p.values["ferric_share_pct"] * 0.01

    def from_law() -> Num:
        iron = iron_oxide.total_iron_pct(s.C_pct, s.T_K, p.blowing)
        return iron * p.values["iron_oxide_factor"]

    def from_share() -> Num:
        if "pin_iron_to_slag_pct" not in p.values:
            return p.pinned("slag_T_Fe_pct", from_law)
        share = p.values["pin_iron_to_slag_pct"] * 0.01
        by_share = s.totals.of("Fe") * share * (100.0 / s.slag_kg)
        mask = p.mask("pin_iron_to_slag_pct")
        if mask is True:
            return by_share
        return ad.where(mask, by_share, p.pinned("slag_T_Fe_pct", from_law))

    fe2, fe3 = oxide_factor("FeO", "Fe"), oxide_factor("Fe2O3", "Fe")
    values, has2, has3 = p.values, p.mask("pin_slag_FeO_pct"), p.mask("pin_slag_Fe2O3_pct")
    if has2 is True and has3 is True:
        return values["pin_slag_FeO_pct"], values["pin_slag_Fe2O3_pct"]
    if has2 is False and has3 is False:
        iron = from_share()
        return iron * ((1.0 - ferric) * fe2), iron * (ferric * fe3)
    if has3 is False:
        FeO = p.pinned("slag_FeO_pct", lambda: from_share() * ((1.0 - ferric) * fe2))
        return FeO, FeO * (ferric * fe3 / ((1.0 - ferric) * fe2))
    Fe2O3 = p.pinned("slag_Fe2O3_pct", lambda: from_share() * (ferric * fe3))
    free = from_share() - Fe2O3 / fe3
    return p.pinned("slag_FeO_pct", lambda: free * fe2), Fe2O3


def _share_minor(p: Problem, s: State, iron_pct: Num) -> None:
    """Si, Al, Ti, V, Cr between slag and steel by their own ratios."""
    given = p.values
    for element in ("Si", "Al", "Ti", "V", "Cr"):
        if element not in p.elements:
            continue
        available = _left(p, s, element)

        def ratio(element: str = element) -> Num:
            if element == "Cr":
                return given["Cr_approach"] * minor.chromium_ratio(
                    p.laws["chromium"], iron_pct, s.O_pct, s.T_K
                )
            if element == "V":
                return given["V_approach"] * minor.vanadium_ratio(
                    p.laws["vanadium"], s.O_pct, s.T_K
                )
            return minor.constant_ratio(element)

        s.laws["L_" + element] = L = p.pinned("L_" + element, ratio)
        in_slag, in_metal = _share_out(s, available, L)
        pin = "pin_end_" + element + "_pct"
        if pin in p.values:
            by_law = in_metal * (100.0 / s.metal_kg)
            in_metal = p.pinned("end_" + element + "_pct", lambda x=by_law: x)  # type: ignore[misc]
            in_metal = in_metal * (s.metal_kg * 0.01)
            in_slag = available - in_metal
        oxide = SHARED[element]
        s.slag_species_kg[oxide] = in_slag * oxide_factor(oxide, element)
        s.metal_species_kg[element] = in_metal


def _phosphorus_manganese(p: Problem, x: Mapping[str, Num], s: State) -> None:
    """Residuals of the two elements whose law depends on how much of them the slag holds."""
    given, law = p.values, p.laws
    ratios = {
        "P": lambda: (
            given["P_approach"]
            * phosphorus.partition_ratio(law["phosphorus"], s.slag_pct, s.T_K, s.C_pct, s.O_pct)
        ),
        "Mn": lambda: (
            given["Mn_approach"] * manganese.partition_ratio(law["manganese"], s.slag_pct, s.T_K)
        ),
    }
    for element, ratio in ratios.items():
        share = x["f_" + element]
        pin = p.values.get("pin_end_" + element + "_pct")
        charged = ad.value(s.totals.of(element)) > 0.0
        mask = p.mask("pin_end_" + element + "_pct") & charged if pin is not None else False
        L = p.pinned("L_" + element, ratio)
        reach = L * (s.slag_kg / s.metal_kg)
        residual = share - reach / (1.0 + reach)
        if pin is not None:
            have = s.metal_species_kg[element] * (100.0 / s.metal_kg)
            residual = ad.where(mask, (have - pin) * -1.0, residual)
        s.laws["L_" + element] = L
        s.residuals[element] = residual


def _sulphur(p: Problem, s: State) -> None:
    """Sulphur to gas, slag (as CaS) and steel."""
    charged = s.totals.of("S")
    to_gas = charged * (p.values["S_to_gas_pct"] * 0.01)
    available = charged - to_gas

    def ratio() -> Num:
        f_S = ad.pow10(0.11 * s.C_pct)
        oxygen = ad.sqrt(ad.square(s.O_pct) + LEAST_O_PCT * LEAST_O_PCT)
        L = sulphur.partition_ratio(p.laws["sulphur"], s.slag_pct, s.T_K, oxygen, f_S)
        return L * p.values["S_approach"]

    def by_ratio() -> Num:
        s.laws["L_S"] = L = p.pinned("L_S", ratio)
        return _share_out(s, available, L)[1] * (100.0 / s.metal_kg)

    in_metal = p.pinned("end_S_pct", by_ratio) * (s.metal_kg * 0.01)
    in_slag = available - in_metal
    kg = s.slag_species_kg
    kg["CaS"] = in_slag * oxide_factor("CaS", "S")
    kg["CaO"] = kg["CaO"] - in_slag * (molar_mass("CaO") / molar_mass("S"))
    s.metal_species_kg["S"] = in_metal
    s.gas_kg["SO2"] = to_gas * oxide_factor("SO2", "S")


def add_gas(p: Problem, s: State) -> None:
    """Off-gas and the oxygen balance."""
    given, gas, totals = p.values, s.gas_kg, s.totals
    carbon = _left(p, s, "C") - s.metal_species_kg["C"]
    apart = totals.carbonate_C * (1.0 - given["carbonate_CO2_reacted_pct"] * 0.01)
    pool = carbon - apart
    burnt = pool * given["post_combustion_ratio"]
    gas["CO"] = (pool - burnt) * oxide_factor("CO", "C")
    gas["CO2"] = (burnt + apart) * oxide_factor("CO2", "C")
    hydrogen = totals.of("H")
    as_water = hydrogen * (given["hydrogen_burnt_pct"] * 0.01)
    gas["H2"], gas["H2O"] = hydrogen - as_water, as_water * oxide_factor("H2O", "H")
    gas["N2"], gas["Ar"] = totals.of("N"), totals.of("Ar")
    gas["O2"] = s.oxygen_kg["O2"] * (1.0 - given["oxygen_utilisation_pct"] * 0.01)
    s.laws["post_burnt_C_kg"] = burnt

    bound = s.metal_species_kg["O"] + gas["O2"] + s.undissolved_kg * _oxygen_share("CaO")
    for stream in (s.slag_species_kg, gas):
        for name, kg in stream.items():
            if name not in ("O2", "CaF2", "CaS") and _oxygen_share(name) > 0.0:
                bound = bound + kg * _oxygen_share(name)
    bound = bound + s.laws["dust_kg"] * p.dust.elements.get("O", 0.0)
    for element, oxide in TO_DUST.items():
        if element in p.elements:
            bound = bound + totals.of(element) * (oxide_factor(oxide, element) - 1.0)
    s.residuals["O"] = (totals.of("O") - bound) / p.scale_kg


@cache
def _oxygen_share(species: str) -> float:
    return mass_fractions(species).get("O", 0.0)
