"""Fields of the tap: what the shop puts in place of the usual practice, in the table `tap`."""

from __future__ import annotations

from collections.abc import Iterable
from functools import cache
from typing import Any

import streamlit as st

from converter_calc.balance.schema import Parameter
from converter_calc.data.tables import read_csv_rows
from converter_calc.page.fields import WIDE_PX
from converter_calc.page.form import Form
from converter_calc.page.markup import note, put
from converter_calc.page.numbers import number_fault, number_text, parse_number, unit_of
from converter_calc.page.session import form, key_of
from converter_calc.tapping.tap_practice import ladles

LABELS = {
    "ladle_temp_C": "Wanted in the ladle",
    "carried_slag_kg_per_t": "Slag carried over",
    "tap_min": "Tap",
    "standing_min": "From tap to ladle station",
    "soluble_Al_pct": "Dissolved aluminium aimed at",
    "margin_C_pct": "Carbon kept below its limit",
    "margin_P_pct": "Phosphorus kept below its limit",
    "P_return_share": "Phosphorus given back, share",
    "stream_K_per_min": "Loss while tapping",
    "standing_K_per_min": "Loss while standing",
    "air_oxygen_kg_per_t": "Oxygen from the air",
    "Al_burnt_share": "Aluminium burnt, share",
}
UNITS = {"kg/t of tapped steel": "kg/t", "mass %": "%", "share": "", "C": "°C"}
FIRST = ("ladle_temp_C", "carried_slag_kg_per_t", "tap_min", "standing_min")
MORE = tuple(name for name in LABELS if name not in FIRST)
CHOICES = {
    "aim_at": ("Additions aim at", {"middle": "the middle of the range",
                                    "minimum": "the minimum of the range"}),
    "ladle": ("Ladle", {name: f"{name}, lining about {C:.0f} °C" for name, C in ladles().items()}),
    "kill": ("Killed with", {"": "as the grade asks", "Al": "aluminium", "Si": "silicon",
                             "none": "nothing"}),
}  # fmt: skip
PRICES = "price_per_t"
FIELD_PX = 170


@cache
def tap_row(name: str) -> Parameter:
    """A number of the tap practice, or the price of an addition, as a row of the schema."""
    group, key = ("number", name)
    if name.startswith(PRICES + "."):
        group, key = PRICES, ""
    row = next(row for row in read_csv_rows("tap_practice.csv")
               if row["group"] == group and key in ("", row["name"]))  # fmt: skip
    unit = UNITS.get(row["unit"], row["unit"])
    return Parameter(name, "tap", name, "number", unit, row["value"], float(row["min"]),
                     float(row["max"]), (), row["description"], row["source"])  # fmt: skip


def place_of(name: str) -> str:
    """Place of a field in the heat file."""
    return f"tap.{name}"


def tap_table(f: Form) -> dict[str, Any]:
    """What the shop gives of the tap."""
    found: dict[str, Any] = dict(f.rest.get("tap", {}))
    return found


def shown_text(f: Form, name: str) -> str:
    """What stands in the field: the text as typed where it is wrong, else the shop's number."""
    if place_of(name) in f.wrong:
        return f.wrong[place_of(name)][0]
    table, _, key = name.partition(".")
    x = tap_table(f).get(table)
    if key:
        x = (x or {}).get(key)
    return number_text(x) if isinstance(x, int | float) else ""


def take_number(f: Form, name: str, text: str) -> None:
    """Take a typed number into the table of the tap, or keep the text with what is wrong."""
    if text.strip() == shown_text(f, name).strip():
        return
    fault = number_fault(tap_row(name), text) if text.strip() else None
    if fault:
        f.wrong[place_of(name)] = text, fault
        return
    f.wrong.pop(place_of(name), None)
    put_value(f, name, parse_number(text) if text.strip() else None)


def put_value(f: Form, name: str, x: Any) -> None:
    """Set a value of the table of the tap; None takes it out, the default stands then."""
    new = tap_table(f)
    table, _, key = name.partition(".")
    if key:
        inner = dict(new.get(table, {}))
        inner.pop(key, None)
        if x is not None:
            inner[key] = x
        x, name = inner or None, table
    new.pop(name, None)
    if x is not None:
        new[name] = x
    if new:
        f.rest["tap"] = new
    else:
        f.rest.pop("tap", None)


def tap_numbers(names: Iterable[str], labels: dict[str, str] | None = None) -> None:
    """Fields for numbers in rows that wrap; under them what is wrong with any."""
    f, faults = form(), []
    with st.container(horizontal=True):
        for name in names:
            row, key = tap_row(name), key_of("tap." + name)
            label = (labels or LABELS)[name]
            unit = unit_of(row)
            st.session_state.setdefault(key, shown_text(f, name))
            text = st.text_input(
                f"{label}, {unit}" if unit else label, key=key, width=FIELD_PX,
                help=f"{row.description.capitalize()}. {row.low:g} to {row.high:g} {unit}.",
                placeholder=f"{row.default} if blank" if row.default else None,
            )  # fmt: skip
            take_number(f, name, text or "")
            if place_of(name) in f.wrong:
                faults.append(f"{label}: {f.wrong[place_of(name)][1]}")
    if faults:
        put(note("fault", "Not taken, and nothing put in its place:", faults))


def tap_choices() -> None:
    """Choices of the tap by name."""
    f = form()
    with st.container(horizontal=True):
        for name, (label, options) in CHOICES.items():
            key, names = key_of("tap." + name), list(options)
            given = tap_table(f).get(name)
            first = "hot" if name == "ladle" else names[0]
            st.session_state.setdefault(key, given if given in options else first)
            chosen = st.selectbox(label, names, key=key, width=WIDE_PX - 40,
                                  format_func=options.__getitem__)  # fmt: skip
            if chosen != (given if given is not None else first):
                put_value(f, name, None if chosen == first else chosen)
