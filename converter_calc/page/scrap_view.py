"""Scrap ratio: a map over scrap share and hot-metal temperature, with today's heat on it."""

from __future__ import annotations

from dataclasses import replace
from functools import partial
from typing import TYPE_CHECKING, Any

import numpy as np
import streamlit as st

from converter_calc.balance.heats import HeatTable
from converter_calc.balance.schema import parameters
from converter_calc.basis.errors import Fault, InputError
from converter_calc.page.address import keep_in_address
from converter_calc.page.balance_view import show_figure
from converter_calc.page.markup import fault_texts, heading, note, put, table_html
from converter_calc.page.numbers import field_fault, label_of, number_text, parse_number
from converter_calc.page.session import (
    Answer,
    answer,
    guarded,
    kept,
    theme,
    view_choice,
    view_field,
)
from converter_calc.planning.sweeps import map_columns, scrap_ratio_map, today_point
from converter_calc.reporting.exports import csv_text, xlsx_bytes
from converter_calc.reporting.sweep_charts import scrap_map_figure, scrap_map_table, scrap_map_text

if TYPE_CHECKING:
    import pandas as pd

SHARES, TEMPERATURES = 15, 9
#: Span of the map about today's heat: scrap share [mass %], hot metal [C].
SHARE_SPAN_PCT, TEMP_SPAN_C = 12.0, 90.0
QUANTITIES = ("trim_kg", "oxygen_Nm3", "lime_kg", "slag_kg", "steel_kg", "yield_pct", "cost_per_t",
              "CO2_kg_per_t", "end_P_pct", "hot_metal_kg", "scrap_kg")  # fmt: skip
keep_in_address("scrap", ["shown", "silicon", *(f"{name}.{end}" for end in ("from", "to")
                for name in ("scrap_share_pct", "hot_metal_temp_C", "hm_Si_pct"))])  # fmt: skip


def scrap_view() -> None:
    """The whole view; what is changed in it redraws only it."""
    _scrap_fragment()


@st.fragment
def _scrap_fragment() -> None:
    guarded(_scrap)


def _scrap() -> None:
    found = answer()
    if found.heats is None:
        put(note("fault", "The heat is not right yet; see Plan a heat.", fault_texts(found.faults)))
        return
    if not np.isfinite(found.heats.values["hot_metal_kg"]).all() and found.outcome is None:
        put(note("fault", "The heat has no answer as it stands; see Plan a heat."))
        return
    put(heading("Scrap share against hot metal"))
    put(
        "At each point the scrap share is given; coolant or fuel closes the heat balance. What "
        "vessel, boxes, stocks or aims do not allow is shaded."
    )
    axes = _axes(found)
    frame = _map(found, found.heats, axes)
    columns = map_columns(found.heats)
    today = today_point(found.outcome) if found.outcome is not None else None
    with st.container(horizontal=True):
        quantity = view_choice("scrap", "shown", "Shown", QUANTITIES, width=300,
                               format_func=lambda name: _title(columns, name))  # fmt: skip
        low, middle, high = axes["hm_Si_pct"]
        levels = {f"{x:.2f}": x for x in (middle, low, high)}
        silicon = levels[view_choice("scrap", "silicon", "Silicon of the hot metal, %",
                                     list(levels), width=200)]  # fmt: skip
    if not frame[quantity].notna().any():
        put(note("note", f"No {columns[quantity].label} to show; is a price or CO2 value missing?"))
    else:
        shade = theme()
        figure = kept("scrap figure", found, (repr(axes), quantity, silicon, shade),
                      lambda: scrap_map_figure(frame, columns, quantity, today, silicon,
                                               shade))  # fmt: skip
        text = scrap_map_text(frame, columns, quantity, today, silicon)
        show_figure(figure, "scrap_map", text)
        if columns[quantity].note:
            put(f"Counted: {columns[quantity].note}.")
        put(heading(f"{_title(columns, quantity)} at {silicon:.2f} % Si"))
        put(_grid_html(scrap_map_table(frame, quantity, today, silicon), _title(columns, quantity)))
    _downloads(frame)


def _title(columns: Any, name: str) -> str:
    label, unit, _ = columns[name]
    return f"{label}, {unit}" if unit else str(label)


def _axes(found: Answer) -> dict[str, list[float]]:
    """The axes: about today's heat at first, then as typed."""
    middle = {"scrap_share_pct": 20.0, "hot_metal_temp_C": 1340.0, "hm_Si_pct": 0.5}
    if found.outcome is not None:
        middle = today_point(found.outcome)
    spans = {"scrap_share_pct": SHARE_SPAN_PCT, "hot_metal_temp_C": TEMP_SPAN_C, "hm_Si_pct": 0.2}
    sizes = {"scrap_share_pct": SHARES, "hot_metal_temp_C": TEMPERATURES, "hm_Si_pct": 3}
    step = {"scrap_share_pct": 1.0, "hot_metal_temp_C": 10.0, "hm_Si_pct": 0.01}
    axes, faults = {}, []
    with st.container(horizontal=True):
        for name, span in spans.items():
            row = parameters()[name]
            ends = []
            for end, x in (("from", middle[name] - span), ("to", middle[name] + span)):
                usual = min(max(round(x / step[name]) * step[name], row.low), row.high)
                text = view_field("scrap", f"{name}.{end}", _end_label(name, end),
                                  placeholder=f"{usual:g}", width=150)  # fmt: skip
                if text and field_fault(name, text):
                    faults.append(Fault(_end_label(name, end), str(field_fault(name, text))))
                    text = ""
                ends.append(parse_number(text) if text else usual)
            if ends[1] <= ends[0]:
                faults.append(Fault(label_of(name), f"must rise, given {ends[0]:g} to {ends[1]:g}"))
            axes[name] = np.linspace(ends[0], ends[1], sizes[name]).tolist()
    if faults:
        raise InputError(faults)
    if middle["hm_Si_pct"] not in axes["hm_Si_pct"]:  # the map of today's silicon is always there
        inside = axes["hm_Si_pct"][0] < middle["hm_Si_pct"] < axes["hm_Si_pct"][-1]
        axes["hm_Si_pct"][1] = middle["hm_Si_pct"] if inside else axes["hm_Si_pct"][1]
    return axes


def _end_label(name: str, end: str) -> str:
    """Label of one end of an axis."""
    what = {"hot_metal_temp_C": "Hot metal, °C", "hm_Si_pct": "Silicon, %"}
    return f"{what.get(name) or label_of(name)}, {end}"


def _map(found: Answer, heats: HeatTable, axes: dict[str, list[float]]) -> pd.DataFrame:
    """The map, worked out once for each heat and axes."""

    def make() -> pd.DataFrame:
        with st.spinner("The map is worked out"):
            # the map gives the scrap share itself, whatever the heat asks for
            free = replace(heats, choices=replace(heats.choices, ask=None))
            return scrap_ratio_map(free, axes["scrap_share_pct"], axes["hot_metal_temp_C"],
                                   axes["hm_Si_pct"])  # fmt: skip

    frame: pd.DataFrame = kept("scrap map", found, repr(axes), make)
    return frame


def _grid_html(table: pd.DataFrame, name: str) -> Any:
    """Temperatures down, scrap shares across; every second share, so that it fits."""
    shares, values = list(table.columns)[::2], table.to_numpy()[:, ::2]
    largest = np.nanmax(np.abs(values), initial=0.0)
    digits = next((k for k, least in enumerate((1000.0, 100.0, 10.0, 1.0)) if largest >= least), 4)
    rows = [
        (f"{temp:.0f} °C", *("–" if np.isnan(x) else f"{x:,.{digits}f}" for x in row))
        for temp, row in zip(table.index, values, strict=True)
    ]
    return table_html(name, ("hot metal", *(f"{share:.1f} %" for share in shares)), rows,
                      wide=True)  # fmt: skip


def _downloads(frame: pd.DataFrame) -> None:
    with st.container(horizontal=True):
        st.download_button("Map as CSV", csv_text(frame), "scrap_ratio.csv", "text/csv",
                           key="scrap_csv", on_click="ignore")  # fmt: skip
        st.download_button(
            "Map as XLSX", partial(xlsx_bytes, {"scrap ratio": frame}),
            "scrap_ratio.xlsx", key="scrap_xlsx", on_click="ignore",
            mime="application/vnd.openxmlformats-officedocument.spreadsheetml.sheet",
        )  # fmt: skip
    put(f"{len(frame)} points; {number_text(float(frame['feasible'].sum()))} can be made.")
