"""The register: heats planned and made, plan beside actual, logs in and out, backup."""

from __future__ import annotations

import datetime as dt
from functools import partial
from typing import TYPE_CHECKING, Any

import streamlit as st

from converter_calc.basis.errors import InputError
from converter_calc.heatlog.columns import find_column
from converter_calc.page import registers
from converter_calc.page.actual_form import actual_form
from converter_calc.page.address import keep_in_address
from converter_calc.page.fields import WIDE_PX
from converter_calc.page.form import document_of, form_of
from converter_calc.page.log_parts import log_shop, reading_choices, refused_shown
from converter_calc.page.markup import fault_texts, heading, note, put, table_html
from converter_calc.page.parts import XLSX, part_of
from converter_calc.page.session import (
    answer,
    form,
    guarded,
    replace_form,
    view_choice,
    write_address,
)
from converter_calc.planning.outcome import Outcome
from converter_calc.register.register import Register
from converter_calc.reporting.learning_tables import words_of
from converter_calc.reporting.register_text import number_text

if TYPE_CHECKING:
    import pandas as pd

PARTS = {"heats": "Heats", "files": "Logs in and out, backup"}
STATES = {
    "all": "All heats",
    "open": "Planned, not made yet",
    "both": "Planned and made",
    "made": "Made without a plan",
}
#: Heats listed at once, and those looked through where no heat is asked for by name.
LISTED, LOOKED_THROUGH = 40, 2000
#: What is shown of a plan, by names of the heat log.
PLAN_ROWS = ("hot_metal_kg", "scrap_total_kg", "oxygen_Nm3", "aim_temp_C", "aim_C_pct",
             "aim_P_pct", "end_temp_C", "end_C_pct", "end_P_pct", "steel_kg")  # fmt: skip
UNITS = {"C": "°C", "Nm3": "Nm³", "mass %": "%", "mass ppm": "ppm"}
PARQUET = "application/vnd.apache.parquet"
#: Key of the heat that is looked at.
HEAT = "register_heat"
keep_in_address("register", ("part", "file", "state"))


def register_view() -> None:
    """The whole view; what is done in it redraws only it."""
    _fragment()


@st.fragment
def _fragment() -> None:
    if st.session_state.pop("cc_show_plan", False):
        st.rerun()  # a plan was opened into the fields: show them
    guarded(_shown)
    write_address()


def _shown() -> None:
    names = registers.register_names()
    name = names[0]
    if len(names) > 1:
        name = view_choice("register", "file", "Register", names, width=WIDE_PX)
    else:
        put(f"Register: {name}, on the machine of this page.")
    part = part_of("register", PARTS)
    _told()
    if part == "files":
        guarded(partial(_files, name))
        return
    guarded(partial(_record_plan, name))
    if not registers.exists(name):
        put("It holds nothing yet: record a plan, or take in a heat log.")
        return
    guarded(partial(_heats, name))


def _told() -> None:
    """What came of the last click."""
    message = st.session_state.pop("cc_register_told", None)
    if message:
        put(note(*message))


def _tell(kind: str, text: str, lines: tuple[str, ...] | list[str] = ()) -> None:
    st.session_state["cc_register_told"] = (kind, text, list(lines))


# --- the plan in the fields -------------------------------------------------------------------


def _record_plan(name: str) -> None:
    outcome = answer().outcome
    if outcome is None or form().question == "predict":
        put("The fields hold no plan that could be recorded; see Plan a heat.")
        return
    heat = outcome.heats.ids[0]
    st.button(f"Record the plan of heat {heat}", key="record_plan", on_click=_record,
              args=(name, outcome, document_of(form())))  # fmt: skip


def _record(name: str, outcome: Outcome, document: dict[str, Any]) -> None:
    try:
        with registers.opened(name, create=True) as book:
            number = book.record_plan(outcome, inputs=document)
    except InputError as error:
        _tell("fault", "The plan was not recorded:", fault_texts(error.faults))
        return
    _tell("good", f"Kept as plan {number} of heat {outcome.heats.ids[0]}.")
    st.session_state[HEAT] = outcome.heats.ids[0]


# --- the heats --------------------------------------------------------------------------------


def _heats(name: str) -> None:
    put(heading("Heats, the newest first"))
    with st.container(horizontal=True):
        state = view_choice("register", "state", "Which", list(STATES), width=WIDE_PX,
                            format_func=STATES.__getitem__)  # fmt: skip
        wanted = st.text_input("Name holds", key="register_search", width=200) or ""
    with registers.opened(name) as book:
        table = book.overview(None if wanted.strip() else LOOKED_THROUGH)
        table = _chosen(table.iloc[::-1], state, wanted.strip())
        if not len(table):
            put("No heat is like this.")
            return
        ids = [str(x) for x in table["heat_id"].head(LISTED)]
        put(_list_html(table.head(LISTED)))
        if len(table) > LISTED:
            put(f"The {LISTED} newest of {len(table):,}; type a part of the name to find others.")
        if st.session_state.get(HEAT) not in ids:
            st.session_state[HEAT] = ids[0]
        heat = st.selectbox("Heat to look at", ids, key=HEAT, width=WIDE_PX)
        guarded(partial(_one_heat, book, name, heat))


def _chosen(table: pd.DataFrame, state: str, wanted: str) -> pd.DataFrame:
    planned, made = table["planned_at"].notna(), table["tapped_at"].notna()
    made |= table[["end_temp_C", "end_C_pct", "steel_kg"]].notna().any(axis=1)
    keep = {
        "all": planned | made,
        "open": planned & ~made,
        "both": planned & made,
        "made": made & ~planned,
    }[state]
    if wanted:
        keep &= table["heat_id"].astype(str).str.contains(wanted, case=False, regex=False)
    return table[keep]


def _moment(moment: Any) -> str:
    text = "" if moment is None else str(moment)
    return "–" if text in ("", "NaT", "nan", "None") else text[:16].replace("T", " ")


def _dashed(text: str) -> str:
    return "–" if text == "-" else text.replace("-", "−", 1) if text.startswith("-") else text


def _cell(x: Any, unit: str, *, signed: bool = False) -> str:
    return _dashed(number_text(float(x), unit, signed=signed))


def _list_html(table: pd.DataFrame) -> Any:
    columns = [
        (f"{which}_{name}", unit)
        for name, unit in (("temp_C", "C"), ("C_pct", "mass %"), ("P_pct", "mass %"))
        for which in ("aim", "end")
    ]
    rows = [
        (row["heat_id"], _moment(row["planned_at"]), _moment(row["tapped_at"]),
         *(_cell(row[column], unit) for column, unit in columns))
        for row in table.to_dict("records")
    ]  # fmt: skip
    headings = ("heat", "planned, UTC", "tapped, UTC", "aim, °C", "end, °C", "aim C, %",
                "end C, %", "aim P, %", "end P, %")  # fmt: skip
    return table_html("heats of the register", headings, rows, numeric=3, wide=True)


def _one_heat(book: Register, name: str, heat: str) -> None:
    plans, actual = book.plans(heat), book.current_actual(heat)
    put(heading(f"Heat {heat}"))
    if not len(plans) and actual is None:
        put("The register holds no heat of this name.")
        return
    if len(plans):
        _plans(book, heat, plans, made=actual is not None)
    opened = st.expander(
        "What became of it: record or correct", key="actual_open", on_change="rerun"
    )
    if opened.open:
        with opened:
            actual_form(name, heat, actual, book.latest_plan(heat), _tell)


def _plans(book: Register, heat: str, plans: pd.DataFrame, *, made: bool) -> None:
    numbers = [int(x) for x in plans["plan_id"]]
    moments = dict(zip(numbers, plans["created_at"], strict=True))
    plan_id = numbers[0]
    if len(numbers) > 1:
        plan_id = st.selectbox(
            "Its plans, the newest first", numbers, key=f"plan_of_{heat}", width=WIDE_PX,
            format_func=lambda k: f"plan {k} of {_moment(moments[k])} UTC",
        )  # fmt: skip
    stored = book.plan(plan_id)
    st.button(f"Open plan {plan_id} in the fields", key="open_plan", on_click=_open,
              args=(stored.inputs, plan_id, heat))  # fmt: skip
    if made:
        _compare(book, heat, plan_id)
        return
    rows = []
    for column in PLAN_ROWS:
        if column in stored.planned:
            unit = "kg" if column == "scrap_total_kg" else _unit(column)
            text = _cell(stored.planned[column], unit)
            rows.append((words_of(column), text, UNITS.get(unit, unit)))
    put(
        f"Plan {plan_id} of {_moment(stored.created_at)} UTC; converter-calc "
        f"{stored.package_version}, data {stored.model_version}.",
        table_html("plan", ("planned", "value", "unit"), rows, numeric={1}),
    )


def _unit(column: str) -> str:
    found = find_column(column, ())
    return found.unit if found else ""


def _open(inputs: dict[str, Any], plan_id: int, heat: str) -> None:
    """Put a recorded plan into the fields and show them."""
    try:
        new = form_of(inputs)
    except InputError as error:
        _tell("fault", f"Plan {plan_id} cannot be opened:", fault_texts(error.faults))
        return
    replace_form(new)
    write_address()
    st.session_state["cc_view"] = "Plan a heat"
    st.query_params["view"] = "plan"
    st.session_state["cc_show_plan"] = True
    _tell("good", f"Plan {plan_id} of heat {heat} is in the fields.")


def _compare(book: Register, heat: str, plan_id: int) -> None:
    found = book.compare(heat, plan_id)
    headings = ("quantity", "unit", "aim", "planned", "actual", "actual − planned", "expected",
                "actual − expected")  # fmt: skip
    rows = []
    for quantity, unit, aim, planned, actual, difference, expected, left in found.rows.itertuples(
        index=False
    ):
        rows.append(
            (words_of(str(quantity)), UNITS.get(unit, unit),
             *(_cell(x, unit) for x in (aim, planned, actual)),
             _cell(difference, unit, signed=True), _cell(expected, unit),
             _cell(left, unit, signed=True))
        )  # fmt: skip
    put(
        heading("Plan and actual"),
        table_html("plan and actual", headings, rows, numeric=2, wide=True),
        "Expected: what the model says of the charge that was really made. What lies between "
        "planned and expected is the work of the charge; between expected and actual, what the "
        "model does not explain.",
    )
    if found.notes:
        put(note("note", "", [text[:1].upper() + text[1:] + "." for text in found.notes]))


# --- logs in and out --------------------------------------------------------------------------


def _files(name: str) -> None:
    put(heading("Take in a heat log"))
    put("CSV, Parquet or XLSX, a row a heat. Values are laid over what is recorded; the older "
        "record is kept. A row with a fault is refused as a whole and listed.")  # fmt: skip
    file = st.file_uploader("Heat log", ["csv", "parquet", "xlsx"], key="register_log",
                            max_upload_size=5)  # fmt: skip
    mark, skip = reading_choices("register")
    strict = st.checkbox("All or nothing: record no heat where any row is refused",
                         key="register_strict")  # fmt: skip
    if st.button("Take it in", key="register_import", disabled=file is None) and file is not None:
        st.session_state.pop("cc_import", None)
        with st.spinner("The log is read"):
            report = registers.import_upload(
                name, file.getvalue(), file.name, log_shop(form()), strict=strict,
                decimal_mark=mark, skip_unknown=skip,
            )  # fmt: skip
        st.session_state["cc_import"] = (file.name, report)
    if "cc_import" in st.session_state:
        _import_shown(*st.session_state["cc_import"])
    if registers.exists(name):
        _out(name)


def _import_shown(file_name: str, report: Any) -> None:
    refused = report.rows_refused
    if not report.taken:
        put(note("fault", f"{file_name}: nothing was recorded, because {refused} rows are refused "
                 "and all or nothing was asked for."))  # fmt: skip
    else:
        text = f"{report.new} heats new, {report.updated} updated, {report.unchanged} said nothing"
        put(note("good", f"{file_name}: {text} new; {refused} rows refused."))
    if report.skipped:
        put(f"Columns left out: {', '.join(report.skipped)}.")
    refused_shown(report.refused, "register")


def _out(name: str) -> None:
    put(heading("Save"))
    today = dt.datetime.now(tz=dt.UTC).date().isoformat()
    stem = name.rpartition(".")[0] or name
    with st.container(horizontal=True):
        for ending, kind, mime in ((".csv", "CSV", "text/csv"), (".parquet", "Parquet", PARQUET),
                                   (".xlsx", "XLSX", XLSX)):  # fmt: skip
            st.download_button(f"Heat log ({kind})",
                               partial(registers.exported, name, ending), f"heat_log{ending}",
                               mime, key="log_out" + ending, on_click="ignore")  # fmt: skip
        st.download_button("Backup of the register", partial(registers.backed_up, name),
                           f"{stem}_{today}.sqlite", "application/vnd.sqlite3",
                           key="register_backup", on_click="ignore")  # fmt: skip
    put("The log holds all recorded heats; aims that were not logged are those of the plan. The "
        "backup is a checked copy that opens as a register.")  # fmt: skip
