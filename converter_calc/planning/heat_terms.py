"""Where the heat comes from and where it goes, term by term, read off a solved balance.

Heats are at the reference of 25 °C: what an input brings or an output carries away is its
heat content above 25 °C; what reacts counts at 25 °C. The terms add up to zero exactly as
the balance does, since both use the same enthalpies.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from converter_calc.balance.charge import CARBONATES, SLAG_OXIDES, slag_enthalpy
from converter_calc.balance.streams import Stream
from converter_calc.basis.dual import Num
from converter_calc.basis.elements import molar_mass, parse_formula
from converter_calc.basis.units import MJ, T_REF_K
from converter_calc.planning.outcome import Outcome
from converter_calc.thermo.enthalpy import enthalpy_J_kg

#: Oxides whose formation is booked as the oxidation of one element.
OXIDATION = {
    "CO": "oxidation of carbon to CO",
    "CO2": "oxidation of carbon to CO2",
    "SiO2": "oxidation of silicon",
    "MnO": "oxidation of manganese",
    "P2O5": "oxidation of phosphorus",
    "FeO": "oxidation of iron to FeO",
    "Fe2O3": "oxidation of iron to Fe2O3",
    "TiO2": "oxidation of titanium",
    "V2O3": "oxidation of vanadium",
    "Cr2O3": "oxidation of chromium",
    "Al2O3": "oxidation of aluminium",
    "ZnO": "oxidation of zinc",
    "PbO": "oxidation of lead",
}
#: What a charged compound is made of, for the heat of taking it apart.
PARTS = {
    "CaCO3": {"CaO": 1.0, "CO2": 1.0},
    "MgCO3": {"MgO": 1.0, "CO2": 1.0},
    "Ca(OH)2": {"CaO": 1.0, "H2O": 1.0},
    "Mg(OH)2": {"MgO": 1.0, "H2O": 1.0},
    "FeOOH": {"Fe2O3": 0.5, "H2O": 0.5},
}


@dataclass(frozen=True)
class HeatTerm:
    """One line of the heat balance of n heats: supplied (positive) or taken (negative) [MJ]."""

    label: str
    group: str
    heat_MJ: Num


def formation_J_kg(species: str) -> float:
    """Heat of formation at 25 °C [J/kg]."""
    if species == "P2O5":
        species = "P4O10"
    return float(enthalpy_J_kg(species, T_REF_K))


def stream_formation_J(stream: Stream) -> Num:
    """Heat of formation of a stream at 25 °C [J]: none for metal, compounds of slag included."""
    species = stream.species_kg
    if stream.kind == "metal":
        return 0.0
    if stream.kind == "slag":
        oxides = {name: kg for name, kg in species.items() if name in SLAG_OXIDES}
        return slag_enthalpy(tuple(oxides)).formation_J(oxides)
    return sum(
        (kg * formation_J_kg(_as_charged(name, stream)) for name, kg in species.items()), 0.0
    )


def _as_charged(species: str, stream: Stream) -> str:
    return "H2O_liquid" if species == "H2O" and stream.kind == "solid" else species


def heat_terms(outcome: Outcome) -> list[HeatTerm]:
    """All terms of the heat balance [MJ]; their sum is zero to rounding.

    Groups: "brought in", "reactions", "carried away", "loss".
    """
    terms: list[HeatTerm] = []
    formed: Num = 0.0
    for stream in outcome.streams:
        base = stream_formation_J(stream)
        content = (stream.enthalpy_J - base) / MJ
        name = stream.name.replace("_", " ")
        if stream.side == "in":
            terms.append(HeatTerm(f"heat content of {name}", "brought in", content))
            formed = formed + base
        else:
            terms.append(HeatTerm(f"heat content of {name}", "carried away", -content))
            formed = formed - base
    reactions = _reactions(outcome)
    terms += reactions
    known: Num = sum((term.heat_MJ for term in reactions), 0.0)
    terms.append(
        HeatTerm("other reactions (sulphur, water, fluorspar)", "reactions", formed / MJ - known)
    )
    terms.append(HeatTerm("heat loss", "loss", -outcome.state.heat_loss_J / MJ))
    return [term for term in terms if np.any(np.abs(np.asarray(term.heat_MJ)) > 1e-9)]


def _reactions(outcome: Outcome) -> list[HeatTerm]:
    net: dict[str, Num] = {}
    apart: Num = 0.0
    compounds: Num = 0.0
    for stream in outcome.streams:
        sign = 1.0 if stream.side == "out" else -1.0
        if stream.kind == "slag":
            oxides = {n: kg for n, kg in stream.species_kg.items() if n in SLAG_OXIDES}
            whole = slag_enthalpy(tuple(oxides)).formation_J(oxides)
            plain = sum(kg * formation_J_kg(n) for n, kg in oxides.items())
            compounds = compounds - sign * (whole - plain)
        for name, kg in stream.species_kg.items():
            if name in PARTS and stream.side == "in":
                apart = apart + kg * _apart_J_kg(name)
                for part, moles in PARTS[name].items():
                    share = moles * molar_mass(part) / molar_mass(name)
                    net[part] = net.get(part, 0.0) - kg * share
            elif name in OXIDATION:
                net[name] = net.get(name, 0.0) + sign * kg
    terms = [
        HeatTerm(label, "reactions", -net[oxide] * formation_J_kg(oxide) / MJ)
        for oxide, label in OXIDATION.items()
        if oxide in net
    ]
    terms.append(
        HeatTerm("slag formation (silicates, phosphates, ferrites)", "reactions", compounds / MJ)
    )
    terms.append(HeatTerm("taking carbonates, hydroxides and rust apart", "reactions", apart / MJ))
    return terms


def _apart_J_kg(species: str) -> float:
    """Heat supplied (negative: taken) by taking a compound apart at 25 °C [J/kg]."""
    parts = sum(
        moles * molar_mass(part) * formation_J_kg("H2O_liquid" if part == "H2O" else part)
        for part, moles in PARTS[species].items()
    )
    return formation_J_kg(species) - parts / molar_mass(species)


def oxygen_terms(outcome: Outcome) -> list[tuple[str, Num]]:
    """Oxygen gas taken up by each product less what solids bring, each in Nm3 of pure O2."""
    from converter_calc.basis.units import NM3_MOL

    terms: dict[str, Num] = {}
    for stream in outcome.streams:
        if stream.name == "oxygen":
            continue
        sign = 1.0 if stream.side == "out" else -1.0
        for name, kg in stream.species_kg.items():
            atoms = parse_formula(name).get("O", 0.0)
            if atoms == 0.0:
                continue
            volume = sign * kg * atoms * 0.5 / (molar_mass(name) * 1e-3) / NM3_MOL
            label = _oxygen_label(name, stream)
            terms[label] = terms.get(label, 0.0) + volume
    return [(label, x) for label, x in terms.items() if np.any(np.abs(np.asarray(x)) > 1e-9)]


def _oxygen_label(name: str, stream: Stream) -> str:
    if name == "O":
        return "dissolved in the metal"
    if name == "O2":
        return "leaves unused in the off-gas" if stream.side == "out" else "gas charged"
    if name in CARBONATES or (name == "CO2" and stream.side == "in"):
        return "brought by carbonates"
    if name in OXIDATION:
        return f"{OXIDATION[name]} (net of oxide charged)"
    if name in ("CaO", "MgO", "Na2O", "K2O"):
        return "in lime and magnesia (net)"
    if name == "SO2":
        return "oxidation of sulphur to SO2"
    return "in water, hydroxides and rust (net)"
