"""The state at the end of the blow, written once for every question.

`evaluate` takes the givens of n heats and values for the unknowns and works out everything
else in closed form: totals charged, slag, metal, gas, dust, enthalpies, and the residuals
that are zero at the answer. Which quantities are unknown is not its business.

Unknowns (any of them may be a given instead): T_K, ln_C, slag_kg (liquid slag), metal_kg
(steel + droplets + ejections), f_Mn and f_P (share of the element in the slag), oxygen_Nm3,
hot_metal_kg, scrap_kg, lime_kg, flux_kg, trim_kg (coolant if positive, fuel if negative),
heat_loss_J.
"""

from __future__ import annotations

from collections.abc import Iterable, Mapping
from dataclasses import dataclass, field
from functools import cache
from typing import Any

from converter_calc.balance.charge import SLAG_OXIDES, Totals, oxide_factor, slag_enthalpy
from converter_calc.balance.problem import SHARED, TO_DUST, TO_SLAG, Problem, given_totals
from converter_calc.basis import dual as ad
from converter_calc.basis.dual import Num
from converter_calc.basis.elements import molar_mass
from converter_calc.basis.units import MJ, NM3_MOL, ZERO_C_K
from converter_calc.laws import (
    carbon_oxygen,
    iron_oxide,
    lime,
    magnesia,
    manganese,
    minor,
    phosphorus,
    sulphur,
)
from converter_calc.laws.slag_measures import FetO_pct, total_iron_pct
from converter_calc.thermo.enthalpy import STEELMAKING_K, EnthalpySet, enthalpy_J_kg, heat_of
from converter_calc.thermo.metal import MetalEnthalpy
from converter_calc.thermo.slag_compounds import compound_heat_J

GASES = ("CO", "CO2", "H2", "H2O", "N2", "Ar", "SO2", "O2")
#: Between these temperatures [K] off-gas leaves the bath; dust is followed in one piece there.
GAS_LEAVES_K = (1500.0, 2300.0)
#: Oxygen that the sulphur law sees at the least [mass %], 0.1 ppm: keeps a pinned zero finite.
LEAST_O_PCT = 1e-5
#: Rounding of the corner where lime stops dissolving, as a share of the slag mass.
LIME_CORNER = 0.01


@dataclass
class State:
    """Everything known of n heats at one set of unknowns; masses in kg, enthalpies in J."""

    charged_kg: dict[str, Num] = field(default_factory=dict)
    hot_metal_kg: Num = 0.0
    scrap_free_kg: Num = 0.0
    oxygen_Nm3: Num = 0.0
    oxygen_kg: dict[str, Num] = field(default_factory=dict)
    stirring_kg: dict[str, Num] = field(default_factory=dict)
    totals: Totals = field(default_factory=Totals)
    T_K: Num = 0.0
    C_pct: Num = 0.0
    O_pct: Num = 0.0
    slag_kg: Num = 0.0
    metal_kg: Num = 0.0
    steel_kg: Num = 0.0
    droplets_kg: Num = 0.0
    ejections_kg: Num = 0.0
    undissolved_kg: Num = 0.0
    dust_kg: dict[str, Num] = field(default_factory=dict)
    slag_species_kg: dict[str, Num] = field(default_factory=dict)
    slag_pct: dict[str, Num] = field(default_factory=dict)
    metal_species_kg: dict[str, Num] = field(default_factory=dict)
    gas_kg: dict[str, Num] = field(default_factory=dict)
    laws: dict[str, Num] = field(default_factory=dict)
    enthalpy_J: dict[str, Num] = field(default_factory=dict)
    gas_base_K: Num = 0.0
    post_combustion_J: Num = 0.0
    heat_loss_J: Num = 0.0
    residuals: dict[str, Num] = field(default_factory=dict)

    @property
    def basicity(self) -> Num:
        """CaO/SiO2 by mass of the slag as a sample shows it, undissolved lime included."""
        return self.liquid_basicity + self.undissolved_kg / self.slag_species_kg["SiO2"]

    @property
    def liquid_basicity(self) -> Num:
        """CaO/SiO2 of the liquid slag by mass, CaS counted as the lime it was."""
        return self.slag_pct["CaO"] / self.slag_pct["SiO2"]


def evaluate(p: Problem, x: Mapping[str, Num]) -> State:
    """State and residuals of n heats.

    Parameters
    ----------
    p : the givens. x : unknowns by name, arrays (n,) or Dual.

    Returns
    -------
    State, with dimensionless residuals slag, metal, Mn, P, O and heat (all zero at the
    answer). Source: conservation of mass and energy; laws as named in `p.laws`.
    """
    s = State()
    s.T_K = x["T_K"] if "T_K" in x else p.values["aim_temp_C"] + ZERO_C_K
    s.C_pct = ad.exp(x["ln_C"]) if "ln_C" in x else p.values["aim_C_pct"]
    s.slag_kg, s.metal_kg = x["slag_kg"], x["metal_kg"]
    _metal_lots(p, s)
    _charge(p, x, s)
    _dust(p, s)
    _slag_and_metal(p, x, s)
    _gas(p, s)
    _heat(p, x, s)
    return s


def _metal_lots(p: Problem, s: State) -> None:
    """Split the metal into steel, droplets in the slag and ejections."""
    s.droplets_kg = p.pinned("droplets_kg", lambda: s.slag_kg * (p.values["droplets_pct"] * 0.01))
    share = p.values["ejections_kg_per_t"] * 1e-3
    rest = s.metal_kg - s.droplets_kg
    s.ejections_kg = p.pinned("ejections_kg", lambda: rest * (share / (1.0 + share)))
    s.steel_kg = rest - s.ejections_kg


def _charge(p: Problem, x: Mapping[str, Num], s: State) -> None:
    """Masses charged and their totals: the part that is given, then what is unknown."""
    given = p.values
    free_hot_metal, free_oxygen = "hot_metal_kg" in x, "oxygen_Nm3" in x
    base = given_charge(p, hot_metal=not free_hot_metal, oxygen=not free_oxygen)
    s.charged_kg, s.totals = dict(base.charged_kg), base.totals.copy()
    s.hot_metal_kg = x["hot_metal_kg"] if free_hot_metal else given["hot_metal_kg"]
    if free_hot_metal:
        _add_hot_metal(p, s)
    s.scrap_free_kg = base.scrap_free_kg
    scrap = x.get("scrap_kg")
    if scrap is None and free_hot_metal:
        scrap = _given_scrap(p, s)
    if scrap is not None:
        _add_scrap(p, scrap, s)
    if "lime_kg" in x:
        _add(p, s, p.roles["lime"], x["lime_kg"])
    if "flux_kg" in x:
        _add(p, s, p.roles["magnesia_flux"], x["flux_kg"])
    if "trim_kg" in x:
        trim = x["trim_kg"]
        short = ad.value(trim) < 0.0
        _add(p, s, p.roles["coolant"], ad.where(short, 0.0, trim))
        _add(p, s, p.roles["fuel"], ad.where(short, -trim, 0.0))
    per_t = given["lining_wear_kg_per_t"] * 1e-3
    _add(p, s, "lining", p.pinned("lining_wear_kg", lambda: s.steel_kg * per_t))
    s.stirring_kg = base.stirring_kg
    s.oxygen_kg, s.oxygen_Nm3 = base.oxygen_kg, given.get("oxygen_Nm3")
    if free_oxygen:
        s.oxygen_kg, s.oxygen_Nm3 = {}, x["oxygen_Nm3"]
        _add_oxygen(p, s)


def given_charge(p: Problem, *, hot_metal: bool, oxygen: bool) -> State:
    """What is charged whatever the unknowns are; worked out once for each set of heats.

    hot_metal, oxygen : whether these are given.
    """
    key = (hot_metal, oxygen)
    if key in p.cache:
        found: State = p.cache[key]
        return found
    s = State()
    s.totals = given_totals(p)
    s.charged_kg = dict(p.fixed)
    if "retained_slag_kg" in p.values:
        _add(p, s, "retained_slag", p.values["retained_slag_kg"])
    if hot_metal:
        s.hot_metal_kg = p.values["hot_metal_kg"]
        _add_hot_metal(p, s)
        scrap = _given_scrap(p, s)
        if scrap is not None:
            _add_scrap(p, scrap, s)
    if oxygen:
        s.oxygen_Nm3 = p.values["oxygen_Nm3"]
        _add_oxygen(p, s)
    if "stirring_gas_Nm3" in p.values:
        argon = p.values["stirring_argon_pct"] * 0.01
        for gas, share in {"Ar": argon, "N2": 1.0 - argon}.items():
            volume = _where_given(p, "stirring_gas_Nm3", p.values["stirring_gas_Nm3"], 0.0)
            s.stirring_kg[gas] = volume * share * (NM3_MOL * molar_mass(gas) * 1e-3)
            s.totals.add_element(gas.rstrip("2"), s.stirring_kg[gas])
    p.cache[key] = s
    return s


def _add(p: Problem, s: State, name: str, kg: Num) -> None:
    have = s.charged_kg.get(name)
    s.charged_kg[name] = kg if have is None else have + kg
    s.totals.add(kg, p.contents[name])


def _add_hot_metal(p: Problem, s: State) -> None:
    """Hot metal, and the slag that comes with it."""
    for element, pct in p.hot_metal_pct.items():
        s.totals.add_element(element, s.hot_metal_kg * (pct * 0.01))
    s.totals.enthalpy_J = s.totals.enthalpy_J + s.hot_metal_kg * p.hot_metal_J_kg
    _add(p, s, "carryover_slag", s.hot_metal_kg * (p.values["carryover_slag_pct"] * 0.01))


def _given_scrap(p: Problem, s: State) -> Num:
    """Scrap that is given by total or by share [kg]; None where there is none."""
    scrap: Num = None
    if "scrap_kg" in p.values:
        scrap = _where_given(p, "scrap_kg", p.values["scrap_kg"], 0.0)
    if "scrap_share_pct" in p.values:
        share = p.values["scrap_share_pct"] * 0.01
        by_share = s.hot_metal_kg * (share / (1.0 - share))
        scrap = _where_given(p, "scrap_share_pct", by_share, 0.0 if scrap is None else scrap)
    return scrap


def _add_scrap(p: Problem, scrap: Num, s: State) -> None:
    """Free scrap: as one mix, or filled up in the order of preference to each stock."""
    plan = p.roles["scrap"]
    if plan is None:
        return
    s.scrap_free_kg = scrap
    if not isinstance(plan, list):
        s.totals.add(scrap, plan)
        return
    below = 0.0
    for place, (name, stock) in enumerate(plan):
        part = scrap - below
        if place > 0:
            part = ad.where(ad.value(part) > 0.0, part, 0.0)
        if place < len(plan) - 1:
            part = ad.where(ad.value(part) < stock, part, stock)
        _add(p, s, name, part)
        below += stock


def _add_oxygen(p: Problem, s: State) -> None:
    """Blown oxygen with its argon and nitrogen."""
    totals = s.totals
    for gas, (kg_per_Nm3, J_per_Nm3) in oxygen_content(p).items():
        s.oxygen_kg[gas] = s.oxygen_Nm3 * kg_per_Nm3
        totals.add_element("O" if gas == "O2" else gas.rstrip("2"), s.oxygen_kg[gas])
        totals.enthalpy_J = totals.enthalpy_J + s.oxygen_Nm3 * J_per_Nm3


def oxygen_content(p: Problem) -> dict[str, tuple[Num, Num]]:
    """kg and J that one Nm3 of the blown oxygen brings, by gas."""
    if "oxygen" in p.cache:
        found: dict[str, tuple[Num, Num]] = p.cache["oxygen"]
        return found
    given = p.values
    purity = given["oxygen_purity_pct"] * 0.01
    argon = given["oxygen_impurity_argon_pct"] * 0.01
    shares = {"O2": purity, "Ar": (1.0 - purity) * argon, "N2": (1.0 - purity) * (1.0 - argon)}
    temp_K = given["oxygen_temp_C"] + ZERO_C_K
    content = {}
    for gas, share in shares.items():
        kg = share * (NM3_MOL * molar_mass(gas) * 1e-3)
        content[gas] = (kg, kg * enthalpy_J_kg(gas, temp_K))
    p.cache["oxygen"] = content
    return content


def _where_given(p: Problem, name: str, yes: Num, no: Num) -> Num:
    return yes if p.mask(name) is True else ad.where(p.mask(name), yes, no)


def _dust(p: Problem, s: State) -> None:
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
    """kg of an element that does not leave with the dust."""
    share = p.dust.elements.get(element)
    total = s.totals.of(element)
    return total if share is None else total - s.laws["dust_kg"] * share


def _share_out(s: State, available: Num, ratio: Num) -> tuple[Num, Num]:
    """Split an element between slag and metal at (%X)/[%X] = ratio: (slag kg, metal kg)."""
    reach = ratio * (s.slag_kg / s.metal_kg)
    in_metal = available / (1.0 + reach)
    return available - in_metal, in_metal


def _slag_and_metal(p: Problem, x: Mapping[str, Num], s: State) -> None:
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
            in_metal = p.pinned(
                "end_" + element + "_pct",
                lambda kg=in_metal: kg * (100.0 / s.metal_kg),
            ) * (s.metal_kg * 0.01)
            in_slag = available - in_metal
        oxide = SHARED[element]
        s.slag_species_kg[oxide] = in_slag * oxide_factor(oxide, element)
        s.metal_species_kg[element] = in_metal


def _phosphorus_manganese(p: Problem, x: Mapping[str, Num], s: State) -> None:
    """Residuals of the two elements whose law depends on how much of them the slag holds."""
    given, law = p.values, p.laws
    ratios = {
        "P": lambda: given["P_approach"]
        * phosphorus.partition_ratio(law["phosphorus"], s.slag_pct, s.T_K, s.C_pct, s.O_pct),
        "Mn": lambda: given["Mn_approach"]
        * manganese.partition_ratio(law["manganese"], s.slag_pct, s.T_K),
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


def _gas(p: Problem, s: State) -> None:
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
    from converter_calc.basis.elements import mass_fractions

    return mass_fractions(species).get("O", 0.0)


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
    solids = [("P4O10" if name == "P2O5" else name, "top solid") for name in dust]
    members = [*((name, "stable") for name in GASES), *solids]
    return EnthalpySet(members, None, GAS_LEAVES_K)


def _heat(p: Problem, x: Mapping[str, Num], s: State) -> None:
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
