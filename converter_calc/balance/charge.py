"""What goes into the converter: the content of each material and the totals of a charge.

Everything is linear in the masses: the element totals, the carbon bound in carbonates and
the enthalpy brought in. A material is reduced once to its `Content`; a charge adds contents.
"""

from __future__ import annotations

from collections.abc import Iterable, Mapping
from dataclasses import dataclass, field
from functools import cache, lru_cache

from converter_calc.balance.materials import Material
from converter_calc.basis.dual import Num
from converter_calc.basis.elements import mass_fractions, molar_mass, parse_formula
from converter_calc.thermo.enthalpy import enthalpy_J_kg
from converter_calc.thermo.slag import SlagEnthalpy

CARBONATES = ("CaCO3", "MgCO3")
SLAG_OXIDES = (
    *("CaO", "SiO2", "MgO", "Al2O3", "FeO", "Fe2O3", "MnO", "P2O5", "TiO2", "V2O3", "V2O5"),
    *("Cr2O3", "CaF2", "CaS", "Na2O", "K2O"),
)
WATER_AS_CHARGED = "H2O_liquid"
#: Contents kept at hand for the next heat.
CONTENTS_KEPT = 512


@dataclass(frozen=True)
class Content:
    """One kilogram of a material.

    elements : kg of each element per kg; carbonate_C : kg of carbon bound as carbonate per
    kg; enthalpy_J_kg : J/kg at the charging temperature; species_kg : kg of each per kg.
    """

    elements: Mapping[str, float]
    carbonate_C: float
    enthalpy_J_kg: float
    species_kg: Mapping[str, float]
    temp_K: float


def elements_of(species_kg: Mapping[str, float]) -> dict[str, float]:
    """Mass of each element [kg] in the given masses of species [kg]."""
    totals: dict[str, float] = {}
    for species, kg in species_kg.items():
        for element, share in mass_fractions(species).items():
            totals[element] = totals.get(element, 0.0) + kg * share
    return totals


def charged_species_enthalpy_J_kg(species: str, temp_K: float) -> float:
    """Enthalpy [J/kg] of a solid (or liquid water, oil) species at the charging temperature."""
    if species == "P2O5":
        return float(enthalpy_J_kg("P4O10", temp_K))
    if species == "H2O" and temp_K < 373.15:
        species = WATER_AS_CHARGED
    return float(enthalpy_J_kg(species, temp_K))


def content(material: Material) -> Content:
    """Elements, carbonate carbon and enthalpy of one kilogram of `material`.

    Molten slag counts as a slag solution, everything else as the compounds it holds. Equal
    materials share one content.
    """
    return _content(tuple(material.species_kg.items()), material.temp_K, molten=material.molten)


@lru_cache(maxsize=CONTENTS_KEPT)
def _content(parts: tuple[tuple[str, float], ...], temp_K: float, *, molten: bool) -> Content:
    species = dict(parts)
    if molten:
        oxides = {name: kg for name, kg in species.items() if name in SLAG_OXIDES}
        enthalpy = float(slag_enthalpy(tuple(oxides)).enthalpy_J(oxides, temp_K))
        rest = {name: kg for name, kg in species.items() if name not in SLAG_OXIDES}
    else:
        enthalpy, rest = 0.0, species
    for name, kg in rest.items():
        enthalpy += kg * charged_species_enthalpy_J_kg(name, temp_K)
    carbon = sum(
        kg * mass_fractions(name)["C"] for name, kg in species.items() if name in CARBONATES
    )
    return Content(elements_of(species), carbon, enthalpy, species, temp_K)


@lru_cache(maxsize=CONTENTS_KEPT)
def dust_content(parts: tuple[tuple[str, float], ...]) -> Content:
    """Elements of one kilogram of dust; its enthalpy is worked out where it leaves."""
    species = dict(parts)
    return Content(elements_of(species), 0.0, 0.0, species, 298.15)


@cache
def slag_enthalpy(oxides: tuple[str, ...]) -> SlagEnthalpy:
    """The slag solution over `oxides`, built once."""
    return SlagEnthalpy(oxides)


def mix_contents(parts: Iterable[tuple[float, Content]]) -> Content:
    """One kilogram of a mixture of contents by mass share (shares sum to one)."""
    elements: dict[str, float] = {}
    species: dict[str, float] = {}
    carbonate = enthalpy = temp = 0.0
    for share, part in parts:
        for element, kg in part.elements.items():
            elements[element] = elements.get(element, 0.0) + share * kg
        for name, kg in part.species_kg.items():
            species[name] = species.get(name, 0.0) + share * kg
        carbonate += share * part.carbonate_C
        enthalpy += share * part.enthalpy_J_kg
        temp += share * part.temp_K
    return Content(elements, carbonate, enthalpy, species, temp)


@dataclass
class Totals:
    """Sum of a charge: kg of each element, kg of carbonate carbon, J of enthalpy."""

    elements: dict[str, Num] = field(default_factory=dict)
    carbonate_C: Num = 0.0
    enthalpy_J: Num = 0.0

    def copy(self) -> Totals:
        """An independent copy to add to."""
        return Totals(dict(self.elements), self.carbonate_C, self.enthalpy_J)

    def add(self, mass_kg: Num, part: Content) -> None:
        """Add `mass_kg` of a material."""
        for element, share in part.elements.items():
            self.add_element(element, mass_kg * share)
        if part.carbonate_C:
            self.carbonate_C = self.carbonate_C + mass_kg * part.carbonate_C
        self.enthalpy_J = self.enthalpy_J + mass_kg * part.enthalpy_J_kg

    def add_element(self, element: str, kg: Num) -> None:
        """Add `kg` of one element."""
        have = self.elements.get(element)
        self.elements[element] = kg if have is None else have + kg

    def of(self, element: str) -> Num:
        """Kg of an element; 0.0 where none was charged."""
        return self.elements.get(element, 0.0)


#: Items of a returned stream that are not species.
ENTHALPY, TEMPERATURE = "enthalpy_J", "temp_C"


def add_returned(totals: Totals, returned: Mapping[str, Num]) -> None:
    """Add what comes back into the vessel: liquid slag, lime in it, metal in it.

    returned : "<stream>:<item>" to array (n,); an item is a species [kg], `enthalpy_J` [J,
    relative to the elements at 298.15 K] or `temp_C`. The composition may differ from heat to
    heat, unlike that of a material.
    """
    for key, x in returned.items():
        item = key.partition(":")[2]
        if item == ENTHALPY:
            totals.enthalpy_J = totals.enthalpy_J + x
        elif item != TEMPERATURE:
            for element, share in mass_fractions(item).items():
                totals.add_element(element, x * share)


def returned_elements(returned: Iterable[str]) -> set[str]:
    """Elements that returned streams hold."""
    items = {key.partition(":")[2] for key in returned} - {ENTHALPY, TEMPERATURE}
    return {element for item in items for element in mass_fractions(item)}


@cache
def oxide_factor(oxide: str, element: str) -> float:
    """Kg of oxide per kg of the element in it."""
    return molar_mass(oxide) / (parse_formula(oxide)[element] * molar_mass(element))
