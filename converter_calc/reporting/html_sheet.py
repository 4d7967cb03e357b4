"""The charge sheet as one printable page: HTML that needs no network, script or other file.

Prints on A4 and on Letter. Every text goes through one door that escapes it.
"""

from __future__ import annotations

import datetime as dt
import html
from collections.abc import Iterable
from typing import TYPE_CHECKING, Any

import numpy as np

from converter_calc.basis.errors import Fault, InputError
from converter_calc.planning.outcome import Outcome, at
from converter_calc.reporting import tables
from converter_calc.reporting.charge_sheet import SAFETY
from converter_calc.reporting.charts import PALETTE
from converter_calc.reporting.display import SYSTEMS, Display

if TYPE_CHECKING:
    import pandas as pd

#: What CSS @page says for each paper; "" leaves it to the printer.
PAPERS = {"": "", "A4": "size: A4;", "Letter": "size: letter;"}
#: Elements of the steel that are shown however little there is; others from this content up.
ALWAYS_SHOWN, LEAST_SHOWN_PCT = ("C", "Si", "Mn", "P", "S"), 0.005
BAR_PX, BAR_ROW_PX, NAME_PX = 250.0, 15.0, 190.0
STYLE = """
@page { %s margin: 10mm 12mm; }
* { box-sizing: border-box; }
body { font: 10.5px/1.3 "Helvetica Neue", Arial, "DejaVu Sans", sans-serif; color: #000;
  background: #fff; margin: 0 auto; max-width: 186mm; }
h1 { font-size: 17px; margin: 0 0 2px; } h2 { font-size: 12px; margin: 7px 0 2px; }
p { margin: 1px 0; } ul { margin: 2px 0; padding-left: 14px; }
table { border-collapse: collapse; width: 100%%; }
th { text-align: left; font-weight: 600; border-bottom: 1px solid #000; }
th, td { padding: 1px 4px; } td { border-bottom: 1px solid #ccc; }
.n { text-align: right; font-variant-numeric: tabular-nums; }
.blank { border-bottom: 1px solid #000; min-width: 20mm; width: 20mm; }
.pair { display: flex; gap: 6mm; } .pair > div { flex: 1 1 0; min-width: 0; }
.head { display: flex; justify-content: space-between; align-items: flex-end; }
.big td { font-size: 13px; font-weight: 600; } .warn { border-left: 3px solid #000;
  padding-left: 20px; } .small { font-size: 9px; } .signs { display: flex; gap: 8mm; }
.signs div { flex: 1; border-top: 1px solid #000; margin-top: 26px; padding-top: 2px; }
section { break-inside: avoid; } td, li, p { overflow-wrap: anywhere; }
"""


class Markup(str):
    """Text that is HTML already; everything else is escaped where it is put in."""

    __slots__ = ()


def element(name: str, *content: Any, **attributes: Any) -> Markup:
    """One HTML element; texts and attributes are escaped, Markup is taken as it is."""
    marks = "".join(
        f' {key.rstrip("_").replace("_", "-")}="{html.escape(str(x))}"'
        for key, x in attributes.items()
    )
    return Markup(f"<{name}{marks}>{joined(content)}</{name}>")


def joined(parts: Iterable[Any]) -> Markup:
    """Parts one after the other, escaped unless they are Markup."""
    return Markup("".join(x if isinstance(x, Markup) else html.escape(str(x)) for x in parts))


def html_sheet(
    outcome: Outcome,
    index: int = 0,
    date: dt.date | None = None,
    units: str = "metric",
    paper: str = "",
) -> str:
    """The charge sheet of one heat as a whole HTML document.

    Parameters
    ----------
    outcome, index : the heat. date : printed; None leaves a blank. units : "metric" or "us".
    paper : "A4", "Letter", or "" for what the printer holds.

    Raises
    ------
    InputError : unknown units or paper.
    """
    for field, given, known in (("units", units, SYSTEMS), ("paper", paper, PAPERS)):
        if given not in known:
            allowed = ", ".join(repr(name) for name in known)
            raise InputError([Fault(field, f"must be one of {allowed}, given {given!r}")])
    show = SYSTEMS[units]
    body = joined(
        [
            _head(outcome, index, date),
            element("section", element("h2", "Charge and blow"), _recipe(outcome, index, show)),
            element(
                "div",
                element("div", element("h2", "End of blow"), _end_point(outcome, index, show)),
                element("div", element("h2", "Slag"), _slag(outcome, index)),
                class_="pair",
            ),
            element("section", element("h2", f"Heat balance, {show.heat}"),
                    _heat_bars(outcome, index, show)),
            _closure(outcome, index),
            _warnings(outcome, index),
            _signatures(),
        ]
    )  # fmt: skip
    style = Markup(STYLE % PAPERS[paper])
    title = f"Charge sheet, heat {outcome.heats.ids[index]}"
    head = joined(
        [
            Markup('<meta charset="utf-8">'),
            Markup('<meta name="viewport" content="width=device-width">'),
            element("title", title),
            element("style", style),
        ]
    )
    page = element("html", element("head", head), element("body", body), lang="en")
    return f"<!DOCTYPE html>\n{page}\n"


def _number(x: float, digits: int) -> str:
    return f"{x:,.{digits}f}" if np.isfinite(x) else ""


def _table(headings: Iterable[str], rows: Iterable[Iterable[Any]], **attributes: Any) -> Markup:
    """A table; a cell is text, or a number already formatted in a tuple ("12.3",)."""
    listed = [list(row) for row in rows]
    first = listed[0] if listed else []
    head = element(
        "tr",
        *[
            element("th", name, scope="col", class_="n" if isinstance(x, tuple) else "t")
            for name, x in zip(headings, first, strict=True)
        ],
    )
    lines = []
    for row in listed:
        cells = [
            element("td", *x, class_="n")
            if isinstance(x, tuple)
            else element("td", "", class_="blank")
            if x is None
            else element("td", x)
            for x in row
        ]
        lines.append(element("tr", *cells))
    return element("table", element("thead", head), element("tbody", *lines), **attributes)


def _head(outcome: Outcome, index: int, date: dt.date | None) -> Markup:
    heats = outcome.heats
    day = date.isoformat() if date else "____________"
    top = element(
        "div",
        element("h1", f"Charge sheet: heat {heats.ids[index]}"),
        element("p", f"Date: {day}\u2003Shift: ______\u2003Vessel: ______"),
        class_="head",
    )
    status = outcome.status[index] if outcome.status else ""
    lines = [top]
    if heats.why:
        lines.append(element("p", heats.why))
    if status and status != "solved":
        binding = outcome.binding[index]
        lines.append(element("p", f"NOT TO BE CHARGED: {status}; {binding}", class_="warn"))
    return joined(lines)


def _recipe(outcome: Outcome, index: int, show: Display) -> Markup:
    rows: list[list[Any]] = []
    metric = show.mass == "kg"
    for row in tables.recipe_table(outcome, index).to_dict("records"):
        mass = row["unit"] == "kg"
        amount = show.mass_of(row["amount"]) if mass else show.gas_of(row["amount"])
        digits = (0 if abs(amount) >= 100.0 else 2) if metric or not mass else 3
        per_t = row["per_t"] * (1.0 if metric or not mass else 2.0)
        unit = show.mass if mass else row["unit"] if metric else show.gas
        per = (_number(per_t, 2), f" {show.per_mass if mass else 'Nm³/t'}")
        rows.append(
            [row["name"], (_number(amount, digits),), unit,
             per if metric or mass else "", None]
        )  # fmt: skip
    headings = ("material", "charge", "", "per tonne" if metric else "per short ton", "actual")
    return _table(headings, rows, class_="big")


def _end_point(outcome: Outcome, index: int, show: Display) -> Markup:
    rows: list[list[Any]] = []
    for row in tables.end_point_table(outcome, index).to_dict("records"):
        value, aim, unit = row["value"], row["aim"], row["unit"]
        digits = 4
        traced = unit == "%" and row["name"] not in ALWAYS_SHOWN
        if traced and abs(value) < LEAST_SHOWN_PCT and not np.isfinite(aim):
            continue
        if unit == "°C":
            value, aim, unit, digits = *map(show.temperature_of, (value, aim)), show.temperature, 0
        elif unit == "kg":
            value, aim, unit = *map(show.mass_of, (value, aim)), show.mass
            digits = 0 if show.mass == "kg" else 2
        elif unit != "%":
            digits = 0 if unit == "ppm" else 2
        rows.append([row["name"], (_number(value, digits),), (_number(aim, digits),), unit, None])
    return _table(("", "calculated", "aim", "", "actual"), rows)


def _slag(outcome: Outcome, index: int) -> Markup:
    slag = tables.slag_table(outcome, index)
    rows: list[list[Any]] = [
        [row["oxide"], (_number(row["pct"], 2),), "%", None]
        for row in slag[slag["pct"] >= 0.1].to_dict("records")
    ]
    iron = float(at(outcome.state.laws["T_Fe_pct"], index))
    rows.append(["total iron", (_number(iron, 2),), "%", None])
    return _table(("liquid slag", "calculated", "", "actual"), rows)


def _heat_bars(outcome: Outcome, index: int, show: Display) -> Markup:
    flows = tables.heat_flow_table(outcome, index)
    columns = [_bars(flows[flows["side"] == side], side, float(flows["heat_MJ"].max()), show)
               for side in ("in", "out")]  # fmt: skip
    return element("div", *[element("div", svg) for svg in columns], class_="pair")


def _bars(part: pd.DataFrame, side: str, most: float, show: Display) -> Markup:
    """Bars of one side as a picture of their own, each with its numbers in words."""
    colour = PALETTE["blue" if side == "in" else "orange"]
    height = BAR_ROW_PX * (len(part) + 1)
    title = "heat in" if side == "in" else "heat out"
    lines = [element("text", f"{title} (% of heat supplied)", x=0, y=11, font_weight="bold")]
    for k, row in enumerate(part.to_dict("records"), start=1):
        y = BAR_ROW_PX * k
        width = BAR_PX * 0.45 * row["heat_MJ"] / most
        amount = show.heat_of(row["heat_MJ"])
        said = f"{amount:,.{0 if show.heat == 'MJ' else 1}f} ({row['share_pct']:.1f} %)"
        lines += [
            element("text", row["name"], x=0, y=f"{y + 11:g}"),
            element("rect", x=f"{NAME_PX - 20:g}", y=f"{y + 2:g}", width=f"{width:.1f}",
                    height=f"{BAR_ROW_PX - 4:g}", fill=colour),
            element("text", said, x=f"{NAME_PX - 16 + width:.1f}", y=f"{y + 11:g}"),
        ]  # fmt: skip
    return element(
        "svg", *lines, viewBox=f"0 0 {NAME_PX + BAR_PX - 40:g} {height:g}", width="100%",
        font_size="10.5", role="img", aria_label=title,
    )  # fmt: skip


def _closure(outcome: Outcome, index: int) -> Markup:
    worst, name = max(
        (abs(float(at(closure.relative, index))), name)
        for name, closure in outcome.closures.items()
    )
    laws = ", ".join(f"{topic} {law}" for topic, law in outcome.p.laws.items())
    return element("p", f"Worst closure of the balance {worst:.0e} ({name}). Laws: {laws}.",
                   class_="small")  # fmt: skip


def _warnings(outcome: Outcome, index: int) -> Markup:
    parts = []
    warnings = outcome.warnings(index)
    if warnings:
        items = [element("li", f"{w['message']} [{w['field']}]") for w in warnings]
        parts.append(element("section", element("h2", "Warnings"),
                             element("ul", *items, class_="warn")))  # fmt: skip
    cautions = element("ul", *[element("li", text) for text in SAFETY], class_="small")
    parts.append(element("section", element("h2", "Safety"), cautions))
    return joined(parts)


def _signatures() -> Markup:
    roles = ("charge calculated by", "checked by", "blown by", "time of tap")
    return element("div", *[element("div", role) for role in roles], class_="signs")
