"""All phosphorus laws side by side, and the laws held against the measured heats of a log."""

from __future__ import annotations

import math
from collections.abc import Callable
from functools import partial
from typing import Any

import streamlit as st

from converter_calc.balance.heats import HeatTable
from converter_calc.balance.schema import parameters
from converter_calc.basis.errors import Fault, InputError
from converter_calc.heatlog.reading import read_log
from converter_calc.laws import phosphorus
from converter_calc.metallurgy.law_ranking import LawRanking, rank_laws
from converter_calc.metallurgy.laws_compared import LawsCompared, compare_laws
from converter_calc.page import registers
from converter_calc.page.balance_view import show_figure
from converter_calc.page.fields import WIDE_PX
from converter_calc.page.log_parts import reading_choices, refused_shown
from converter_calc.page.markup import fault_texts, heading, note, put, rows_of, table_html
from converter_calc.page.numbers import number_text
from converter_calc.page.parts import cell, save_tables, why
from converter_calc.page.session import Answer, form, kept, replace_form, theme, write_address
from converter_calc.planning.explain import Explanation, explain
from converter_calc.reporting.phosphorus_charts import measured_figure, measured_text
from converter_calc.reporting.phosphorus_tables import STILL_KG

#: Session: the ranking of the log that was read last, and what was asked to be planned.
RANKING, REFUSED, ASKED = "cc_ranking", "cc_ranking_refused", "cc_laws_asked"
FIGURES = ("phosphorus", "oxygen", "scrap")
FAULTS_SHOWN = 20


def laws_part(found: Answer) -> None:
    """The plan under every law: asked for with a button, then kept with the heat."""
    if found.heats is None:
        return
    put(heading("Every law side by side"))
    ranking: LawRanking | None = st.session_state.get(RANKING)
    fitted = ranking is not None and st.checkbox(
        "Each law with the approach factor fitted to the measured heats", key="laws_fitted"
    )
    key = (found.asked, fitted)
    if st.button("Plan under every law", key="compare_laws"):
        st.session_state[ASKED] = key
    if st.session_state.get(ASKED) != key:
        put("Plans this heat under each published law: lime, slag, iron to slag, oxygen, scrap.")
        return
    compared = _compared(found, found.heats, ranking if fitted else None)
    put(
        "* the law chosen. Lime: for the phosphorus aim or the least basicity, whichever asks for "
        "more. Spread: lime if the law is off by one standard deviation, where one is known. "
        "For P alone: without the least basicity."
    )
    put(_laws_html(compared))
    notes = _notes(compared)
    if notes:
        put(note("note", "Range and limits", notes))
    why("laws", _reasons(compared), "Why this number of a law")
    save_tables("laws", {"laws": compared.table})


def _compared(found: Answer, heats: HeatTable, ranking: LawRanking | None) -> LawsCompared:
    import pandas as pd

    names = list(dict.fromkeys([heats.choices.laws["phosphorus"], *phosphorus.laws()]))
    approach = {} if ranking is None else {n: f.approach for n, f in ranking.fits.items()}
    scatter = {} if ranking is None else {n: f.scatter_log10 for n, f in ranking.fits.items()}

    def make() -> LawsCompared:
        bar = st.progress(0.0, "The heat is planned under each law")
        tables: list[Any] = []
        outcomes: dict[str, Any] = {}
        for done, law in enumerate(names):
            bar.progress(done / len(names), f"Planned under {law}")
            one = compare_laws(heats, [law], approach, scatter)
            tables.append(one.table)
            outcomes.update(one.outcomes)
        bar.empty()
        return LawsCompared(pd.concat(tables, ignore_index=True), outcomes)

    made: LawsCompared = kept("laws", found, repr((approach, scatter)), make)
    return made


def _laws_html(compared: LawsCompared) -> Any:
    rows = []
    for row in rows_of(compared.table):
        name = f"{row.law}{' *' if row.chosen else ''}"
        if row.status != "solved":
            near = cell(row.nearest_end_P_pct, 4)
            least = f"least {near}" if near != "–" else "–"
            rows.append((name, "no plan", *[""] * 6, least, "", "", _range_words(row)))
            continue
        rows.append((
            name, cell(row.lime_kg, 0), _spread(row), cell(row.lime_for_P_kg, 0),
            cell(row.slag_kg, 0),
            cell(row.iron_to_slag_kg, 0), cell(row.oxygen_Nm3, 0), cell(row.scrap_kg, 0),
            cell(row.end_P_pct, 4), cell(row.L_P, 0), cell(row.approach, 2), _range_words(row),
        ))  # fmt: skip
    heads = ("law", "lime, kg", "spread, kg", "for P alone, kg", "slag, kg", "iron to slag, kg",
             "oxygen, Nm³", "scrap, kg", "end P, %", "L_P", "approach", "its range")  # fmt: skip
    return table_html("laws side by side", heads, rows, wide=True, numeric=range(1, 11))


def _spread(row: Any) -> str:
    if math.isnan(row.scatter_log10):
        return "not known"
    if abs(row.lime_high_kg - row.lime_low_kg) < STILL_KG:
        return "none"
    return f"{cell(row.lime_low_kg, 0)} to {cell(row.lime_high_kg, 0)}"


def _range_words(row: Any) -> str:
    if row.status != "solved":
        return ""
    return "✓ inside" if row.in_range else "▲ outside"


def _notes(compared: LawsCompared) -> list[str]:
    found = [f"{row.law}: {row.binding}" for row in rows_of(compared.table) if row.binding]
    found += [f"{row.law}: outside its range: {row.outside}" for row in rows_of(compared.table)
              if row.outside and row.status == "solved"]  # fmt: skip
    flat = [str(row.law) for row in rows_of(compared.table) if row.on_plateau]
    if flat:
        found.append(
            f"under {', '.join(flat)} the slag is where measured partition no longer rises with "
            "basicity and iron oxide (Basu, Lahiri, Seetharaman 2007), though the law does"
        )
    return found


def _reasons(compared: LawsCompared) -> dict[str, Callable[[], Explanation]]:
    found: dict[str, Callable[[], Explanation]] = {}
    for law, groups in compared.outcomes.items():
        found[f"{law}: lime"] = partial(compared.explanation, law)
        for _, outcome in groups:
            if outcome.status[0] == "solved":
                found |= {f"{law}: {q}": partial(explain, outcome, q) for q in FIGURES}
    return dict(sorted(found.items(), key=lambda item: list(compared.outcomes).index(
        item[0].split(":")[0])))  # fmt: skip


def measured_part(found: Answer) -> None:
    """Laws ranked by the heats of a log, and the one to take over into the plan."""
    if found.heats is None:
        return
    put(heading("Laws against measured heats"))
    put(
        "Give a heat log with end temperature, end phosphorus and slag analysis. Each law gets "
        "the approach factor that fits the heats, and is judged by heats it was not fitted to."
    )
    file = st.file_uploader("Heat log", ["csv", "parquet", "xlsx"], key="laws_log",
                            max_upload_size=5)  # fmt: skip
    mark, skip = reading_choices("laws")
    if st.button("Rank the laws by this log", key="rank_laws"):
        for key in (RANKING, REFUSED):
            st.session_state.pop(key, None)
        try:
            _rank(file, found.heats, mark, skip_unknown=skip)
        except InputError as error:
            lines = fault_texts(error.faults)
            more = len(lines) - FAULTS_SHOWN
            lines = [*lines[:FAULTS_SHOWN], f"and {more} more"] if more > 0 else lines
            put(note("fault", "The log was not taken:", lines))
    ranking: LawRanking | None = st.session_state.get(RANKING)
    if ranking is not None:
        _ranking(ranking)
    if REFUSED in st.session_state:
        refused_shown(st.session_state[REFUSED], "laws")


def _rank(file: Any, heats: HeatTable, mark: str, *, skip_unknown: bool) -> None:
    """Keep the ranking of an uploaded log. Raises InputError with every fault of the file."""
    if file is None:
        raise InputError([Fault("log", "choose a file first")])
    bar = st.progress(0.1, "The log is read")
    try:
        with registers.as_file(file.getvalue(), file.name) as path:
            read = read_log(path, materials=heats.materials, decimal_mark=mark,
                            skip_unknown=skip_unknown)  # fmt: skip
        st.session_state[REFUSED] = read.refused
        bar.progress(0.5, "The laws are fitted and tested")
        ranking = rank_laws(read.frame)
    finally:
        bar.empty()
    if read.rows_refused:
        ranking.notes.append(f"{read.rows_refused} rows of the log were refused as faulty")
    if read.skipped:
        ranking.notes.append(f"columns left out: {', '.join(read.skipped)[:300]}")
    st.session_state[RANKING] = ranking


def _ranking(ranking: LawRanking) -> None:
    rows = []
    for row in rows_of(ranking.table):
        tested = row.rank > 0
        worse = "–"
        if row.rank > 1:
            worse = f"{row.beside_best_pct:.5f} ± {row.beside_best_error_pct:.5f}"
        rows.append((
            str(row.law), str(row.rank) if tested else "–", cell(row.approach, 3),
            cell(row.approach * row.ln_error, 3), cell(row.scatter_log10, 3),
            cell(row.error_P_pct, 5), cell(row.error_P_share_pct, 1), worse, str(row.heats),
            str(row.in_range),
        ))  # fmt: skip
    heads = ("law", "rank", "approach", "± one st. error", "scatter, log L_P", "error of P, %",
             "of the P, %", "worse than the first by, %", "heats", "in range")  # fmt: skip
    put(table_html("laws ranked", heads, rows, wide=True))
    put(
        "Error of P: mean absolute error of end phosphorus from the measured slag, on heats that "
        "the factor was not fitted to. Scatter: of log L_P about the factor."
    )
    if ranking.notes:
        put(note("note", "Of the log", ranking.notes))
    _take_over(ranking)
    why("ranking", {law: partial(_fit_reason, ranking, law) for law in ranking.fits},
        "Why this approach")  # fmt: skip
    save_tables("laws_measured", {"ranking": ranking.table, "tests": ranking.tests})


def _take_over(ranking: LawRanking) -> None:
    """A law of the ranking: its picture, and one click that puts it into the plan."""
    names = [str(law) for law in ranking.table["law"] if str(law) in ranking.fits]
    if not names:
        return
    if st.session_state.get("law_taken") not in names:  # another log may rank other laws
        st.session_state["law_taken"] = ranking.offered or names[0]
    law = st.selectbox("Law to look at and to take over", names, key="law_taken", width=WIDE_PX)
    fit, row = ranking.fits[law], parameters()["P_approach"]
    if law in set(ranking.tests["law"]):
        figure = measured_figure(ranking.tests, law, theme())
        show_figure(figure, "measured_P", measured_text(ranking.tests, law))
    if not row.low <= fit.approach <= row.high:
        put(note("note", f"An approach of {fit.approach:.3g} is outside {row.low:g} to "
                 f"{row.high:g}; this law cannot be taken over."))  # fmt: skip
        return
    if 2 * fit.in_range < fit.heats:
        put(note("note", f"{law} is outside its range for most of these heats: a fit, no more."))
    st.button(f"Plan with {law} and approach {fit.approach:.3g}", key="take_law",
              on_click=_take, args=(law, fit.approach))  # fmt: skip
    if st.session_state.pop("cc_law_taken", None) == law:
        put(note("good", f"The plan now uses {law}, approach {fit.approach:.4g}."))


def _take(law: str, approach: float) -> None:
    new = form().copy()
    new.fields["law_phosphorus"] = law
    new.fields["P_approach"] = number_text(float(f"{approach:.4g}"))
    replace_form(new)
    st.session_state["cc_law_taken"] = law
    write_address()


def _fit_reason(ranking: LawRanking, law: str) -> Explanation:
    fit = ranking.fits[law]
    reason = f"{law} against the heats of the log:"
    return Explanation("approach", fit.approach, "", reason, fit.terms())
