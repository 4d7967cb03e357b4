"""Why this number? The terms behind a result, read off the solved balance."""

from __future__ import annotations

import difflib
from collections.abc import Callable
from dataclasses import dataclass, field

import numpy as np

from converter_calc.balance.closures import magnesia_aim_pct
from converter_calc.basis.elements import molar_mass, parse_formula
from converter_calc.basis.errors import Fault, InputError
from converter_calc.basis.units import ZERO_C_K
from converter_calc.data.tables import read_toml
from converter_calc.laws import phosphorus
from converter_calc.planning.heat_terms import heat_terms, oxygen_terms
from converter_calc.planning.outcome import Outcome, at


@dataclass(frozen=True)
class Term:
    """One line of an explanation."""

    label: str
    value: float
    unit: str
    source: str = ""


@dataclass
class Explanation:
    """A result, the sentence that says what sets it, and its terms."""

    quantity: str
    value: float
    unit: str
    reason: str
    terms: list[Term] = field(default_factory=list)

    def text(self) -> str:
        """The explanation as lines of text."""
        lines = [f"{self.quantity}: {number(self.value)} {self.unit}", self.reason]
        width = max((len(term.label) for term in self.terms), default=0)
        for term in self.terms:
            line = f"  {term.label:<{width}}  {number(term.value):>10} {term.unit}".rstrip()
            lines.append(f"{line}   [{term.source}]" if term.source else line)
        return "\n".join(lines)


def number(x: float) -> str:
    """A number to read: no exponents, four digits or whole thousands."""
    if abs(x) >= 1000.0:
        return f"{x:,.0f}"
    return f"{x:.4g}" if abs(x) >= 1e-3 or x == 0.0 else f"{x:.2e}"


def source_of(law: str) -> str:
    """Source of a law that has one data file of its own: "lime", "iron_oxide", "magnesia"."""
    data = read_toml(law + ".toml")
    return f"{data['source']} ({data['known']})"


def check_quantity(quantity: str) -> None:
    """Raise InputError unless `quantity` can be explained."""
    if quantity.lower() not in QUANTITIES:
        near = difflib.get_close_matches(quantity.lower(), QUANTITIES, n=1, cutoff=0.4)
        hint = f"; did you mean {near[0]}?" if near else ""
        allowed = ", ".join(QUANTITIES)
        raise InputError(
            [Fault("quantity", f"{quantity!r} cannot be explained{hint} (allowed: {allowed})")]
        )


def explain(outcome: Outcome, quantity: str, index: int = 0) -> Explanation:
    """How a result of one heat comes about.

    quantity : one of QUANTITIES. Raises InputError for another name, with the nearest ones.
    """
    check_quantity(quantity)
    return QUANTITIES[quantity.lower()](outcome, index)


def _heat_lines(outcome: Outcome, index: int) -> list[Term]:
    terms = [Term(t.label, float(at(t.heat_MJ, index)), "MJ") for t in heat_terms(outcome)]
    return [term for term in terms if abs(term.value) > 1e-6]


def _temperature(outcome: Outcome, i: int) -> Explanation:
    value = float(at(outcome.state.T_K, i)) - ZERO_C_K
    if outcome.ask.heat == "T_K":
        reason = "The end temperature is where heat supplied and heat carried away balance:"
    else:
        reason = "The end temperature is the aim; the charge is chosen so that these balance:"
    return Explanation("end temperature", value, "C", reason, _heat_lines(outcome, i))


def _scrap(outcome: Outcome, i: int) -> Explanation:
    value = float(at(outcome.kind_kg("scrap"), i))
    if outcome.ask.heat == "scrap_kg":
        reason = (
            "Scrap takes up the heat left over at the aim temperature. The steel made of it "
            "holds its share of the heat of the steel; the rest of the balance is:"
        )
    else:
        reason = "Scrap was given; the heat balance around it is:"
    lines = _heat_lines(outcome, i)
    s = outcome.state
    per_kg = float(at(s.enthalpy_J["metal"] / s.metal_kg, i)) / 1e6
    lines.append(Term("heat content of 1 kg of steel at the end", per_kg, "MJ/kg"))
    return Explanation("scrap", value, "kg", reason, lines)


def _oxygen(outcome: Outcome, i: int) -> Explanation:
    lines = [Term(label, float(at(x, i)), "Nm3 O2") for label, x in oxygen_terms(outcome)]
    pure = sum(term.value for term in lines)
    purity = float(at(outcome.p.values["oxygen_purity_pct"], i))
    lines.append(Term("oxygen needed, pure", pure, "Nm3 O2"))
    lines.append(Term("purity of the oxygen", purity, "%"))
    value = float(at(outcome.oxygen_Nm3, i))
    true = outcome.p.truth("oxygen")
    if true is not None:
        lines.append(Term("true volume as a share of the meter's", float(at(true, i)), ""))
    reason = "Oxygen blown follows from the oxygen balance of all products and solids charged:"
    return Explanation("oxygen", value, "Nm3", reason, lines)


def _lime_reason(outcome: Outcome, i: int) -> str:
    values = outcome.heats.values
    if not outcome.ask.lime:
        return "Lime was given; the slag holds it as follows:"
    if np.isfinite(values["pin_basicity"][i]):
        return "Lime follows the pinned basicity:"
    if np.isfinite(values["pin_slag_CaO_pct"][i]):
        return "Lime follows the pinned CaO of the slag:"
    least = float(values["aim_basicity"][i])
    B = float(at(outcome.state.basicity, i))
    if least * (1.0 + 1e-6) < B:
        return (
            f"The phosphorus aim asks for more lime than the least basicity of {least:g} "
            f"(CaO/SiO2 reaches {B:.2f}):"
        )
    return f"The least basicity of {least:g} asks for more lime than the phosphorus aim:"


def _lime(outcome: Outcome, i: int) -> Explanation:
    s, name = outcome.state, outcome.heats.choices.lime
    kg = outcome.charged_kg
    value = float(at(kg.get(name, 0.0), i))
    pct = s.slag_pct
    dissolved = float(at(pct["CaO"] * s.slag_kg * 0.01, i))
    lines = [
        Term("SiO2 in the slag", float(at(pct["SiO2"] * s.slag_kg * 0.01, i)), "kg"),
        Term("CaO/SiO2 reached", float(at(s.basicity, i)), ""),
        Term("CaO in the liquid slag (as analysed)", dissolved, "kg"),
        Term("CaO left undissolved", float(at(s.undissolved_kg, i)), "kg"),
        Term(
            "CaO at which dissolution stops",
            float(at(s.laws["lime_limit_pct"], i)),
            "% of slag",
            source_of("lime"),
        ),
        Term("CaO lost with dust", float(at(s.dust_kg.get("CaO", 0.0), i)), "kg"),
    ]
    for material, mass in kg.items():
        Ca = outcome.p.contents[material].elements.get("Ca", 0.0)
        CaO = float(at(mass, i)) * Ca * molar_mass("CaO") / molar_mass("Ca")
        if CaO > 0.0:
            lines.append(Term(f"CaO (and CaO of CaF2) brought by {material}", CaO, "kg"))
    lines += _phosphorus_lines(outcome, i)
    return Explanation("lime", value, "kg", _lime_reason(outcome, i), lines)


def _phosphorus_lines(outcome: Outcome, i: int) -> list[Term]:
    s, p = outcome.state, outcome.p
    law = p.laws["phosphorus"]
    pinned = np.isfinite(outcome.heats.values["pin_L_P"][i])
    pinned_end = np.isfinite(outcome.heats.values["pin_end_P_pct"][i])
    charged = float(at(s.totals.of("P"), i))
    in_slag = float(at(s.slag_species_kg["P2O5"], i)) * 2.0 * molar_mass("P") / molar_mass("P2O5")
    in_metal = float(at(s.metal_species_kg["P"], i))
    metal, slag = float(at(s.metal_kg, i)), float(at(s.slag_kg, i))
    lines = [Term("phosphorus charged", charged, "kg")]
    if not pinned_end:
        approach = float(at(p.values["P_approach"], i))
        L = float(at(s.laws["L_P"], i))
        if pinned:
            lines.append(Term("L_P = (%P)/[%P], pinned", L, "", "pin.L_P"))
        else:
            source = phosphorus.describe(law).source
            lines.append(Term(f"L_P at equilibrium, law {law}", L / approach, "", source))
            lines.append(Term("approach to equilibrium", approach, "", "practice.P_approach"))
            lines.append(Term("L_P reached", L, ""))
    lines += [
        Term("liquid slag per kg of metal", slag / metal, "kg/kg"),
        Term("phosphorus in the slag", in_slag, "kg"),
        Term("phosphorus in steel, droplets and ejections", in_metal, "kg"),
        Term("end phosphorus", 100.0 * in_metal / metal, "%"),
    ]
    return lines


def _phosphorus(outcome: Outcome, i: int) -> Explanation:
    value = float(at(outcome.steel_pct()["P"], i))
    reason = "[P] = phosphorus charged / (metal x (1 + L_P x slag/metal)):"
    s = outcome.state
    lines = _phosphorus_lines(outcome, i)
    for name in ("CaO", "MgO", "SiO2", "MnO", "P2O5"):
        if name in s.slag_pct:
            lines.append(Term(f"({name}) of the slag", float(at(s.slag_pct[name], i)), "%"))
    iron = float(at(s.laws["T_Fe_pct"], i))
    lines.append(Term("total iron of the slag", iron, "%", source_of("iron_oxide")))
    lines.append(Term("temperature", float(at(s.T_K, i)) - ZERO_C_K, "C"))
    return Explanation("end phosphorus", value, "%", reason, lines)


def _magnesia(outcome: Outcome, i: int) -> Explanation:
    s, name = outcome.state, outcome.heats.choices.magnesia_flux
    value = float(at(outcome.charged_kg.get(name, 0.0), i))
    aim = float(at(magnesia_aim_pct(outcome.p, s), i))
    lines = [
        Term("MgO wanted in the slag", aim, "%", "aim.MgO_pct, else " + source_of("magnesia")),
        Term("MgO of the slag", float(at(s.slag_pct["MgO"], i)), "%"),
    ]
    for material, mass in outcome.charged_kg.items():
        Mg = outcome.p.contents[material].elements.get("Mg", 0.0)
        MgO = float(at(mass, i)) * Mg * molar_mass("MgO") / molar_mass("Mg")
        if MgO > 0.0:
            lines.append(Term(f"MgO brought by {material}", MgO, "kg"))
    reason = "Magnesia flux brings the slag to the MgO that spares the lining:"
    return Explanation(f"magnesia flux ({name})", value, "kg", reason, lines)


def _trim(outcome: Outcome, i: int) -> Explanation:
    choices, kg = outcome.heats.choices, outcome.charged_kg
    coolant, fuel = (float(at(kg.get(n, 0.0), i)) for n in (choices.coolant, choices.fuel))
    name, value = (choices.coolant, coolant) if coolant >= fuel else (choices.fuel, fuel)
    reason = "Coolant takes up surplus heat, fuel makes up a shortage:"
    return Explanation(name, value, "kg", reason, _heat_lines(outcome, i))


def _carbon(outcome: Outcome, i: int) -> Explanation:
    s = outcome.state
    lines = [
        Term("carbon charged", float(at(s.totals.of("C"), i)), "kg"),
        Term("carbon to CO", float(at(s.gas_kg["CO"], i)) * _share("CO", "C"), "kg"),
        Term("carbon to CO2", float(at(s.gas_kg["CO2"], i)) * _share("CO2", "C"), "kg"),
        Term("carbon left in the metal", float(at(s.metal_species_kg["C"], i)), "kg"),
    ]
    given = outcome.ask.end != "root_C"
    reason = "End carbon is the aim:" if given else "End carbon follows from the oxygen blown:"
    return Explanation("end carbon", float(at(s.C_pct, i)), "%", reason, lines)


def _share(species: str, element: str) -> float:
    return parse_formula(species)[element] * molar_mass(element) / molar_mass(species)


QUANTITIES: dict[str, Callable[[Outcome, int], Explanation]] = {
    "lime": _lime,
    "oxygen": _oxygen,
    "scrap": _scrap,
    "temperature": _temperature,
    "phosphorus": _phosphorus,
    "magnesia": _magnesia,
    "coolant": _trim,
    "fuel": _trim,
    "carbon": _carbon,
}
