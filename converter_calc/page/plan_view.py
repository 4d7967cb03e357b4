"""Plan a heat: fields on the left, recipe on the right; a change redraws only this."""

from __future__ import annotations

import streamlit as st

from converter_calc.page.fields import WIDE_PX
from converter_calc.page.inputs import all_fields, question_choice
from converter_calc.page.markup import heading, put, rows_of, table_html
from converter_calc.page.reasons import figures, reason_for
from converter_calc.page.results import amount, shown_answer, term_rows
from converter_calc.page.session import Answer, answer, form, guarded, write_address
from converter_calc.page.sureness import sureness
from converter_calc.planning.outcome import Outcome
from converter_calc.reporting import tables
from converter_calc.reporting.html_sheet import element

#: Key of the figure whose explanation is shown.
WHY = "why_figure"


def plan_view() -> None:
    """The whole view, in one fragment so that the rest of the page is not built anew."""
    _plan_fragment()


@st.fragment
def _plan_fragment() -> None:
    guarded(_plan)


def _plan() -> None:
    question_choice()
    left, right = st.columns([9, 11], gap="large")
    with left:
        all_fields()
    found = answer()
    if found.outcome is not None and form().question != "predict":
        st.session_state["cc_planned"] = found.outcome
    with right:
        put(shown_answer(found))
        if found.outcome is not None:
            _reasons(found.outcome)
        unsure = st.container()
        _inputs_used(found)
    write_address()
    if st.session_state.get("cc_address_too_long"):
        put("This heat is too long for an address; save it under Files to keep or share it.")
    with unsure:  # last, so that the recipe does not wait for it
        sureness()


def _reasons(outcome: Outcome) -> None:
    """One figure at a time: to build all explanations would cost more than the plan."""
    known = {figure.name: figure for figure in figures(outcome)}
    if st.session_state.get(WHY) not in known:  # another heat may charge other materials
        st.session_state[WHY] = None
    name = st.selectbox(
        "Why this number", list(known), key=WHY, index=None, width=WIDE_PX,
        placeholder="Choose a figure of the recipe",
    )  # fmt: skip
    if name is None:
        return
    figure = known[name]
    digits = 4 if figure.unit == "%" else None
    reason = reason_for(outcome, figure)
    rows = term_rows((t.label, t.value, t.unit, t.source) for t in reason.terms)
    headings: tuple[str, ...] = ("term", "value", "unit", "source")
    if not any(row[3] for row in rows):
        rows, headings = [row[:3] for row in rows], headings[:3]
    put(
        heading(f"{figure.name}: {amount(figure.value, digits)} {figure.unit}"),
        element("p", reason.reason),
        table_html(figure.name, headings, rows, numeric={1}) if rows else "",
    )


def _inputs_used(found: Answer) -> None:
    if found.heats is None:
        return
    opened = st.expander("Inputs used", key="inputs_used", on_change="rerun")
    if opened.open:
        with opened:
            table = tables.inputs_table(found.heats)
            rows = [
                (row.field, f"{row.value:.6g}" if isinstance(row.value, float) else row.value,
                 row.unit, row.description)
                for row in rows_of(table)
            ]  # fmt: skip
            put(
                table_html(
                    "inputs used", ("field", "value", "unit", "what it is"), rows, numeric={1}
                )
            )
