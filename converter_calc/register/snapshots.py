"""A planned heat as plain data: inputs complete on their own, and values by names of the log."""

from __future__ import annotations

import hashlib
import math
from collections.abc import Mapping
from functools import cache
from importlib.resources import files
from pathlib import Path
from typing import Any

import numpy as np

from converter_calc.balance.documents import read_document, with_shop
from converter_calc.balance.heats import HeatTable
from converter_calc.balance.materials import OIL, RUST, WATER, Material
from converter_calc.balance.schema import material_fields, parameters
from converter_calc.basis.elements import molar_mass
from converter_calc.basis.units import ZERO_C_K
from converter_calc.heatlog.columns import find_column
from converter_calc.planning.outcome import Outcome, at

#: FeO that holds as much iron as 1 kg of Fe2O3, kg.
FEO_PER_FE2O3 = 2.0 * molar_mass("FeO") / molar_mass("Fe2O3")
_LOGGED_INPUTS = ("hot_metal_temp_C", "wait_min", "blow_min")
_ALWAYS_USED = ("carryover_slag", "retained_slag", "lining")


@cache
def model_version() -> str:
    """Twelve signs that tell the numbers of the trade apart: a digest of all data files."""
    digest = hashlib.sha256()
    for file in sorted(files("converter_calc.data").iterdir(), key=lambda file: file.name):
        if file.name.endswith((".csv", ".toml")):
            digest.update(file.name.encode() + b"\0" + file.read_bytes())
    return digest.hexdigest()[:12]


def whole_document(heat: str | Path | Mapping[str, Any]) -> dict[str, Any]:
    """A heat file laid over its shop file: complete on its own, no path in it.

    Raises InputError where a file cannot be read.
    """
    if isinstance(heat, Mapping):
        document, folder = dict(heat), None
    else:
        path = Path(heat)
        document, folder = read_document(path), path.parent
        document.setdefault("heat_id", path.stem)
    whole = with_shop(document, folder)
    whole.pop("shop", None)
    return whole


def document_of_heat(heats: HeatTable, index: int = 0) -> dict[str, Any]:
    """One heat of a table as the content of a heat file that gives the same plan.

    Defaults are written out; the materials in use stand in it with their species.
    """
    document: dict[str, Any] = {"heat_id": heats.ids[index]}
    if heats.why:
        document["why"] = heats.why
    for name, values in heats.values.items():
        row = parameters()[name]
        number = float(at(values, index))
        if math.isfinite(number) and not name.startswith("hm_"):
            document.setdefault(row.section, {})[row.key] = number
    document.setdefault("hot_metal", {}).update(
        {f"{el}_pct": float(at(pct, index)) for el, pct in heats.hm_pct.items() if el != "Fe"}
    )
    masses = {f"{name}_kg": float(at(kg, index)) for name, kg in heats.masses_kg.items()}
    document.setdefault("charge", {}).update(
        {name: kg for name, kg in masses.items() if math.isfinite(kg)}
    )
    _put_choices(document, heats)
    choices = heats.choices
    used = [*heats.masses_kg, *choices.scrap_mix, *choices.scrap_order, choices.lime,
            choices.magnesia_flux, choices.coolant, choices.fuel, *_ALWAYS_USED]  # fmt: skip
    document["materials"] = {
        name: material_document(heats.materials[name]) for name in dict.fromkeys(used)
    }
    return document


def _put_choices(document: dict[str, Any], heats: HeatTable) -> None:
    choices = heats.choices
    named = {
        "lime": choices.lime, "magnesia_flux": choices.magnesia_flux, "coolant": choices.coolant,
        "fuel": choices.fuel, "ask": choices.ask, "scrap_mix": choices.scrap_mix,
        "scrap_order": choices.scrap_order,
    }  # fmt: skip
    document["choice"] = {key: choice for key, choice in named.items() if choice}
    practice = document.setdefault("practice", {})
    practice |= {"blowing": choices.blowing, "dust_pct": choices.dust_species}
    document["law"] = dict(choices.laws)
    tables = {"grades": heats.grades, "tap": heats.tap}
    document |= {key: table for key, table in tables.items() if table}
    if heats.grade:
        document.setdefault("aim", {})["grade"] = heats.grade


def material_document(material: Material) -> dict[str, Any]:
    """Fields of a heat file that give this material, its composition as weighed."""
    beside = {WATER: "moisture_pct", OIL: "oil_pct", RUST: "rust_pct"}
    fields: dict[str, Any] = {"kind": material.kind, "temp_C": material.temp_K - ZERO_C_K}
    clean = {name: kg for name, kg in material.species_kg.items() if name not in beside}
    total = math.fsum(clean.values())
    fields["pct"] = {name: 100.0 * kg / total for name, kg in clean.items()}
    for species, key in beside.items():
        fields[key] = 100.0 * material.species_kg.get(species, 0.0)
    for key, row in material_fields().items():
        value = getattr(material, key, None)
        if key in fields or row.kind not in ("number", "text") or value in (None, ""):
            continue
        if row.kind == "text" or value != row.default_number:
            fields[key] = value
    return fields


def planned_values(outcome: Outcome, index: int = 0) -> dict[str, float]:
    """Planned inputs, aims and results of a heat by the names of the heat log.

    The total iron of the slag stands under slag_FeO_pct, as FeO. Beside the columns of the
    log: scrap_total_kg [kg].
    """
    heats = outcome.heats
    materials = tuple(heats.materials)
    given = {name: at(values, index) for name, values in heats.values.items()}
    given |= {f"hm_{el}_pct": at(pct, index) for el, pct in heats.hm_pct.items()}
    found = {
        name: value
        for name, value in given.items()
        if name.startswith(("hm_", "aim_")) or name in _LOGGED_INPUTS
    }
    found |= {
        name: at(values, index)
        for name, values in outcome.columns().items()
        if np.asarray(values).dtype != object
    }
    iron = found.pop("slag_Fe2O3_pct", 0.0) * FEO_PER_FE2O3
    found["slag_FeO_pct"] = found.get("slag_FeO_pct", 0.0) + iron
    return {
        name: float(value)
        for name, value in found.items()
        if math.isfinite(float(value))
        and name not in ("hm_Fe_pct", "end_Fe_pct")
        and (name == "scrap_total_kg" or find_column(name, materials) is not None)
    }
