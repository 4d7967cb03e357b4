"""The form for what became of a heat: end point, weights, slag, charge as it was made."""

from __future__ import annotations

from collections.abc import Callable, Mapping
from typing import Any

import streamlit as st

from converter_calc.basis.errors import InputError
from converter_calc.heatlog.columns import find_column, names_of_group
from converter_calc.page import registers
from converter_calc.page.fields import FIELD_PX, plain_name
from converter_calc.page.markup import fault_texts, put
from converter_calc.page.numbers import parse_number
from converter_calc.register.plans import StoredPlan

#: Groups of fields: those of the end of the blow stand open.
FIRST = ("tapped_at", "end_temp_C", "end_C_pct", "end_P_pct", "end_Mn_pct", "end_S_pct",
         "end_O_ppm", "steel_kg", "oxygen_Nm3")  # fmt: skip
LABELS = {
    "tapped_at": "Tapped at, ISO 8601",
    "end_temp_C": "End temperature, °C",
    "end_O_ppm": "Dissolved O, ppm",
    "steel_kg": "Steel tapped, kg",
    "oxygen_Nm3": "Oxygen blown, Nm³",
    "hot_metal_kg": "Hot metal, kg",
    "hot_metal_temp_C": "Hot metal, °C",
}
TEXTS = ("tapped_at", "vessel", "grade")
Tell = Callable[..., None]


def actual_form(
    name: str, heat: str, actual: Mapping[str, Any] | None, plan: StoredPlan | None, tell: Tell
) -> None:
    """Fields and buttons; what is left blank stays as it is recorded.

    name : of the register. actual : present values. plan : the latest, for its materials. tell :
    takes kind, sentence and lines on what came of it.
    """
    recorded = dict(actual or {})
    put("Blank leaves a value as it is recorded; the recorded one shows in grey.")
    slag = [column for column in names_of_group("outcome") if column.startswith("slag_")]
    charge = _charge(recorded, plan)
    with st.form(f"actual_{heat}", border=False, enter_to_submit=False):
        _fields(heat, FIRST, recorded)
        with st.expander("Slag sample"):
            _fields(heat, slag, recorded)
        with st.expander("Charge as it was made"):
            _fields(heat, charge, recorded)
        if recorded:
            st.multiselect("Take back what was wrong and has no other value", sorted(recorded),
                           key=f"clear_{heat}", format_func=_label)  # fmt: skip
        st.form_submit_button("Record", key=f"record_actual_{heat}", on_click=_submit,
                              args=(name, heat, (*FIRST, *slag, *charge), tell))  # fmt: skip


def _submit(name: str, heat: str, columns: tuple[str, ...], tell: Tell) -> None:
    state = st.session_state
    typed = {column: str(state.get(_key(heat, column)) or "").strip() for column in columns}
    typed = {column: text for column, text in typed.items() if text}
    _record(name, heat, typed, list(state.get(f"clear_{heat}") or ()), tell)


def _charge(recorded: Mapping[str, Any], plan: StoredPlan | None) -> list[str]:
    """Columns of the charge: hot metal, waiting, and the materials of plan and record."""
    names = {*recorded, *(plan.planned if plan else ())}
    masses = [
        column for column in sorted(names)
        if column.endswith("_kg") and column not in ("steel_kg", "hot_metal_kg", "scrap_total_kg")
        and not column.startswith(("aim_", "slag_"))
    ]  # fmt: skip
    analyses = [f"hm_{el}_pct" for el in ("C", "Si", "Mn", "P", "S")]
    return ["hot_metal_kg", "hot_metal_temp_C", *analyses, "wait_min", "blow_min", *masses]


def _key(heat: str, column: str) -> str:
    return f"actual_{heat}_{column}"


def _label(column: str) -> str:
    if column in LABELS:
        return LABELS[column]
    found = find_column(column, ())
    unit = {"mass %": "%", "Nm3": "Nm³", "C": "°C"}.get(found.unit, found.unit) if found else "kg"
    words = column
    for ending in ("_pct", "_kg", "_temp_C", "_min", "_ppm", "_Nm3"):
        words = words.removesuffix(ending)
    words = words.replace("slag_", "").replace("hm_", "hot metal ").replace("end_", "")
    text = plain_name(words)
    return f"{text[:1].upper()}{text[1:]}, {unit}" if unit else text


def _fields(heat: str, columns: Any, recorded: Mapping[str, Any]) -> None:
    with st.container(horizontal=True):
        for column in columns:
            x = recorded.get(column)
            shown = None if x is None else f"{x:g}" if isinstance(x, float) else str(x)[:19]
            st.text_input(_label(column), key=_key(heat, column), placeholder=shown,
                          width=FIELD_PX if column != "tapped_at" else 190)  # fmt: skip


def _record(name: str, heat: str, typed: dict[str, str], wrong: list[str], tell: Tell) -> None:
    """Record what was typed, or say what is wrong with it; the fields keep what they hold."""
    values: dict[str, Any] = {}
    faults = []
    for column, text in typed.items():
        if column in TEXTS:
            values[column] = text
            continue
        try:
            values[column] = parse_number(text)
        except ValueError as error:
            faults.append(f"{_label(column)}: {error}")
    if not values and not wrong and not faults:
        faults.append("nothing was typed")
    if not faults:
        try:
            with registers.opened(name) as book:
                number = book.record_actual(heat, values, clear=wrong, origin="page")
        except InputError as error:
            faults = fault_texts(error.faults)
    if faults:
        tell("fault", f"Nothing was recorded of heat {heat}:", faults)
    else:
        tell("good", f"Kept as record {number} of heat {heat}.")
        for column in typed:
            st.session_state[_key(heat, column)] = ""
        st.session_state.pop(f"clear_{heat}", None)
