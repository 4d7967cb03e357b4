"""What stands in the fields of the page, and the heat document that it makes.

Fields hold texts as typed; a wrong one stays as it is and is named, nothing is put in its
place.
"""

from __future__ import annotations

import copy
from collections.abc import Mapping
from dataclasses import dataclass, field
from typing import Any

from converter_calc.balance.checks import check_document
from converter_calc.balance.materials import library_fields
from converter_calc.balance.schema import (
    is_element_column,
    nearest,
    parameters,
)
from converter_calc.basis.errors import Fault, InputError
from converter_calc.page.numbers import field_fault, number_text, parse_number, row_of

#: Question -> what it is called; the first is the usual one.
QUESTIONS = {
    "scrap": "Hot metal is given: find scrap",
    "steel": "Tapped steel is given: find hot metal and scrap",
    "trim": "Scrap is given: find coolant or fuel",
    "predict": "The whole recipe is given: find the end point",
}
#: Fields that a question leaves out, because it solves for them or has no use for them.
LEFT_OUT = {
    "scrap": {"aim_steel_kg", "scrap_kg", "scrap_share_pct", "oxygen_Nm3"},
    "steel": {"hot_metal_kg", "scrap_kg", "scrap_share_pct", "oxygen_Nm3"},
    "trim": {"oxygen_Nm3"},
    "predict": {"aim_steel_kg"},
}
#: Sections that belong to the heat; all others are those of a shop file.
HEAT_SECTIONS = ("heat_id", "why", "shop", "hot_metal", "aim", "charge", "pin")
#: Tables that have no fields of their own; they are carried along as they came.
CARRIED = tuple(
    row.name for row in parameters().values() if row.kind == "table" and not row.section
)
TEXTS = ("heat_id", "why", "name")


@dataclass
class Form:
    """All fields.

    question : a key of QUESTIONS. fields : flat name -> text; names as in the parameter
    table, `hm_<El>_pct` and `<material>_kg`. mix : scrap -> share as text. order : scraps by
    preference; in use where it is not empty. rest : tables without fields, and the materials
    of the shop. wrong : place of a material's field -> text as typed and what is wrong with it.
    """

    question: str = "scrap"
    fields: dict[str, str] = field(default_factory=dict)
    mix: dict[str, str] = field(default_factory=dict)
    order: list[str] = field(default_factory=list)
    rest: dict[str, Any] = field(default_factory=dict)
    wrong: dict[str, tuple[str, str]] = field(default_factory=dict)

    def copy(self) -> Form:
        """A copy that shares nothing that changes."""
        return copy.deepcopy(self)

    def materials(self, *kinds: str) -> list[str]:
        """Names of the materials at hand of some kinds, those of the shop included."""
        kinds_of = {name: fields.get("kind", "other") for name, fields in library_fields().items()}
        own = self.rest.get("materials", {})
        for name, fields in own.items():
            if isinstance(fields, Mapping) and (name not in kinds_of or "kind" in fields):
                kinds_of[name] = str(fields.get("kind", "other"))
        return sorted(name for name, kind in kinds_of.items() if not kinds or kind in kinds)


def form_of(document: Mapping[str, Any]) -> Form:
    """The fields that a whole document (shop laid under it) fills.

    Raises InputError with every fault of the document.
    """
    faults: list[Fault] = []
    givens = check_document({k: v for k, v in document.items() if k != "shop"}, faults)
    if faults:
        raise InputError(faults)
    form = Form()
    form.fields = {name: number_text(x) for name, x in givens.numbers.items()}
    form.fields |= {f"hm_{el}_pct": number_text(x) for el, x in givens.elements.items()}
    form.fields |= {f"{name}_kg": number_text(kg) for name, kg in givens.masses_kg.items()}
    form.fields |= {
        name: text for name, text in givens.texts.items() if name not in ("shop", "ask")
    }
    form.order = list(givens.scrap_order)
    form.mix = {} if form.order else {
        name: number_text(share) for name, share in givens.shares.get("scrap_mix", {}).items()
    }  # fmt: skip
    form.rest = {key: copy.deepcopy(dict(document[key])) for key in CARRIED if key in document}
    if "dust_pct" in givens.shares:
        form.rest["dust_pct"] = givens.shares["dust_pct"]
    form.question = _question(form, givens.texts.get("ask"))
    return form


def _question(form: Form, ask: str | None) -> str:
    """The question that a document poses, where it does not say."""
    if ask is None and form.fields.get("oxygen_Nm3"):
        return "predict"
    if ask in QUESTIONS:
        return str(ask)
    scraps = {f"{name}_kg" for name in form.materials("scrap")} | {"scrap_kg", "scrap_share_pct"}
    if scraps & form.fields.keys():
        return "trim"
    return "steel" if "aim_steel_kg" in form.fields else "scrap"


def document_of(form: Form) -> dict[str, Any]:
    """The heat document that the fields make, complete on its own.

    Raises InputError naming every field whose text is no number or out of its range.
    """
    document: dict[str, Any] = {}
    faults: list[Fault] = []
    for name in _fields_in_use(form):
        row, value = row_of(name), _value(name, form.fields[name], faults)
        if value is not None and row.section:
            document.setdefault(row.section, {})[row.key] = value
        elif value is not None:
            document[row.key] = value
    choice = document.setdefault("choice", {})
    if form.question != "predict":
        choice["ask"] = form.question
    _put_scraps(form, choice, faults)
    for key, table in form.rest.items():
        if key == "dust_pct":
            document.setdefault("practice", {})[key] = dict(table)
        else:
            document[key] = copy.deepcopy(table)
    faults += [Fault(place, message) for place, (_, message) in form.wrong.items()]
    if faults:
        raise InputError(faults)
    return document


def _fields_in_use(form: Form) -> list[str]:
    """Filled fields that the question uses; masses of materials that are gone are left out."""
    left_out = LEFT_OUT[form.question] | {"ask"}
    if form.question == "trim" and form.fields.get("hot_metal_kg"):
        left_out = left_out | {"aim_steel_kg"}
    known = {f"{name}_kg" for name in form.materials()}
    return [
        name
        for name, text in form.fields.items()
        if text.strip()
        and name not in left_out
        and (name in parameters() or is_element_column(name) or name in known)
    ]


def _value(name: str, text: str, faults: list[Fault]) -> Any:
    """A field as number or text; None, and a fault more, where it is wrong."""
    if row_of(name).kind != "number":
        return text.strip()
    fault = field_fault(name, text)
    if fault is None:
        return parse_number(text)
    faults.append(Fault(row_of(name).place, fault))
    return None


def _put_scraps(form: Form, choice: dict[str, Any], faults: list[Fault]) -> None:
    if form.order:
        choice["scrap_order"] = list(form.order)
        return
    mix = {}
    for name, text in form.mix.items():
        if not text.strip():
            continue
        place = f"choice.scrap_mix.{name}"
        try:
            share = parse_number(text)
        except ValueError as error:
            faults.append(Fault(place, str(error)))
            continue
        if share < 0.0:
            faults.append(Fault(place, "a share cannot be less than 0"))
        elif share > 0.0:
            mix[name] = share
    if mix:
        choice["scrap_mix"] = mix


def shop_part(document: Mapping[str, Any]) -> dict[str, Any]:
    """The sections of a document that a shop file holds; the question is the heat's."""
    shop = {key: copy.deepcopy(x) for key, x in document.items() if key not in HEAT_SECTIONS}
    shop.get("choice", {}).pop("ask", None)
    return shop


def heat_part(document: Mapping[str, Any]) -> dict[str, Any]:
    """The sections of a document that are the heat's own."""
    heat = {key: copy.deepcopy(x) for key, x in document.items() if key in HEAT_SECTIONS}
    if "ask" in document.get("choice", {}):
        heat["choice"] = {"ask": document["choice"]["ask"]}
    return heat


def known_field(name: str, form: Form) -> str | None:
    """None for a field of the form, else what is wrong with the name."""
    materials = [f"{material}_kg" for material in form.materials()]
    if name in parameters():
        return None if row_of(name).kind in ("number", "text") else "has no field"
    if is_element_column(name) or name in materials:
        return None
    return "unknown" + nearest(name, [*parameters(), *materials])
