"""Files in and out: heat and shop files, heats as a table, results, the sheet to print."""

from __future__ import annotations

import datetime as dt
from collections.abc import Callable
from functools import partial
from typing import TYPE_CHECKING, Any

import streamlit as st

from converter_calc.basis.errors import ConverterError, Fault, InputError
from converter_calc.page.documents import (
    form_with_heat,
    form_with_shop,
    parse_document,
    solve_frame,
    table_defaults,
)
from converter_calc.page.form import Form, document_of, shop_part
from converter_calc.page.markup import fault_texts, heading, note, put
from converter_calc.page.session import answer, form, guarded, replace_form, write_address
from converter_calc.page.toml_text import toml_text
from converter_calc.planning.outcome import Outcome
from converter_calc.reporting.exports import csv_text, heat_json, heat_xlsx, json_text
from converter_calc.reporting.exports import xlsx_bytes as sheets_xlsx
from converter_calc.reporting.html_sheet import PAPERS, html_sheet
from converter_calc.reporting.tables import recipe_table
from converter_calc.reporting.uploads import parse_table

if TYPE_CHECKING:
    import pandas as pd

XLSX = "application/vnd.openxmlformats-officedocument.spreadsheetml.sheet"
FAULTS_SHOWN = 25


def files_view() -> None:
    """The whole view; each part in a fragment of its own or plain."""
    guarded(_load)
    guarded(_save)
    guarded(_results)
    _table_fragment()


def _load() -> None:
    put(heading("Load a heat or a shop"))
    left, right = st.columns(2)
    with left:
        _upload("Heat file (TOML)", "heat")
    with right:
        _upload("Shop file (TOML)", "shop")
    message = st.session_state.pop("cc_loaded", None)
    if message:
        put(note(*message))


def _upload(label: str, kind: str) -> None:
    key = f"upload_{kind}"
    st.file_uploader(label, "toml", key=key, max_upload_size=2, on_change=_take_file,
                     args=(key, kind))  # fmt: skip


def _take_file(key: str, kind: str) -> None:
    """Put an uploaded file into the fields, or say what is wrong with it and keep them."""
    file = st.session_state.get(key)
    if file is None:
        return
    try:
        document = parse_document(file.getvalue(), file.name)
        text = "The shop is in the fields, under the heat that was there."
        if kind == "heat":
            new, text = form_with_heat(document, form(), st.session_state.get("cc_shop"))
        else:
            new = form_with_shop(document, form())
            st.session_state["cc_shop"] = document
    except InputError as error:
        title = f"{file.name} was not taken; the fields are as they were:"
        message = ("fault", title, _shortened(fault_texts(error.faults)))
        st.session_state["cc_loaded"] = message
        return
    replace_form(new)
    write_address()
    st.session_state["cc_loaded"] = ("good", f"{file.name} was taken. {text}", [])


def _shortened(lines: list[str]) -> list[str]:
    more = len(lines) - FAULTS_SHOWN
    return [*lines[:FAULTS_SHOWN], f"and {more} more"] if more > 0 else lines


def _save() -> None:
    put(heading("Save the heat and the shop"))
    try:
        document = document_of(form())
    except InputError as error:
        put(note("fault", "They can be saved once these fields are right:",
                 fault_texts(error.faults)))  # fmt: skip
        return
    with st.container(horizontal=True):
        _download(
            "Heat file, complete (TOML)", toml_text(document), "heat.toml", "application/toml"
        )
        _download("Shop file (TOML)", toml_text(shop_part(document)), "shop.toml",
                  "application/toml")  # fmt: skip


def _results() -> None:
    put(heading("Results of this heat"))
    outcome = answer().outcome
    if outcome is None:
        put(note("fault", "The heat has no answer as it stands; see Plan a heat."))
        return
    papers = {"": "as the printer holds", "A4": "A4", "Letter": "Letter"}
    paper = st.radio("Paper of the charge sheet", list(PAPERS), horizontal=True, key="paper",
                     format_func=lambda name: papers.get(name, name))  # fmt: skip
    today = dt.datetime.now(tz=dt.UTC).astimezone().date()
    # what runs after the click has no session: everything it needs is bound here
    sheet = partial(html_sheet, outcome, date=today, paper=paper)
    with st.container(horizontal=True):
        _download("Charge sheet to print (HTML)", sheet, "charge_sheet.html", "text/html")
        _download("Workbook (XLSX)", partial(heat_xlsx, outcome), "heat.xlsx", XLSX)
        _download("Recipe (CSV)", partial(_recipe_csv, outcome), "recipe.csv", "text/csv")
        _download("Everything (JSON)", partial(heat_json, outcome), "heat.json", "application/json")
    put("The sheet opens in a browser without a network; print it from there.")


def _recipe_csv(outcome: Outcome) -> str:
    return csv_text(recipe_table(outcome))


def _download(label: str, data: str | Callable[[], Any], name: str, mime: str) -> None:
    st.download_button(label, data, name, mime, key="get_" + name, on_click="ignore")


@st.fragment
def _table_fragment() -> None:
    guarded(_table)


def _table() -> None:
    put(heading("Many heats as a table"))
    put(
        "One row a heat; the columns are heat_id, hot_metal_kg, hot_metal_temp_C, hm_C_pct, "
        "hm_Si_pct, aim_temp_C, <material>_kg and so on, as in a heat log. What the table leaves "
        "out is taken from the shop and the aims in the fields."
    )
    file = st.file_uploader("Table (CSV or XLSX)", ["csv", "xlsx"], key="upload_table",
                            max_upload_size=5)  # fmt: skip
    pasted = st.text_area("or paste it here, with its heading", key="paste_table", height=120)
    what = st.radio(
        "Each heat is", ["planned", "predicted"], horizontal=True, key="table_what",
        captions=["what is missing is solved for", "the charge is complete"],
    )  # fmt: skip
    asked = st.button("Work out all heats", key="solve_table")
    if asked:
        st.session_state.pop("cc_table", None)
        try:
            predict = what == "predicted"
            st.session_state["cc_table"] = _solved_table(file, pasted, form(), predict=predict)
        except InputError as error:
            put(note("fault", "The table was not worked out:",
                     _shortened(fault_texts(error.faults))))  # fmt: skip
        except ConverterError as error:
            put(note("fault", f"The table was not worked out: {error}"))
    if "cc_table" in st.session_state:
        _show_table(*st.session_state["cc_table"])


def _solved_table(file: Any, pasted: str, now: Form, *, predict: bool) -> tuple[Any, str]:
    """Results of the table, and how it was read. Raises InputError with every fault."""
    if file is None and not pasted.strip():
        raise InputError([Fault("table", "upload a file or paste a table first")])
    name = "pasted table" if file is None else file.name
    content = pasted.encode("utf-8", "replace") if file is None else file.getvalue()
    frame = parse_table(content, name)
    bar = st.progress(0.0, "The heats are worked out")

    def advance(share: float) -> None:
        bar.progress(share, "The heats are worked out")

    found = solve_frame(frame, table_defaults(now), advance, predict=predict)
    bar.empty()
    return found, str(frame.attrs.get("read_as", ""))


def _show_table(found: pd.DataFrame, read_as: str) -> None:
    counts = found["status"].value_counts()
    put(note("good", f"Read as {read_as}. " + ", ".join(f"{n} {s}" for s, n in counts.items())))
    first = ["heat_id", "status", "binding", "hot_metal_kg", "scrap_total_kg", "oxygen_Nm3",
             "end_temp_C", "end_C_pct", "end_P_pct", "steel_kg"]  # fmt: skip
    order = [name for name in first if name in found]
    order += [name for name in found.columns if name not in order]
    shown = found[order]
    st.dataframe(shown, hide_index=True, alt=f"Results of {len(found)} heats, one a row")
    with st.container(horizontal=True):
        _download("Results (CSV)", partial(csv_text, shown), "heats.csv", "text/csv")
        _download("Results (XLSX)", partial(sheets_xlsx, {"heats": shown}), "heats.xlsx", XLSX)
        _download("Results (JSON)", partial(json_text, shown), "heats.json", "application/json")
