"""Pictures of phosphorus: limits on the lime curve, cost of the last of it, measured heats."""

from __future__ import annotations

from collections.abc import Sequence
from typing import TYPE_CHECKING, Any

import numpy as np

from converter_calc.metallurgy.lime_limits import LimeLimits, LimeMark
from converter_calc.metallurgy.marginal_cost import MarginalCost
from converter_calc.planning.lime_sweeps import LimeLines
from converter_calc.reporting.charts import PALETTE, axis, layout, themed
from converter_calc.reporting.sweep_charts import lime_band, lime_figure, lime_text

if TYPE_CHECKING:
    import pandas as pd
    import plotly.graph_objects as go

#: Marks nearer than this on the axis are drawn in the next row, so that no two numbers overlap.
ROW_SHARE = 0.035
#: Panels of the marginal cost: column, title with unit, colour.
MARGINAL = (
    ("d_lime_kg", "more lime, kg", "blue"),
    ("d_iron_kg", "more iron lost to slag, kg", "grey"),
    ("d_cost", "cost a heat, currency", "orange"),
)


def numbered(limits: LimeLimits) -> list[tuple[int, LimeMark]]:
    """The limits that this heat has, numbered by rising lime as in the picture."""
    return list(enumerate((m for m in limits.marks if np.isfinite(m.lime_kg)), start=1))


def limits_figure(
    curve: pd.DataFrame,
    lines: LimeLines,
    limits: LimeLimits,
    theme: str = "light",
    width: int | None = None,
) -> go.Figure:
    """The lime picture with the limits as numbered marks on the curve of the chosen law.

    curve, lines : of `lime_sweeps`; limits : of `lime_limits`, for the same heat. The numbers
    are those of `numbered`, whose table stands beside the picture.
    """
    text, grid = themed(theme)
    figure = lime_figure(curve, lines, theme, width)
    low, high = float(curve["lime_kg"].min()), float(curve["lime_kg"].max())
    shown = [(k, mark) for k, mark in numbered(limits) if low <= mark.lime_kg <= high]
    aim_shapes = [shape for shape in figure.layout.shapes if shape.y0 == shape.y1]
    aim_notes = [note for note in figure.layout.annotations if note.xref == "paper"]
    shapes = [
        {"type": "line", "x0": mark.lime_kg, "x1": mark.lime_kg, "y0": 0, "y1": 1,
         "yref": "paper", "line": {"dash": "dot", "width": 1.2, "color": text}}
        for _, mark in shown
    ]  # fmt: skip
    rows = _rows([(mark.lime_kg - low) / (high - low) for _, mark in shown])
    notes = [
        {"x": mark.lime_kg, "y": 1.0, "yref": "paper", "yshift": -20 * row, "text": f"<b>{k}</b>",
         "showarrow": False, "xanchor": "center", "yanchor": "top", "borderpad": 2,
         "bordercolor": text, "bgcolor": "#ffffff" if theme == "light" else "#0e1117"}
        for row, (k, mark) in zip(rows, shown, strict=True)
    ]  # fmt: skip
    # assigned, not updated: an update would merge them with those of before, one by one
    figure.layout.shapes = [*aim_shapes, *shapes]
    figure.layout.annotations = [*aim_notes, *notes]
    if shown:
        figure.add_scatter(
            x=[mark.lime_kg for _, mark in shown], y=[mark.end_P_pct for _, mark in shown],
            mode="markers", name="limits, numbered as in the table",
            marker={"size": 8, "color": text, "line": {"width": 1, "color": grid}},
            customdata=[[k, mark.label] for k, mark in shown],
            hovertemplate="%{customdata[0]}: %{customdata[1]}<br>%{x:,.0f} kg, %{y:.4f} % P"
            "<extra></extra>",
        )  # fmt: skip
    return figure


def _rows(places: Sequence[float]) -> list[int]:
    """Row of each number: the first in which it has room (places rise from 0 to 1)."""
    ends: list[float] = []
    found = []
    for place in places:
        row = next((k for k, end in enumerate(ends) if place - end >= ROW_SHARE), len(ends))
        ends[row : row + 1] = [place]
        found.append(row)
    return found


def limits_text(curve: pd.DataFrame, lines: LimeLines, limits: LimeLimits) -> str:
    """The lime picture and its limits in words."""
    parts = [f"{k} {mark.label} at {mark.lime_kg:,.0f} kg" for k, mark in numbered(limits)]
    told = f" Limits: {'; '.join(parts)}." if parts else ""
    return lime_text(curve, lines) + told


def band_at(curve: pd.DataFrame, every: int = 2) -> pd.DataFrame:
    """The band of all laws at every so many points of the curve."""
    return lime_band(curve).iloc[::every]


def marginal_columns(table: pd.DataFrame) -> pd.DataFrame:
    """The table of `marginal_table` with all iron lost to slag, oxide and droplets, in one."""
    return table.assign(d_iron_kg=table["d_iron_to_slag_kg"] + table["d_droplets_kg"])


def marginal_figure(
    table: pd.DataFrame, cost: MarginalCost, theme: str = "light", width: int | None = None
) -> go.Figure:
    """What the next 0.001 % P costs against the aim: lime, iron, money, a panel each.

    table, cost : of `marginal_cost`; the aim of the heat is the dashed line.
    """
    from plotly.subplots import make_subplots

    text, _ = themed(theme)
    shown = marginal_columns(table)
    panels = [panel for panel in MARGINAL if np.isfinite(shown[panel[0]]).any()]
    figure = make_subplots(
        rows=1, cols=max(len(panels), 1), horizontal_spacing=0.07,
        subplot_titles=[title for _, title, _ in panels],
    )  # fmt: skip
    figure.update_layout(layout(theme, 320, width), margin={"l": 10, "r": 10, "t": 56, "b": 10})
    for col, (column, title, colour) in enumerate(panels, start=1):
        figure.add_scatter(
            x=shown["aim_P_pct"], y=shown[column], mode="lines+markers", row=1, col=col,
            line={"width": 3, "color": PALETTE[colour]}, marker={"size": 6},
            hovertemplate="aim %{x:.4f} % P<br>" + title + ": %{y:,.1f}<extra></extra>",
        )  # fmt: skip
        figure.update_xaxes(axis(theme, "aim, % P", nticks=5), row=1, col=col)
        figure.update_yaxes(axis(theme, "", rangemode="tozero"), row=1, col=col)
        figure.add_vline(x=cost.aim_P_pct, row=1, col=col,
                         line={"dash": "dash", "width": 1.5, "color": text})  # fmt: skip
    return figure


def marginal_text(table: pd.DataFrame, cost: MarginalCost) -> str:
    """The marginal cost in one sentence."""
    solved = marginal_columns(table)
    solved = solved[solved["status"] == "solved"]
    start = f"What {cost.step_pct:g} % less phosphorus costs against the aim: "
    if solved.empty:
        return start + "no aim has a plan."
    parts = [
        f"{row['d_lime_kg']:,.0f} kg of lime and {row['d_iron_kg']:,.0f} kg of iron at an aim of "
        f"{row['aim_P_pct']:.4f} %"
        for row in (solved.iloc[0], solved.iloc[-1])
    ]
    return start + ", ".join(parts) + "."


def measured_figure(
    tests: pd.DataFrame, law: str, theme: str = "light", width: int | None = None
) -> go.Figure:
    """End phosphorus by a law against the measured, on heats it was not fitted to.

    tests : of a `LawRanking`. law : one that was tested.
    """
    import plotly.graph_objects as go

    text, _ = themed(theme)
    part = tests[tests["law"] == law]
    most, beyond = _reach(part)
    more = f" ({beyond} beyond the picture)" if beyond else ""
    figure = go.Figure(layout=layout(theme, 420, width, legend=True))
    figure.add_scatter(
        x=part["measured_P_pct"], y=part["calculated_P_pct"], mode="markers",
        name=f"heats, {law}{more}", marker={"size": 6, "color": PALETTE["blue"], "opacity": 0.75},
        hovertemplate="measured %{x:.4f} %<br>calculated %{y:.4f} %<extra></extra>",
    )  # fmt: skip
    figure.add_scatter(
        x=[0.0, most], y=[0.0, most], mode="lines", name="equal", hoverinfo="skip",
        line={"dash": "dash", "width": 1.5, "color": text},
    )  # fmt: skip
    figure.update_layout(
        xaxis=axis(theme, "measured end phosphorus, mass %", range=[0.0, most]),
        yaxis=axis(theme, "calculated, mass %", range=[0.0, most]),
    )
    return figure


def _reach(part: pd.DataFrame) -> tuple[float, int]:
    """End of both axes [mass %], so that one wild analysis hides no other; heats beyond it."""
    both = part[["measured_P_pct", "calculated_P_pct"]].to_numpy(float)
    most = 1.4 * float(np.quantile(both, 0.98)) if both.size else 0.01
    return most, int((both.max(axis=1, initial=0.0) > most).sum())


def measured_text(tests: pd.DataFrame, law: str) -> str:
    """Measured against calculated phosphorus in one sentence."""
    part = tests[tests["law"] == law]
    error: Any = (part["calculated_P_pct"] - part["measured_P_pct"]).abs().mean()
    return (
        f"Calculated against measured end phosphorus of {len(part)} heats by {law}: mean absolute "
        f"error {float(error):.5f} %; {_reach(part)[1]} of them beyond the picture."
    )
