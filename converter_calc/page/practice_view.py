"""Slag practice: practices side by side, the slag as a product, where each element goes."""

from __future__ import annotations

from collections.abc import Callable
from functools import partial
from typing import TYPE_CHECKING, Any

import numpy as np
import streamlit as st

from converter_calc.balance.schema import sections
from converter_calc.metallurgy.element_shares import ElementShares, Shares, element_shares
from converter_calc.metallurgy.practices import compare_practices
from converter_calc.metallurgy.practices_chain import Chain, practice_columns, stage_rows
from converter_calc.metallurgy.practices_comparison import TITLES, Comparison
from converter_calc.metallurgy.slag_product import slag_product
from converter_calc.page.address import keep_in_address
from converter_calc.page.balance_view import show_figure, solved_or_told
from converter_calc.page.fields import number_fields
from converter_calc.page.markup import formula, heading, note, put, table_html
from converter_calc.page.parts import (
    CAUTION,
    cell,
    part_of,
    right_heat,
    save_tables,
    shown_unit,
    why,
)
from converter_calc.page.session import answer, guarded, kept, theme, write_address
from converter_calc.planning.explain import Explanation, Term, explain
from converter_calc.planning.outcome import at
from converter_calc.reporting.practice_charts import (
    SHARE_COLOURS,
    practices_figure,
    practices_text_of,
    shares_figure,
    shares_text_of,
)
from converter_calc.reporting.practice_tables import DIGITS

if TYPE_CHECKING:
    import pandas as pd

PARTS = {
    "practices": "Practices side by side",
    "slag": "The slag as a product",
    "elements": "Where each element goes",
}
#: Inputs that stand first, by practice; the others are folded away.
FIRST = ("slag_off_share_pct", "slag_off_temp_C", "slag_off_C_pct", "kept_slag_share_pct",
         "pretreated_P_pct", "pretreated_Si_pct", "pretreated_S_pct")  # fmt: skip
SECTIONS = ("slag_off", "kept_slag", "pretreated")
#: What of a stage can be asked about.
ASKED = ("lime", "scrap", "oxygen", "magnesia", "phosphorus", "carbon", "temperature")
INPUT_PX = 165
STAGE_COLUMNS = (
    ("temp_C", "°C", 1), ("C_pct", "[C], %", 3), ("P_pct", "[P], %", 4), ("Mn_pct", "[Mn], %", 3),
    ("lime_kg", "lime, kg", 0), ("scrap_kg", "scrap, kg", 0), ("oxygen_Nm3", "oxygen, Nm³", 0),
    ("slag_kg", "slag, kg", 0), ("basicity", "CaO/SiO₂", 2), ("T_Fe_pct", "total iron, %", 1),
    ("P2O5_pct", "P₂O₅, %", 2), ("L_P", "L_P", 1),
)  # fmt: skip
SLAG_CAUTION = (
    "Free lime makes slag swell when it takes up water; hot slag on water or wet ground explodes. "
    "Use and storage: local codes and the shop's own practice."
)
keep_in_address("practice", ("part",))


def practice_view() -> None:
    """The whole view; what is changed in it redraws only it."""
    _fragment()


@st.fragment
def _fragment() -> None:
    guarded(_shown)
    write_address()


def _shown() -> None:
    shown = {"practices": _practices, "slag": _slag, "elements": _elements}
    shown[part_of("practice", PARTS)]()


def _practices() -> None:
    put("The same hot metal made by each practice: full balances, each closed over all its stages.")
    number_fields(FIRST, INPUT_PX)
    more = st.expander("All inputs of the practices", key="practice_inputs", on_change="rerun")
    if more.open:
        with more:
            for name in SECTIONS:
                rows = [row.name for row in sections()[name].values() if row.name not in FIRST]
                number_fields(rows, INPUT_PX)
    found = answer()
    if not right_heat(found, planned=True) or found.heats is None:
        return
    with st.spinner("The practices are worked out"):
        comparison: Comparison = kept("practices", found, (), partial(compare_practices,
                                                                     found.heats))  # fmt: skip
    table = comparison.table()
    _verdicts(comparison)
    shade = theme()
    put(heading("Practices side by side"))
    if (table["status"] == "solved").any():
        figure = kept("practices figure", found, shade, lambda: practices_figure(table, shade))
        show_figure(figure, "practices", practices_text_of(table))
    put(_side_by_side(comparison))
    why("practices", _reasons(comparison))
    put(heading("Stages and closure of each practice"))
    for name in comparison.chains:
        _opened(name, *comparison.chain(name))
    put(note("note", CAUTION))
    save_tables("practices", _sheets(comparison, table))


def _verdicts(comparison: Comparison) -> None:
    """Practices without a plan: what binds, and what would free it."""
    for name in comparison.chains:
        chain, i = comparison.chain(name)
        if chain.status[i] != "solved":
            title = f"{TITLES[name].capitalize()}: no plan. {chain.binding[i]}"
            put(note("fault", title, [f"freed by: {text}" for text in chain.frees[i]]))


def _side_by_side(comparison: Comparison) -> Any:
    chains = [comparison.chain(name) for name in comparison.chains]
    numbers = [chain.numbers() for chain, _ in chains]
    rows = []
    for key, column in practice_columns().items():
        row = [
            float(at(found[key], i)) if chain.status[i] == "solved" else np.nan
            for found, (chain, i) in zip(numbers, chains, strict=True)
        ]
        if column.unit == "relative":
            cells = ["0" if x == 0.0 else f"{x:.0e}" if np.isfinite(x) else "–" for x in row]
        elif all(x == 0.0 or not np.isfinite(x) for x in row):
            continue
        else:
            digits = 2 if key in ("T_Fe_pct", "slag_P2O5_pct") else DIGITS.get(column.unit, 2)
            cells = [cell(x, digits) for x in row]
        label = f"{formula(column.label)}, {shown_unit(column.unit)}".rstrip(", ")
        rows.append((label, *cells))
    heads = ("per heat", *(TITLES[name] for name in comparison.chains))
    return table_html("practices side by side", heads, rows, wide=True)


def _reasons(comparison: Comparison) -> dict[str, Callable[[], Explanation]]:
    found: dict[str, Callable[[], Explanation]] = {}
    for name in comparison.chains:
        chain, i = comparison.chain(name)
        if chain.status[i] != "solved":
            continue
        found[f"{TITLES[name]}: every number and what it counts"] = partial(
            _meaning, comparison, name
        )
        for stage, outcome in chain.stages:
            where = TITLES[name] if len(chain.stages) == 1 else f"{TITLES[name]}, {stage}"
            for quantity in ASKED:
                found[f"{where}: {quantity}"] = partial(explain, outcome, quantity, i)
    return found


def _meaning(comparison: Comparison, name: str) -> Explanation:
    terms = comparison.terms(name)
    return Explanation(name, np.nan, "", "Read off the balances of all stages:", terms)


def _opened(name: str, chain: Chain, i: int) -> None:
    """Stages, closure and warnings of one practice, built once opened."""
    title = TITLES[name].capitalize()
    box = st.expander(title, key="practice_" + name, on_change="rerun")
    if not box.open:
        return
    with box:
        rows = [
            (row["stage"], *(cell(row[key], digits) for key, _, digits in STAGE_COLUMNS),
             f"{row['closure']:.0e}", row["law"])
            for row in stage_rows(chain, i)
        ]  # fmt: skip
        heads = ("where it ends", *(label for _, label, _ in STAGE_COLUMNS), "worst closure",
                 "phosphorus law")  # fmt: skip
        put(table_html(f"stages of {title}", heads, rows, wide=True,
                       numeric=range(1, len(heads) - 1)))  # fmt: skip
        closures = [
            (
                el,
                cell(at(c.inflow, i), 3),
                cell(at(c.outflow, i), 3),
                f"{float(at(c.relative, i)):.1e}",
            )
            for el, c in chain.closures().items()
        ]
        put(heading("Closure over all stages"))
        put(table_html(f"closure of {title}", ("element", "in, kg (energy: MJ)", "out", "relative"),
                       closures))  # fmt: skip
        lines = [f"{h.name}: worst gap {float(at(h.worst(), i)):.0e}" for h in chain.handovers]
        if lines:
            put(note("note", "What one stage gives and the next takes:", lines))
        warnings = [f"{w['message']} [{w['field']}]" for w in chain.warnings(i)]
        if warnings:
            put(note("note", "Warnings", warnings))


def _sheets(comparison: Comparison, table: pd.DataFrame) -> dict[str, pd.DataFrame]:
    import pandas as pd

    stages: list[dict[str, Any]] = []
    for name in comparison.chains:
        chain, i = comparison.chain(name)
        if chain.status[i] == "solved":
            stages += [{"practice": name, **row} for row in stage_rows(chain, i)]
    return {"practices": table, "stages": pd.DataFrame(stages)}


def _slag() -> None:
    outcome = solved_or_told()
    if outcome is None:
        return
    import pandas as pd

    product = kept("slag product", answer(), (), partial(slag_product, outcome))
    put(heading("The slag at the end of the blow"))
    put("Each number with its definition or source.")
    terms = product.terms()
    rows = [(formula(t.label), _slag_cell(t), shown_unit(t.unit), t.source) for t in terms]
    put(table_html("slag as a product", ("quantity", "value", "unit", "definition or source"), rows,
                   numeric={1}))  # fmt: skip
    if "softens_C" not in product.document():
        put(note("note", "No melting hint: the slag is outside what the hint was made for."))
    put(note("note", SLAG_CAUTION))
    frame = pd.DataFrame([(t.label, t.value, t.unit, t.source) for t in terms],
                         columns=["quantity", "value", "unit", "source"])  # fmt: skip
    save_tables("slag", {"slag": frame})


def _slag_cell(term: Term) -> str:
    digits = 3 if term.unit == "" else 0 if term.unit in ("kg", "MJ", "C") else 2
    return cell(term.value, digits)


def _elements() -> None:
    outcome = solved_or_told()
    if outcome is None:
        return
    shares: ElementShares = kept("shares", answer(), (), partial(element_shares, outcome))
    main = shares.main()
    frame, shade = main.frame(), theme()
    put(heading("Where each element goes"))
    figure = kept("shares figure", answer(), shade, lambda: shares_figure(frame, shade))
    show_figure(figure, "shares", shares_text_of(frame))
    rows = [
        (row["element"], cell(row["input_kg"], 1),
         *(cell(row[f"{place}_pct"], 2) for place in SHARE_COLOURS), cell(row["ratio"], 1),
         row["law"], f"outside: {row['outside']}" if row["outside"] else "inside or none")
        for row in frame.to_dict("records")
    ]  # fmt: skip
    heads = ("element", "charged, kg", *(f"% to {place}" for place in SHARE_COLOURS),
             "(X)/[X]", "what decides", "range of the law")  # fmt: skip
    put(table_html("where each element goes", heads, rows, wide=True,
                   numeric=range(1, len(heads) - 2)))  # fmt: skip
    why("elements", {
        f"{el}: charged and leaving": partial(_share_reason, el, found)
        for el, found in shares.elements.items()
    })  # fmt: skip
    save_tables("elements", {"elements": shares.frame()})


def _share_reason(el: str, found: Shares) -> Explanation:
    terms = [Term(f"brought by {name.replace('_', ' ')}", float(kg[0]), "kg", "analysis and mass")
             for name, kg in found.brought_kg.items() if kg[0] > 0.0]  # fmt: skip
    terms += [Term(f"to {place}", float(kg[0]), "kg", "mass balance")
              for place, kg in found.taken_kg.items() if kg[0] > 0.0]  # fmt: skip
    ratio = float(found.law.ratio[0])
    if np.isfinite(ratio):
        terms.append(Term(f"({el})/[{el}]", ratio, "", found.law.source))
    reason = f"What decides: {found.law.name}. {found.law.source}"
    outside = found.range_note(0)
    if outside:
        reason += f". Outside its range: {outside}"
    return Explanation(f"{el} charged", float(found.input_kg[0]), "kg", reason, terms)
