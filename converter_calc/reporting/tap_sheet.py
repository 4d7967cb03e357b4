"""The tap sheet as text: additions, temperature steps, oxygen, ladle against grade, cautions."""

from __future__ import annotations

import textwrap
from typing import Any

import numpy as np

from converter_calc.planning.tap_report import TapResult
from converter_calc.reporting.display import SYSTEMS, Display

WIDTH = 84
#: Shown on every sheet. ILO code of practice, Safety and health in the iron and steel industry
#: (from memory), and common practice.
SAFETY = (
    (
        "Additions dry and warm, never wet, iced or oily: moisture under steel explodes, and "
        "brings hydrogen."
    ),
    (
        "Carbon, or alloys rich in it, on oxidised steel boils violently and throws steel and "
        "flame out: kill first, small lots, nobody near the ladle."
    ),
    (
        "Silicon and aluminium flare and smoke as they go in; fine aluminium with rust burns like "
        "thermit. Extraction on, faces covered, no fines."
    ),
    (
        "Ladle dried and preheated, slag stopped in time, room left above the steel: slag on "
        "killed steel gives phosphorus back and may foam."
    ),
    "Carbon monoxide from the boil is poisonous and burns.",
    (
        "A calculation, not an instruction: local codes, the shop's own practice and its licensed "
        "engineers decide."
    ),
)


def tap_sheet(result: TapResult, index: int = 0, units: str = "metric") -> str:
    """The sheet of one heat; units "metric" or "us"."""
    show = SYSTEMS[units]
    told = result.document(index)["tap"]
    lines = [f"TAP SHEET   heat {result.outcome.heats.ids[index]}", "=" * WIDTH]
    lines += _additions(told, show)
    lines += _temperature(told, show)
    lines += _oxygen(told, show)
    lines += _ladle(told, show)
    lines += _slag(told, show)
    worst = max((abs(x), name) for name, x in told["closure"].items())
    lines += [f"Balance of the tap: worst closure {worst[0]:.1e} ({worst[1]})", ""]
    if told["warnings"]:
        lines.append("Warnings")
        for warning in told["warnings"]:
            lines += _wrap(f"! {warning['message']} [{warning['field']}]")
        lines.append("")
    lines.append("Safety")
    for text in SAFETY:
        lines += _wrap("- " + text)
    return "\n".join(lines) + "\n"


def _mass(kg: float, show: Display) -> str:
    digits = 0 if show.mass == "kg" and abs(kg) >= 100.0 else 1 if show.mass == "kg" else 3
    return f"{show.mass_of(kg):,.{digits}f}"


def _additions(told: dict[str, Any], show: Display) -> list[str]:
    per = 1.0 if show.mass == "kg" else 2.0
    lines = ["Additions" + " " * 13 + f"{show.mass:>12}{show.per_mass:>14}  {'for':<5}"
             f"{'recovery':>9}{'cost':>13}"]  # fmt: skip
    for row in told["additions"]:
        recovery = "" if row["recovery"] is None else f"{100.0 * row['recovery']:.1f} %"
        cost = "" if row["cost"] is None else f"{row['cost']:,.0f}"
        lines.append(
            f"  {row['name']:<20}{_mass(row['mass_kg'], show):>12}"
            f"{row['kg_per_t'] * per:>14.3f}  {row['for'] or 'slag':<5}{recovery:>9}{cost:>13}"
        )
    if not told["additions"]:
        lines.append("  none")
    total = told["additions_cost_per_t"]
    if total is not None:
        lines.append(f"  priced additions per tonne of steel{total:>40,.2f} shop currency")
    return [*lines, ""]


def _temperature(told: dict[str, Any], show: Display) -> list[str]:
    scale = 1.0 if show.temperature == "C" else 1.8
    unit = "K" if show.temperature == "C" else "F"
    tap, ladle = told["tap_temperature_C"], told["temperature_C"]
    lines = ["Temperature", _step("steel at the end of the blow", show.temperature_of(tap),
                                  show.temperature, signed=False)]  # fmt: skip
    lines += [
        _step(name, x * scale, unit, signed=True)
        for name, x in told["temperature_steps_K"].items()
        if abs(x) >= 0.05
    ]
    lines.append(
        _step("steel in the ladle", show.temperature_of(ladle), show.temperature, signed=False)
    )
    over = (ladle - told["liquidus_C"]) * scale
    lines.append(_step("above liquidus", over, unit, signed=False))
    return [*lines, ""]


def _step(label: str, x: float, unit: str, *, signed: bool) -> str:
    return f"  {label:<42}{x:>+12,.1f} {unit}" if signed else f"  {label:<42}{x:>12,.1f} {unit}"


def _oxygen(told: dict[str, Any], show: Display) -> list[str]:
    lines = [f"Oxygen   (steel killed by: {told['killed_by']})"]
    for name, kg in told["oxygen_account_kg"].items():
        if abs(kg) >= 0.05:
            lines.append(f"  {name:<42}{_mass(kg, show):>12} {show.mass}")
    lines.append(f"  {'stays dissolved':<42}{told['dissolved_oxygen_ppm']:>12,.1f} ppm")
    return [*lines, ""]


def _ladle(told: dict[str, Any], show: Display) -> list[str]:
    lines = [f"Ladle analysis against {told['grade']}",
             f"  {'':<6}{'mass %':>10}{'min':>10}{'max':>10}   mark"]  # fmt: skip
    limits = {row["element"]: row for row in told["limits"]}
    shown = list(dict.fromkeys([*("C", "Si", "Mn", "P", "S", "Al"), *limits, *told["steel_pct"]]))
    for element in shown:
        x = told["steel_pct"].get(element, 0.0)
        row = limits.get(element)
        if element == "Fe" or (row is None and x < 5e-5):
            continue
        low, high = (None, None) if row is None else (row["min_pct"], row["max_pct"])
        sides = "".join(f"{'' if side is None else f'{side:g}':>10}" for side in (low, high))
        mark = "" if row is None else row["mark"]
        shown_pct = f"{x:.4f}" if row is None or row["pct"] is not None else "-"
        lines.append(f"  [{element + ']':<5}{shown_pct:>10}{sides}   {mark}".rstrip())
    lines.append(f"  phosphorus given back by the slag {told['phosphorus_returned_pct']:.4f} %")
    lines.append(f"  {'steel in the ladle':<30}{_mass(told['steel_kg'], show):>12} {show.mass}")
    return [*lines, ""]


def _slag(told: dict[str, Any], show: Display) -> list[str]:
    lines = ["Ladle slag", f"  {'slag':<30}{_mass(told['slag_kg'], show):>12} {show.mass}"]
    pct = {name: x for name, x in told["slag_pct"].items() if np.isfinite(x) and x >= 0.005}
    parts = [f"{name} {x:.2f}" for name, x in sorted(pct.items(), key=lambda e: -e[1])]
    lines += [
        "    " + "  ".join(parts[k : k + 6]) + (" %" if k + 6 >= len(parts) else "")
        for k in range(0, len(parts), 6)
    ]
    return [*lines, ""]


def _wrap(text: str) -> list[str]:
    return textwrap.wrap(text, WIDTH, initial_indent="  ", subsequent_indent="    ")
