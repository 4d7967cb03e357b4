"""Pictures of the heat and element balance: table in, plotly figure out, nothing else.

Each picture has its numbers as a table (`tables`) and a sentence for those who cannot see it.
Theme "light" or "dark" sets the colour of texts; backgrounds stay clear. Figures fill the
width they are given (made for 700 px and for a page); `width` fixes it [px].
The charts of the sweeps stand in `sweep_charts`.
"""

from __future__ import annotations

from collections.abc import Sequence
from typing import TYPE_CHECKING, Any

from converter_calc.basis.errors import Fault, InputError

if TYPE_CHECKING:
    import pandas as pd
    import plotly.graph_objects as go

#: Our own colours, told apart with any colour vision (tests/test_charts.py measures it).
PALETTE = {
    "blue": "#2960c9",
    "orange": "#b85b0c",
    "green": "#15c57d",
    "plum": "#4b396f",
    "yellow": "#ecc43d",
    "sky": "#7cc0f0",
    "grey": "#70747a",
}
#: Colour of text and of grid lines by theme.
THEMES = {"light": ("#1b1f24", "#d4d8de"), "dark": ("#eceff3", "#4a5059")}
FLOW_COLOURS = {
    "hot metal": "orange", "other charge": "grey", "carbon": "plum", "silicon": "green",
    "manganese": "sky", "phosphorus": "yellow", "iron to oxide": "blue", "steel": "orange",
    "slag": "green", "off-gas": "plum", "dust": "sky", "heat loss": "grey",
}  # fmt: skip
PLACE_COLOURS = {
    "steel": "orange", "slag": "green", "gas": "plum", "dust": "sky",
    "droplets and ejections": "yellow", "undissolved lime": "grey",
}  # fmt: skip
#: Height of all flow together, and of the slot that a one-line label needs [px].
FLOW_PX, SLOT_PX = 250.0, 25.0


def themed(theme: str) -> tuple[str, str]:
    """Colours of text and grid of a theme.

    Raises InputError for a theme other than "light" and "dark".
    """
    if theme not in THEMES:
        raise InputError([Fault("theme", f"must be light or dark, given {theme!r}")])
    return THEMES[theme]


def layout(
    theme: str, height: float, width: int | None = None, *, legend: bool = False
) -> dict[str, Any]:
    """What all figures share: fonts, clear background, margins; sizes in px."""
    text, _ = themed(theme)
    return {
        "height": int(height),
        "width": width,
        "autosize": width is None,
        "margin": {"l": 10, "r": 10, "t": 44 if legend else 16, "b": 10},
        "font": {"color": text, "size": 13},
        "paper_bgcolor": "rgba(0,0,0,0)",
        "plot_bgcolor": "rgba(0,0,0,0)",
        "showlegend": legend,
        "legend": {"orientation": "h", "x": 0.0, "y": 1.01, "yanchor": "bottom"},
        "hoverlabel": {"align": "left"},
    }


def axis(theme: str, title: str, **more: Any) -> dict[str, Any]:
    """An axis with a title (unit included) and a quiet grid."""
    text, grid = themed(theme)
    return {
        "title": {"text": title},
        "gridcolor": grid,
        "zerolinecolor": grid,
        "linecolor": text,
        "automargin": True,
        **more,
    }


def faded(colour: str, share: float = 0.4) -> str:
    """A colour #rrggbb as rgba with opacity `share` (0..1)."""
    r, g, b = (int(colour[k : k + 2], 16) for k in (1, 3, 5))
    return f"rgba({r},{g},{b},{share:g})"


def flow_colour(name: str) -> str:
    """Colour of one flow of the heat balance."""
    return PALETTE[FLOW_COLOURS.get(name, "grey")]


def heat_flow_figure(
    flows: pd.DataFrame, theme: str = "light", width: int | None = None
) -> go.Figure:
    """Where the heat comes from and where it goes.

    flows : of `tables.heat_flow_table`: side, name, heat_MJ, heat_MJ_per_t, share_pct. Every
    flow is drawn as positive; what takes heat stands on the right.
    """
    import plotly.graph_objects as go

    text, _ = themed(theme)
    rows = flows.to_dict("records")
    sides = {side: [row for row in rows if row["side"] == side] for side in ("in", "out")}
    total = sum(row["heat_MJ"] for row in sides["in"])
    height = max(_slots(side, total)[1] for side in sides.values())
    most = max(len(side) for side in sides.values())
    labels: list[str] = []
    colours: list[str] = []
    x, y, numbers, source, target, value, links, link_numbers = ([] for _ in range(8))
    middle = len(rows)
    for side, place in (("in", 0.001), ("out", 0.999)):
        centres, used = _slots(sides[side], total)
        for row, centre in zip(sides[side], centres, strict=True):
            here = len(labels)
            labels.append(f"{row['name']} {row['heat_MJ']:,.0f} MJ ({row['share_pct']:.1f} %)")
            colours.append(flow_colour(row["name"]))
            x.append(place)
            y.append(_inside((centre + 0.5 * (height - used)) / height))
            numbers.append([row["heat_MJ"], row["heat_MJ_per_t"], row["share_pct"]])
            source.append(here if side == "in" else middle)
            target.append(middle if side == "in" else here)
            value.append(row["heat_MJ"])
            links.append(faded(colours[-1]))
            link_numbers.append([row["name"], *numbers[-1]])
    labels.append(f"all heat {total:,.0f} MJ")
    colours.append(text)
    x.append(0.5)
    y.append(0.5)
    numbers.append([total, *(sum(row[key] for row in sides["in"])
                             for key in ("heat_MJ_per_t", "share_pct"))])  # fmt: skip
    sankey = go.Sankey(
        arrangement="fixed",
        textfont={"color": text, "size": 13, "shadow": "none"},
        node={
            "label": labels, "color": colours, "x": x, "y": y, "customdata": numbers,
            "thickness": 16, "line": {"width": 0},
            "pad": (height - FLOW_PX) / max(most - 1, 1),
            "hovertemplate": "%{label}<br>" + _amounts(0),
        },
        link={
            "source": source, "target": target, "value": value, "color": links,
            "customdata": link_numbers,
            "hovertemplate": "%{customdata[0]}<br>" + _amounts(1),
        },
    )  # fmt: skip
    shared = layout(theme, height + 24, width)
    return go.Figure(sankey, {**shared, "margin": {"l": 4, "r": 4, "t": 12, "b": 12}})


def _amounts(first: int) -> str:
    """Hover text of a heat whose numbers start at place `first` of the custom data."""
    heat, per_t, share = (f"%{{customdata[{first + k}]" for k in range(3))
    return (
        f"{heat}:,.0f}} MJ<br>{per_t}:,.1f}} MJ/t steel<br>{share}:.2f}} % of heat<extra></extra>"
    )


def _slots(rows: Sequence[Any], total: float) -> tuple[list[float], float]:
    """Centre of each flow in a column, each with room for its label, and the height [px]."""
    centres, top = [], 0.0
    for row in rows:
        slot = max(FLOW_PX * row["heat_MJ"] / total, SLOT_PX)
        centres.append(top + 0.5 * slot)
        top += slot
    return centres, max(top, FLOW_PX)


def _inside(share: float) -> float:
    return min(max(share, 0.001), 0.999)


def heat_flow_text(flows: pd.DataFrame) -> str:
    """The heat flow in one sentence; `flows` in MJ and % of the heat supplied."""
    total = flows.loc[flows["side"] == "in", "heat_MJ"].sum()
    return (
        f"Heat flow of {total:,.0f} MJ: comes from {_top(flows, 'in')}; goes to "
        f"{_top(flows, 'out')}."
    )


def _top(flows: pd.DataFrame, side: str, count: int = 4) -> str:
    rows = flows[flows["side"] == side].nlargest(count, "heat_MJ").to_dict("records")
    return ", ".join(f"{row['name']} {row['share_pct']:.1f} %" for row in rows)


def heat_bars_figure(
    flows: pd.DataFrame, theme: str = "light", width: int | None = None
) -> go.Figure:
    """Inputs and outputs of the heat balance as bars [MJ].

    flows : as for `heat_flow_figure`. Inputs are marked +, outputs −, beside the colour.
    """
    import plotly.graph_objects as go

    bars = []
    for side, colour, sign in (("in", "blue", "+"), ("out", "orange", "−")):
        part = flows[flows["side"] == side]
        bars.append(
            go.Bar(
                y=[f"{sign} {name}" for name in part["name"]],
                x=part["heat_MJ"].tolist(),
                orientation="h",
                name="heat in" if side == "in" else "heat out",
                marker={"color": PALETTE[colour]},
                text=[f"{sign}{x:,.0f} ({p:.1f} %)"
                      for x, p in zip(part["heat_MJ"], part["share_pct"], strict=True)],
                textposition="outside",
                cliponaxis=False,
                customdata=part[["heat_MJ_per_t", "share_pct"]].to_numpy().tolist(),
                hovertemplate="%{y}<br>%{x:,.0f} MJ<br>%{customdata[0]:,.1f} MJ/t steel<br>"
                "%{customdata[1]:.2f} % of heat<extra></extra>",
            )
        )  # fmt: skip
    figure = go.Figure(bars, layout(theme, 110 + 26 * len(flows), width, legend=True))
    figure.update_layout(
        xaxis=axis(theme, "heat, MJ", range=[0.0, 1.5 * float(flows["heat_MJ"].max())]),
        yaxis=axis(theme, "", autorange="reversed", showgrid=False),
        bargap=0.25,
    )
    return figure


def heat_bars_text(flows: pd.DataFrame) -> str:
    """The bars in one sentence; `flows` in MJ and % of the heat supplied."""
    sums = flows.groupby("side")["heat_MJ"].sum()
    return (
        f"Bars of heat in ({sums['in']:,.0f} MJ, most: {_top(flows, 'in', 3)}) and out "
        f"({sums['out']:,.0f} MJ, most: {_top(flows, 'out', 3)})."
    )


def element_figure(
    table: pd.DataFrame,
    elements: Sequence[str] = ("Fe", "C", "Si", "Mn", "P", "S"),
    theme: str = "light",
    width: int | None = None,
) -> go.Figure:
    """Where each element goes, as bars that fill 100 %.

    table : of `tables.element_balance_table`. elements : which to draw, from the top; those
    that the heat does not hold are left out.
    """
    import plotly.graph_objects as go

    rows = table.set_index("element")
    shown = [element for element in elements if element in rows.index]
    bars = []
    for place, colour in PLACE_COLOURS.items():
        share = rows.loc[shown, f"to {place}"]
        if not (share > 0.0).any():
            continue
        kg = (share * rows.loc[shown, "out_kg"] / 100.0).tolist()
        bars.append(
            go.Bar(
                y=shown, x=share.tolist(), name=place, orientation="h", customdata=kg,
                marker={"color": PALETTE[colour], "line": {"width": 0.5, "color": "#ffffff"}},
                hovertemplate="%{y} to " + place + "<br>%{x:.2f} %<br>%{customdata:,.2f} kg"
                "<extra></extra>",
            )
        )  # fmt: skip
    figure = go.Figure(bars, layout(theme, 120 + 32 * len(shown), width, legend=True))
    figure.update_layout(
        barmode="stack",
        xaxis=axis(theme, "share of the element that leaves, %", range=[0.0, 100.0]),
        yaxis=axis(theme, "element", autorange="reversed", type="category"),
    )
    return figure


def element_text(table: pd.DataFrame, elements: Sequence[str] = ("C", "Si", "Mn", "P", "S")) -> str:
    """Where the elements go in one sentence; shares in % of what leaves."""
    parts = []
    for row in table[table["element"].isin(elements)].to_dict("records"):
        shares = {str(key)[3:]: x for key, x in row.items() if str(key).startswith("to ")}
        place = max(shares, key=lambda name: shares[name])
        parts.append(f"{row['element']} {shares[place]:.1f} % to {place}")
    worst = float(table["relative_closure"].abs().max())
    return f"Where elements go: {', '.join(parts)}; worst closure {worst:.0e}."
