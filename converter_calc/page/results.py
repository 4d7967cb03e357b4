"""The answer of a plan as HTML: recipe, end point against aim, slag, warnings, cautions."""

from __future__ import annotations

from collections.abc import Iterable

import numpy as np

from converter_calc.page.markup import fault_texts, formula, heading, note, table_html
from converter_calc.page.session import Answer
from converter_calc.planning.explain import number
from converter_calc.planning.outcome import Outcome, at
from converter_calc.reporting import tables
from converter_calc.reporting.charge_sheet import SAFETY
from converter_calc.reporting.html_sheet import Markup, element, joined

#: Start of a warning's field -> the part of the answer under which it stands.
PLACES = (
    ("end_point.slag", "slag"),
    ("end_point.basicity", "slag"),
    ("streams.undissolved", "slag"),
    ("law", "slag"),
    ("end_point", "end"),
)
#: Names of reachable end points of a heat without answer, as they are shown.
NEAREST = {
    "end_temp_C": ("temperature", "°C", 1),
    "end_C_pct": ("carbon", "%", 4),
    "end_P_pct": ("phosphorus", "%", 4),
}
#: Equal to the aim within what is shown [in the unit of the row].
SHOWN = {"°C": 0.05, "%": 5e-5, "kg": 0.5, "": 5e-3}


def amount(x: float, digits: int | None = None) -> str:
    """A mass or volume: whole from 100 up, two decimals below."""
    places = (0 if abs(x) >= 100.0 else 2) if digits is None else digits
    return f"{x:,.{places}f}"


def shown_answer(found: Answer) -> Markup:
    """The answer as HTML, made once for each answer."""
    if not found.shown:
        found.shown = answer_html(found)
    return Markup(found.shown)


def answer_html(found: Answer) -> Markup:
    """The whole answer, or what is in its way."""
    if found.outcome is None:
        return _no_answer(found)
    outcome = found.outcome
    warnings = outcome.warnings(0)
    return joined(
        [
            heading(f"Recipe: {outcome.heats.ids[0]}"),
            recipe_html(outcome),
            _warned(warnings, "charge"),
            element(
                "div",
                element("div", heading("End of the blow"), end_point_html(outcome),
                        _warned(warnings, "end")),
                element("div", heading("Slag"), slag_html(outcome), _warned(warnings, "slag")),
                class_="cc-pair",
            ),
            heading("Cautions"),
            note("note", "", SAFETY),
        ]
    )  # fmt: skip


def _no_answer(found: Answer) -> Markup:
    if found.infeasible is None:
        return joined([
            heading("No recipe yet"),
            note("fault", "The recipe is shown once these fields are right:",
                 fault_texts(found.faults)),
        ])  # fmt: skip
    error = found.infeasible
    parts = [heading("No charge reaches the aim"), note("fault", str(error))]
    if error.frees:
        parts.append(note("good", "It would be freed by:", error.frees))
    if error.nearest:
        rows = []
        for name, x in error.nearest.items():
            label, unit, digits = NEAREST.get(name, (name.replace("_", " "), "", 4))
            rows.append((label, f"{x:,.{digits}f}", unit))
        parts.append(
            table_html("Nearest end point that can be reached", ("", "value", "unit"), rows)
        )
    return joined(parts)


def recipe_html(outcome: Outcome) -> Markup:
    """What to charge and blow in large figures, per heat and per tonne of steel."""
    rows: list[tuple[str, str, str]] = []
    scraps: list[tuple[str, str, str]] = []
    place = 0
    for row in tables.recipe_rows(outcome):
        unit = row.unit
        cells = (row.name, f"{amount(row.amount)} {unit}", f"{row.per_t:,.2f} {unit}/t")
        (scraps if _kind(outcome, row.name) == "scrap" else rows).append(cells)
        if row.name == "scrap, all":
            place = len(rows)
    rows[place:place] = scraps
    parts = list(range(place, place + len(scraps)))
    hot_metal = float(at(outcome.state.hot_metal_kg, 0))
    scrap = float(at(outcome.kind_kg("scrap"), 0))
    steel = float(at(outcome.state.steel_kg, 0))
    more = [("steel tapped", f"{amount(steel)} kg", "")]
    if hot_metal + scrap > 0.0:
        more.append(("scrap share", f"{100.0 * scrap / (hot_metal + scrap):.2f} %", ""))
        more.append(("metallic yield", f"{100.0 * steel / (hot_metal + scrap):.2f} %", ""))
    cost = float(at(outcome.cost(), 0))
    if np.isfinite(cost) and cost > 0.0:
        more.append(("materials, shop currency", "", f"{cost:,.2f} /t"))
    parts += range(len(rows), len(rows) + len(more))
    headings = ("charge and blow", "per heat", "per tonne of steel")
    return table_html("recipe", headings, rows + more, large=True, parts=parts)


def _kind(outcome: Outcome, shown: str) -> str:
    material = outcome.heats.materials.get(shown.replace(" ", "_"))
    return "" if material is None else material.kind


def end_point_html(outcome: Outcome) -> Markup:
    """Where the blow ends beside the aim."""
    rows = []
    for row in tables.end_point_rows(outcome):
        element_row = row.unit == "%"
        if element_row and abs(row.value) < 5e-5 and not np.isfinite(row.aim):
            continue
        digits = 4 if element_row else {"°C": 1, "": 2}.get(row.unit, 0)
        name = f"[{row.name}]" if element_row else row.name
        aim = f"{row.aim:,.{digits}f}" if np.isfinite(row.aim) else ""
        value = f"{row.value:,.{digits}f} {row.unit}".strip()
        rows.append((name, value, aim, _verdict(row.name, row.value, row.aim, row.unit)))
    return table_html("end of the blow", ("end of blow", "reached", "aim", ""), rows)


def _verdict(name: str, value: float, aim: float, unit: str) -> str:
    """Against the aim in one word; P, S and Mn are at most, CaO/SiO₂ is at least."""
    if not np.isfinite(aim):
        return ""
    near = SHOWN.get(unit, 0.0)
    if name in ("P", "S", "Mn"):
        return "met" if value <= aim + near else "above"
    if name.startswith("CaO"):
        return "met" if value >= aim - near else "below"
    if abs(value - aim) <= near:
        return "met"
    return "above" if value > aim else "below"


def slag_html(outcome: Outcome) -> Markup:
    """The liquid slag: weight and analysis."""
    slag = tables.slag_rows(outcome)
    steel_t = float(at(outcome.state.steel_kg, 0)) * 1e-3
    total = sum(row.kg for row in slag)
    rows = [("liquid slag", f"{amount(total)} kg", f"{total / steel_t:.1f} kg/t")]
    rows += [
        (formula(row.oxide), f"{amount(row.kg)} kg", f"{row.pct:.2f} %")
        for row in slag
        if row.pct >= 0.005
    ]
    iron = float(at(outcome.state.laws["T_Fe_pct"], 0))
    rows.append(("total iron", "", f"{iron:.2f} %"))
    undissolved = float(at(outcome.state.undissolved_kg, 0))
    if undissolved > 0.5:
        rows.append(("undissolved lime", f"{amount(undissolved)} kg", ""))
    return table_html("slag", ("slag", "mass", "share"), rows)


def _warned(warnings: Iterable[dict[str, str]], place: str) -> Markup:
    texts = []
    for warning in warnings:
        at_place = next((p for start, p in PLACES if warning["field"].startswith(start)), "charge")
        if at_place == place:
            texts.append(f"{warning['message']} [{warning['field']}]")
    return note("note", "Warnings", texts) if texts else Markup("")


def term_rows(terms: Iterable[tuple[str, float, str, str]]) -> list[tuple[str, ...]]:
    """Terms of an explanation as rows of text: label, value, unit, source."""
    shown = {"Nm3": "Nm³", "Nm3 O2": "Nm³ O₂"}
    return [(label, number(x), shown.get(unit, unit), source) for label, x, unit, source in terms]
