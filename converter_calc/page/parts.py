"""Parts that several views share: what is shown of a view, why a number is so, tables to save."""

from __future__ import annotations

import math
from collections.abc import Callable, Iterable, Mapping, Sequence
from functools import partial
from typing import TYPE_CHECKING, Any

import streamlit as st

from converter_calc.page.fields import WIDE_PX
from converter_calc.page.markup import fault_texts, heading, note, put, table_html
from converter_calc.page.results import term_rows
from converter_calc.page.session import Answer, form, view_choice
from converter_calc.planning.explain import Explanation, Term, number
from converter_calc.reporting.exports import csv_text, xlsx_bytes
from converter_calc.reporting.html_sheet import Markup, element

if TYPE_CHECKING:
    import pandas as pd

XLSX = "application/vnd.openxmlformats-officedocument.spreadsheetml.sheet"
CAUTION = "A calculation, not an instruction: the shop's own practice and its engineers decide."
#: Units as they are shown.
UNITS = {"Nm3": "Nm³", "C": "°C", "mass %": "%", "kg/t steel": "kg/t",
         "currency/t steel": "currency/t"}  # fmt: skip


def part_of(view: str, parts: Mapping[str, str]) -> str:
    """The part of a view that is shown; the others are neither built nor worked out.

    parts : name in the address -> words. The view keeps "part" in the address.
    """
    draw = partial(st.radio, horizontal=True)
    return view_choice(view, "part", "Shown", list(parts), draw, format_func=parts.__getitem__)


def right_heat(found: Answer, *, planned: bool) -> bool:
    """Whether the fields make a heat (and a plan is asked); else it is told what is missing."""
    if found.heats is None:
        put(note("fault", "The heat is not right yet; see Plan a heat.", fault_texts(found.faults)))
        return False
    if planned and form().question == "predict":
        put(note("note", "This belongs to planning: choose another question under Plan a heat."))
        return False
    return True


def why(
    view: str, options: Mapping[str, Callable[[], Explanation]], label: str = "Why this number"
) -> None:
    """A choice among figures, and the terms, law and source behind the one chosen."""
    key = "why_" + view
    if st.session_state.get(key) not in options:
        st.session_state[key] = None
    name = st.selectbox(label, list(options), key=key, index=None, width=2 * WIDE_PX,
                        placeholder="Choose a figure to see what stands behind it")  # fmt: skip
    if name is not None:
        put(explanation_html(name, options[name]()))


def explanation_html(name: str, found: Explanation) -> Markup:
    """An explanation as a heading, a sentence and a table of its terms."""
    value = ""
    if math.isfinite(found.value):
        value = f": {number(found.value)} {shown_unit(found.unit)}".rstrip()
    return element("div", heading(name + value), element("p", found.reason),
                   terms_html(name, found.terms))  # fmt: skip


def terms_html(name: str, terms: Iterable[Term]) -> Markup:
    """Terms as a table; the column of sources only where there are any."""
    rows = term_rows((t.label, t.value, shown_unit(t.unit), t.source) for t in terms)
    if not rows:
        return Markup("")
    headings: tuple[str, ...] = ("term", "value", "unit", "source")
    if not any(row[3] for row in rows):
        rows, headings = [row[:3] for row in rows], headings[:3]
    return table_html(name, headings, rows, numeric={1})


def shown_unit(unit: str) -> str:
    """A unit as it is printed."""
    return UNITS.get(unit, unit)


def cell(x: Any, digits: int, sign: str = "") -> str:
    """A number of a table; a dash where there is none. sign "+" writes the sign of both sides."""
    value = float(x)
    if not math.isfinite(value):
        return "–"
    shown = round(value, digits) + 0.0  # no "-0"
    return f"{shown:{sign if shown else ''},.{digits}f}"


def save_tables(view: str, sheets: Mapping[str, pd.DataFrame], names: Sequence[str] = ()) -> None:
    """Buttons that save tables: all as a workbook, those named (else the first) as CSV."""
    with st.container(horizontal=True):
        for name in names or list(sheets)[:1]:
            st.download_button(f"{name.capitalize()} (CSV)", csv_text(sheets[name]),
                               f"{view}_{name.replace(' ', '_')}.csv", "text/csv",
                               key=f"csv_{view}_{name}", on_click="ignore")  # fmt: skip
        # what runs after the click has no session: everything it needs is bound here
        st.download_button("All tables (XLSX)", partial(xlsx_bytes, dict(sheets)), f"{view}.xlsx",
                           XLSX, key=f"xlsx_{view}", on_click="ignore")  # fmt: skip
