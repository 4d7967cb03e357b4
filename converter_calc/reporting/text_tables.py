"""Plain-text tables for the command line: sensitivities, grades, laws."""

from __future__ import annotations

from collections.abc import Iterable, Mapping

from converter_calc.laws import carbon_oxygen, manganese, phosphorus, sulphur
from converter_calc.planning.grades import grade, grades
from converter_calc.planning.sensitivities import Sensitivity

TITLES = {
    "plan": "What the plan would ask for if an input were other",
    "predict": "Where the blow would end if an input were other, the charge left as it is",
}
COLUMNS = {
    "end_temp_C": ("temp", "C", "{:+.2f}"),
    "end_C_pct": ("carbon", "%", "{:+.4f}"),
    "end_P_pct": ("phosph.", "%", "{:+.5f}"),
    "steel_kg": ("steel", "kg", "{:+.0f}"),
    "hot_metal_kg": ("hot metal", "kg", "{:+.0f}"),
    "scrap_kg": ("scrap", "kg", "{:+.0f}"),
    "trim_kg": ("coolant", "kg", "{:+.0f}"),
    "lime_kg": ("lime", "kg", "{:+.0f}"),
    "flux_kg": ("MgO flux", "kg", "{:+.0f}"),
    "oxygen_Nm3": ("oxygen", "Nm3", "{:+.0f}"),
}
#: Results that are aims of a plan and so do not move there.
STILL = {"plan": ("end_temp_C", "end_C_pct"), "predict": ()}


def sensitivity_text(found: Mapping[str, Iterable[Sensitivity]]) -> str:
    """Sensitivities as text, one table for the plan and one for the prediction."""
    lines = []
    for kind, rows in found.items():
        listed = list(rows)
        shown = [
            name
            for name in COLUMNS
            if name not in STILL[kind] and any(name in row.change for row in listed)
        ]
        lines.append(TITLES[kind])
        lines.append(" " * 40 + "".join(f"{COLUMNS[name][0]:>11}" for name in shown))
        lines.append(" " * 40 + "".join(f"{COLUMNS[name][1]:>11}" for name in shown))
        for row in listed:
            cells = "".join(f"{COLUMNS[name][2].format(row.change[name]):>11}" for name in shown)
            lines.append(f"  {row.label:<38}{cells}")
        lines.append("")
    return "\n".join(lines)


def _limit(low: float | None, high: float | None) -> str:
    if low is None:
        return f"max {high:g}"
    return f"min {low:g}" if high is None else f"{low:g} to {high:g}"


def grade_text(name: str | None) -> str:
    """All grades of the library a line each, or the limits of one [mass %]."""
    if name is None:
        rows = [f"{g.name:<14} {g.standard} ({g.edition}), {g.known}" for g in grades()]
        return "\n".join(rows) + "\n"
    found = grade(name)
    lines = [f"{found.name}: {found.standard} ({found.edition}), {found.known}"]
    lines += [f"  {el:<3} {_limit(*limits)} %" for el, limits in found.limits.items()]
    if found.note:
        lines.append(f"  {found.note}")
    return "\n".join(lines) + "\n"


def law_text() -> str:
    """Every named law with formula, source and range."""
    lines = []
    for title, module in (
        ("phosphorus", phosphorus),
        ("manganese", manganese),
        ("sulphur", sulphur),
        ("carbon_oxygen", carbon_oxygen),
    ):
        lines.append(f"[law] {title} =")
        for name in module.laws():
            note = module.describe(name)
            lines += [f"  {name}", f"      {note.formula}", f"      {note.source} ({note.known})"]
            if note.ranges:
                ranges = ", ".join(f"{r.quantity} {r.low:g} to {r.high:g}" for r in note.ranges)
                lines.append(f"      range: {ranges}")
    return "\n".join(lines) + "\n"
