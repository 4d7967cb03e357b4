"""Additions at tap: from the library of ferro-alloys, or from materials of the shop."""

from __future__ import annotations

from collections.abc import Iterable, Mapping
from dataclasses import dataclass, field

from converter_calc.balance.charge import SLAG_OXIDES, charged_species_enthalpy_J_kg
from converter_calc.balance.materials import Material
from converter_calc.basis.elements import mass_fractions
from converter_calc.basis.errors import DataError, Fault, InputError
from converter_calc.basis.units import T_REF_K, ZERO_C_K
from converter_calc.data.tables import read_toml
from converter_calc.thermo.enthalpy import known_species

#: What is neither analysed nor iron (ash, scale) is counted as this. Common practice, no source.
ASH = "Al2O3"
#: Elements that a steel can take up from an addition.
DISSOLVES = (
    *("Fe", "C", "Si", "Mn", "P", "S", "Al", "Cr", "V", "Nb", "Ti", "Mo", "Ni", "Cu"),
    *("Co", "W", "B", "Sn", "As", "Sb"),
)


@dataclass(frozen=True)
class Addition:
    """A ferro-alloy or other addition at tap.

    Attributes
    ----------
    name : trade name.
    supplies : the element it is added for ("" for none: slag makers).
    pct : elements of the analysis as weighed [mass %].
    rest_is_iron : what is missing to 100 is iron and joins the steel; else it is ash.
    recovery : element -> share (0..1) that ends in the steel, where it is not the shop's.
    source : of the analysis.
    oxides_pct : oxides as weighed [mass %]; they go to the ladle slag.
    heat_kJ_kg : heat of formation from the elements (and oxides) at 25 C [kJ/kg].
    temp_C : temperature when added, None = that of the practice.
    price_per_t, stock_kg : of the shop, None where not given.
    """

    name: str
    supplies: str
    pct: dict[str, float]
    rest_is_iron: bool
    source: str
    recovery: dict[str, float]
    oxides_pct: dict[str, float] = field(default_factory=dict)
    heat_kJ_kg: float = 0.0
    temp_C: float | None = None
    price_per_t: float | None = None

    def elements_pct(self) -> dict[str, float]:
        """Elements as weighed, the iron that fills up included [mass %]."""
        pct = dict(self.pct)
        if self.rest_is_iron:
            missing = 100.0 - sum(self.pct.values()) - sum(self.oxides_pct.values())
            pct["Fe"] = pct.get("Fe", 0.0) + missing
        return pct

    def all_oxides_pct(self) -> dict[str, float]:
        """Oxides as weighed, ash included [mass %]; with the elements they add up to 100."""
        oxides = dict(self.oxides_pct)
        ash = 100.0 - sum(self.elements_pct().values()) - sum(oxides.values())
        if ash > 1e-9:
            oxides[ASH] = oxides.get(ASH, 0.0) + ash
        return oxides

    def recovered_share(self, element: str, recovery: Mapping[str, float]) -> float:
        """Share of an element that ends in the steel: the addition's own before the shop's."""
        return self.recovery.get(element, recovery.get(element, 1.0))

    def gain_kg(self, recovery: Mapping[str, float]) -> dict[str, float]:
        """Element -> kg that ends in the steel per kg added [kg/kg].

        `recovery` is the shop's; the addition's own goes before it. An element with none
        is taken to enter wholly.
        """
        return {
            element: content / 100.0 * self.recovered_share(element, recovery)
            for element, content in self.elements_pct().items()
        }


def additions() -> dict[str, Addition]:
    """Additions of the library by name (typical analyses, mass %, a source on each)."""
    return {
        name: Addition(
            name=name,
            supplies=row["supplies"],
            pct=dict(row["pct"]),
            rest_is_iron=row["rest"] == "Fe",
            source=row["source"],
            recovery={},
            heat_kJ_kg=float(row.get("heat_kJ_kg", 0.0)),
        )
        for name, row in read_toml("ferroalloys.toml").items()
    }


def from_materials(materials: Mapping[str, Material], names: Iterable[str]) -> dict[str, Addition]:
    """Materials of the shop as additions at tap, by name.

    Elements join the steel with the shop's recoveries, oxides the ladle slag; compounds of
    elements (carbides, silicides) count as their elements with their heat of formation.

    Raises InputError for a material that holds water, a carbonate or an element that has no
    place in steel or ladle slag.
    """
    found: dict[str, Addition] = {}
    faults: list[Fault] = []
    for name in names:
        if name in materials:
            try:
                found[name] = _from_material(materials[name])
            except InputError as error:
                faults += error.faults
    if faults:
        raise InputError(faults)
    return found


def _from_material(material: Material) -> Addition:
    pct: dict[str, float] = {}
    oxides: dict[str, float] = {}
    heat = 0.0
    place = f"materials.{material.name}"
    for species, share in material.species_kg.items():
        if species in SLAG_OXIDES:
            oxides[species] = 100.0 * share
            continue
        parts = mass_fractions(species)
        wrong = [element for element in parts if element not in DISSOLVES]
        if "H" in wrong:
            why = f"holds {species}; wet additions throw steel out, give a dry analysis"
            raise InputError([Fault(place, why)])
        if wrong:
            why = f"holds {species}, which cannot be an addition at tap"
            raise InputError([Fault(place, why)])
        if len(parts) > 1:
            heat += share * charged_species_enthalpy_J_kg(species, T_REF_K) * 1e-3
        for element, part in parts.items():
            pct[element] = pct.get(element, 0.0) + 100.0 * share * part
    useful = {element: x for element, x in pct.items() if element != "Fe"}
    return Addition(
        name=material.name,
        supplies=max(useful, key=lambda element: useful[element]) if useful else "",
        pct=pct,
        rest_is_iron=False,
        source=material.source or "given by the shop",
        recovery={},
        oxides_pct=oxides,
        heat_kJ_kg=heat,
        temp_C=material.temp_K - ZERO_C_K,
        price_per_t=material.price_per_t,
    )


def check_library() -> None:
    """Raise DataError where an addition of the library holds an element without a place."""
    for name, addition in additions().items():
        unknown = [e for e in addition.pct if e not in DISSOLVES or e not in known_species()]
        if unknown:
            raise DataError(f"ferroalloys.toml: {name} holds {', '.join(unknown)}")
