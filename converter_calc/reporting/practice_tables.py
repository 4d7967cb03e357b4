"""Plain-text tables: slag practices side by side, slag as a product, where elements go."""

from __future__ import annotations

import textwrap
from collections.abc import Iterable, Mapping
from typing import Any

import numpy as np

from converter_calc.metallurgy.element_shares import ElementShares
from converter_calc.metallurgy.practices_chain import SAID_ONCE, practice_columns, stage_rows
from converter_calc.metallurgy.practices_comparison import TITLES, Comparison
from converter_calc.metallurgy.slag_product import SlagProduct
from converter_calc.planning.outcome import at

WIDTH = 96
#: Decimals by the end of a unit or name.
DIGITS = {"kg": 0, "Nm3": 0, "C": 1, "mass %": 4, "%": 2, "kg/t steel": 2, "min": 0, "MJ": 0}
#: Numbers that are zero where a practice does not know them: a dash says so.
STAGE_COLUMNS = (
    ("temp_C", "temp C", 1),
    ("C_pct", "[C] %", 3),
    ("P_pct", "[P] %", 4),
    ("slag_kg", "slag kg", 0),
    ("basicity", "CaO/SiO2", 2),
    ("T_Fe_pct", "T.Fe %", 1),
    ("P2O5_pct", "P2O5 %", 2),
    ("L_P", "L_P", 1),
)


def _cell(x: float, unit: str, digits: int | None = None) -> str:
    if not np.isfinite(x):
        return "-"
    if unit == "relative":
        return f"{x:.0e}"
    return f"{x:,.{DIGITS.get(unit, 2) if digits is None else digits}f}"


def _unit(unit: str) -> str:
    return unit.replace("currency/t steel", "currency/t")


def practices_text(comparison: Comparison, index: int = 0) -> str:
    """The practices of one heat side by side, stages, verdicts and warnings."""
    names = list(comparison.chains)
    found = {name: comparison.chain(name, index) for name in names}
    numbers = {name: chain.numbers() for name, (chain, _) in found.items()}
    lines = [f"SLAG PRACTICES   heat {comparison.heats.ids[index]}", "=" * WIDTH]
    lines.append(" " * 48 + "".join(f"{TITLES[name]:>12}" for name in names))
    verdicts = {name: chain.status[i] for name, (chain, i) in found.items()}
    lines.append(" " * 48 + "".join(f"{verdicts[name]:>12}" for name in names))
    for key, column in practice_columns().items():
        row = [float(at(numbers[name][key], found[name][1])) for name in names]
        if all(x == 0.0 or not np.isfinite(x) for x in row) and column.unit != "relative":
            continue
        cells = "".join(f"{_cell(x, column.unit):>12}" for x in row)
        lines.append(f"  {column.label:<31} {_unit(column.unit):<14}{cells}")
    lines += ["", *_stages(found), *_verdicts(found), *_warnings(found)]
    lines += ["", *_notes()]
    return "\n".join(lines) + "\n"


def _stages(found: Mapping[str, Any]) -> list[str]:
    lines = ["Where each stage ends"]
    lines.append(" " * 28 + "".join(f"{label:>9}" for _, label, _ in STAGE_COLUMNS))
    for name, (chain, i) in found.items():
        for row in stage_rows(chain, i):
            label = TITLES[name] if len(chain.stages) == 1 else f"{TITLES[name]}, {row['stage']}"
            cells = "".join(f"{_cell(row[k], '', digits):>9}" for k, _, digits in STAGE_COLUMNS)
            lines.append(f"  {label:<26}{cells}")
    return lines


def _verdicts(found: Mapping[str, Any]) -> list[str]:
    lines: list[str] = []
    for name, (chain, i) in found.items():
        if chain.status[i] != "solved":
            lines += ["", *_wrap(f"{TITLES[name]}: {chain.status[i]}; {chain.binding[i]}")]
            lines += [f"    it would be freed by: {text}" for text in chain.frees[i]]
    return lines


def _warnings(found: Mapping[str, Any]) -> list[str]:
    """Warnings; those of all practices once."""
    by_text: dict[str, list[str]] = {}
    once_by_code: dict[str, dict[str, str]] = {}
    for name, (chain, i) in found.items():
        for entry in chain.warnings(i):
            once = (
                once_by_code.setdefault(entry["code"], entry)
                if entry["code"] in SAID_ONCE
                else entry
            )
            text = f"{once['message']} [{once['field']}]"
            titles = by_text.setdefault(text, [])
            if TITLES[name] not in titles:
                titles.append(TITLES[name])
    lines = ["", "Warnings"] if by_text else []
    for text, names in by_text.items():
        lead = "" if len(names) == len(found) else f"{', '.join(names)}: "
        lines += _wrap(f"! {lead}{text}")
    return lines


def _notes() -> Iterable[str]:
    notes = ("slag_made_kg_per_t", "CO2_gas_kg_per_t", "CO2_materials_kg_per_t")
    columns = practice_columns()
    for name in notes:
        yield from _wrap(f"{columns[name].label}: {columns[name].note}")
    yield from _wrap(
        "Inputs: sections slag_off, kept_slag and pretreated of the heat or shop file. A "
        "calculation, not an instruction: local codes, the shop's own practice and its licensed "
        "engineers decide."
    )


def slag_text(product: SlagProduct, index: int = 0) -> str:
    """Slag of one heat as a product; definitions and sources as numbered notes."""
    lines = [f"SLAG   heat {product.ids[index]}", "=" * WIDTH]
    notes: dict[str, int] = {}
    for term in product.terms(index):
        note = notes.setdefault(term.source, len(notes) + 1)
        digits = 3 if term.unit == "" else 0 if term.unit in ("kg", "MJ", "C") else 2
        value = f"{term.value:,.{digits}f}"
        lines.append(f"  {term.label:<48}{value:>12} {term.unit:<12} ({note})")
    lines.append("")
    for text, number in notes.items():
        lines += _wrap(f"({number}) {text}")
    lines += _wrap(
        "Free lime makes slag swell when it takes up water; hot slag on water or wet ground "
        "explodes. Use and storage: local codes and the shop's own practice."
    )
    return "\n".join(lines) + "\n"


def shares_text(shares: ElementShares, index: int = 0) -> str:
    """Where each element of one heat goes: kg and % of the input, law and range."""
    frame = shares.frame(index)
    places = [name.removesuffix("_pct") for name in frame.columns if name.endswith("_pct")]
    lines = [f"WHERE THE ELEMENTS GO   heat {shares.ids[index]}", "=" * WIDTH]
    lines.append(f"  {'':<3}{'input kg':>12}" + "".join(f"{place:>12}" for place in places))
    for row in frame.to_dict("records"):
        kg = "".join(f"{row[f'{place}_kg']:>12,.1f}" for place in places)
        pct = "".join(f"{row[f'{place}_pct']:>11.2f}%" for place in places)
        lines += [f"  {row['element']:<3}{row['input_kg']:>12,.1f}{kg}", f"  {'':<15}{pct}"]
    lines += ["", "Laws: (%X)/[%X], what decides, source"]
    for row in frame.to_dict("records"):
        ratio = f"{row['ratio']:.4g}" if np.isfinite(row["ratio"]) else "-"
        text = f"{row['element']:<3}{ratio:>8}  {row['law']}: {row['source']}"
        outside = f"; OUTSIDE ITS RANGE: {row['outside']}" if row["outside"] else ""
        lines += _wrap(text + outside)
    return "\n".join(lines) + "\n"


def _wrap(text: str) -> list[str]:
    return textwrap.wrap(text, WIDTH, initial_indent="  ", subsequent_indent="      ")
