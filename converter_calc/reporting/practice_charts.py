"""Pictures of the slag practices and of where each element goes. Table in, figure out."""

from __future__ import annotations

from typing import TYPE_CHECKING, Any

import numpy as np

from converter_calc.metallurgy.practices_comparison import TITLES
from converter_calc.reporting.charts import PALETTE, axis, layout, themed

if TYPE_CHECKING:
    import pandas as pd
    import plotly.graph_objects as go

#: Panels of the practices: column, title with unit, decimals of the text at the bar.
PANELS = (
    ("end_P_pct", "end phosphorus, %", 4),
    ("lime_kg", "lime, kg", 0),
    ("slag_made_kg_per_t", "slag made, kg/t", 1),
    ("scrap_kg", "scrap, kg", 0),
    ("iron_lost_kg_per_t", "iron lost, kg/t", 1),
    ("cost_per_t", "priced items, currency/t", 1),
)
COLUMNS = 3
#: Destination of an element -> colour; droplets and ejections are metal that is not tapped.
SHARE_COLOURS = {
    "steel": "orange", "slag": "green", "gas": "plum", "dust": "sky", "droplets": "yellow",
    "ejections": "blue", "undissolved": "grey",
}  # fmt: skip


def practices_figure(
    table: pd.DataFrame, theme: str = "light", width: int | None = None
) -> go.Figure:
    """Practices of one heat as small bars, a panel a quantity (PANELS).

    table : of `Comparison.table` for one heat. Practices without a plan have no bar; what has
    no number at all (no price) has no panel.
    """
    from plotly.subplots import make_subplots

    panels = [panel for panel in PANELS if np.isfinite(table[panel[0]].to_numpy(float)).any()]
    names = [TITLES[name] for name in table["practice"]]
    solved = (table["status"] == "solved").to_numpy()
    rows = max(1, -(-len(panels) // COLUMNS))
    figure = make_subplots(
        rows=rows, cols=COLUMNS, shared_yaxes=True, horizontal_spacing=0.04,
        vertical_spacing=0.36 / rows, subplot_titles=[title for _, title, _ in panels],
    )  # fmt: skip
    figure.update_layout(layout(theme, 86 + 165 * rows, width))
    figure.update_layout(bargap=0.35, margin={"l": 10, "r": 10, "t": 56, "b": 10})
    for place, (column, title, digits) in enumerate(panels):
        row, col = place // COLUMNS + 1, place % COLUMNS + 1
        x = np.where(solved, table[column].to_numpy(float), np.nan)
        figure.add_bar(
            y=names, x=x.tolist(), orientation="h", row=row, col=col,
            marker={"color": PALETTE["blue"]}, cliponaxis=False, textposition="outside",
            text=[f"{v:,.{digits}f}" if np.isfinite(v) else "no plan" for v in x],
            hovertemplate="%{y}<br>" + title + ": %{text}<extra></extra>",
        )  # fmt: skip
        most = float(np.nanmax(x, initial=0.0)) or 1.0
        figure.update_xaxes(axis(theme, "", range=[0.0, 1.45 * most], nticks=4), row=row, col=col)
        figure.update_yaxes(axis(theme, "", showgrid=False, autorange="reversed"), row=row, col=col)
    return figure


def practices_text_of(table: pd.DataFrame) -> str:
    """The practices in one sentence."""
    parts = []
    for row in table.to_dict("records"):
        title = TITLES[row["practice"]]
        if row["status"] != "solved":
            parts.append(f"{title} no plan")
            continue
        parts.append(
            f"{title} {row['end_P_pct']:.4f} % P with {row['lime_kg']:,.0f} kg of lime and "
            f"{row['slag_made_kg_per_t']:.1f} kg/t of slag"
        )
    return "Practices on the same hot metal: " + "; ".join(parts) + "."


def shares_figure(frame: pd.DataFrame, theme: str = "light", width: int | None = None) -> go.Figure:
    """Where each element goes, as bars that fill 100 % of what was charged.

    frame : of `ElementShares.frame`.
    """
    import plotly.graph_objects as go

    text, _ = themed(theme)
    bars: list[Any] = []
    for place, colour in SHARE_COLOURS.items():
        share = frame[f"{place}_pct"]
        if not (share > 0.0).any():
            continue
        bars.append(
            go.Bar(
                y=frame["element"].tolist(), x=share.tolist(), name=place, orientation="h",
                customdata=frame[f"{place}_kg"].tolist(),
                marker={"color": PALETTE[colour], "line": {"width": 0.5, "color": "#ffffff"}},
                hovertemplate="%{y} to " + place + "<br>%{x:.2f} % of the input<br>"
                "%{customdata:,.2f} kg<extra></extra>",
            )
        )  # fmt: skip
    figure = go.Figure(bars, layout(theme, 120 + 32 * len(frame), width, legend=True))
    figure.update_layout(
        barmode="stack", font={"color": text},
        legend={"traceorder": "normal"},
        xaxis=axis(theme, "share of the element charged, %", range=[0.0, 100.5], dtick=20),
        yaxis=axis(theme, "element", autorange="reversed", type="category"),
    )  # fmt: skip
    return figure


def shares_text_of(frame: pd.DataFrame) -> str:
    """Where the elements go in one sentence: the largest place of each."""
    parts = []
    for row in frame.to_dict("records"):
        shares = {place: float(row[f"{place}_pct"]) for place in SHARE_COLOURS}
        place = max(shares, key=lambda name: shares[name])
        parts.append(f"{row['element']} {shares[place]:.1f} % to {place}")
    return f"Where each element goes: {', '.join(parts)}."
