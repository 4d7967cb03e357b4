"""HTML of our own for the page. Every text is escaped where it is put in."""

from __future__ import annotations

from collections.abc import Collection, Iterable, Sequence
from typing import Any

import streamlit as st

from converter_calc.basis.errors import Fault
from converter_calc.reporting.html_sheet import Markup, element, joined

#: Colours follow the theme: text is inherited, lines are a thinned text colour.
STYLE = """
.cc-table { border-collapse: collapse; width: 100%; font-variant-numeric: tabular-nums; }
.cc-table th, .cc-table td { padding: .22rem .5rem .22rem 0; text-align: left;
  border-bottom: 1px solid color-mix(in srgb, currentColor 18%, transparent); font-weight: 400; }
.cc-table thead th { font-weight: 600; font-size: .86rem; vertical-align: bottom; }
.cc-table .n { text-align: right; white-space: nowrap; }
.cc-table thead .n { white-space: normal; }
.cc-large td.n:nth-of-type(1) { font-size: 1.6rem; font-weight: 600; line-height: 1.25; }
.cc-large th[scope=row] { font-size: 1.05rem; }
.cc-large tr.cc-part th { padding-left: 1.2rem; font-size: .95rem; }
.cc-large tr.cc-part td.n:nth-of-type(1) { font-size: 1.1rem; font-weight: 400; }
.cc-note { border-left: .3rem solid #b85b0c; padding: .25rem .6rem; margin: .35rem 0; }
.cc-fault { border-left: .3rem solid #c4314b; padding: .3rem .6rem; margin: .3rem 0; }
.cc-good { border-left: .3rem solid #2960c9; padding: .3rem .6rem; margin: .3rem 0; }
.cc-note ul, .cc-fault ul, .cc-good ul { margin: .1rem 0; padding-left: 1.1rem; }
.cc-note p, .cc-fault p, .cc-good p { margin: .1rem 0; }
.cc-page h1 { font-size: 1.5rem; padding: 0; margin: 0; }
.cc-page h2, h2.cc { font-size: 1.15rem; padding: .9rem 0 .25rem 0; margin: 0; }
.cc-small { font-size: .86rem; }
.cc-table td { overflow-wrap: anywhere; }
.cc-wide { overflow-x: auto; }
.cc-wide td, .cc-wide th { white-space: nowrap; padding-right: .7rem; }
.cc-wide thead th { white-space: normal; min-width: 4.2rem; }
.cc-pair { display: grid; grid-template-columns: repeat(auto-fit, minmax(17rem, 1fr));
  gap: 0 1.6rem; }
.stMultiSelect [data-baseweb="tag"] { background-color: #2960c9; }
.stMainBlockContainer { padding-top: 2.6rem; padding-bottom: 3rem; }
"""


def put_style() -> None:
    """Send the style once a run."""
    st.html(f"<style>{STYLE}</style>")


def table_html(
    name: str,
    headings: Sequence[str],
    rows: Iterable[Sequence[Any]],
    *,
    numeric: int | Collection[int] = 1,
    large: bool = False,
    parts: Iterable[int] = (),
    wide: bool = False,
) -> Markup:
    """A table: the first cell of a row names it.

    numeric : places of the cells that are numbers; from one place on where it is one. name :
    for those who cannot see the heading above. parts : numbers of the rows that are a part of
    the row above. wide : many columns; scrolls sideways by itself on a small screen.
    """
    inset = set(parts)
    right = range(numeric, len(headings)) if isinstance(numeric, int) else numeric
    head = [
        element("th", text, scope="col", **({"class_": "n"} if k in right else {}))
        for k, text in enumerate(headings)
    ]
    body = []
    for number, row in enumerate(rows):
        cells = [element("th", row[0], scope="row")]
        cells += [
            element("td", cell, **({"class_": "n"} if k in right else {}))
            for k, cell in enumerate(row[1:], start=1)
        ]
        marks = {"class_": "cc-part"} if number in inset else {}
        body.append(element("tr", *cells, **marks))
    table = element(
        "table",
        element("thead", element("tr", *head)),
        element("tbody", *body),
        class_="cc-table cc-large" if large else "cc-table",
        aria_label=name,
    )
    if not wide:
        return table
    # a region that scrolls has to be reached by the keyboard
    label = f"{name}, scrolls sideways"
    return element("div", table, class_="cc-wide", tabindex=0, role="region", aria_label=label)


def rows_of(table: Any) -> Iterable[Any]:
    """The rows of a DataFrame as named tuples, whose fields are of any type."""
    rows: Iterable[Any] = table.itertuples()
    return rows


def heading(text: str) -> Markup:
    """A heading of the second order."""
    return element("h2", text, class_="cc")


#: Figures of a formula as it is printed.
_LOWERED = str.maketrans("0123456789", "₀₁₂₃₄₅₆₇₈₉")


def formula(text: str) -> str:
    """A chemical formula as it is printed: SiO₂ for SiO2."""
    return text.translate(_LOWERED)


def listed(texts: Iterable[str]) -> Markup:
    """A bulleted list; nothing for no texts."""
    items = [element("li", text) for text in texts]
    return element("ul", *items) if items else Markup("")


def note(kind: str, title: str, texts: Iterable[str] = ()) -> Markup:
    """A framed message; kind is "note", "fault" or "good"."""
    role = {"role": "alert"} if kind == "fault" else {}
    return element("div", element("p", title), listed(texts), class_=f"cc-{kind}", **role)


def fault_texts(faults: Iterable[Fault]) -> list[str]:
    """Faults as lines, the field first."""
    return [fault.line() for fault in faults]


def put(*parts: Any) -> None:
    """Show parts as one element; texts are escaped, Markup is taken as it is."""
    st.html(element("div", joined(parts), class_="cc-page"))
