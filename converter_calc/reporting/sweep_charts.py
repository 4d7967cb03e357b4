"""Pictures of the sweeps: scrap ratio map, lime and phosphorus. Table in, plotly figure out."""

from __future__ import annotations

from collections.abc import Mapping
from typing import TYPE_CHECKING, Any

import numpy as np

from converter_calc.basis.errors import Fault, InputError
from converter_calc.planning.lime_sweeps import LimeLines
from converter_calc.planning.sweeps import Column
from converter_calc.reporting.charts import PALETTE, axis, faded, layout, themed

if TYPE_CHECKING:
    import pandas as pd
    import plotly.graph_objects as go

#: Light to dark in one hue, so that order is seen in grey too; and two hues about zero.
SEQUENTIAL = [[0.0, "#eaf3fb"], [0.35, "#9cc7ea"], [0.7, "#3f86c6"], [1.0, "#123f73"]]
DIVERGING = [[0.0, "#b35c00"], [0.25, "#f0b26b"], [0.5, "#f4f4f2"], [0.75, "#8ab9e2"],
             [1.0, "#1c4f8c"]]  # fmt: skip
EFFECTS = {
    "tap_temperature": ("end_temp_C", "tap temperature, °C"),
    "iron_oxide": ("slag_T_Fe_pct", "total iron of the slag, mass %"),
    "slag_weight": ("slag_kg_per_t", "slag, kg/t steel"),
}


def scrap_map_figure(
    frame: pd.DataFrame,
    columns: Mapping[str, Column],
    quantity: str = "trim_kg",
    today: Mapping[str, float] | None = None,
    Si_pct: float | None = None,
    theme: str = "light",
    width: int | None = None,
) -> go.Figure:
    """One quantity over scrap share and hot-metal temperature, with what cannot be made shaded.

    frame, columns : of `sweeps.scrap_ratio_map` and `map_columns`. quantity : a column of
    numbers. today : of `sweeps.today_point`, drawn as a cross. Si_pct : which silicon of the
    frame, the nearest is taken [mass %]; None: today's, else the first.

    Raises InputError for a quantity that is no column of numbers.
    """
    import plotly.graph_objects as go

    text, _ = themed(theme)
    part, Si = _at_silicon(frame, quantity, today, Si_pct)
    x, y, z = _grid(part, quantity)
    feasible = _grid(part, "feasible")[2].astype(float)
    label, unit, _ = columns[quantity]
    title = f"{label}, {unit}" if unit else label
    two_sided = quantity == "trim_kg" and bool((z < 0.0).any() and (z > 0.0).any())
    figure = go.Figure(layout=layout(theme, 460, width, legend=True))
    figure.add_trace(
        go.Contour(
            x=x, y=y, z=z, name=label, showscale=True, ncontours=16,
            colorscale=DIVERGING if two_sided else SEQUENTIAL,
            contours={"showlabels": True, "labelfont": {"size": 11}}
            | (_even_levels(z) if two_sided else {}),
            line={"width": 0.6},
            colorbar={"title": {"text": title, "side": "right"}, "thickness": 14},
            text=_grid(part, "binding")[2],
            hovertemplate="scrap %{x:.1f} %<br>hot metal %{y:.0f} °C<br>"
             f"{label}: %{{z:,.4~g}} {unit}<br>%{{text}}<extra></extra>",
        )
    )  # fmt: skip
    if (feasible < 0.5).any():
        grey = faded(PALETTE["grey"], 0.7)
        figure.add_trace(
            go.Contour(x=x, y=y, z=1.0 - feasible, showscale=False, hoverinfo="skip",
                       showlegend=False, fillcolor=grey, line={"width": 2, "color": text},
                       contours={"type": "constraint", "operation": "<", "value": 0.5})
        )  # fmt: skip
        figure.add_trace(_mark([None], [None], "cannot be made", symbol="square", color=grey))
    if two_sided:
        # each side by its own size: a kilogram of coolant and one of fuel differ in heat
        both = [_grid(part, name)[2] for name in ("coolant_kg", "fuel_kg")]
        even = both[0] / np.nanmax(both[0]) - both[1] / np.nanmax(both[1])
        figure.add_trace(
            go.Contour(x=x, y=y, z=even, showscale=False, hoverinfo="skip", name="neither needed",
                       showlegend=True, line={"width": 3, "color": text},
                       contours={"start": 0.0, "end": 0.0, "size": 1.0, "coloring": "none"})
        )  # fmt: skip
    if today is not None:
        figure.add_trace(
            _mark([today["scrap_share_pct"]], [today["hot_metal_temp_C"]], "today's heat",
                  symbol="x", color=PALETTE["plum"], outline=text)
        )  # fmt: skip
    figure.update_layout(
        xaxis=axis(theme, "scrap share, % of hot metal and scrap", range=[x[0], x[-1]]),
        yaxis=axis(theme, f"hot metal temperature, °C (at {Si:.2f} % Si)", range=[y[0], y[-1]]),
    )
    return figure


def scrap_map_table(
    frame: pd.DataFrame,
    quantity: str = "trim_kg",
    today: Mapping[str, float] | None = None,
    Si_pct: float | None = None,
) -> pd.DataFrame:
    """The numbers of `scrap_map_figure`: hot metal temperature [C] down, scrap share [%] across.

    Points that cannot be made are NaN. Parameters as there.
    """
    part, _ = _at_silicon(frame, quantity, today, Si_pct)
    made = part.assign(**{quantity: part[quantity].where(part["feasible"])})
    return _over_both(made, quantity)


def scrap_map_text(
    frame: pd.DataFrame,
    columns: Mapping[str, Column],
    quantity: str = "trim_kg",
    today: Mapping[str, float] | None = None,
    Si_pct: float | None = None,
) -> str:
    """The map in one sentence; parameters as in `scrap_map_figure`."""
    part, Si = _at_silicon(frame, quantity, today, Si_pct)
    made = part[part["feasible"]]
    label, unit, _ = columns[quantity]
    share, temp = part["scrap_share_pct"], part["hot_metal_temp_C"]
    start = (
        f"Map of {label} over scrap share {share.min():.0f} to {share.max():.0f} % and hot metal "
        f"of {temp.min():.0f} to {temp.max():.0f} °C at {Si:.2f} % Si: "
    )
    if made.empty:
        return start + "no point can be made."
    low, high = made[quantity].min(), made[quantity].max()
    return (
        f"{start}{len(made)} of {len(part)} points can be made, with {low:,.4g} to "
        f"{high:,.4g} {unit}."
    )


def lime_figure(
    curve: pd.DataFrame, lines: LimeLines, theme: str = "light", width: int | None = None
) -> go.Figure:
    """End phosphorus against lime: the chosen law, the band of all laws, and the lines.

    curve, lines : of `lime_sweeps.lime_curve` and `lime_lines`.
    """
    import plotly.graph_objects as go

    text, _ = themed(theme)
    figure = go.Figure(layout=layout(theme, 480, width, legend=True))
    band = lime_band(curve)
    fill = faded(PALETTE["sky"], 0.35)
    edges = [("highest_P_pct", None, False), ("lowest_P_pct", "tonexty", True)]
    for name, filled, legend in edges:
        figure.add_trace(
            go.Scatter(x=band["lime_kg"], y=band[name], mode="lines", line={"width": 0},
                       fill=filled, fillcolor=fill, name="all published laws",
                       showlegend=legend, hoverinfo="skip")
        )  # fmt: skip
    for law, part in curve.groupby("law", sort=False):
        chosen = bool(part["chosen"].iloc[0])
        figure.add_trace(
            go.Scatter(
                x=part["lime_kg"], y=part["end_P_pct"], mode="lines", showlegend=chosen,
                name=f"{law} (chosen)" if chosen else str(law),
                line={"width": 3 if chosen else 1,
                      "color": PALETTE["blue"] if chosen else PALETTE["grey"]},
                customdata=part[["basicity", "undissolved_lime_kg", "slag_kg"]].to_numpy(),
                hovertemplate=f"{law}<br>lime %{{x:,.0f}} kg<br>end P %{{y:.4f}} %<br>CaO/SiO₂ "
                "%{customdata[0]:.2f}<br>undissolved %{customdata[1]:,.0f} kg<br>"
                "slag %{customdata[2]:,.0f} kg<extra></extra>",
            )
        )  # fmt: skip
    shapes, notes = _lime_marks(lines, text)
    at_aim = lines.for_aim_kg.get(lines.law, np.nan)
    if np.isfinite(at_aim):
        figure.add_trace(
            _mark([at_aim], [lines.aim_P_pct], f"lime for the aim: {at_aim:,.0f} kg", symbol="x",
                  color=PALETTE["plum"], outline=text)
        )  # fmt: skip
    figure.update_layout(
        xaxis=axis(theme, f"{lines.lime.replace('_', ' ')}, kg"),
        yaxis=axis(theme, "end phosphorus, mass %", rangemode="tozero"),
        shapes=shapes,
        annotations=notes,
    )
    return figure


def lime_band(curve: pd.DataFrame) -> pd.DataFrame:
    """Lowest and highest end phosphorus of all laws at each lime.

    Columns lime_kg, lowest_P_pct, highest_P_pct, chosen_P_pct [mass %].
    """
    by_lime = curve.groupby("lime_kg")["end_P_pct"]
    chosen = curve[curve["chosen"]].set_index("lime_kg")["end_P_pct"]
    table = by_lime.agg(["min", "max"]).assign(chosen_P_pct=chosen).reset_index()
    return table.rename(columns={"min": "lowest_P_pct", "max": "highest_P_pct"})


def lime_lines_table(lines: LimeLines) -> pd.DataFrame:
    """The lines as a table: line, lime_kg (NaN where there is none)."""
    import pandas as pd

    rows = _named_lines(lines)
    rows += [(f"P aim {lines.aim_P_pct:.4g} %, {law}", kg) for law, kg in lines.for_aim_kg.items()]
    return pd.DataFrame(rows, columns=["line", "lime_kg"])


def lime_text(curve: pd.DataFrame, lines: LimeLines) -> str:
    """The lime picture in one sentence [kg of lime, mass % P]."""
    band = lime_band(curve).dropna()
    last = band.iloc[-1]
    at_aim = lines.for_aim_kg.get(lines.law, np.nan)
    aim = f"no lime that dissolves meets the aim by {lines.law}"
    if np.isfinite(at_aim):
        aim = f"the aim of {lines.aim_P_pct:.4g} % is met at {at_aim:,.0f} kg by {lines.law}"
    elif not np.isfinite(lines.aim_P_pct):
        aim = "no aim is given"
    first, high = band["lime_kg"].iloc[0], last["lime_kg"]
    return (
        f"End phosphorus for {first:,.0f} to {high:,.0f} kg of lime: {aim}; at the most lime the "
        f"laws say {last['lowest_P_pct']:.4f} to {last['highest_P_pct']:.4f} %."
    )


def effect_figure(
    table: pd.DataFrame, kind: str, theme: str = "light", width: int | None = None
) -> go.Figure:
    """End phosphorus against one driver.

    table, kind : an entry of `lime_sweeps.phosphorus_effects` and its key.
    """
    import plotly.graph_objects as go

    column, title = EFFECTS[kind]
    line = go.Scatter(
        x=table[column], y=table["end_P_pct"], mode="lines+markers",
        line={"width": 3, "color": PALETTE["blue"]}, marker={"size": 7},
        customdata=table[["L_P", "slag_kg_per_t", "slag_T_Fe_pct"]].to_numpy(),
        hovertemplate=title + ": %{x:,.4~g}<br>end P %{y:.4f} %<br>L_P %{customdata[0]:.1f}<br>"
        "slag %{customdata[1]:.1f} kg/t<br>total iron %{customdata[2]:.1f} %<extra></extra>",
    )  # fmt: skip
    figure = go.Figure(line, layout(theme, 300, width))
    figure.update_layout(
        xaxis=axis(theme, title),
        yaxis=axis(theme, "end phosphorus, mass %", rangemode="tozero"),
    )
    return figure


def effect_text(table: pd.DataFrame, kind: str) -> str:
    """One effect in one sentence."""
    column, title = EFFECTS[kind]
    known = table.dropna(subset=["end_P_pct"]).sort_values(column)
    if known.empty:
        return f"End phosphorus against {title}: no point has a solution."
    parts = [
        f"{row['end_P_pct']:.4f} % at {row[column]:,.4g}"
        for row in (known.iloc[0], known.iloc[-1], known.iloc[known["end_P_pct"].argmin()])
    ]
    return f"End phosphorus against {title}: {parts[0]}, {parts[1]}; lowest {parts[2]}."


def _at_silicon(
    frame: pd.DataFrame, quantity: str, today: Mapping[str, float] | None, Si_pct: float | None
) -> tuple[pd.DataFrame, float]:
    """The rows at the silicon asked for, and that silicon."""
    if quantity not in frame.columns or frame[quantity].dtype.kind not in "fi":
        raise InputError([Fault("quantity", f"{quantity!r} is no number of the sweep")])
    known = frame["hm_Si_pct"].unique()
    wanted = Si_pct if Si_pct is not None else (today or {}).get("hm_Si_pct", known[0])
    Si = float(known[np.argmin(np.abs(known - wanted))])
    return frame[frame["hm_Si_pct"] == Si], Si


def _grid(part: pd.DataFrame, name: str) -> tuple[Any, Any, Any]:
    """Scrap shares, temperatures, and a column over both, (b, a)."""
    table = _over_both(part, name)
    return table.columns.to_numpy(), table.index.to_numpy(), table.to_numpy()


def _over_both(part: pd.DataFrame, name: str) -> pd.DataFrame:
    """One column with temperature down and scrap share across."""
    return part.set_index(["hot_metal_temp_C", "scrap_share_pct"])[name].unstack()  # noqa: PD010


def _even_levels(z: Any) -> dict[str, float]:
    """Contour levels as far below zero as above it, so that zero has the middle colour."""
    most = float(np.nanmax(np.abs(z)))
    size = 10.0 ** np.floor(np.log10(most / 2.0))
    if most / size > 10.0:
        size *= 2.0
    end = float(size * np.ceil(most / size))
    return {"start": -end, "end": end, "size": float(size)}


def _mark(
    x: list[Any], y: list[Any], name: str, *, symbol: str, color: str, outline: str = ""
) -> Any:
    import plotly.graph_objects as go

    line = {"width": 1.5, "color": outline} if outline else {"width": 0}
    return go.Scatter(
        x=x, y=y, mode="markers", name=name, hovertemplate=name + "<extra></extra>",
        marker={"symbol": symbol, "size": 14, "color": color, "line": line},
    )  # fmt: skip


def _named_lines(lines: LimeLines) -> list[tuple[str, float]]:
    return [
        (f"CaO/SiO₂ {lines.aim_basicity:.2f}, the least asked for", lines.least_basicity_kg),
        ("slag saturated with MgO from here", lines.MgO_saturation_kg),
        ("lime stops dissolving", lines.dissolution_stops_kg),
    ]


def _lime_marks(lines: LimeLines, text: str) -> tuple[list[Any], list[Any]]:
    """Upright lines with their names, and the P aim across."""
    shapes: list[Any] = []
    notes: list[Any] = []
    for (name, kg), dash in zip(_named_lines(lines), ("dash", "dot", "solid"), strict=True):
        if not np.isfinite(kg):
            continue
        shapes.append({"type": "line", "x0": kg, "x1": kg, "y0": 0, "y1": 1, "yref": "paper",
                       "line": {"dash": dash, "width": 1.5, "color": text}})  # fmt: skip
        notes.append({"x": kg, "y": 1.0, "yref": "paper", "text": name, "textangle": -90,
                      "showarrow": False, "xanchor": "right", "yanchor": "top",
                      "font": {"size": 12}})  # fmt: skip
    if np.isfinite(lines.aim_P_pct):
        y = lines.aim_P_pct
        line = {"dash": "dashdot", "width": 1.5, "color": PALETTE["orange"]}
        shapes.append({"type": "line", "x0": 0, "x1": 1, "xref": "paper", "y0": y, "y1": y,
                       "line": line})  # fmt: skip
        notes.append({"x": 1.0, "xref": "paper", "y": y, "text": f"aim {y:.4g} % P",
                      "showarrow": False, "xanchor": "right", "yanchor": "bottom"})  # fmt: skip
    return shapes, notes
