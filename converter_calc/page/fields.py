"""Fields that people type into: numbers, names, choices; each seeded from the form."""

from __future__ import annotations

from collections.abc import Iterable

import streamlit as st

from converter_calc.page.markup import note, put
from converter_calc.page.numbers import field_fault, help_of, label_of, row_of
from converter_calc.page.session import form, key_of

FIELD_PX, SMALL_PX, WIDE_PX = 136, 70, 288


def number_fields(names: Iterable[str], width: int = FIELD_PX) -> None:
    """Fields for numbers in rows that wrap; under them what is wrong with any."""
    f, faults, state, start = form(), [], st.session_state, key_of("")
    with st.container(horizontal=True):
        for name in names:
            key, row = start + name, row_of(name)
            state.setdefault(key, f.fields.get(name, ""))
            text = st.text_input(
                label_of(name), key=key, help=help_of(name) if width > SMALL_PX else None,
                placeholder=f"{row.default} if blank" if row.default else None, width=width,
            )  # fmt: skip
            f.fields[name] = text or ""
            fault = field_fault(name, text) if text and text.strip() else None
            if fault:
                faults.append(f"{label_of(name)}: {fault}")
    if faults:
        put(note("fault", "Not taken, and nothing put in its place:", faults))


def text_field(name: str, label: str) -> None:
    """A field for a name; any text will do."""
    f, key = form(), key_of(name)
    st.session_state.setdefault(key, f.fields.get(name, ""))
    f.fields[name] = st.text_input(label, key=key, max_chars=60, width=FIELD_PX) or ""


def choice_field(name: str, label: str, options: list[str], width: int = WIDE_PX) -> None:
    """A choice among names; one that is not at hand any more is kept and named wrong."""
    f, key = form(), key_of(name)
    given = f.fields.get(name, "") or row_of(name).default
    if given not in options:
        options = [given, *options]
    st.session_state.setdefault(key, given)
    f.fields[name] = st.selectbox(
        label, options, key=key, width=width, format_func=lambda x: plain_name(x) or "none"
    )


def plain_name(name: str) -> str:
    """A name as words."""
    return name.replace("_", " ")
