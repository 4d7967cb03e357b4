"""Lime and magnesia carriers against each other: each pair planned for the same aims.

A pair is a carrier of lime and one of magnesia in the places of `choice.lime` and
`choice.magnesia_flux`; the plan does the rest. The heat that a pair takes is what the heat
loss would have to be lower by with the fluxes of that pair beside the scrap of the first.
"""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass, replace
from typing import TYPE_CHECKING, Any

import numpy as np

from converter_calc.balance.heats import HeatTable
from converter_calc.basis.errors import Fault, InputError
from converter_calc.basis.units import MJ
from converter_calc.planning.explain import Term
from converter_calc.planning.grading import with_grade_aims
from converter_calc.planning.outcome import Outcome, spread
from converter_calc.planning.plan import plan_heats
from converter_calc.planning.solving import (
    complete_charge,
    plan_groups,
    solve_heats,
    with_masses,
    with_values,
)
from converter_calc.planning.sweeps import gas_CO2_kg, materials_CO2_kg, only_one

if TYPE_CHECKING:
    import pandas as pd

LIME_CARRIERS = ("burnt_lime", "limestone")
MAGNESIA_CARRIERS = ("dolomitic_lime", "raw_dolomite", "magnesite")
CAUTION = (
    "Fluorspar leaves fluorides in slag and fume: harmful to people and soil, hard on the "
    "lining; permits and local codes decide. The balance gives it no credit for lime that "
    "dissolves sooner."
)
#: Columns compared with the first pair, and the names of the differences.
DIFFERENCES = ("scrap_kg", "oxygen_Nm3", "slag_kg", "steel_kg", "cost_per_t", "CO2_kg_per_t")


@dataclass(frozen=True)
class FluxMixes:
    """Pairs of carriers planned for the same heat.

    table : a row a pair, the first being what the others are compared with: lime, magnesia
    (materials), status, binding, lime_kg, magnesia_kg, scrap_kg, coolant_kg, fuel_kg,
    oxygen_Nm3, slag_kg, steel_kg, end_P_pct, basicity, slag_MgO_pct, unpriced, cost_per_t (NaN
    where something charged has no price), CO2_gas_kg_per_t, CO2_materials_kg_per_t,
    CO2_kg_per_t; d_<column> against the first pair, heat_MJ (heat that the fluxes of the pair
    take more, beside the scrap of the first). outcomes : by pair.
    """

    table: pd.DataFrame
    outcomes: Mapping[tuple[str, str], Outcome]

    def terms(self, lime: str, magnesia: str) -> list[Term]:
        """What a pair changes against the first, as lines of an explanation."""
        first = self.table.iloc[0]
        row = self.table[(self.table["lime"] == lime) & (self.table["magnesia"] == magnesia)].iloc[
            0
        ]
        beside = f"against {first['lime']} with {first['magnesia']}"
        units = {"scrap_kg": "kg", "oxygen_Nm3": "Nm3", "slag_kg": "kg", "steel_kg": "kg",
                 "cost_per_t": "currency/t steel", "CO2_kg_per_t": "kg/t steel"}  # fmt: skip
        lines = [
            Term(f"{lime}", float(row["lime_kg"]), "kg", "plan"),
            Term(f"{magnesia}", float(row["magnesia_kg"]), "kg", "plan"),
            Term("heat taken more, scrap kept", float(row["heat_MJ"]), "MJ", "two balances"),
        ]
        return lines + [
            Term(f"{name.rsplit('_', 1)[0]} {beside}", float(row["d_" + name]), unit, "two plans")
            for name, unit in units.items()
        ]


def flux_mixes(
    heats: HeatTable, pairs: Sequence[tuple[str, str]] | None = None, extra_kg: Any = None
) -> FluxMixes:
    """Plan one heat with each pair of a lime carrier and a magnesia carrier.

    Parameters
    ----------
    heats : one heat. pairs : (lime carrier, magnesia carrier), the first being what the others
        are compared with; None: the heat's own choice, then all of LIME_CARRIERS with all of
        MAGNESIA_CARRIERS. extra_kg : masses of further materials charged in every pair [kg].

    Returns
    -------
    FluxMixes. A pair without a plan has its status and what binds; its numbers are NaN.

    Raises
    ------
    InputError : not one heat, an unknown material, input missing.
    """
    import pandas as pd

    only_one(heats)
    base = fluxes_free(heats, {})
    choices = base.choices
    own = (choices.lime, choices.magnesia_flux)
    listed = [own, *((a, b) for a in LIME_CARRIERS for b in MAGNESIA_CARRIERS)]
    wanted = list(dict.fromkeys(listed if pairs is None else pairs))
    extra = dict(extra_kg or {})
    check_materials(base, [*extra, *(name for pair in wanted for name in pair)])
    rows, outcomes = [], {}
    for pair in wanted:
        ((_, outcome),) = plan_heats(_with_pair(base, pair, extra))
        outcomes[pair] = outcome
        rows.append({"lime": pair[0], "magnesia": pair[1], **mix_numbers(outcome, pair)})
    first = outcomes[wanted[0]]
    for row, pair in zip(rows, wanted, strict=True):
        for name in DIFFERENCES:
            row["d_" + name] = row[name] - rows[0][name]
        both = row["status"] == "solved" and rows[0]["status"] == "solved"
        row["heat_MJ"] = (
            heat_loss_MJ(first, first) - heat_loss_MJ(outcomes[pair], first) if both else np.nan
        )
    return FluxMixes(pd.DataFrame(rows), outcomes)


def check_materials(heats: HeatTable, names: Sequence[str]) -> None:
    """Raise InputError for a material that is not at hand."""
    unknown = [name for name in names if name not in heats.materials]
    if unknown:
        known = ", ".join(sorted(heats.materials))
        raise InputError(
            [Fault("material", f"{name!r} is not known ({known})") for name in unknown]
        )


def fluxes_free(heats: HeatTable, fluxes_kg: Mapping[str, Any]) -> HeatTable:
    """The heat with its aims complete, lime, flux and pins on them let go, masses given set."""
    aims = with_grade_aims(heats)
    end = aims.values["pin_end_temp_C"]
    aim = np.where(np.isfinite(end), end, aims.values["aim_temp_C"])
    names = ("basicity", "slag_CaO_pct", "slag_MgO_pct", "L_P", "end_P_pct", "end_temp_C")
    aims = with_values(aims, aim_temp_C=aim, **{f"pin_{name}": np.nan for name in names})
    roles = (heats.choices.lime, heats.choices.magnesia_flux)
    free = {name: np.nan for name in roles if name in aims.masses_kg}
    return with_masses(aims, {**free, **fluxes_kg})


def mix_numbers(outcome: Outcome, pair: tuple[str, str]) -> dict[str, Any]:
    """Numbers of one planned heat for a table of mixes; NaN where it has no answer."""
    s, kg, choices = outcome.state, outcome.charged_kg, outcome.heats.choices
    steel_t = s.steel_kg * 1e-3
    gas, making = gas_CO2_kg(outcome) / steel_t, materials_CO2_kg(outcome) / steel_t
    values = {
        "lime_kg": kg.get(pair[0], 0.0),
        "magnesia_kg": kg.get(pair[1], 0.0),
        "scrap_kg": outcome.kind_kg("scrap"),
        "coolant_kg": kg.get(choices.coolant, 0.0) if outcome.ask.heat == "trim_kg" else 0.0,
        "fuel_kg": kg.get(choices.fuel, 0.0) if outcome.ask.heat == "trim_kg" else 0.0,
        "oxygen_Nm3": s.oxygen_Nm3,
        "slag_kg": s.slag_kg,
        "steel_kg": s.steel_kg,
        "end_P_pct": outcome.steel_pct().get("P", 0.0),
        "basicity": s.basicity,
        "slag_MgO_pct": s.slag_pct.get("MgO", 0.0),
        "cost_per_t": np.nan if unpriced(outcome.heats, kg) else outcome.cost(),
        "CO2_gas_kg_per_t": gas,
        "CO2_materials_kg_per_t": making,
        "CO2_kg_per_t": gas + making,
    }
    good = outcome.status[0] == "solved"
    return {
        "status": outcome.status[0],
        "binding": _binding(outcome),
        "unpriced": ", ".join(unpriced(outcome.heats, kg)),
        **{name: float(spread(x, 1)[0]) if good else np.nan for name, x in values.items()},
    }


def _binding(outcome: Outcome) -> str:
    """What binds; where fuel was asked for in vain, why that can be so."""
    text = outcome.binding[0]
    if outcome.status[0] == "not converged" and outcome.ask.heat == "trim_kg":
        fuel = outcome.heats.choices.fuel
        text += f"; the flux that {fuel} asks for can take more heat than it gives: less scrap"
    return text


def unpriced(heats: HeatTable, charged: Mapping[str, Any]) -> list[str]:
    """Materials charged, hot metal and oxygen that have no price."""
    unasked = ("carryover_slag", "retained_slag", "lining")
    found = [
        name
        for name, kg in charged.items()
        if name not in unasked
        and np.any(np.asarray(kg) > 0.0)
        and heats.materials[name].price_per_t is None
    ]
    for name, text in (("price_hot_metal_per_t", "hot_metal"), ("price_oxygen_per_Nm3", "oxygen")):
        if not np.isfinite(heats.values[name]).all():
            found.append(text)
    return found


def _with_pair(base: HeatTable, pair: tuple[str, str], extra: Mapping[str, float]) -> HeatTable:
    """The heat with other carriers in the places of lime and magnesia flux."""
    if pair[0] == pair[1]:
        message = f"{pair[0]} cannot answer the basicity and the MgO aim at once"
        raise InputError([Fault("pair", message)])
    choices = replace(base.choices, lime=pair[0], magnesia_flux=pair[1])
    masses = {name: np.nan for name in pair if name in base.masses_kg}
    heats = with_masses(base, {**masses, **extra})
    return replace(heats, choices=choices)


def heat_loss_MJ(mix: Outcome, first: Outcome) -> float:
    """Heat loss that closes the balance with the fluxes of `mix` and the rest of `first` [MJ].

    The same hot metal, scrap, coolant and aims as `first`; oxygen follows. NaN: no answer.
    """
    choices = mix.heats.choices
    charged = {**first.charged_kg, choices.lime: 0.0, choices.magnesia_flux: 0.0}
    for name in (first.heats.choices.lime, first.heats.choices.magnesia_flux):
        charged[name] = mix.charged_kg.get(name, 0.0)
    for name in (choices.lime, choices.magnesia_flux):
        charged[name] = mix.charged_kg.get(name, 0.0)
    unasked = ("carryover_slag", "retained_slag", "lining")
    masses = {name: kg for name, kg in charged.items() if name not in unasked}
    heats = with_masses(mix.heats, masses)
    heats = with_values(
        heats,
        pin_end_temp_C=heats.values["aim_temp_C"],
        hot_metal_kg=complete_charge(first).values["hot_metal_kg"],
        aim_steel_kg=np.nan,
        scrap_kg=0.0,
        scrap_share_pct=np.nan,
    )
    heats = replace(heats, choices=replace(heats.choices, ask=None))
    ((_, group, ask),) = plan_groups(heats)
    solved = solve_heats(group, ask)
    loss = spread(solved.state.heat_loss_J, 1)[0] / MJ
    return float(loss) if solved.converged[0] else np.nan
