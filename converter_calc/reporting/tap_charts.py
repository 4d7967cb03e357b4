"""Pictures of the tap: temperature from step to step, ladle analysis in the range of the grade."""

from __future__ import annotations

from collections.abc import Mapping
from typing import TYPE_CHECKING, Any

from converter_calc.reporting.charts import PALETTE, axis, layout, themed

if TYPE_CHECKING:
    import pandas as pd
    import plotly.graph_objects as go

#: Steps smaller than this are not drawn; they are in the table [K].
LEAST_STEP_K = 0.05
START, END = "end of the blow", "in the ladle"


def steps_table(tap: Mapping[str, Any]) -> pd.DataFrame:
    """Temperature from the end of the blow to the ladle, a row a step.

    tap : the `tap` part of a `TapResult` document. Columns: step, change_K (NaN for the first
    and the last row), temp_C (after the step).
    """
    import pandas as pd

    temp = float(tap["tap_temperature_C"])
    rows: list[tuple[str, float, float]] = [(START, float("nan"), temp)]
    for name, change in tap["temperature_steps_K"].items():
        temp += float(change)
        rows.append((name, float(change), temp))
    rows.append((END, float("nan"), float(tap["temperature_C"])))
    return pd.DataFrame(rows, columns=["step", "change_K", "temp_C"])


def steps_figure(steps: pd.DataFrame, theme: str = "light", width: int | None = None) -> go.Figure:
    """Temperature steps as falling bars, from the top down; signs beside the colours.

    steps : of `steps_table`.
    """
    import plotly.graph_objects as go

    text, _ = themed(theme)
    shown = steps[steps["change_K"].isna() | (steps["change_K"].abs() >= LEAST_STEP_K)]
    low, high = _reach(shown)
    names, bases, sizes, colours, labels = [], [], [], [], []
    for row in shown.to_dict("records"):
        change, temp = float(row["change_K"]), float(row["temp_C"])
        whole = change != change  # noqa: PLR0124 - NaN: a temperature, not a step
        names.append(str(row["step"]))
        bases.append(low if whole else temp - change)
        sizes.append(temp - low if whole else change)
        colours.append(PALETTE["grey" if whole else "orange" if change < 0.0 else "blue"])
        sign = "−" if change < 0.0 else "+"
        labels.append(f"{temp:,.1f} °C" if whole else f"{sign}{abs(change):.1f} K")
    figure = go.Figure(
        go.Bar(
            y=names, x=sizes, base=bases, orientation="h", marker={"color": colours},
            customdata=labels, hovertemplate="%{y}<br>%{customdata}<extra></extra>",
        ),
        layout(theme, 90 + 30 * len(names), width),
    )  # fmt: skip
    ends = [max(b, b + s) for b, s in zip(bases, sizes, strict=True)]
    figure.update_layout(
        xaxis=axis(theme, "steel temperature, °C", range=[low, high]),
        yaxis=axis(theme, "", autorange="reversed", showgrid=False, type="category"),
        bargap=0.3,
        annotations=[
            {"x": end, "y": name, "text": label, "showarrow": False, "xanchor": "left",
             "xshift": 5, "font": {"color": text, "size": 13}}
            for end, name, label in zip(ends, names, labels, strict=True)
        ],
    )  # fmt: skip
    return figure


def _reach(shown: pd.DataFrame) -> tuple[float, float]:
    """Ends of the temperature axis, round, with room for the labels [C]."""
    least, most = float(shown["temp_C"].min()), float(shown["temp_C"].max())
    span = max(most - least, 10.0)
    return 10.0 * ((least - 0.15 * span) // 10.0), most + 0.22 * span


def steps_text(steps: pd.DataFrame) -> str:
    """The temperature steps in one sentence."""
    changes = steps.dropna(subset=["change_K"])
    largest = changes.reindex(changes["change_K"].abs().sort_values(ascending=False).index)
    parts = [f"{row['step']} {row['change_K']:+.1f} K" for row in largest[:4].to_dict("records")]
    first, last = float(steps["temp_C"].iloc[0]), float(steps["temp_C"].iloc[-1])
    return (
        f"Steel from {first:.1f} °C at the end of the blow to {last:.1f} °C in the ladle; "
        f"largest steps: {', '.join(parts)}."
    )


def limits_figure(
    limits: list[dict[str, Any]], theme: str = "light", width: int | None = None
) -> go.Figure:
    """Where each content lies: 0 is the lower limit of the grade (or none), 100 the upper.

    limits : rows of `tap["limits"]` of a document that have an upper limit and a content. The
    shape of the mark says inside (circle) or outside (cross).
    """
    import plotly.graph_objects as go

    text, _ = themed(theme)
    figure = go.Figure(layout=layout(theme, 110 + 28 * max(len(limits), 1), width, legend=True))
    rows = [(row["element"], _place(row), str(row["mark"]), row) for row in limits]
    kinds = (
        ("inside", "circle", "blue", lambda mark: mark == "inside"),
        ("near a limit", "diamond", "yellow", lambda mark: mark.startswith("near")),
        ("outside", "x", "orange", lambda mark: mark in ("below", "above")),
    )
    order = [element for element, *_ in rows]
    for name, symbol, colour, belongs in kinds:
        part = [row for row in rows if belongs(row[2])]
        if not part:
            continue
        figure.add_scatter(
            x=[place for _, place, _, _ in part], y=[element for element, *_ in part],
            mode="markers", name=name, customdata=[[row["pct"], mark] for *_, mark, row in part],
            marker={"symbol": symbol, "size": 13, "color": PALETTE[colour],
                    "line": {"width": 1.2, "color": text}},
            hovertemplate="%{y}: %{customdata[0]:.4f} %, %{customdata[1]}<extra></extra>",
        )  # fmt: skip
    shapes = [
        {"type": "line", "x0": x, "x1": x, "y0": 0, "y1": 1, "yref": "paper",
         "line": {"width": 1.5, "dash": "dash", "color": text}} for x in (0.0, 100.0)
    ]  # fmt: skip
    most = max([110.0, *(1.08 * place for _, place, _, _ in rows)])
    least = min([-6.0, *(1.08 * place for _, place, _, _ in rows)])
    figure.update_layout(
        xaxis=axis(theme, "place in the range of the grade, % (0: lower limit, 100: upper)",
                   range=[max(least, -100.0), min(most, 250.0)]),
        yaxis=axis(theme, "", autorange="reversed", type="category", categoryorder="array",
                   categoryarray=order),
        shapes=shapes,
    )  # fmt: skip
    return figure


def _place(row: Mapping[str, Any]) -> float:
    low = float(row["min_pct"] or 0.0)
    return 100.0 * (float(row["pct"]) - low) / (float(row["max_pct"]) - low)


def drawn_limits(limits: list[dict[str, Any]]) -> list[dict[str, Any]]:
    """Those of the limits of a document that have a place between two ends."""
    return [
        row
        for row in limits
        if row["pct"] is not None
        and row["max_pct"] is not None
        and row["max_pct"] > (row["min_pct"] or 0.0)
    ]


def limits_text(limits: list[dict[str, Any]]) -> str:
    """The ladle analysis against the grade in one sentence."""
    parts = [f"{row['element']} {row['pct']:.4g} % {row['mark']}" for row in limits]
    return f"Ladle analysis in the range of the grade: {', '.join(parts)}."
