"""Materials of the shop as they stand in the fields: what a field shows, and what it changes.

The form carries the shop's own materials as a table over the library (`form.rest`). A field
that is blank leaves the library's value, or the default. A wrong text is kept, with what is
wrong with it, and nothing is put in its place.
"""

from __future__ import annotations

import re
from collections.abc import Mapping
from typing import Any

from converter_calc.balance.materials import (
    COMPOSITION,
    compile_material,
    library_fields,
    override_fields,
)
from converter_calc.balance.schema import Parameter, material_fields, parameters
from converter_calc.basis.errors import Fault, InputError
from converter_calc.page.form import Form
from converter_calc.page.numbers import number_fault, number_text, parse_number, range_text

#: A share of the analysis [mass %].
SHARE = Parameter("", "", "", "number", "mass %", "", 0.0, 100.0, (), "", "")
#: Numbers shown for every material, then what only some kinds need.
USUAL = ("price_per_t", "CO2_kg_per_t", "stock_kg", "moisture_pct", "yield_pct", "temp_C")
OF_KIND = {
    "scrap": ("rust_pct", "oil_pct", "max_share_pct", "bulk_density_kg_per_m3"),
    "flux": ("loss_on_ignition_pct", "loss_on_ignition_water_pct"),
    "coolant": ("loss_on_ignition_pct", "loss_on_ignition_water_pct"),
}
MOST_MATERIALS = 60


def own_materials(form: Form) -> dict[str, dict[str, Any]]:
    """Materials that the shop gives, as a table that may be changed."""
    found: dict[str, dict[str, Any]] = form.rest.setdefault("materials", {})
    return found


def given(form: Form, name: str) -> Mapping[str, Any]:
    """Fields of a material that the shop itself gives."""
    found: Mapping[str, Any] = form.rest.get("materials", {}).get(name, {})
    return found


def whole(form: Form, name: str) -> dict[str, Any]:
    """All fields of a material, those of the library under those of the shop."""
    return override_fields(library_fields().get(name, {}), given(form, name))


def number_keys(form: Form, name: str) -> list[str]:
    """Numbers that are shown for a material, in order."""
    kind = str(whole(form, name).get("kind", "other"))
    keys = [*USUAL, *OF_KIND.get(kind, ())]
    rows = material_fields()
    keys += [key for key in whole(form, name) if key in rows and rows[key].kind == "number"]
    return list(dict.fromkeys(keys))


def place_of(name: str, key: str) -> str:
    """Place of a field in the heat file; a share of the analysis has the key pct.<species>."""
    return f"materials.{name}.{key}"


def shown_text(form: Form, name: str, key: str) -> str:
    """What stands in the field: the text as typed where it is wrong, else the shop's number."""
    place = place_of(name, key)
    if place in form.wrong:
        return form.wrong[place][0]
    if key.startswith("pct."):
        share = (whole(form, name).get("pct") or {}).get(key.removeprefix("pct."))
        return "" if share is None else number_text(share)
    x = given(form, name).get(key)
    return "" if x is None else number_text(x)


def blank_text(form: Form, name: str, key: str) -> str | None:
    """What a blank field stands for, to be shown in it; None where it stands for nothing."""
    rest = {k: x for k, x in given(form, name).items() if k != key}
    x = override_fields(library_fields().get(name, {}), rest).get(key)
    if x is None:
        return material_fields()[key].default or None
    return number_text(x)


def take_number(form: Form, name: str, key: str, text: str) -> None:
    """Take a typed number into the form, or keep the text with what is wrong with it."""
    if text.strip() == shown_text(form, name, key).strip():
        return
    place = place_of(name, key)
    species = key.removeprefix("pct.") if key.startswith("pct.") else ""
    row = SHARE if species else material_fields()[key]
    fault = number_fault(row, text) if text.strip() else None
    if fault:
        form.wrong[place] = text, fault
        return
    form.wrong.pop(place, None)
    x = parse_number(text) if text.strip() else None
    if species:
        shares = dict(whole(form, name).get("pct") or {})
        shares[species] = 0.0 if x is None else x
        set_analysis(form, name, shares)
        return
    new = dict(given(form, name))
    new.pop(key, None)
    if x is not None:
        new[key] = x
    _put(form, name, new)


def set_analysis(form: Form, name: str, shares: Mapping[str, float]) -> None:
    """Give a material another analysis; what else makes up its composition stays as it is."""
    kept = {key: x for key, x in whole(form, name).items() if key in COMPOSITION}
    _put(form, name, {**given(form, name), **kept, "pct": dict(shares)})


def set_species(form: Form, name: str, chosen: list[str]) -> None:
    """The species that the analysis names; a new one starts at 0."""
    shares = whole(form, name).get("pct") or {}
    if list(shares) == chosen:
        return
    for species in set(shares) - set(chosen):
        form.wrong.pop(place_of(name, f"pct.{species}"), None)
    set_analysis(form, name, {species: shares.get(species, 0.0) for species in chosen})


def set_text(form: Form, name: str, key: str, text: str) -> None:
    """A text of a material: its kind, the species that fills up the analysis, what it is."""
    if text == str(whole(form, name).get(key, material_fields()[key].default)):
        return
    _put(form, name, {**given(form, name), key: text})


def _put(form: Form, name: str, fields: dict[str, Any]) -> None:
    table = own_materials(form)
    if fields or name not in library_fields():
        table[name] = fields
    else:
        table.pop(name, None)
    if not table:
        del form.rest["materials"]


def faults_of(form: Form, name: str) -> list[Fault]:
    """What is wrong with a material: its fields, or all of them together."""
    start = place_of(name, "")
    faults = [Fault(p, text) for p, (_, text) in form.wrong.items() if p.startswith(start)]
    if faults:
        return faults
    try:
        compile_material(name, whole(form, name))
    except InputError as error:
        return error.faults
    return []


def notes_of(form: Form, name: str) -> list[str]:
    """What is done to a material that is right but for rounding, one sentence each."""
    try:
        return list(compile_material(name, whole(form, name)).warnings)
    except InputError:
        return []


def name_from(text: str) -> str:
    """A name as the files write it, from words."""
    return re.sub(r"[\s-]+", "_", text.strip()).lower()


def add_material(form: Form, text: str, like: str) -> str:
    """Add a material of one's own that starts as a copy of another; gives its name.

    Raises InputError where the name will not do.
    """
    name, known = name_from(text), form.materials()
    message = ""
    if not name:
        message = "give the new material a name first"
    elif not (name.isidentifier() and name.isascii() and len(name) <= 40):
        message = f"{text.strip()[:40]!r} is no name; use at most 40 letters, digits and spaces"
    elif name in known:
        message = f"{name.replace('_', ' ')} is there already; choose it above to change it"
    elif f"{name}_kg" in parameters():
        message = f"{name}_kg is a field of its own; choose another name"
    elif len(form.rest.get("materials", {})) >= MOST_MATERIALS:
        message = f"a shop has at most {MOST_MATERIALS} materials of its own here"
    if message:
        raise InputError([Fault("new material", message)])
    fields = whole(form, like)
    left_out = ("price_per_t", "stock_kg", "source", "description")
    own_materials(form)[name] = {k: x for k, x in fields.items() if k not in left_out}
    own_materials(form)[name]["source"] = f"as {like} at first, then changed by hand"
    return name


def uses_of(form: Form, name: str) -> list[str]:
    """Where a heat uses a material: roles, mix, order, given mass."""
    roles = {"lime": "lime", "magnesia_flux": "magnesia flux", "coolant": "coolant", "fuel": "fuel"}
    found = [shown for role, shown in roles.items() if form.fields.get(role) == name]
    found += ["scrap order"] if name in form.order else []
    found += ["scrap mix"] if not form.order and name in form.mix else []
    found += ["masses that are given"] if form.fields.get(f"{name}_kg", "").strip() else []
    return found


def take_back(form: Form, name: str) -> str:
    """Back to the library's material, or one's own removed; gives a sentence that says so.

    Raises InputError where a material that would be gone is in use.
    """
    shown = name.replace("_", " ")
    in_library = name in library_fields()
    uses = uses_of(form, name)
    if not in_library and uses:
        message = f"is in use ({', '.join(uses)}); take it out there first"
        raise InputError([Fault(shown, message)])
    table = own_materials(form)
    table.pop(name, None)
    if not table:
        del form.rest["materials"]
    for place in [p for p in form.wrong if p.startswith(place_of(name, ""))]:
        del form.wrong[place]
    return f"{shown} is as in the library again." if in_library else f"{shown} was removed."


def range_of(key: str) -> str:
    """Help of a field: what it is and its range."""
    if key.startswith("pct."):
        return f"{range_text(SHARE)} of the dry, clean material."
    row = material_fields()[key]
    return f"{row.description}. {range_text(row)}."
