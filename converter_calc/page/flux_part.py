"""Choice of fluxes: pairs of carriers beside each other, and the mix of least cost."""

from __future__ import annotations

from functools import partial
from typing import Any

import streamlit as st

from converter_calc.balance.heats import HeatTable
from converter_calc.basis.errors import ConverterError, Fault, InputError
from converter_calc.metallurgy.flux_choice import CANDIDATES, FluxChoice, choose_fluxes
from converter_calc.metallurgy.flux_mixes import CAUTION, FluxMixes, flux_mixes
from converter_calc.metallurgy.flux_search import LABELS, FluxLimits
from converter_calc.page.address import keep_in_address
from converter_calc.page.fields import plain_name
from converter_calc.page.markup import heading, note, put, rows_of, table_html
from converter_calc.page.numbers import number_text, parse_number
from converter_calc.page.parts import CAUTION as CALCULATION
from converter_calc.page.parts import cell, save_tables, why
from converter_calc.page.session import (
    Answer,
    form,
    kept,
    replace_form,
    view_field,
    write_address,
)
from converter_calc.planning.explain import Explanation
from converter_calc.reporting.phosphorus_tables import EASED

MOST_PRICE, MOST_KG_PER_T = 1e6, 100.0
#: Field -> label, what a blank stands for, most.
FIELDS = {
    "steel_value": ("Value of a tonne of steel, currency", "", MOST_PRICE),
    "fluorspar": ("Most fluorspar, kg/t", "0", MOST_KG_PER_T),
    "recycled_P": ("Most P by recycled slag, kg/t", "0.1", MOST_KG_PER_T),
}
Found = tuple[FluxMixes, FluxChoice | str]
keep_in_address("lime", FIELDS)


def flux_part(found: Answer) -> None:
    """Fluxes for the heat in the fields."""
    if found.heats is None:
        return
    put(heading("Choice of fluxes"))
    put(
        "Each pair of a lime carrier and a magnesia carrier is planned for the same aims; then the "
        "mix of least cost is sought among fluxes with a price. With a value of steel, the value "
        "of the heat is greatest, so that scrap melted counts."
    )
    given = _numbers()
    key = (found.asked, tuple(given.items()))
    if st.button("Compare fluxes", key="compare_fluxes"):
        st.session_state["cc_fluxes"] = key
    _given_masses(found.heats)
    if st.session_state.get("cc_fluxes") != key:
        return
    mixes, choice = _worked_out(found, found.heats, given)
    _pairs(mixes)
    _least_cost(choice, found.heats)
    put(note("note", CALCULATION, [CAUTION] if "fluorspar" in _used(choice) else []))
    save_tables("fluxes", {"pairs": mixes.table})


def _given_masses(heats: HeatTable) -> None:
    """What of the fluxes the fields give, and one click that lets the plan find it again."""
    roles = (heats.choices.lime, heats.choices.magnesia_flux)
    names = list(dict.fromkeys((*roles, *CANDIDATES)))
    fields = form().fields
    given = [f"{plain_name(name)} {fields[f'{name}_kg']} kg" for name in names
             if fields.get(f"{name}_kg", "").strip()]  # fmt: skip
    if given:
        put(note("note", f"The plan is given: {', '.join(given)}."))
        st.button("Let the plan find the fluxes again", key="free_fluxes", on_click=_take,
                  args=(dict.fromkeys(names),))  # fmt: skip


def _numbers() -> dict[str, float | None]:
    given: dict[str, float | None] = {}
    faults = []
    with st.container(horizontal=True):
        for name, (label, usual, most) in FIELDS.items():
            text = view_field("lime", name, label, width=220,
                              placeholder=f"{usual} if blank" if usual else "not counted if blank")  # fmt: skip # noqa: E501
            given[name] = float(usual) if usual else None
            if not text.strip():
                continue
            try:
                x = parse_number(text)
            except ValueError as error:
                faults.append(Fault(label, str(error)))
                continue
            if not 0.0 <= x <= most:
                faults.append(Fault(label, f"{x:g} is outside 0 to {most:g}"))
            given[name] = x
    if faults:
        raise InputError(faults)
    return given


def _worked_out(found: Answer, heats: HeatTable, given: dict[str, float | None]) -> Found:
    def make() -> Found:
        bar = st.progress(0.05, "The pairs are planned")
        mixes = flux_mixes(heats)
        bar.progress(0.6, "The least cost is sought")
        limits = FluxLimits(float(given["fluorspar"] or 0.0), float(given["recycled_P"] or 0.0))
        try:
            choice: FluxChoice | str = choose_fluxes(heats, None, limits, given["steel_value"])
        except ConverterError as error:  # the pairs can still be compared
            choice = str(error)
        bar.empty()
        return mixes, choice

    made: Found = kept("fluxes", found, tuple(given.items()), make)
    return made


def _pairs(mixes: FluxMixes) -> None:
    first = mixes.table.iloc[0]
    beside = f"{plain_name(first['lime'])} with {plain_name(first['magnesia'])}"
    put(heading("Pairs of carriers"))
    put(
        f"From the second row on scrap, oxygen, CO₂ and cost are changes against {beside}. Heat: "
        "what the fluxes take more, beside the same scrap. CO₂: off-gas burnt, and the making of "
        "materials where the shop gives it."
    )
    rows = [_pair_row(place, row) for place, row in enumerate(rows_of(mixes.table))]
    heads = ("lime and magnesia carrier", "lime carrier, kg", "magnesia carrier, kg", "scrap, kg",
             "heat, MJ", "oxygen, Nm³", "CO₂, kg/t", "cost, currency/t", "end P, %")  # fmt: skip
    put(table_html("pairs of fluxes", heads, rows, wide=True))
    told = [f"{plain_name(row.lime)} and {plain_name(row.magnesia)}: {row.binding}"
            for row in rows_of(mixes.table) if row.binding]  # fmt: skip
    missing = sorted(
        {name for text in mixes.table["unpriced"] for name in text.split(", ") if name}
    )
    if missing:
        told.append(
            f"no price, so no cost: {', '.join(map(plain_name, missing))}; give it under Plan a "
            "heat, Materials of the shop and prices"
        )
    if told:
        put(note("note", "To note", told))
    solved = mixes.table[mixes.table["status"] == "solved"]
    why("flux pairs", {
        f"{plain_name(row.lime)} and {plain_name(row.magnesia)}":
            partial(_pair_reason, mixes, row.lime, row.magnesia) for row in rows_of(solved)
    }, "What this pair changes")  # fmt: skip


def _pair_row(place: int, row: Any) -> tuple[str, ...]:
    name = f"{plain_name(row.lime)}, {plain_name(row.magnesia)}"
    if row.status != "solved":
        return (name, "no plan", *[""] * 7)
    sign, lead = ("+", "d_") if place else ("", "")

    def at(key: str, digits: int) -> str:
        return cell(getattr(row, lead + key), digits, sign)

    return (
        name, cell(row.lime_kg, 0), cell(row.magnesia_kg, 0), at("scrap_kg", 0),
        cell(row.heat_MJ, 0, "+") if place else "", at("oxygen_Nm3", 0), at("CO2_kg_per_t", 1),
        at("cost_per_t", 2), cell(row.end_P_pct, 4),
    )  # fmt: skip


def _pair_reason(mixes: FluxMixes, lime: str, magnesia: str) -> Explanation:
    reason = "What this pair charges, and what it changes against the first:"
    nan = float("nan")
    return Explanation("pair", nan, "", reason, mixes.terms(lime, magnesia))


def _used(choice: FluxChoice | str) -> list[str]:
    if isinstance(choice, str):
        return []
    return [use.material for use in choice.uses if use.kg > 0.0]


def _least_cost(choice: FluxChoice | str, heats: HeatTable) -> None:
    put(heading("Least cost"))
    if isinstance(choice, str):
        put(note("fault", f"No least cost: {choice}"))
        return
    rows = [
        (plain_name(use.material), cell(use.kg, 0), cell(use.kg_per_t, 2),
         cell(use.price_per_t, 2), _enters(use.enters_below_per_t))
        for use in choice.uses
    ]  # fmt: skip
    heads = ("flux", "kg", "kg/t", "price, currency/t", "comes in below, currency/t")
    put(table_html("fluxes of least cost", heads, rows))
    beside = cell(choice.beside, 2)
    put(
        f"Cost of materials {choice.cost_per_t:.2f} a tonne of steel; with the heat's own lime and "
        f"magnesia flux {beside}."
    )
    eased = [f"easing the {LABELS[key]} by {EASED.get(key, '1 % of the limit')} saves {x:.3f} a "
             "tonne" for key, x in choice.binding.items()]  # fmt: skip
    if eased:
        put(note("note", "What binds", eased))
    if choice.left_out:
        left = ", ".join(map(plain_name, choice.left_out))
        put(note("note", f"Left out for want of a price: {left}."))
    why("least cost", {"fluxes of least cost": partial(_choice_reason, choice)},
        "Why these fluxes")  # fmt: skip
    masses = {use.material: use.kg for use in choice.uses if use.kg > 0.0}
    roles = (heats.choices.lime, heats.choices.magnesia_flux)
    st.button("Plan with these fluxes", key="take_fluxes", on_click=_take,
              args=({**dict.fromkeys(roles, 0.0), **masses},))  # fmt: skip


def _enters(price: float) -> str:
    return cell(price, 2) if not price <= 0.0 else "at no price"


def _choice_reason(choice: FluxChoice) -> Explanation:
    reason = (
        "The masses of all fluxes are free; scrap and oxygen follow. Sequential quadratic "
        "programming with exact slopes of the balance, every aim and limit kept:"
    )
    return Explanation("cost", choice.cost_per_t, "currency/t", reason, choice.terms())


def _take(masses: dict[str, float | None]) -> None:
    """Give these masses in the plan; None lets the plan find one again."""
    new = form().copy()
    for name, kg in masses.items():
        new.fields[f"{name}_kg"] = "" if kg is None else number_text(round(kg))
    replace_form(new)
    write_address()
