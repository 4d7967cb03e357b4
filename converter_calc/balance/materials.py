"""Materials: from what a user states about one to the species in one kilogram as weighed.

The stated analysis is that of the dry, clean material and adds up to 100 % with the loss on
ignition. Moisture, oil, rust and dirt come on top, as shares of the weighed material.
"""

from __future__ import annotations

import math
from collections.abc import Mapping
from dataclasses import dataclass
from functools import cache
from typing import Any

from converter_calc.balance.fields import show, take_number, take_shares, take_table, take_text
from converter_calc.balance.schema import material_fields, nearest, parse_shares
from converter_calc.basis.elements import molar_mass
from converter_calc.basis.errors import Fault, InputError
from converter_calc.basis.units import ZERO_C_K
from converter_calc.data.tables import read_csv_rows, read_toml

OIL, RUST, WATER = "C16H34", "FeOOH", "H2O"
#: A slag charged above this temperature counts as liquid, degree C.
MOLTEN_ABOVE_C = 1100.0
#: A sum within this of 100 % is rounding, mass %.
SUM_ROUNDING_PCT = 0.5
#: An analysis short by more than this is refused, mass %.
SUM_SHORT_PCT = 10.0
#: Fields that make up the composition; a new `pct` replaces all of them.
COMPOSITION = (
    *("pct", "rest", "loss_on_ignition_pct", "loss_on_ignition_water_pct"),
    *("moisture_pct", "oil_pct", "rust_pct", "yield_pct", "dirt_pct"),
)
#: How carbon dioxide and bound water are held, first choice first: (oxide, compound). Each
#: oxide takes one molecule; Fe2O3 and H2O make two FeOOH.
HOLDS_CO2 = (("CaO", "CaCO3"), ("MgO", "MgCO3"))
HOLDS_WATER = (("CaO", "Ca(OH)2"), ("MgO", "Mg(OH)2"), ("Fe2O3", "FeOOH"))


@dataclass(frozen=True)
class Material:
    """One material, ready to charge.

    species_kg : kg of each species per kg as weighed, sums to 1. temp_K : charging
    temperature [K]. molten : True for a liquid slag. yield_factor : share of scrap as weighed
    that comes into the bath. What is not given is None.
    """

    name: str
    kind: str
    species_kg: Mapping[str, float]
    temp_K: float
    molten: bool
    price_per_t: float | None = None
    CO2_kg_per_t: float | None = None
    stock_kg: float | None = None
    yield_factor: float = 1.0
    max_share_pct: float | None = None
    bulk_density_kg_per_m3: float | None = None
    description: str = ""
    source: str = ""
    warnings: tuple[str, ...] = ()


@cache
def known_species() -> tuple[str, ...]:
    """Species that a material may hold: those with a solid or liquid, and bound CO2 and water."""
    rows = read_csv_rows("species.csv")
    solid = dict.fromkeys(row["species"] for row in rows if row["phase"] != "g")
    solid.pop("H2O_liquid", None)
    return (*solid, "P2O5", "H2O", "CO2")


def compile_material(name: str, fields: Mapping[str, Any]) -> Material:
    """The material that the fields of a heat or shop file describe.

    Parameters
    ----------
    name : its name, used as `<name>_kg` in a charge.
    fields : as listed in data/material_fields.csv [units there].

    Returns
    -------
    Material; `warnings` holds one sentence for an analysis that was scaled by more than
    rounding.

    Raises
    ------
    InputError : every fault found, one each, naming materials.<name>.<field>.
    """
    faults: list[Fault] = []
    place = f"materials.{name}"
    if take_table(fields, place, faults) is None:
        raise InputError(faults)
    values, texts = _take_fields(fields, place, faults)
    kind = texts.get("kind") or "other"
    rest = texts.get("rest") or ("Fe" if kind == "scrap" and "rest" not in fields else "")
    pct = _take_analysis(fields.get("pct"), f"{place}.pct", faults, needed=not rest)
    if "yield_factor" in fields and kind != "scrap":
        faults.append(Fault(f"{place}.yield_factor", f'only a scrap has one, given for "{kind}"'))
    dirt = parse_shares(material_fields()["dirt_pct"].default)
    if "dirt_pct" in fields:
        dirt = _take_analysis(fields["dirt_pct"], f"{place}.dirt_pct", faults, needed=True) or dirt
    if rest and rest not in known_species():
        faults.append(Fault(f"{place}.rest", _unknown(rest)))
    if faults or pct is None:
        raise InputError(faults)

    warnings: list[str] = []
    analysis = _close_analysis(name, pct, rest, values, warnings, faults)
    weighed = _as_weighed(place, analysis, dirt, values, faults)
    if kind in ("slag", "flux"):
        weighed = _bind_sulphur(weighed)
    if faults:
        raise InputError(faults)
    total = math.fsum(weighed.values())
    shares = {formula: part / total for formula, part in weighed.items()}
    species = {formula: share for formula, share in shares.items() if share > 0.0}
    return Material(
        name=name,
        kind=kind,
        species_kg=species,
        temp_K=values["temp_C"] + ZERO_C_K,
        molten=kind == "slag" and values["temp_C"] > MOLTEN_ABOVE_C,
        price_per_t=values.get("price_per_t"),
        CO2_kg_per_t=values.get("CO2_kg_per_t"),
        stock_kg=values.get("stock_kg"),
        yield_factor=values["yield_factor"],
        max_share_pct=values.get("max_share_pct"),
        bulk_density_kg_per_m3=values.get("bulk_density_kg_per_m3"),
        description=texts.get("description", ""),
        source=texts.get("source", ""),
        warnings=tuple(warnings),
    )


def _take_fields(
    fields: Mapping[str, Any], place: str, faults: list[Fault]
) -> tuple[dict[str, float], dict[str, str]]:
    """Numbers (defaults filled in) and texts of a material."""
    rows = material_fields()
    values = {key: float(row.default) for key, row in rows.items()
              if row.kind == "number" and row.default}  # fmt: skip
    texts: dict[str, str] = {}
    for key, given in fields.items():
        spot = f"{place}.{key}"
        row = rows.get(key)
        if row is None:
            faults.append(Fault(spot, f"unknown field{nearest(str(key), rows)}"))
        elif row.kind == "number":
            number = take_number(given, row, spot, faults)
            if number is not None:
                values[key] = number
        elif row.kind == "text":
            text = take_text(given, row.allowed, spot, faults)
            if text is not None:
                texts[key] = text
    return values, texts


def _unknown(species: str) -> str:
    return f"{show(species)} is not a species known here{nearest(species, known_species())}"


def _take_analysis(
    given: Any, place: str, faults: list[Fault], *, needed: bool
) -> dict[str, float] | None:
    """A table species = mass %, species checked; empty where it may be left out."""
    if given is None and not needed:
        return {}
    if given is None:
        faults.append(Fault(place, "not given; state the analysis as {species = mass %}"))
        return None
    if isinstance(given, Mapping) and not given and not needed:
        return {}
    shares = take_shares(given, place, faults, unit="species")
    if shares is None:
        return None
    wrong = [species for species in shares if species not in known_species()]
    faults.extend(Fault(f"{place}.{species}", _unknown(species)) for species in wrong)
    return None if wrong else shares


def _close_analysis(
    name: str,
    pct: Mapping[str, float],
    rest: str,
    values: Mapping[str, float],
    warnings: list[str],
    faults: list[Fault],
) -> dict[str, float]:
    """Analysis scaled to 100 %, with carbon dioxide and water bound to oxides."""
    place = f"materials.{name}.pct"
    ignition = values.get("loss_on_ignition_pct", 0.0)
    if ignition and ("CO2" in pct or "H2O" in pct):
        message = "given beside CO2 or H2O in pct; leave one of the two out"
        faults.append(Fault(f"materials.{name}.loss_on_ignition_pct", message))
        return dict(pct)
    analysis = dict(pct)
    water_share = values["loss_on_ignition_water_pct"] * 0.01
    analysis["CO2"] = analysis.get("CO2", 0.0) + ignition * (1.0 - water_share)
    analysis["H2O"] = analysis.get("H2O", 0.0) + ignition * water_share
    total = math.fsum(analysis.values())
    if rest:
        analysis[rest] = analysis.get(rest, 0.0) + max(0.0, 100.0 - total)
        total = max(total, 100.0)
    if total > 100.0 + SUM_ROUNDING_PCT:
        faults.append(Fault(place, f"adds up to {total:.6g} %, above 100"))
    elif total < 100.0 - SUM_SHORT_PCT:
        message = f'adds up to {total:.6g} % only; state what is missing, or rest = "<species>"'
        faults.append(Fault(place, message))
    elif total < 100.0 - SUM_ROUNDING_PCT:
        warnings.append(f"{name}: analysis adds up to {total:.6g} %, scaled to 100 %")
    if not faults:
        analysis = {species: part * (100.0 / total) for species, part in analysis.items()}
        _bind(analysis, "CO2", HOLDS_CO2)
        _bind(analysis, "H2O", HOLDS_WATER)
        if analysis.get("CO2", 0.0) > 0.0:
            message = f"{analysis['CO2']:.3g} % CO2 is more than its CaO and MgO can hold"
            faults.append(Fault(place, message))
    return analysis


def _bind(analysis: dict[str, float], gas: str, holders: tuple[tuple[str, str], ...]) -> None:
    """Move `gas` and the oxides that hold it into the compounds of both, in order."""
    for oxide, compound in holders:
        mol = min(
            analysis.get(gas, 0.0) / molar_mass(gas),
            analysis.get(oxide, 0.0) / molar_mass(oxide),
        )
        if mol <= 0.0:
            continue
        for species in (gas, oxide):
            part = mol * molar_mass(species)
            left = analysis[species] - part
            analysis[species] = left if left > 1e-9 * part else 0.0  # rounding of the subtraction
            analysis[compound] = analysis.get(compound, 0.0) + part


def _bind_sulphur(parts: dict[str, float]) -> dict[str, float]:
    """Sulphur of a slag or flux sits on calcium, CaO + S -> CaS; no analysis states its oxygen."""
    sulphur = parts.get("S", 0.0)
    mol = min(sulphur / molar_mass("S"), parts.get("CaO", 0.0) / molar_mass("CaO"))
    if mol <= 0.0:
        return parts
    bound = dict(parts)
    bound["S"] = max(0.0, sulphur - mol * molar_mass("S"))
    bound["CaO"] = max(0.0, bound["CaO"] - mol * molar_mass("CaO"))
    bound["CaS"] = bound.get("CaS", 0.0) + mol * molar_mass("CaS")
    return bound


def _as_weighed(
    place: str,
    analysis: Mapping[str, float],
    dirt: Mapping[str, float],
    values: Mapping[str, float],
    faults: list[Fault],
) -> dict[str, float]:
    """Mass of each species [kg] in 100 kg of the material as weighed."""
    on_top = {WATER: values["moisture_pct"], OIL: values["oil_pct"], RUST: values["rust_pct"]}
    beside = math.fsum(on_top.values())
    clean = values.get("yield_pct", 100.0 - beside)
    dirty = 100.0 - beside - clean
    if clean <= 0.0 or dirty < -1e-9:
        message = (
            f"leaves {100.0 - clean:.3g} % for moisture, oil and rust of {beside:.3g} %"
            if "yield_pct" in values
            else f"moisture, oil and rust add up to {beside:.3g} %"
        )
        faults.append(Fault(f"{place}.yield_pct", message))
        return dict(analysis)
    parts = {species: part * (clean * 0.01) for species, part in analysis.items()}
    for species, part in on_top.items():
        parts[species] = parts.get(species, 0.0) + part
    total = math.fsum(dirt.values())
    for species, part in dirt.items():
        parts[species] = parts.get(species, 0.0) + max(0.0, dirty) * part / total
    return parts


def override_fields(below: Mapping[str, Any], above: Mapping[str, Any]) -> dict[str, Any]:
    """Fields of a material with some replaced; a new `pct` replaces the whole composition."""
    kept = {
        key: given for key, given in below.items() if "pct" not in above or key not in COMPOSITION
    }
    return {**kept, **above}


@cache
def library_fields() -> dict[str, dict[str, Any]]:
    """Fields of the materials that are always at hand, by name (data/materials.toml)."""
    return {
        name: fields for name, fields in read_toml("materials.toml").items()
        if isinstance(fields, dict)
    }  # fmt: skip


@cache
def library_material(name: str) -> Material:
    """A material of the library, compiled once."""
    return compile_material(name, library_fields()[name])
