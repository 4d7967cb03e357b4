"""What the last 0.001 % of phosphorus costs: numbers at the aim, and the curve against it."""

from __future__ import annotations

from functools import partial
from typing import Any

import streamlit as st

from converter_calc.metallurgy.marginal_cost import (
    QUANTITIES,
    MarginalCost,
    marginal_cost,
    marginal_table,
)
from converter_calc.page.balance_view import show_figure
from converter_calc.page.markup import heading, note, put, rows_of, table_html
from converter_calc.page.parts import cell, save_tables, shown_unit, why
from converter_calc.page.session import Answer, kept, theme
from converter_calc.planning.explain import Explanation
from converter_calc.reporting.phosphorus_charts import (
    marginal_columns,
    marginal_figure,
    marginal_text,
)


def margin_part(found: Answer) -> None:
    """The cost of low phosphorus of the heat in the fields."""
    if found.heats is None:
        return
    with st.spinner("The cost is worked out"):
        cost: MarginalCost = kept("marginal", found, (), partial(marginal_cost, found.heats))
        table = kept("marginal table", found, (), partial(marginal_table, found.heats))
    put(heading(f"What {cost.step_pct:g} % less phosphorus costs"))
    put(_verdict(cost))
    shade = theme()
    figure = kept("marginal figure", found, shade, lambda: marginal_figure(table, cost, shade))
    show_figure(figure, "marginal", marginal_text(table, cost))
    if cost.binding:
        rows = [(label, cell(cost.change[key], 3 if key.endswith("per_t") else 1, "+"),
                 shown_unit(unit)) for key, (label, unit) in QUANTITIES.items()]  # fmt: skip
        rows.append(("a heat, steel not tapped counted", cell(cost.cost, 2, "+"), "currency"))
        put(table_html("marginal cost", ("at the aim", "change", "unit"), rows, numeric={1}))
    if cost.unpriced:
        put(note("note", f"Without a price, so not in the cost: {', '.join(cost.unpriced)}."))
    put(heading("Against the aim"))
    put(_table_html(table))
    why("marginal", {f"{cost.step_pct:g} % less phosphorus": partial(_reason, cost)})
    save_tables("marginal", {"marginal cost": table})


def _verdict(cost: MarginalCost) -> str:
    if cost.binding:
        return (
            f"The phosphorus aim of {cost.aim_P_pct:.4g} % sets the lime; one more step down costs:"
        )
    return (
        f"At this aim of {cost.aim_P_pct:.4g} % nothing: the least basicity sets the lime, and the "
        f"steel ends at {cost.end_P_pct:.4f} % P. The curve shows from which aim on it costs."
    )


def _reason(cost: MarginalCost) -> Explanation:
    reason = (
        "The slope of the plan at its answer, every balance closed: scrap, oxygen and flux follow "
        "the lime, and steel that is not tapped is valued at its own cost."
    )
    return Explanation("cost", cost.cost, "currency a heat", reason, cost.terms())


def _table_html(table: Any) -> Any:
    rows = []
    for row in rows_of(marginal_columns(table)):
        first = cell(row.aim_P_pct, 4)
        if row.status != "solved":
            rows.append((first, "no plan", *[""] * 6))
            continue
        rows.append((first, cell(row.lime_kg, 0), cell(row.slag_kg, 0), cell(row.d_lime_kg, 0, "+"),
                     cell(row.d_iron_kg, 0, "+"), cell(row.d_scrap_kg, 0, "+"),
                     cell(row.d_oxygen_Nm3, 1, "+"), cell(row.d_cost, 0, "+")))  # fmt: skip
    heads = ("aim, % P", "lime, kg", "slag, kg", "more lime, kg", "iron to slag, kg", "scrap, kg",
             "oxygen, Nm³", "cost a heat, currency")  # fmt: skip
    return table_html("cost against the aim", heads, rows)
