"""Pictures of the learning from a log: misses in time, predicted against measured, drift.

Table in, plotly figure out. Themes, colours and widths as in `charts`.
"""

from __future__ import annotations

from collections.abc import Sequence
from typing import TYPE_CHECKING, Any

from converter_calc.reporting.charts import PALETTE, axis, faded, layout

if TYPE_CHECKING:
    import pandas as pd
    import plotly.graph_objects as go

#: How each quantity is written on an axis.
TITLES = {
    "end_temp_C": "end temperature, °C",
    "end_C_pct": "end carbon, mass %",
    "end_P_pct": "end phosphorus, mass %",
    "end_Mn_pct": "end manganese, mass %",
}
#: Colour and marker of each method; told apart without colour too.
METHOD_STYLES = {
    "untuned": ("grey", "x-thin-open"),
    "tuned": ("sky", "circle-open"),
    "with drift": ("orange", "diamond-open"),
    "with residual": ("blue", "circle"),
    "linear regression": ("plum", "square-open"),
    "gradient boosting": ("green", "triangle-up-open"),
}
#: Colours that stand in for those too dark to be seen on a dark page.
ON_DARK = {"blue": "sky", "sky": "blue", "plum": "yellow"}
DASHES = ("solid", "dash", "dot", "dashdot")
#: Heats in the running mean of the misses.
RUNNING = 25
#: A longer time without a heat is a pause: a repair, a new lining [days].
PAUSE_DAYS = 5


def shade(colour: str, theme: str) -> str:
    """A colour of the palette (#rrggbb) as it is seen on a page of a theme."""
    return PALETTE[ON_DARK.get(colour, colour) if theme == "dark" else colour]


def method_style(method: str, theme: str = "light") -> tuple[str, str]:
    """Colour (#rrggbb) and marker of a method on a page of a theme."""
    colour, marker = METHOD_STYLES.get(method, ("yellow", "cross"))
    return shade(colour, theme), marker


def misses_figure(
    heats: pd.DataFrame,
    quantity: str,
    methods: Sequence[str],
    theme: str = "light",
    width: int | None = None,
) -> go.Figure:
    """Misses of one quantity in time: running mean of predicted less observed, a line a method.

    heats : of `Proof.heats`: tapped_at, quantity, method, observed, predicted.
    """
    import plotly.graph_objects as go

    figure = go.Figure()
    for place, method in enumerate(methods):
        rows = heats[(heats["quantity"] == quantity) & (heats["method"] == method)]
        rows = rows.dropna(subset=["observed", "predicted"])
        miss = rows["predicted"] - rows["observed"]
        running = miss.rolling(RUNNING, min_periods=RUNNING // 2, center=True).median()
        times, running = _broken(rows["tapped_at"], running)
        colour, _ = method_style(method, theme)
        figure.add_trace(
            go.Scatter(
                x=times, y=running, name=method, mode="lines",
                line={"color": colour, "width": 2, "dash": DASHES[place % len(DASHES)]},
                hovertemplate=f"{method}<br>%{{x|%Y-%m-%d}}: %{{y:.4g}}<extra></extra>",
            )
        )  # fmt: skip
    figure.update_layout(
        **layout(theme, 300, width, legend=True),
        xaxis=axis(theme, "tapped at"),
        yaxis=axis(theme, f"running median miss of {RUNNING} heats<br>{TITLES[quantity]}"),
    )
    return figure


def _broken(times: pd.Series[Any], values: pd.Series[Any]) -> tuple[Any, Any]:
    """Times and values with a blank in every pause of the log, so that no line spans it."""
    import numpy as np

    x, y = times.to_numpy(), values.to_numpy(dtype=float)
    pauses = np.flatnonzero(np.diff(x) > np.timedelta64(PAUSE_DAYS, "D")) + 1
    return np.insert(x, pauses, x[pauses - 1]), np.insert(y, pauses, np.nan)


def measured_figure(
    heats: pd.DataFrame, quantity: str, method: str, theme: str = "light", width: int | None = None
) -> go.Figure:
    """Predicted against measured, a point a heat, with the line on which both are equal."""
    import plotly.graph_objects as go

    rows = heats[(heats["quantity"] == quantity) & (heats["method"] == method)]
    rows = rows.dropna(subset=["observed", "predicted"])
    colour, marker = method_style(method, theme)
    both = [float(rows[["observed", "predicted"]].quantile(q).agg(e))
            for q, e in ((0.002, "min"), (0.998, "max"))]  # fmt: skip
    figure = go.Figure(
        [
            go.Scatter(
                x=rows["observed"], y=rows["predicted"], mode="markers", name=method,
                customdata=rows["heat_id"],
                marker={"color": faded(colour, 0.55), "size": 5, "symbol": marker},
                hovertemplate="%{customdata}: measured %{x:.4g}, predicted %{y:.4g}<extra></extra>",
            ),
            go.Scatter(
                x=both, y=both, mode="lines", name="equal", hoverinfo="skip",
                line={"color": PALETTE["grey"], "width": 1.5, "dash": "dash"},
            ),
        ]
    )  # fmt: skip
    figure.update_layout(
        **layout(theme, 360, width, legend=True),
        xaxis=axis(theme, f"measured {TITLES[quantity]}", range=both),
        yaxis=axis(theme, f"predicted {TITLES[quantity]}", range=both),
    )
    return figure


def calibration_figure(
    calibration: pd.DataFrame, theme: str = "light", width: int | None = None
) -> go.Figure:
    """How often a stated interval (or chance) held: stated against held, a line a quantity.

    calibration : of `Proof.calibration` or `Proof.hit_chances`: quantity, stated, held.
    """
    import plotly.graph_objects as go

    figure = go.Figure(
        go.Scatter(
            x=[0.0, 100.0], y=[0.0, 100.0], mode="lines", name="as stated", hoverinfo="skip",
            line={"color": PALETTE["grey"], "width": 1.5, "dash": "dash"},
        )
    )  # fmt: skip
    colours = ("orange", "blue", "green", "plum")
    for place, (quantity, rows) in enumerate(calibration.groupby("quantity", sort=False)):
        colour = shade(colours[place % len(colours)], theme)
        title = TITLES.get(str(quantity), str(quantity)).split(",")[0]
        figure.add_trace(
            go.Scatter(
                x=100.0 * rows["stated"], y=100.0 * rows["held"], name=title,
                mode="lines+markers",
                line={"color": colour, "width": 2, "dash": DASHES[place % len(DASHES)]},
                hovertemplate=f"{title}: stated %{{x:.0f}} %, held %{{y:.0f}} %<extra></extra>",
            )
        )  # fmt: skip
    figure.update_layout(
        **layout(theme, 340, width, legend=True),
        xaxis=axis(theme, "stated, %", range=[0, 101]),
        yaxis=axis(theme, "held, %", range=[0, 101]),
    )
    return figure


def drift_figure(
    drift: pd.DataFrame,
    jumps: pd.DataFrame,
    offset: str,
    title: str,
    theme: str = "light",
    width: int | None = None,
) -> go.Figure:
    """One offset through the campaign, with its band of two deviations and the jumps found.

    drift : tapped_at, offset, value, deviation. jumps : tapped_at, offset, text. title : of the
    axis, unit included.
    """
    import plotly.graph_objects as go

    rows = drift[drift["offset"] == offset]
    colour = shade("blue", theme)
    low, high = rows["value"] - 2.0 * rows["deviation"], rows["value"] + 2.0 * rows["deviation"]
    figure = go.Figure(
        [
            _edge(rows["tapped_at"], high, None),
            _edge(rows["tapped_at"], low, faded(colour, 0.25)),
            go.Scatter(
                x=rows["tapped_at"], y=rows["value"], mode="lines", name=title,
                line={"color": colour, "width": 2},
                hovertemplate="%{x|%Y-%m-%d %H:%M}: %{y:.4g}<extra></extra>",
            ),
        ]
    )  # fmt: skip
    for row in jumps[jumps["offset"] == offset].to_dict("records"):
        figure.add_vline(x=row["tapped_at"], line={"color": PALETTE["orange"], "dash": "dash"})
        figure.add_annotation(
            x=row["tapped_at"], y=1.0, yref="paper", yanchor="bottom", showarrow=False,
            text=row["text"],
        )  # fmt: skip
    figure.update_layout(
        **{**layout(theme, 280, width), "margin": {"l": 10, "r": 10, "t": 30, "b": 10}},
        xaxis=axis(theme, "tapped at"),
        yaxis=axis(theme, title),
    )
    return figure


def _edge(x: Any, y: Any, fill: str | None) -> go.Scatter:
    import plotly.graph_objects as go

    return go.Scatter(
        x=x, y=y, mode="lines", line={"width": 0}, hoverinfo="skip", showlegend=False,
        fill=None if fill is None else "tonexty", fillcolor=fill,
    )  # fmt: skip
