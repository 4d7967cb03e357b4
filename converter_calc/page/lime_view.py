"""Lime and phosphorus: curve and limits, all laws, cost of the last of it, fluxes, the log."""

from __future__ import annotations

from collections.abc import Callable
from functools import partial
from typing import Any

import numpy as np
import streamlit as st

from converter_calc.balance.heats import HeatTable
from converter_calc.basis.errors import Fault, InputError
from converter_calc.metallurgy.lime_limits import LimeLimits, LimeMark, lime_limits
from converter_calc.page.address import keep_in_address
from converter_calc.page.balance_view import show_figure
from converter_calc.page.flux_part import flux_part
from converter_calc.page.laws_part import laws_part, measured_part
from converter_calc.page.margin_part import margin_part
from converter_calc.page.markup import heading, listed, note, put, table_html
from converter_calc.page.numbers import number_text, parse_number
from converter_calc.page.parts import cell, part_of, right_heat, save_tables, why
from converter_calc.page.session import (
    Answer,
    answer,
    form,
    guarded,
    kept,
    replace_form,
    theme,
    view_field,
    write_address,
)
from converter_calc.planning.explain import Explanation
from converter_calc.planning.lime_sweeps import (
    LimeLines,
    lime_curve,
    lime_lines,
    phosphorus_effects,
)
from converter_calc.planning.outcome import at
from converter_calc.reporting.html_sheet import element
from converter_calc.reporting.phosphorus_charts import (
    band_at,
    limits_figure,
    limits_text,
    numbered,
)
from converter_calc.reporting.sweep_charts import EFFECTS, effect_figure, effect_text

POINTS = 25
MOST_LIME_KG = 100_000.0
PARTS = {
    "curve": "Lime curve, limits and laws",
    "margin": "Cost of low phosphorus",
    "fluxes": "Choice of fluxes",
    "measured": "Laws against measured heats",
}
keep_in_address("lime", ("from", "to", "part"))


def lime_view() -> None:
    """The whole view; what is changed in it redraws only it."""
    _lime_fragment()


@st.fragment
def _lime_fragment() -> None:
    guarded(_lime)


def _lime() -> None:
    found = answer()
    if not right_heat(found, planned=True):
        return
    part = part_of("lime", PARTS)
    shown: dict[str, Callable[[Answer], None]] = {
        "curve": _curve, "margin": margin_part, "fluxes": flux_part, "measured": measured_part,
    }  # fmt: skip
    shown[part](found)


def _curve(found: Answer) -> None:
    if found.heats is None:
        return
    usual = 8000.0
    if found.outcome is not None:
        kg = found.outcome.charged_kg.get(found.heats.choices.lime, 0.0)
        usual = max(float(at(kg, 0)), 1000.0)
    low, high = _range(0.5 * usual, 2.0 * usual)
    curve, lines, effects, limits = _worked_out(found, found.heats, low, high)
    put(heading("End phosphorus against lime"))
    shade = theme()
    figure = kept("lime figure", found, (low, high, shade),
                  lambda: limits_figure(curve, lines, limits, shade))  # fmt: skip
    show_figure(figure, "lime_curve", limits_text(curve, lines, limits))
    _carry_back(lines)
    _limits(limits)
    laws_part(found)
    _band(curve)
    put(heading("What else moves phosphorus"))
    put("Lime holds the basicity of the plan while one thing changes; the law is the chosen one.")
    for kind, table in effects.items():
        _effect(found, kind, table)
    save_tables("lime", {"curves": curve, "limits": limits.curve})


def _effect(found: Answer, kind: str, table: Any) -> None:
    shade = theme()
    put(heading("Against " + EFFECTS[kind][1]))
    figure = kept("effect", found, (kind, shade),
                  partial(effect_figure, table, kind, shade))  # fmt: skip
    show_figure(figure, "effect_" + kind, effect_text(table, kind))
    column, title = EFFECTS[kind]
    rows = [
        (f"{row[column]:,.4g}", f"{row['end_P_pct']:.4f}", f"{row['L_P']:.1f}",
         f"{row['lime_kg']:,.0f}")
        for row in table.to_dict("records")
    ]  # fmt: skip
    put(table_html(kind, (title, "end phosphorus, mass %", "L_P", "lime, kg"), rows))


def _limits(limits: LimeLimits) -> None:
    """The limits by number as in the picture, then those that this heat does not meet."""
    put(heading("Limits on the lime axis"))
    rows = [
        (f"{k}  {mark.label}", cell(mark.lime_kg, 0), cell(mark.end_P_pct, 4),
         cell(mark.basicity, 2), cell(mark.slag_kg, 0), cell(mark.scrap_kg, 0), mark.note)
        for k, mark in numbered(limits)
    ]  # fmt: skip
    heads = ("limit", "lime, kg", "end P, %", "CaO/SiO₂", "slag, kg", "scrap, kg", "what it means")
    put(table_html("limits", heads, rows, numeric=range(1, 6)))
    absent = [f"{m.label}: {m.note}" for m in limits.marks if not np.isfinite(m.lime_kg)]
    if absent:
        put(element("p", "Not met by this heat:"), listed(absent))
    reasons = {mark.label: partial(_mark_reason, mark) for _, mark in numbered(limits)}
    why("limits", reasons, "Why this limit")


def _mark_reason(mark: LimeMark) -> Explanation:
    reason = mark.note or "Solved for in the balance, scrap and magnesia flux following."
    return Explanation(mark.label, mark.lime_kg, "kg", reason[:1].upper() + reason[1:] + ".",
                       list(mark.terms))  # fmt: skip


def _range(low: float, high: float) -> tuple[float, float]:
    """The range of lime: about the plan's at first, then as typed [kg]."""
    ends, faults = [], []
    with st.container(horizontal=True):
        for end, label, about in (("from", "Lime from, kg", low), ("to", "Lime to, kg", high)):
            usual = round(about, -2)
            text = view_field("lime", end, label, placeholder=f"{usual:g}", width=150).strip()
            x = usual
            if text:
                try:
                    x = parse_number(text)
                except ValueError as error:
                    faults.append(Fault(label, str(error)))
                if not 0.0 <= x <= MOST_LIME_KG:
                    faults.append(Fault(label, f"{x:g} is outside 0 to {MOST_LIME_KG:g} kg"))
            ends.append(x)
    if not faults and ends[1] <= ends[0]:
        faults.append(Fault("Lime to, kg", "must be more than where the range starts"))
    if faults:
        raise InputError(faults)
    return ends[0], ends[1]


def _worked_out(
    found: Answer, heats: HeatTable, low: float, high: float
) -> tuple[Any, LimeLines, Any, LimeLimits]:
    def make() -> tuple[Any, LimeLines, Any]:
        curve = lime_curve(heats, np.linspace(low, high, POINTS))
        return curve, lime_lines(heats, curve), phosphorus_effects(heats)

    with st.spinner("The curves are worked out"):
        made: tuple[Any, LimeLines, Any] = kept("lime", found, (low, high), make)
        limits: LimeLimits = kept("lime limits", found, (), partial(lime_limits, heats))
    return (*made, limits)


def _carry_back(lines: LimeLines) -> None:
    """The lime for the aim, and one click that puts it into the plan."""
    kg = lines.for_aim_kg.get(lines.law, np.nan)
    name = lines.lime.replace("_", " ")
    if not np.isfinite(kg):
        why = "the heat has no phosphorus aim" if np.isnan(lines.aim_P_pct) else (
            "no lime that dissolves meets the phosphorus aim")  # fmt: skip
        put(note("note", f"Nothing to carry to the plan: {why}."))
        return
    text = f"{kg:,.0f} kg of {name} meet the aim of {lines.aim_P_pct:.4g} % P by {lines.law}."
    if np.isfinite(lines.least_basicity_kg) and kg < lines.least_basicity_kg:
        text += f" The least basicity asks for more: {lines.least_basicity_kg:,.0f} kg."
    put(text)
    st.button(f"Plan with {kg:,.0f} kg of {name}", key="carry_lime", on_click=_carry,
              args=(f"{lines.lime}_kg", kg))  # fmt: skip
    if form().fields.get(f"{lines.lime}_kg"):
        st.button("Let the plan find the lime again", key="free_lime", on_click=_carry,
                  args=(f"{lines.lime}_kg", None))  # fmt: skip


def _carry(name: str, kg: float | None) -> None:
    new = form().copy()
    new.fields[name] = "" if kg is None else number_text(round(kg))
    replace_form(new)
    write_address()


def _band(curve: Any) -> None:
    rows = [
        (f"{row['lime_kg']:,.0f}", *(cell(row[name], 4) for name in
                                     ("chosen_P_pct", "lowest_P_pct", "highest_P_pct")))
        for row in band_at(curve).to_dict("records")
    ]  # fmt: skip
    put(heading("The chosen law and the spread of all"))
    put(table_html("laws", ("lime, kg", "chosen law, % P", "lowest, % P", "highest, % P"), rows))
