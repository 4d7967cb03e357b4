"""Heat and element balance: pictures, the same numbers as tables, and how well it closes."""

from __future__ import annotations

from collections.abc import Callable
from typing import Any

import streamlit as st

from converter_calc.page.markup import heading, note, put, rows_of, table_html
from converter_calc.page.session import answer, guarded, kept, theme
from converter_calc.planning.outcome import Outcome
from converter_calc.reporting import charts, tables

GROUPS = ("brought in", "reactions", "carried away", "loss")
#: No toolbar logo, no sending to a cloud; the picture can be saved.
CHART = {
    "displaylogo": False,
    "modeBarButtonsToRemove": ["lasso2d", "select2d", "autoScale2d"],
    "toImageButtonOptions": {"format": "svg"},
}


def show_figure(figure: Any, key: str, text: str) -> None:
    """A picture with a sentence for those who cannot see it."""
    st.plotly_chart(figure, key=key, theme=None, config=CHART, alt=text, width="stretch")


def solved_or_told() -> Outcome | None:
    """The solved heat, or a message that there is none and where to see why."""
    outcome = answer().outcome
    if outcome is None:
        put(note("fault", "The heat has no answer as it stands; see Plan a heat."))
    return outcome


def balance_view() -> None:
    """The whole view."""
    outcome = solved_or_told()
    if outcome is None:
        return
    guarded(lambda: _heat(outcome))
    guarded(lambda: _elements(outcome))


def _figure(name: str, make: Callable[[str], Any]) -> Any:
    """A figure of today's heat in the theme of the browser."""
    shade = theme()
    return kept(name, answer(), shade, lambda: make(shade))


def _heat(outcome: Outcome) -> None:
    flows = tables.heat_flow_table(outcome)
    put(heading("Where the heat comes from and where it goes"))
    put("Heat above 25 °C; what takes heat stands on the right. Shares are of the heat supplied.")
    figure = _figure("heat flow", lambda shade: charts.heat_flow_figure(flows, shade))
    show_figure(figure, "heat_flow", charts.heat_flow_text(flows))
    put(heading("Heat in and out"))
    figure = _figure("heat bars", lambda shade: charts.heat_bars_figure(flows, shade))
    show_figure(figure, "heat_bars", charts.heat_bars_text(flows))
    terms = tables.heat_balance_table(outcome)
    terms = terms.sort_values("group", key=lambda names: names.map(GROUPS.index), kind="stable")
    rows = [
        (f"{row.term}", row.group, f"{row.heat_MJ:,.1f}", f"{row.heat_MJ_per_t:,.2f}",
         f"{row.share_pct:.2f}")
        for row in rows_of(terms)
    ]  # fmt: skip
    put(heading("Heat balance, term by term"))
    headings = ("term", "group", "MJ", "MJ/t steel", "% of heat supplied")
    put(table_html("heat balance", headings, rows, numeric=2))
    closure = tables.energy_closure(outcome)
    put(
        f"Energy in {closure['in_MJ']:,.1f} MJ and out {closure['out_MJ']:,.1f} MJ (zero: pure "
        f"elements at 25 °C), loss included; relative closure {closure['relative']:.1e}."
    )


def _elements(outcome: Outcome) -> None:
    table = tables.element_balance_table(outcome)
    put(heading("Where each element goes"))
    figure = _figure("elements", lambda shade: charts.element_figure(table, theme=shade))
    show_figure(figure, "elements", charts.element_text(table))
    places = [name for name in table.columns if name.startswith("to ")]
    rows = [
        (row["element"], f"{row['in_kg']:,.2f}", f"{row['out_kg']:,.2f}",
         f"{row['relative_closure']:.1e}", *(f"{row[place]:.2f}" for place in places))
        for row in table.to_dict("records")
    ]  # fmt: skip
    put(heading("Element balance"))
    headings = ("element", "in, kg", "out, kg", "relative closure", *(f"% {p}" for p in places))
    put(table_html("element balance", headings, rows, wide=True))
