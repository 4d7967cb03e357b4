"""What was learnt from a log, shown: parameters, drift, proof; taken into the plan and saved."""

from __future__ import annotations

import json
from functools import partial
from typing import TYPE_CHECKING, Any

import streamlit as st

from converter_calc.basis.errors import InputError
from converter_calc.learning.today import drift_table
from converter_calc.learning.tuned import Tuned
from converter_calc.page import registers
from converter_calc.page.balance_view import show_figure
from converter_calc.page.fields import WIDE_PX
from converter_calc.page.learnt import Learnt, restored, taken
from converter_calc.page.markup import fault_texts, heading, note, put, table_html
from converter_calc.page.session import answer, form, replace_form, theme, write_address
from converter_calc.reporting import learning_charts as charts
from converter_calc.reporting import learning_tables as tables
from converter_calc.reporting.exports import csv_text
from converter_calc.reporting.proof_report import ANCHORS, proof_html
from converter_calc.reporting.tuning_text import IN_SAMPLE, tuning_text

if TYPE_CHECKING:
    from converter_calc.learning.following import Followed
    from converter_calc.learning.proof import Proof
    from converter_calc.learning.today import Today

GROSS_LISTED = 15


# --- tuned parameters -------------------------------------------------------------------------


def tuning(found: dict[str, Any], source: str) -> None:
    """Report of a tuning, and what can be done with it."""
    tuned: Tuned = found["tuned"]
    put(
        heading("Parameters of the shop"),
        " ".join(tables.used_lines(tuned)),
        table_html(
            "tuned parameters",
            ("parameter", "unit", "before", "±", "tuned", "±", "told by log", ""),
            tables.parameter_rows(tuned), numeric={2, 3, 4, 5, 6}, wide=True,
        ),
        "± is one standard error. Before: what the shop says, or common practice.",
    )  # fmt: skip
    warnings = [] if tuned.settled else ["The search did not settle; take the numbers with care."]
    warnings += [
        f"The log can hardly tell {tables.words_of(a)} from {tables.words_of(b)} (correlation "
        f"{r:+.2f}); only what was believed before keeps them apart."
        for a, b, r in tuned.collinear
    ]
    if warnings:
        put(note("note", "", warnings))
    _take_button(tuned, f"the tuning on {source}", "Take the tuned parameters into the plan",
                 "take_tuned")  # fmt: skip
    _save_tuned(tuned, source)
    put(
        heading("How the model fits the log"),
        table_html(
            "fit",
            ("outcome", "unit", "used", "mean error before", "tuned", "mean absolute error before",
             "tuned"),
            tables.fit_rows(tuned), numeric=2, wide=True,
        ),
        note("note", IN_SAMPLE),
        note("note", "For context, not our result:", ANCHORS),
    )  # fmt: skip
    _gross(tuned)


def _gross(tuned: Tuned) -> None:
    table = tuned.gross_frame()
    if table.empty:
        return
    put(
        heading("Not used"),
        table_html("not used", ("heat", "field", "given", "expected", "why"),
                   tables.gross_rows(table, GROSS_LISTED), numeric={2, 3}, wide=True),
    )  # fmt: skip
    if len(table) > GROSS_LISTED:
        put(f"and {len(table) - GROSS_LISTED:,} more; the file has them all.")
    st.download_button("Not used (CSV)", csv_text(table), "not_used.csv", "text/csv",
                       key="gross_csv", on_click="ignore")  # fmt: skip


def _save_tuned(tuned: Tuned, source: str) -> None:
    with st.container(horizontal=True):
        st.download_button("Tuned parameters (JSON)", json_of(tuned), "tuned.json",
                           "application/json", key="tuned_json", on_click="ignore")  # fmt: skip
        st.download_button("Report (text)", tuning_text(tuned), "tuning.txt", "text/plain",
                           key="tuning_text", on_click="ignore")  # fmt: skip
        name = registers.register_names()[0]
        st.button(f"Keep them in the register {name}", key="keep_tuned", on_click=_keep,
                  args=(name, tuned, source))  # fmt: skip
    put("The file serves converter-calc plan, predict and spread with --tuned.")


def json_of(learnt: Tuned | Today) -> str:
    """Tuned parameters, or the offsets of the day, as the command line writes and reads them."""
    return json.dumps(learnt.document(), indent=1, allow_nan=False) + "\n"


def _keep(name: str, tuned: Tuned, source: str) -> None:
    shop = tuned.shop or "shop"
    try:
        with registers.opened(name, create=True) as book:
            version = book.save_parameters(
                shop, tuned.practice_values(), tuned.covariance, f"tuned on {source}, from the page"
            )
    except InputError as error:
        _tell("fault", "They were not kept:", fault_texts(error.faults))
        return
    _tell("good", f"Kept in {name} as version {version} of the parameters of {shop}.")


def _tell(kind: str, text: str, lines: list[str] | None = None) -> None:
    st.session_state["cc_learning_told"] = (kind, text, lines or [])


# --- into the plan ----------------------------------------------------------------------------


def _take_button(tuned: Tuned, source: str, label: str, key: str) -> None:
    """One click takes learnt parameters into the fields, another puts them back."""
    with st.container(horizontal=True):
        st.button(label, key=key, on_click=_take, args=(tuned, source))
        if "cc_before_learnt" in st.session_state:
            st.button("Put back what the fields held before", key="undo_" + key, on_click=_undo)


def _take(tuned: Tuned, source: str) -> None:
    heats = answer().heats
    try:
        if heats is not None:
            tuned.apply(heats)  # refuses parameters of other laws
        new, learnt, before = taken(form(), tuned, source)
    except InputError as error:
        _tell("fault", "They were not taken:", fault_texts(error.faults))
        return
    st.session_state["cc_before_learnt"] = before | st.session_state.get("cc_before_learnt", {})
    st.session_state["cc_learnt"] = learnt
    replace_form(new)
    write_address()
    count = len(learnt.values)
    _tell("good", f"{count} parameters from {source} are in the fields of Plan a heat; the spread "
          "there reckons with their uncertainty until the page is loaded anew.")  # fmt: skip


def _undo() -> None:
    before = st.session_state.pop("cc_before_learnt")
    learnt: Learnt | None = st.session_state.pop("cc_learnt", None)
    replace_form(restored(form(), before))
    write_address()
    if learnt is not None:
        _tell("good", "The fields hold what they held before.")


# --- drift ------------------------------------------------------------------------------------


def drift(found: dict[str, Any], source: str) -> None:
    """Offsets through the log, jumps, today's values."""
    followed: Followed = found["followed"]
    heats = found["heats"]
    put(heading("Today"))
    put("What a parameter is for the heat to come: the end of the log counts most, as far as the "
        "log itself says that it wanders.")  # fmt: skip
    put(table_html("today", ("parameter", "unit", "tuned over the log", "today", "±"),
                   tables.today_rows(followed), numeric=2))  # fmt: skip
    _take_button(followed.today(), f"the end of {source}", "Take today's offsets into the plan",
                 "take_today")  # fmt: skip
    today: Today = found["today"]
    left = tables.left_text(today)
    if left:
        put(note("note", left))
    st.download_button("Offsets of the day (JSON)", json_of(today), "today.json",
                       "application/json", key="today_json", on_click="ignore")  # fmt: skip
    put(heading("How it wandered"))
    names = list(followed.drift.offsets)
    offset = st.selectbox("Parameter", names, key="drift_offset", width=WIDE_PX,
                          format_func=tables.words_of)  # fmt: skip
    table = drift_table(heats, followed, found["drift"])
    jumps = tables.jump_table(followed.tuned, found["drift"], heats)
    unit = {entry.name: tables.unit_text(entry.unit) for entry in followed.tuned.parameters}
    title = f"{tables.words_of(offset)}, {unit[offset]}".rstrip(", ")
    figure = charts.drift_figure(table, jumps, offset, title, theme())
    show_figure(figure, "drift_picture", tables.drift_text(table, jumps, offset))
    put("Line: what all heats of the log say; band: two standard deviations either way.")
    rows = table[table["offset"] == offset]
    rows = rows.iloc[:: max(len(rows) // 12, 1)]
    put(table_html("course", ("tapped", title, "± 1 sd"), [
        (f"{row['tapped_at']:%Y-%m-%d %H:%M}" if row["tapped_at"] == row["tapped_at"] else "–",
         tables.plain(row["value"]), tables.plain(row["deviation"]))
        for row in rows.to_dict("records")
    ]))  # fmt: skip
    put(heading("Jumps"))
    if jumps.empty:
        put("None stands out from what chance would show.")
    else:
        put(table_html("jumps", ("first heat after it", "tapped", "parameter", "size"), [
            (row["heat_id"], f"{row['tapped_at']:%Y-%m-%d %H:%M}", tables.words_of(row["offset"]),
             row["text"])
            for row in jumps.to_dict("records")
        ], numeric={3}))  # fmt: skip
        put("Suspected: a wander as fast as the log asks for could have gone so far as well.")
    st.download_button("Course of all (CSV)", csv_text(table), "drift.csv", "text/csv",
                       key="drift_csv", on_click="ignore")  # fmt: skip


# --- proof ------------------------------------------------------------------------------------


def proof(found: dict[str, Any], _: str) -> None:
    """Scores of each method out of sample, and pictures."""
    proved: Proof = found["proof"]
    shade = theme()
    names = list(proved.names)
    quantity = st.selectbox("Quantity", names, key="proof_quantity", width=WIDE_PX,
                            format_func=tables.words_of)  # fmt: skip
    title = charts.TITLES[quantity]
    put(
        heading(f"Out of sample: {title}"),
        f"{len(proved.rows):,} heats in {len(proved.stages)} stages, each predicted from the heats "
        "before it; nothing is fitted to what comes.",
        table_html("scores", ("method", "heats", "mean absolute error", "bias", "hits, %"),
                   tables.score_rows(proved, quantity)),
        "± is one standard error. Left out where every method misses by far, because the log errs "
        f"there: {int(proved.misread()[:, names.index(quantity)].sum())} readings.",
    )  # fmt: skip
    heats = proved.heats()
    methods = list(proved.predicted)
    best = best_method(proved)
    show_figure(charts.misses_figure(heats, quantity, methods, shade), "misses",
                tables.misses_text(proved, quantity))  # fmt: skip
    show_figure(charts.measured_figure(heats, quantity, best, shade), "measured",
                tables.measured_text(proved, quantity, best))  # fmt: skip
    put(heading("Do the stated probabilities hold?"))
    for key, text, table in (
        ("intervals", "Intervals of the end point", proved.calibration()),
        ("chances", "Chance of a hit, heats in five groups", proved.hit_chances()),
    ):
        put(f"{text}: stated against held.")
        show_figure(charts.calibration_figure(table, shade), key, tables.calibration_text(table))
        if key == "intervals":
            put(table_html(key, *tables.calibration_rows(table)))
        else:
            put(table_html(key, ("quantity", "stated, %", "held, %", "heats"),
                           tables.hit_rows(table)))  # fmt: skip
    put(note("note", "For context, not our result:", ANCHORS))
    with st.container(horizontal=True):
        # what runs after the click has no session: everything it needs is bound here
        st.download_button("Report (HTML)", partial(proof_html, proved), "proof.html",
                           "text/html", key="proof_html", on_click="ignore")  # fmt: skip
        st.download_button("Heats (CSV)", partial(csv_text, heats), "proof_heats.csv", "text/csv",
                           key="proof_csv", on_click="ignore")  # fmt: skip


def best_method(proved: Proof) -> str:
    """Our last method, the one that states its own uncertainty."""
    return next(reversed(proved.deviation))
