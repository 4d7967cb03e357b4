"""Slag as a product: mass, analysis, basicities, free lime, iron in it, heat in it, melting."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass
from typing import TYPE_CHECKING

import numpy as np

from converter_calc.basis.dual import Array, Num
from converter_calc.basis.elements import molar_mass
from converter_calc.basis.units import MJ, ZERO_C_K
from converter_calc.data.tables import read_csv_rows
from converter_calc.laws import slag_measures
from converter_calc.planning.explain import Term
from converter_calc.planning.heat_terms import stream_formation_J
from converter_calc.planning.outcome import Outcome, at, spread

if TYPE_CHECKING:
    import pandas as pd

#: Where the melting hint holds: quantity, low, high.
MELTING_RANGE = (("basicity", 2.5, 4.5), ("MgO_pct", 4.0, 12.0))
OPTICAL = "Duffy, Ingram, Sommerville, J. Chem. Soc. Faraday Trans. 1 74 (1978) 1410 (from memory)"
BOGUE = (
    "lime beyond its compounds; after Bogue, Ind. Eng. Chem. Anal. Ed. 1 (1929) 192 (from memory)"
)
AS_SAMPLED = "liquid slag and undissolved lime, as a sample shows it"
WHOLE = "liquid slag, undissolved lime and iron droplets"
RATIO = "definition, by mass, of the liquid slag"


@dataclass(frozen=True)
class Quantity:
    """A property of the slag of n heats: label, values (n,), unit, definition or source."""

    label: str
    values: Array
    unit: str
    source: str


@dataclass(frozen=True)
class SlagProduct:
    """The slag of n heats: `quantities` by name, `ids` of the heats."""

    ids: list[str]
    quantities: dict[str, Quantity]

    def terms(self, index: int = 0) -> list[Term]:
        """The quantities of one heat as lines of an explanation; what is not known is left out."""
        found = []
        for q in self.quantities.values():
            value = float(at(q.values, index))
            if np.isfinite(value):
                found.append(Term(q.label, value, q.unit, q.source))
        return found

    def document(self, index: int = 0) -> dict[str, dict[str, str | float]]:
        """One heat, ready for JSON: label, value, unit and source by name."""
        return {
            name: {
                "label": q.label,
                "value": float(at(q.values, index)),
                "unit": q.unit,
                "source": q.source,
            }
            for name, q in self.quantities.items()
            if np.isfinite(at(q.values, index))
        }

    def frame(self) -> pd.DataFrame:
        """A row a heat, a column a quantity."""
        import pandas as pd

        columns = {name: q.values for name, q in self.quantities.items()}
        return pd.DataFrame({"heat_id": self.ids} | columns)


def slag_product(outcome: Outcome) -> SlagProduct:
    """What the end slag of n heats is worth knowing for: quantities with definition and source.

    Whole slag = liquid slag, undissolved lime and iron droplets, as it leaves the vessel. Heats
    are above 25 °C, compounds taken as formed at 25 °C. NaN where a quantity has no value: the
    melting hint outside its range, ratios of a slag without silica.
    """
    n = outcome.n
    with np.errstate(all="ignore"):
        found = _masses(outcome) | _analysis(outcome) | _basicities(outcome)
        found |= _free_lime(outcome) | _heat(outcome) | _melting(outcome)
    quantities = {
        name: Quantity(label, spread(x, n), unit, source)
        for name, (label, x, unit, source) in found.items()
    }
    return SlagProduct(list(outcome.heats.ids), quantities)


Rows = dict[str, tuple[str, Num, str, str]]


def _masses(outcome: Outcome) -> Rows:
    s = outcome.state
    whole = s.slag_kg + s.undissolved_kg + s.droplets_kg
    per_t = 1e3 / s.steel_kg
    return {
        "slag_kg": ("liquid slag", s.slag_kg, "kg", "mass balance"),
        "slag_kg_per_t": ("liquid slag", s.slag_kg * per_t, "kg/t steel", "mass balance"),
        "whole_kg": ("whole slag", whole, "kg", WHOLE),
        "whole_kg_per_t": ("whole slag", whole * per_t, "kg/t steel", WHOLE),
        "metallic_iron_pct": (
            "metallic iron in the whole slag",
            100.0 * s.droplets_kg * (s.metal_species_kg["Fe"] / s.metal_kg) / whole,
            "mass %",
            "droplets: practice.droplets_pct or pin.droplets_kg",
        ),
        "droplets_kg": ("iron droplets in it", s.droplets_kg, "kg", "practice.droplets_pct"),
    }


def _analysis(outcome: Outcome) -> Rows:
    pct, source = outcome.slag_pct(), "mass balance and the laws of the heat"
    ordered = sorted(pct, key=lambda name: -float(np.mean(pct[name])))
    rows: Rows = {f"{oxide}_pct": (f"({oxide})", pct[oxide], "mass %", source) for oxide in ordered}
    phosphorus = pct.get("P2O5", 0.0) * slag_measures.share_of("P", "P2O5")
    rows["T_Fe_pct"] = (
        "total iron in oxides",
        slag_measures.total_iron_pct(pct),
        "mass %",
        "stoichiometry: Fe in FeO and Fe2O3",
    )
    rows["FetO_pct"] = (
        "all of it as FeO",
        slag_measures.FetO_pct(pct),
        "mass %",
        "stoichiometry",
    )
    rows["P_pct"] = ("phosphorus", phosphorus, "mass %", "stoichiometry: P in P2O5")
    return rows


def _basicities(outcome: Outcome) -> Rows:
    s, pct = outcome.state, outcome.slag_pct()
    return {
        "basicity": ("CaO/SiO2 as sampled", s.basicity, "", AS_SAMPLED),
        "basicity_liquid": ("CaO/SiO2", slag_measures.basicity(pct), "", RATIO),
        "basicity_MgO": (
            "(CaO+MgO)/SiO2",
            slag_measures.basicity_with_magnesia(pct),
            "",
            RATIO,
        ),
        "basicity_P2O5": (
            "CaO/(SiO2+P2O5)",
            slag_measures.basicity_with_phosphate(pct),
            "",
            RATIO,
        ),
        "optical_basicity": (
            "optical basicity",
            slag_measures.optical_basicity(pct),
            "",
            f"{OPTICAL}; FeO 0.51 and its kind",
        ),
        "optical_basicity_density": (
            "optical basicity, later values of FeO and MnO",
            slag_measures.optical_basicity(pct, "density"),
            "",
            "Mills, ISIJ Int. 33 (1993) 148 (from memory); FeO 1.00",
        ),
    }


def lime_beyond_compounds_pct(slag_pct: Mapping[str, Num]) -> tuple[Num, Num]:
    """Lime of a liquid slag that its compounds do not bind [mass %]: (least, most).

    slag_pct : mass % by oxide. Least with tricalcium silicate, most with dicalcium silicate
    (slow cooling); zero where the compounds would take more than there is. Valid for slags
    richer in lime than dicalcium silicate; table in data/slag_lime.csv, after Bogue 1929.
    """
    least_bound: Num = 0.0
    most_bound: Num = 0.0
    for row in read_csv_rows("slag_lime.csv"):
        mol = slag_pct.get(row["oxide"], 0.0) * (molar_mass("CaO") / molar_mass(row["oxide"]))
        least_bound = least_bound + mol * float(row["least_mol"])
        most_bound = most_bound + mol * float(row["most_mol"])
    lime = slag_pct.get("CaO", 0.0)
    return np.maximum(lime - most_bound, 0.0), np.maximum(lime - least_bound, 0.0)


def _free_lime(outcome: Outcome) -> Rows:
    s = outcome.state
    least, most = lime_beyond_compounds_pct(outcome.slag_pct())
    sampled = s.slag_kg + s.undissolved_kg
    solid = 100.0 * s.undissolved_kg / sampled
    liquid = s.slag_kg / sampled
    return {
        "undissolved_lime_kg": ("lime left undissolved", s.undissolved_kg, "kg", "mass balance"),
        "undissolved_lime_pct": ("lime left undissolved", solid, "mass %", AS_SAMPLED),
        "free_lime_least_pct": (
            "free lime once frozen, least",
            solid + least * liquid,
            "mass %",
            f"undissolved, and {BOGUE}; silica as 3CaO.SiO2",
        ),
        "free_lime_most_pct": (
            "free lime once frozen, most",
            solid + most * liquid,
            "mass %",
            f"undissolved, and {BOGUE}; silica as 2CaO.SiO2 (slow cooling)",
        ),
    }


def _heat(outcome: Outcome) -> Rows:
    s = outcome.state
    stream = next(part for part in outcome.streams if part.name == "slag")
    heat = (stream.enthalpy_J - stream_formation_J(stream)) / MJ
    share = s.droplets_kg / s.metal_kg
    droplets = share * s.enthalpy_J["metal"] / MJ
    source = "enthalpies of the balance, above 25 C; fusion of slag counted in"
    return {
        "heat_MJ": ("heat in the liquid slag", heat, "MJ", source),
        "heat_MJ_per_t": ("heat in a tonne of it", heat / (s.slag_kg * 1e-3), "MJ/t slag", source),
        "heat_droplets_MJ": (
            "heat in the iron droplets",
            droplets,
            "MJ",
            "enthalpies of the balance; elements dissolved in iron, from the pure ones at 25 C",
        ),
        "temperature_C": ("temperature", s.T_K - ZERO_C_K, "C", "end of the blow"),
    }


def _melting(outcome: Outcome) -> Rows:
    pct, n = outcome.slag_pct(), outcome.n
    rows = read_csv_rows("slag_melting.csv")
    iron = [float(row["T_Fe_pct"]) for row in rows]
    have = spread(slag_measures.total_iron_pct(pct), n)
    measures = {"basicity": outcome.state.basicity, "MgO_pct": pct.get("MgO", 0.0)}
    inside = (have >= iron[0]) & (have <= iron[-1])
    for quantity, low, high in MELTING_RANGE:
        inside &= (spread(measures[quantity], n) >= low) & (spread(measures[quantity], n) <= high)
    found: Rows = {}
    for column, label in (("softens_C", "softens from about"), ("fluid_C", "fluid from about")):
        at_rows = [float(row[column]) for row in rows]
        value = np.where(inside, np.interp(have, iron, at_rows), np.nan)
        found[column] = (label, value, "C", "hint by total iron, common practice, no source")
    return found
