"""Tap and ladle: additions, temperature, oxygen, phosphorus given back, analysis against grade."""

from __future__ import annotations

from functools import partial
from typing import TYPE_CHECKING, Any

import streamlit as st

from converter_calc.page.balance_view import show_figure, solved_or_told
from converter_calc.page.fields import choice_field
from converter_calc.page.markup import formula, heading, note, put, rows_of, table_html
from converter_calc.page.parts import cell, save_tables, why
from converter_calc.page.results import amount
from converter_calc.page.session import (
    answer,
    form,
    guarded,
    kept,
    replace_form,
    theme,
    write_address,
)
from converter_calc.page.tap_fields import (
    FIRST,
    MORE,
    PRICES,
    tap_choices,
    tap_numbers,
    tap_table,
)
from converter_calc.planning.grades import additions, grades
from converter_calc.planning.ladle import ladle_of
from converter_calc.planning.outcome import Outcome
from converter_calc.planning.tap_report import TapResult
from converter_calc.reporting.html_sheet import element
from converter_calc.reporting.tap_charts import (
    drawn_limits,
    limits_figure,
    limits_text,
    steps_figure,
    steps_table,
    steps_text,
)
from converter_calc.reporting.tap_sheet import SAFETY

if TYPE_CHECKING:
    import pandas as pd

#: Figures that can be asked about -> topic of `TapResult.explain`.
TOPICS = {
    "dissolved oxygen in the ladle": "oxygen",
    "deoxidant": "deoxidant",
    "temperature in the ladle": "temperature",
    "phosphorus in the ladle": "phosphorus",
    "additions": "additions",
    "ladle analysis": "analysis",
}
ALWAYS = ("C", "Si", "Mn", "P", "S", "Al")
#: Sign before the words of a mark, so that it is found at a glance without colour.
SIGNS = {"inside": "✓", "below": "▼", "above": "▲", "near lower limit": "↓",
         "near upper limit": "↑"}  # fmt: skip


def tap_view() -> None:
    """The whole view; what is changed in it redraws only it."""
    _fragment()


@st.fragment
def _fragment() -> None:
    guarded(_inputs)
    guarded(_shown)
    write_address()


def _inputs() -> None:
    f = form()
    names = ["", *(grade.name for grade in grades()), *map(str, f.rest.get("grades", {}))]
    choice_field("grade", "Steel grade (gives aims left blank)", names)
    tap_choices()
    tap_numbers(FIRST)
    if tap_table(f).get("ladle_temp_C") and f.fields.get("aim_temp_C", "").strip():
        st.button("Let the plan find the tap temperature for this ladle", key="free_tap_temp",
                  on_click=_free_temperature)  # fmt: skip
    more = st.expander("More of the tap practice", key="tap_more", on_change="rerun")
    if more.open:
        with more:
            tap_numbers(MORE)
    prices = st.expander("Prices of additions, currency/t", key="tap_prices", on_change="rerun")
    if prices.open:
        with prices:
            put("Additions are chosen by least cost among those with a price; without any, in the "
                "shop's order of preference.")  # fmt: skip
            labels = {f"{PRICES}.{name}": name for name in additions()}
            tap_numbers(labels, labels)


def _free_temperature() -> None:
    new = form().copy()
    new.fields["aim_temp_C"] = ""
    replace_form(new)
    write_address()


def _shown() -> None:
    outcome = solved_or_told()
    if outcome is None:
        return
    result: TapResult = kept("tap", answer(), (), partial(_tapped, outcome))
    tap = result.document()["tap"]
    _verdict(result, tap)
    _temperature(tap)
    _additions(tap)
    _analysis(tap)
    _oxygen(tap)
    why("tap", {name: partial(result.explain, topic) for name, topic in TOPICS.items()})
    put(heading("Cautions"), note("note", "", SAFETY))
    save_tables("tap", _sheets(tap), ["additions", "ladle analysis"])


def _tapped(outcome: Outcome) -> TapResult:
    return TapResult(outcome, ladle_of(outcome))


def _verdict(result: TapResult, tap: dict[str, Any]) -> None:
    choice = result.ladle.choice
    put(heading("In the ladle"))
    if not choice.feasible[0]:
        title = f"No additions reach {tap['grade']}; what binds is {choice.binding[0]}"
        freed = [f"freed by: {text}" for text in choice.frees[0]]
        put(note("fault", title, [*freed, "What follows is the nearest that was tried."]))
    spare = tap["temperature_C"] - tap["liquidus_C"]
    rows = [
        ("steel temperature", f"{tap['temperature_C']:,.1f} °C",
         f"{spare:.0f} K above the liquidus of {tap['liquidus_C']:.0f} °C"),
        ("steel in the ladle", f"{amount(tap['steel_kg'])} kg", ""),
        ("dissolved oxygen", f"{tap['dissolved_oxygen_ppm']:.1f} ppm",
         f"killed by {tap['killed_by']}"),
        ("phosphorus given back", f"{tap['phosphorus_returned_pct']:.4f} %",
         "by the slag carried over"),
        ("ladle slag", f"{amount(tap['slag_kg'])} kg", _slag_words(tap)),
    ]  # fmt: skip
    cost = tap["additions_cost_per_t"]
    if cost is not None:
        rows.append(("priced additions, shop currency", f"{cost:,.2f} /t", ""))
    heads = ("in the ladle", "value", "remark")
    put(table_html("in the ladle", heads, rows, numeric={1}, large=True))
    warnings = [f"{w['message']} [{w['field']}]" for w in tap["warnings"]]
    if warnings:
        put(note("note", "Warnings", warnings))


def _slag_words(tap: dict[str, Any]) -> str:
    largest = sorted(tap["slag_pct"].items(), key=lambda item: -item[1])[:4]
    return ", ".join(f"{formula(name)} {x:.0f} %" for name, x in largest if x >= 1.0)


def _temperature(tap: dict[str, Any]) -> None:
    put(heading("Temperature from the end of the blow to the ladle"))
    steps, shade = steps_table(tap), theme()
    figure = kept("tap steps", answer(), shade, lambda: steps_figure(steps, shade))
    show_figure(figure, "tap_steps", steps_text(steps))
    rows = [(row.step, cell(row.change_K, 1, "+"), cell(row.temp_C, 1)) for row in rows_of(steps)]
    put(table_html("temperature steps", ("step", "change, K", "steel, °C"), rows))


def _additions(tap: dict[str, Any]) -> None:
    put(heading("Additions"))
    if not tap["additions"]:
        put("None.")
        return
    rows = [
        (row["name"], cell(row["mass_kg"], 1), cell(row["kg_per_t"], 3), row["for"] or "slag",
         "–" if row["recovery"] is None else f"{100.0 * row['recovery']:.1f}",
         "–" if row["cost"] is None else cell(row["cost"], 0))
        for row in tap["additions"]
    ]  # fmt: skip
    heads = ("addition", "kg", "kg/t", "for", "recovery, %", "cost, currency")
    put(table_html("additions", heads, rows, numeric={1, 2, 4, 5}))


def _analysis(tap: dict[str, Any]) -> None:
    put(heading(f"Ladle analysis against {tap['grade']}"))
    if not tap["limits"]:
        put("No grade is named; choose one above to hold the analysis against it.")
    drawn, shade = drawn_limits(tap["limits"]), theme()
    if drawn:
        figure = kept("tap limits", answer(), shade, lambda: limits_figure(drawn, shade))
        show_figure(figure, "tap_limits", limits_text(drawn))
    heads = ("element", "mass %", "at least", "at most", "against the grade")
    put(table_html("ladle analysis", heads, _analysis_rows(tap), numeric={1, 2, 3}))


def _analysis_rows(tap: dict[str, Any]) -> list[tuple[str, ...]]:
    limits = {row["element"]: row for row in tap["limits"]}
    rows = []
    for el in dict.fromkeys([*ALWAYS, *limits, *tap["steel_pct"]]):
        x, row = tap["steel_pct"].get(el, 0.0), limits.get(el)
        if el == "Fe" or (row is None and x < 5e-5):
            continue
        low, high = (None, None) if row is None else (row["min_pct"], row["max_pct"])
        mark = "" if row is None else f"{SIGNS.get(row['mark'], '')} {row['mark']}".strip()
        unknown = row is not None and row["pct"] is None
        rows.append(
            (
                f"[{el}]",
                "–" if unknown else f"{x:.4f}",
                *("" if side is None else f"{side:g}" for side in (low, high)),
                mark,
            )
        )
    return rows


def _oxygen(tap: dict[str, Any]) -> None:
    put(heading("Oxygen and the deoxidant"))
    rows = [
        (name, cell(kg, 1, "+")) for name, kg in tap["oxygen_account_kg"].items() if abs(kg) >= 0.05
    ]
    rows.append(("stays dissolved", f"{tap['dissolved_oxygen_ppm']:.1f} ppm"))
    put(table_html("oxygen of the tap", ("oxygen", "kg"), rows))
    worst = max((abs(x), name) for name, x in tap["closure"].items())
    put(element("p", f"Balance of the tap: worst relative closure {worst[0]:.1e} ({worst[1]})."))


def _sheets(tap: dict[str, Any]) -> dict[str, pd.DataFrame]:
    import pandas as pd

    analysis = pd.DataFrame(
        _analysis_rows(tap), columns=["element", "mass_pct", "min_pct", "max_pct", "mark"]
    )
    analysis["mass_pct"] = [
        tap["steel_pct"].get(name.strip("[]"), 0.0) for name in analysis["element"]
    ]
    return {
        "additions": pd.DataFrame(tap["additions"]),
        "ladle analysis": analysis,
        "temperature": steps_table(tap),
        "oxygen": pd.DataFrame(tap["oxygen_account_kg"].items(), columns=["oxygen", "kg"]),
        "ladle slag": pd.DataFrame(tap["slag_pct"].items(), columns=["oxide", "mass_pct"]),
    }
