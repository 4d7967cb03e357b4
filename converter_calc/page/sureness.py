"""How sure is this plan: bands and chances beside the recipe, and the margin to plan with."""

from __future__ import annotations

import math
from typing import Any

import streamlit as st

from converter_calc.basis.errors import Fault, InputError
from converter_calc.learning.errors_of_inputs import known_errors
from converter_calc.learning.spread import Spread, spread
from converter_calc.learning.spread_margin import LEVERS, Margin, check_probability, margin
from converter_calc.page.address import keep_in_address
from converter_calc.page.fields import FIELD_PX
from converter_calc.page.form import Form
from converter_calc.page.learnt import Learnt
from converter_calc.page.markup import heading, note, put, table_html
from converter_calc.page.numbers import number_fault, number_text, parse_number
from converter_calc.page.session import (
    Answer,
    answer,
    form,
    guarded,
    kept,
    key_of,
    replace_form,
    view_field,
    write_address,
)
from converter_calc.reporting import spread_bands as bands
from converter_calc.reporting.spread_text import CAUTION

#: Draws on the page; few, so that the plan never waits for them.
DRAWS, MARGIN_DRAWS = 2048, 4096
#: Digits that a moved aim is written with.
AIM_DIGITS = {"aim_temp_C": 1, "aim_C_pct": 4, "aim_P_pct": 5}
#: Aim -> its window below and above, as fields.
WINDOWS = {
    "aim_temp_C": ("window_temp_below_C", "window_temp_above_C"),
    "aim_C_pct": ("window_below_C_pct", "window_above_C_pct"),
    "aim_P_pct": (None, "window_above_P_pct"),
}
keep_in_address("spread", ("probability",))


def sureness() -> None:
    """The part that opens; nothing is drawn or worked out while it is shut."""
    _sureness_fragment()


@st.fragment
def _sureness_fragment() -> None:
    guarded(_sureness)


def _sureness() -> None:
    if st.session_state.pop("cc_redraw", False):
        st.rerun()  # fields outside this fragment were changed
    opened = st.expander("How sure is this plan", key="sureness", on_change="rerun")
    if not opened.open:
        return
    with opened:
        found = answer()
        if found.outcome is None:
            put("The plan has no answer as it stands, so there is nothing to be sure of.")
            return
        extra = _learnt_extra()
        _shown(_spread(found, extra, shares=False), learnt=extra is not None)
        if form().question != "predict":
            _margin(found, extra)
        _scatter(found, extra)
        _errors()


def _spread(found: Answer, extra: Any, *, shares: bool) -> Spread:
    """The spread of the plan; what makes it costs as much again, so only where it is shown."""

    def make() -> Spread:
        return spread(found.outcome, DRAWS, needs=False, extra=extra, shares=shares)

    scatter: Spread = kept("spread", found, (shares, _key(extra)), make)
    return scatter


def _learnt_extra() -> Any:
    learnt: Learnt | None = st.session_state.get("cc_learnt")
    return None if learnt is None else learnt.unsure(form())


def _key(extra: Any) -> Any:
    return None if extra is None else (extra[0], extra[1].tobytes())


def _shown(scatter: Spread, *, learnt: bool) -> None:
    put(
        bands.joined_bands(scatter),
        "Frame: what counts as hit. Band: 90 % of heats, thicker: half of them; line: the middle. "
        f"{scatter.draws.solved.size:,} draws of what is true beside what is read.",
    )
    if learnt:
        source = st.session_state["cc_learnt"].source
        put(f"The uncertainty of the parameters from {source} is in it.")
    if scatter.unsolved:
        put(note("note", f"{scatter.unsolved} draws have no end point and count as missed."))
    put(note("note", " ".join(CAUTION)))


def _scatter(found: Answer, extra: Any) -> None:
    """What makes the scatter, and all numbers; worked out once opened."""
    title = "What makes the scatter, and what a better measurement is worth"
    opened = st.expander(title, key="spread_scatter", on_change="rerun")
    if not opened.open:
        return
    with opened:
        scatter = _spread(found, extra, shares=True)
        headings, rows = bands.scatter_rows(scatter)
        if rows:
            put(
                heading("What makes the scatter"),
                "Share of the variance; what is correlated stands in one row.",
                table_html("what makes the scatter", headings, rows),
            )
        rows = bands.worth_rows(scatter)
        if rows:
            put(
                heading("What a better measurement is worth"),
                "Gain in the chance of all together, percentage points.",
                table_html("worth of better measurements",
                           ("error of", "now, sd", "halved", "gone"), rows),
            )  # fmt: skip
        _numbers(scatter)


def _numbers(scatter: Spread) -> None:
    named = ("end point", "as read", "5 %", "25 %", "50 %", "75 %", "95 %")
    put(
        heading("Numbers"),
        table_html("chances", ("window", "", "chance", "95 % interval"),
                   bands.chance_rows(scatter), numeric=2),
        table_html("end point", named, bands.distribution_rows(scatter.results.values()),
                   wide=True),
    )  # fmt: skip


def _margin(found: Answer, extra: Any) -> None:
    put(heading("The margin to plan with"))
    text = view_field("spread", "probability", "Wanted chance of each window, %",
                      placeholder="90", width=250)  # fmt: skip
    try:
        wanted = 0.01 * parse_number(text.strip() or "90")
        check_probability(wanted)
    except ValueError as error:
        put(note("fault", f"Wanted chance of each window: {error}."))
        return
    except InputError as error:
        put(note("fault", f"Wanted chance of each window: {error.faults[0].message}."))
        return
    key = (found.asked, round(wanted, 9))
    if st.button(f"Find the aims for {100.0 * wanted:g} %", key="find_margin"):
        st.session_state["cc_margin_for"] = key
    if st.session_state.get("cc_margin_for") == key:
        with st.spinner("Plans with other aims are drawn"):
            moved = kept("margin", found, (wanted, MARGIN_DRAWS, _key(extra)),
                         lambda: _margin_of(found, wanted, extra))  # fmt: skip
        _margin_shown(moved)
    if "cc_before_margin" in st.session_state:
        st.button("Put the aims back as they were", key="undo_margin", on_click=_undo)


def _margin_of(found: Answer, wanted: float, extra: Any) -> Margin:
    return margin(_spread(found, extra, shares=True), wanted, MARGIN_DRAWS, extra)


def _margin_shown(moved: Margin) -> None:
    headings = ("window", "aim now", "aim then", "chance now", "then")
    put(table_html("margin", headings, bands.margin_rows(moved)))
    notes = bands.margin_notes(moved)
    if moved.checked is not None:
        both = moved.checked.all_windows
        notes.append(f"All together then: {bands.percent(both.probability)}.")
    if notes:
        put(note("good" if moved.reached else "note", "", notes))
    if moved.planned is None:
        return
    changes = aim_fields(form(), moved)
    if changes:
        st.button("Plan with these aims; the windows stay where they are", key="take_margin",
                  on_click=_take, args=(changes,))  # fmt: skip


def aim_fields(now: Form, moved: Margin) -> dict[str, str]:
    """Fields that move the aims and leave every window where it is; empty where none moves.

    Raises InputError where a window would not hold its own aim any more.
    """
    changes: dict[str, str] = {}
    for shift in moved.shifts:
        name, window = LEVERS.get(shift.window.name, ""), shift.window
        aim = moved.aims.get(name, math.nan)
        if not math.isfinite(aim) or math.isclose(aim, window.aim, rel_tol=1e-9):
            continue
        aim = round(aim, AIM_DIGITS[name])
        below, above = WINDOWS[name]
        sides = [(above, window.high - aim)]
        if below is not None and math.isfinite(window.low):
            sides.append((below, aim - window.low))
        if min(size for _, size in sides) < 0.0:
            text = f"the aim of {aim:g} lies outside its window; widen the window first"
            raise InputError([Fault(name, text)])
        changes[name] = number_text(aim)
        changes |= {str(field): number_text(round(size, 9)) for field, size in sides}
    return {name: text for name, text in changes.items() if now.fields.get(name, "") != text}


def _take(changes: dict[str, str]) -> None:
    st.session_state["cc_before_margin"] = {name: form().fields.get(name, "") for name in changes}
    _put(changes)


def _undo() -> None:
    _put(st.session_state.pop("cc_before_margin"))


def _put(changes: dict[str, str]) -> None:
    new = form().copy()
    new.fields |= changes
    replace_form(new)
    write_address()
    st.session_state["cc_redraw"] = True


def _errors() -> None:
    """Size of each error, as the shop knows it."""
    opened = st.expander("Errors of the instruments, one standard deviation",
                         key="spread_errors", on_change="rerun")  # fmt: skip
    if not opened.open:
        return
    f = form()
    own, faults = dict(f.rest.get("errors", {})), []
    with opened:
        put("Blank takes the usual size; 0 switches an error off.")
        with st.container(horizontal=True):
            for name, (error, row) in known_errors().items():
                key = key_of("error_" + name)
                given = own.get(name)
                st.session_state.setdefault(key, "" if given is None else number_text(given))
                label = f"{error.label.capitalize()}, {bands.unit(error.unit)}"
                text = st.text_input(label, key=key, placeholder=f"{error.sd:g}",
                                     width=2 * FIELD_PX)  # fmt: skip
                fault = number_fault(row, text) if text and text.strip() else None
                if fault:
                    faults.append(f"{label}: {fault}")
                elif text and text.strip():
                    own[name] = parse_number(text)
                else:
                    own.pop(name, None)
        if faults:
            put(note("fault", "Not taken, and the size before is kept:", faults))
    if own != f.rest.get("errors", {}):
        f.rest.pop("errors", None)
        if own:
            f.rest["errors"] = own
        write_address()
        st.rerun()
