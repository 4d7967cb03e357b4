"""Text of the phosphorus, lime and flux commands: numbers in, lines out."""

from __future__ import annotations

import math
import textwrap
from collections.abc import Iterable, Mapping, Sequence
from typing import TYPE_CHECKING, Any

from converter_calc.metallurgy.flux_choice import FluxChoice
from converter_calc.metallurgy.flux_mixes import CAUTION, FluxMixes
from converter_calc.metallurgy.flux_search import LABELS
from converter_calc.metallurgy.lime_limits import LimeLimits
from converter_calc.metallurgy.marginal_cost import QUANTITIES, MarginalCost

if TYPE_CHECKING:
    import pandas as pd

    from converter_calc.metallurgy.law_ranking import LawRanking
    from converter_calc.metallurgy.laws_compared import LawsCompared

WIDTH = 100
TON_CAUTION = "A calculation, not an instruction: the shop's own practice and its engineers decide."
#: Lime that differs by less is the same lime: the least basicity sets it either way.
STILL_KG = 2.0
EASED = {"phosphorus": "0.001 %", "basicity": "0.1", "magnesia": "1 %"}


def plain(x: Any) -> Any:
    """Numbers, texts, lists and mappings ready for JSON; what is no number becomes None."""
    if isinstance(x, Mapping):
        return {str(key): plain(part) for key, part in x.items()}
    if isinstance(x, (list, tuple)):
        return [plain(part) for part in x]
    if isinstance(x, (bool, str)) or x is None:
        return x
    number = x.item() if hasattr(x, "item") else x
    return number if not isinstance(number, float) or math.isfinite(number) else None


def records(table: pd.DataFrame) -> list[dict[str, Any]]:
    """Rows of a table as mappings ready for JSON."""
    return [plain(row) for row in table.to_dict("records")]


def _rows(table: Any) -> Iterable[Any]:
    """Rows of a table, columns as attributes."""
    return table.itertuples()  # type: ignore[no-any-return]


def _number(x: Any, digits: int) -> str:
    number = float(x)
    return f"{number:,.{digits}f}" if math.isfinite(number) else "-"


def _signed(x: Any, digits: int) -> str:
    number = round(float(x), digits) + 0.0  # no "-0"
    return f"{number:+,.{digits}f}" if math.isfinite(number) else "-"


def _grid(heads: Sequence[str], rows: Iterable[Sequence[str]], first: int) -> list[str]:
    """Lines of a table, the first column flush left."""
    body = [list(row) for row in rows]
    widths = [max(len(row[k]) for row in [list(heads), *body]) for k in range(len(heads))]
    widths[0] = max(first, widths[0])
    lines = []
    for row in [list(heads), *body]:
        cells = [row[0].ljust(widths[0])]
        cells += [cell.rjust(width) for cell, width in zip(row[1:], widths[1:], strict=True)]
        lines.append("  " + "  ".join(cells).rstrip())
    return lines


def _wrapped(text: str, indent: str = "  ") -> list[str]:
    return textwrap.wrap(text, WIDTH, initial_indent=indent, subsequent_indent=indent)


def laws_compared_text(compared: LawsCompared, heat: int = 0) -> str:
    """The plan of one heat (row number) under each law, as text."""
    table = compared.table
    rows = table[table["heat_id"] == table["heat_id"].drop_duplicates().iloc[heat]]
    lines = [f"PHOSPHORUS LAWS   heat {rows['heat_id'].iloc[0]}", "=" * WIDTH]
    heads = ("law", "lime kg", "off by 1 s", "for P kg", "slag kg", "Fe to slag", "O2 Nm3",
             "scrap kg", "end P %", "L_P")  # fmt: skip
    body = []
    for row in _rows(rows):
        mark = "* " if row.chosen else "  "
        if row.status != "solved":
            near = _number(row.nearest_end_P_pct, 4)
            body.append(
                [mark + row.law, "no plan", *[""] * 6, f"> {near}" if near != "-" else "-", ""]
            )
            continue
        low, high = _number(row.lime_low_kg, 0), _number(row.lime_high_kg, 0)
        moves = not abs(row.lime_high_kg - row.lime_low_kg) < STILL_KG
        between = "" if math.isnan(row.scatter_log10) else f"{low} to {high}" if moves else "as is"
        body.append([
            mark + row.law, _number(row.lime_kg, 0), between, _number(row.lime_for_P_kg, 0),
            _number(row.slag_kg, 0), _number(row.iron_to_slag_kg, 0), _number(row.oxygen_Nm3, 0),
            _number(row.scrap_kg, 0), _number(row.end_P_pct, 4), _number(row.L_P, 0),
        ])  # fmt: skip
    lines += _grid(heads, body, 34)
    lines += ["", *_wrapped(
        "* the law chosen. lime: phosphorus aim or least basicity, whichever asks for more; off by "
        "1 s: if the law is off by its published (or measured) scatter; for P: for the phosphorus "
        "aim alone; Fe to slag: iron as oxide [kg]; end P after >: the least that lime reaches. "
        "Each law times its approach factor.")]  # fmt: skip
    notes = [f"{row.law}: {row.binding}" for row in _rows(rows) if row.binding]
    notes += [f"{row.law}: outside its range: {row.outside}" for row in _rows(rows)
              if row.outside and row.status == "solved"]  # fmt: skip
    flat = [str(row.law) for row in _rows(rows) if row.on_plateau]
    if flat:
        notes.append(
            f"under {', '.join(flat)} the slag is where measured partition no longer rises with "
            "basicity and iron oxide (Basu, Lahiri, Seetharaman 2007), though the law does"
        )
    for note in notes:
        lines += ["", *_wrapped("! " + note)]
    return "\n".join(lines) + "\n"


def ranking_text(ranking: LawRanking) -> str:
    """Laws ranked by measured heats, as text."""
    lines = ["LAWS AGAINST MEASURED HEATS", "=" * WIDTH]
    heads = ("law", "rank", "approach", "+- 1 s", "scatter", "error P %", "of P %", "worse by",
             "heats", "in range")  # fmt: skip
    body = []
    for row in _rows(ranking.table):
        tested = row.rank > 0
        worse = (
            f"{row.beside_best_pct:.5f} +- {row.beside_best_error_pct:.5f}" if row.rank > 1 else ""
        )
        body.append([
            str(row.law), str(row.rank) if tested else "-", _number(row.approach, 3),
            _number(row.approach * row.ln_error, 3), _number(row.scatter_log10, 3),
            _number(row.error_P_pct, 5), _number(row.error_P_share_pct, 1), worse,
            str(row.heats), str(row.in_range),
        ])  # fmt: skip
    lines += _grid(heads, body, 32)
    lines += ["", *_wrapped(
        "approach: robust mean of measured over calculated L_P; scatter: of log10 L_P about it; "
        "error P: mean absolute error of end phosphorus from the measured slag, on heats that "
        "the factor was not fitted to; worse by: beside the first law, same heats.")]  # fmt: skip
    for note in ranking.notes:
        lines += _wrapped("- " + note)
    best = ranking.offered
    if best is not None:
        fit = ranking.fits[best]
        lines += ["", "To use it, in the heat or shop file:", "", "  [law]",
                  f'  phosphorus = "{best}"', "  [practice]",
                  f"  P_approach = {fit.approach:.4g}"]  # fmt: skip
    return "\n".join(lines) + "\n"


def marginal_text(cost: MarginalCost, table: pd.DataFrame) -> str:
    """The marginal cost of phosphorus, as text."""
    lines = [f"What {cost.step_pct:g} % less phosphorus costs, at the aim of {cost.aim_P_pct:g} %"]
    if not cost.binding:
        lines += _wrapped(
            "Nothing: the least basicity sets the lime, and the steel ends at "
            f"{cost.end_P_pct:.4f} % P, below the aim. The table shows from which aim on it costs."
        )
    else:
        for key, (label, unit) in QUANTITIES.items():
            digits = 3 if key.endswith("per_t") else 2 if unit == "currency" else 1
            lines.append(f"  {label:<36}{_signed(cost.change[key], digits):>12} {unit}")
        lines.append(
            f"  {'a heat, steel not tapped counted':<36}{_signed(cost.cost, 2):>12} currency"
        )
    if cost.unpriced:
        lines += _wrapped(f"without a price, so not in the cost: {', '.join(cost.unpriced)}")
    heads = ("aim P %", "lime kg", "slag kg", "lime", "Fe lost", "scrap", "O2 Nm3", "cost a heat")
    body = [
        [_number(row.aim_P_pct, 4), _number(row.lime_kg, 0), _number(row.slag_kg, 0),
         _signed(row.d_lime_kg, 0), _signed(row.d_iron_to_slag_kg + row.d_droplets_kg, 0),
         _signed(row.d_scrap_kg, 0), _signed(row.d_oxygen_Nm3, 1), _signed(row.d_cost, 0)]
        if row.status == "solved"
        else [_number(row.aim_P_pct, 4), "no plan", *[""] * 6]
        for row in _rows(table)
    ]  # fmt: skip
    lines += ["", f"Against the aim: the plan, and its change for {cost.step_pct:g} % less"]
    return "\n".join([*lines, *_grid(heads, body, 8)]) + "\n"


def lime_limits_text(limits: LimeLimits) -> str:
    """Limits on the lime axis and the curve at every fourth point, as text."""
    lines = [f"LIME   {limits.lime}, law {limits.law}", "=" * WIDTH]
    heads = ("limit", "lime kg", "end P %", "CaO/SiO2", "slag kg", "scrap kg")
    body = [
        [mark.label, _number(mark.lime_kg, 0), _number(mark.end_P_pct, 4),
         _number(mark.basicity, 2), _number(mark.slag_kg, 0), _number(mark.scrap_kg, 0)]
        for mark in limits.marks
    ]  # fmt: skip
    lines += _grid(heads, body, 44)
    for mark in limits.marks:
        if mark.note:
            lines += _wrapped(f"- {mark.label}: {mark.note}")
        lines += [f"      {term.label}: {term.value:.4g} {term.unit}   [{term.source}]".rstrip()
                  for term in mark.terms if term.source]  # fmt: skip
    heads_of_curve = (
        "lime kg",
        "end P %",
        "gain a kg/t",
        "CaO/SiO2",
        "undissolved",
        "slag kg",
        "scrap kg",
    )
    body = [
        [_number(row.lime_kg, 0), _number(row.end_P_pct, 4), _number(row.gain_pct_per_kg_t, 5),
         _number(row.basicity, 2), _number(row.undissolved_lime_kg, 0), _number(row.slag_kg, 0),
         _number(row.scrap_kg, 0)]
        for row in _rows(limits.curve.iloc[::4])
    ]  # fmt: skip
    return "\n".join([*lines, "", *_grid(heads_of_curve, body, 8)]) + "\n"


def flux_mixes_text(mixes: FluxMixes) -> str:
    """Pairs of carriers planned for the same heat, as text."""
    table = mixes.table
    lines = [
        f"FLUXES   against {table['lime'].iloc[0]} with {table['magnesia'].iloc[0]}",
        "=" * WIDTH,
    ]
    heads = ("lime + magnesia carrier", "kg", "and kg", "scrap kg", "heat MJ", "O2 Nm3", "CO2 kg/t",
             "cost/t", "end P %")  # fmt: skip
    body = []
    for place, row in enumerate(_rows(table)):
        name = f"{row.lime} + {row.magnesia}"
        if row.status != "solved":
            body.append([name, "no plan", *[""] * 7])
            continue
        change = place > 0
        body.append([
            name, _number(row.lime_kg, 0), _number(row.magnesia_kg, 0),
            _signed(row.d_scrap_kg, 0) if change else _number(row.scrap_kg, 0),
            _signed(row.heat_MJ, 0) if change else "",
            _signed(row.d_oxygen_Nm3, 0) if change else _number(row.oxygen_Nm3, 0),
            _signed(row.d_CO2_kg_per_t, 1) if change else _number(row.CO2_kg_per_t, 1),
            _signed(row.d_cost_per_t, 2) if change else _number(row.cost_per_t, 2),
            _number(row.end_P_pct, 4),
        ])  # fmt: skip
    lines += _grid(heads, body, 32)
    lines += _wrapped(
        "From the second line on scrap, oxygen, CO2 and cost are changes against the first. CO2: "
        "off-gas burnt, and the making of materials where the shop gives it. heat: what the fluxes "
        "take more beside the scrap of the first line."
    )
    lines += [line for row in _rows(table) if row.binding
              for line in _wrapped(f"! {row.lime} + {row.magnesia}: {row.binding}")]  # fmt: skip
    if any("fluorspar" in outcome.charged_kg for outcome in mixes.outcomes.values()):
        lines += _wrapped("! " + CAUTION)
    missing = sorted({name for text in table["unpriced"] for name in text.split(", ") if name})
    if missing:
        lines += _wrapped(f"- no price, so no cost: {', '.join(missing)}")
    return "\n".join(lines) + "\n"


def flux_choice_text(choice: FluxChoice) -> str:
    """The least-cost fluxes of a heat, as text."""
    aimed = (
        "least cost per tonne of steel"
        if choice.steel_value_per_t is None
        else f"greatest value of the heat, steel at {choice.steel_value_per_t:g} a tonne"
    )
    lines = [f"Fluxes by {aimed}"]
    heads = ("material", "kg", "kg/t", "price/t", "comes in below")
    body = [
        [use.material, _number(use.kg, 0), _number(use.kg_per_t, 2), _number(use.price_per_t, 2),
         _number(use.enters_below_per_t, 2) if use.enters_below_per_t > 0.0
         else "at no price" if use.enters_below_per_t <= 0.0 else "-"]
        for use in choice.uses
    ]  # fmt: skip
    lines += _grid(heads, body, 24)
    lines += _wrapped(
        f"cost of materials {choice.cost_per_t:.2f} a tonne of steel; with the heat's own lime and "
        f"magnesia flux {_number(choice.beside, 2)}"
    )
    for term in choice.terms():
        if not term.source:
            number = _number(term.value, 4 if term.unit == "%" else 1)
            lines.append(f"  {term.label:<34}{number:>12} {term.unit}".rstrip())
    for key, saved in choice.binding.items():
        step = EASED.get(key, "1 % of the limit")
        lines.append(f"  easing the {LABELS[key]} by {step} saves {saved:.3f} a tonne")
    if choice.left_out:
        lines += _wrapped(f"- no price, so left out: {', '.join(choice.left_out)}")
    for material in ("fluorspar",):
        if any(use.material == material and use.kg > 0.0 for use in choice.uses):
            lines += _wrapped("! " + CAUTION)
    for index, status in enumerate(choice.outcome.status):
        if status != "solved":
            lines += _wrapped("! " + choice.outcome.binding[index])
    return "\n".join([*lines, "", *_wrapped(TON_CAUTION)]) + "\n"
