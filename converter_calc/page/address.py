"""The state of the page in its address: what differs from the starting heat.

Numbers and choices stand in it readably, by flat name. Tables (materials of the shop, own
grades) are packed as zlib-compressed JSON in base64url (RFC 1950, RFC 4648). What is set in a
view, as the ends of an axis, stands in it as `<view>.<field>`.
"""

from __future__ import annotations

import base64
import binascii
import json
import zlib
from collections.abc import Iterable, Mapping

from converter_calc.balance.checks import check_document
from converter_calc.balance.documents import check_depth
from converter_calc.balance.schema import parameters
from converter_calc.basis.errors import Fault, InputError
from converter_calc.page.form import CARRIED, QUESTIONS, Form, document_of, known_field
from converter_calc.page.numbers import field_fault, parse_number, row_of

#: Names in the address beside the fields.
QUESTION, MIX, ORDER, TABLES, VIEW = "question", "scrap_mix", "scrap_order", "tables", "view"
#: A longer address is cut by proxies and by chat programs; then a file carries the heat.
MOST_SIGNS = 6000
MOST_UNPACKED_BYTES = 400_000
MOST_TEXT = 300
#: Fields of the views that have a place in the address; each view names its own.
_VIEW_FIELDS: set[str] = set()


def keep_in_address(view: str, fields: Iterable[str]) -> None:
    """Give fields of a view a place in the address, as `<view>.<field>`."""
    _VIEW_FIELDS.update(f"{view}.{name}" for name in fields)


def view_texts(params: Mapping[str, str]) -> dict[str, str]:
    """Fields of views in an address, by `<view>.<field>`; the view says what is wrong with one."""
    return {k: text[:MOST_TEXT] for k, text in params.items() if k in _VIEW_FIELDS and text}


def address_of(form: Form, start: Form) -> dict[str, str]:
    """Query parameters that lead from the starting form to this one."""
    found: dict[str, str] = {}
    if form.question != start.question:
        found[QUESTION] = form.question
    for name in {**start.fields, **form.fields}:
        here, there = form.fields.get(name, "").strip(), start.fields.get(name, "").strip()
        if here != there:
            found[name] = here
    if form.order != start.order:
        found[ORDER] = ",".join(form.order)
    if form.mix != start.mix and not form.order:
        found[MIX] = ",".join(f"{name}:{share}" for name, share in form.mix.items())
    if form.rest != start.rest:
        found[TABLES] = _packed(form.rest)
    return found


def too_long(found: Mapping[str, str]) -> bool:
    """Whether the address would be too long to share."""
    return sum(len(key) + len(text) + 2 for key, text in found.items()) > MOST_SIGNS


def form_from(params: Mapping[str, str], start: Form) -> tuple[Form, list[Fault]]:
    """The form of an address, and what in it was not taken: each parameter and why."""
    form, faults = start.copy(), []
    if TABLES in params:
        try:
            form.rest = _unpacked(params[TABLES])
        except InputError as error:
            faults += [Fault(TABLES, f.line()) for f in error.faults]
    for name, text in params.items():
        if name in (TABLES, VIEW) or name in _VIEW_FIELDS:
            continue
        reason = _take(form, name, text)
        if reason:
            faults.append(Fault(name, reason))
    return form, faults


def _take(form: Form, name: str, text: str) -> str | None:
    """Take one parameter into the form; the reason where it is refused."""
    if len(text) > MOST_TEXT and name != MIX:
        return "is too long"
    if name == QUESTION:
        if text not in QUESTIONS:
            return f"must be one of {', '.join(QUESTIONS)}"
        form.question = text
        return None
    if name in (ORDER, MIX):
        take = _take_order if name == ORDER else _take_mix
        return take(form, text, form.materials("scrap"))
    reason = known_field(name, form) or (_field_reason(form, name, text) if text.strip() else None)
    if reason is None:
        form.fields[name] = text
    return reason


def _field_reason(form: Form, name: str, text: str) -> str | None:
    """What the planner would have against a filled field, or None."""
    row = row_of(name)
    if row.kind == "number":
        return field_fault(name, text)
    trial = form.copy()
    trial.fields = {name: text}
    found: list[Fault] = []
    check_document(document_of(trial), found)
    return next((fault.message for fault in found if fault.field == row.place), None)


def _take_order(form: Form, text: str, scraps: list[str]) -> str | None:
    names = [part for part in text.split(",") if part]
    strange = [part for part in names if part not in scraps]
    if strange:
        return f"{strange[0][:40]!r} is no scrap of the shop"
    form.order = names
    return None


def _take_mix(form: Form, text: str, scraps: list[str]) -> str | None:
    mix = {}
    for part in text.split(","):
        name, _, share = part.partition(":")
        if not part:
            continue
        if name not in scraps:
            return f"{name[:40]!r} is no scrap of the shop"
        try:
            if parse_number(share) < 0.0:
                return f"the share of {name} is less than 0"
        except ValueError as error:
            return str(error)
        mix[name] = share
    form.mix, form.order = mix, []
    return None


def _packed(rest: Mapping[str, object]) -> str:
    text = json.dumps(rest, separators=(",", ":"), ensure_ascii=False).encode()
    return base64.urlsafe_b64encode(zlib.compress(text, 9)).decode().rstrip("=")


def _unpacked(text: str) -> dict[str, object]:
    """Tables of an address. Raises InputError where they are broken, too large or wrong."""
    try:
        raw = base64.urlsafe_b64decode(text + "=" * (-len(text) % 4))
        unzip = zlib.decompressobj()
        content = unzip.decompress(raw, MOST_UNPACKED_BYTES)
        if not unzip.eof:
            raise InputError([Fault(TABLES, "are too large or cut off")])
        rest = json.loads(content)
    except (ValueError, binascii.Error, zlib.error, RecursionError) as error:
        raise InputError([Fault(TABLES, "cannot be read; the address may be cut off")]) from error
    if not isinstance(rest, dict) or not set(rest) <= {*CARRIED, "dust_pct"}:
        raise InputError([Fault(TABLES, "are not those of a heat")])
    check_depth(rest)
    document = {key: x for key, x in rest.items() if key != "dust_pct"}
    if "dust_pct" in rest:
        document["practice"] = {parameters()["dust_pct"].key: rest["dust_pct"]}
    faults: list[Fault] = []
    check_document(document, faults)
    if faults:
        raise InputError(faults)
    return rest
