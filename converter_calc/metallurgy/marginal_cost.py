"""What the last 0.001 % of phosphorus costs: lime, iron, heat, oxygen, slag and money.

All by implicit differentiation of the plan at its answer, so no second plan is needed; the
tests re-plan at neighbouring aims and compare.
"""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass
from typing import TYPE_CHECKING, Any

import numpy as np

from converter_calc.balance.asks import Ask
from converter_calc.balance.heats import HeatTable
from converter_calc.balance.problem import Problem, build_problem
from converter_calc.balance.schema import parameters
from converter_calc.balance.state import State
from converter_calc.balance.streams import charged_masses
from converter_calc.basis.dual import Array, Num
from converter_calc.basis.elements import mass_fractions
from converter_calc.basis.errors import Fault, InputError
from converter_calc.planning.explain import Term
from converter_calc.planning.grading import with_grade_aims
from converter_calc.planning.lime_sweeps import lime_free, phosphorus_free
from converter_calc.planning.outcome import Outcome, spread
from converter_calc.planning.plan import plan_heats
from converter_calc.planning.sensitivities import Outputs, response
from converter_calc.planning.solving import with_values
from converter_calc.planning.sweeps import only_one, repeated
from converter_calc.planning.verdicts import AT_AIM

if TYPE_CHECKING:
    import pandas as pd

#: The step in which the trade thinks [mass % P].
STEP_PCT = 0.001
#: Points of the table against the aim, and its range as shares of what the plan ends at.
POINTS, LOWEST, HIGHEST = 17, 0.6, 1.4
QUANTITIES = {
    "lime_kg": ("lime", "kg"),
    "flux_kg": ("magnesia flux", "kg"),
    "slag_kg": ("slag", "kg"),
    "iron_to_slag_kg": ("iron lost to slag as oxide", "kg"),
    "droplets_kg": ("iron lost as droplets in slag", "kg"),
    "scrap_kg": ("scrap melted", "kg"),
    "coolant_kg": ("coolant (fuel negative)", "kg"),
    "oxygen_Nm3": ("oxygen", "Nm3"),
    "steel_kg": ("steel tapped", "kg"),
    "materials_cost": ("cost of what is charged and blown", "currency"),
    "cost_per_t": ("cost of materials", "currency/t steel"),
}


@dataclass(frozen=True)
class MarginalCost:
    """Change of the plan for an aim lower by `step_pct`, at the plan of one heat.

    aim_P_pct, end_P_pct : aim and end phosphorus [mass %]. binding : the aim sets the lime;
    where False, the least basicity does and the last 0.001 % costs nothing. change : by the
    keys of QUANTITIES, for `step_pct` less phosphorus (a derivative times the step).
    cost : change of cost with the steel not tapped valued at its own cost, a heat
    [currency]; NaN where nothing has a price. unpriced : charged without a price, so not in it.
    """

    aim_P_pct: float
    end_P_pct: float
    step_pct: float
    binding: bool
    change: Mapping[str, float]
    cost: float
    unpriced: tuple[str, ...]

    def terms(self) -> list[Term]:
        """The changes as lines of an explanation."""
        source = "implicit derivative of the plan by aim.P_pct, times the step"
        lines = [Term(label, self.change[key], unit, source)
                 for key, (label, unit) in QUANTITIES.items()]  # fmt: skip
        value = "materials less steel not tapped, at its own cost"
        return [*lines, Term("cost a heat", self.cost, "currency", value)]


def marginal_cost(heats: HeatTable, step_pct: float = STEP_PCT) -> MarginalCost:
    """Marginal cost of phosphorus at the plan of one heat.

    Parameters
    ----------
    heats : one heat with an aim P. step_pct : how much less phosphorus [mass %], above 0.

    Raises
    ------
    InputError : not one heat, no aim P, no answer at this aim (what its plan says).
    """
    only_one(heats)
    aim = _aim_of(heats)
    row = marginal_table(heats, [aim], step_pct).iloc[0]
    if row["status"] != "solved":
        raise InputError([Fault("aim.P_pct", f"this aim has no plan: {row['binding']}")])
    return MarginalCost(
        aim_P_pct=aim,
        end_P_pct=float(row["end_P_pct"]),
        step_pct=step_pct,
        binding=bool(row["aim_binds"]),
        change={key: float(row["d_" + key]) for key in QUANTITIES},
        cost=float(row["d_cost"]),
        unpriced=_unpriced(heats),
    )


def marginal_table(
    heats: HeatTable, aims_pct: Any = None, step_pct: float = STEP_PCT
) -> pd.DataFrame:
    """Marginal cost of phosphorus of one heat against its aim.

    Parameters
    ----------
    heats : one heat. aims_pct : aim P at each point [mass %], (n,); None: POINTS from 0.6 to
        1.4 times what the least basicity alone gives, or the aim where that is lower.
    step_pct : how much less phosphorus [mass %], above 0.

    Returns
    -------
    DataFrame, a row an aim: aim_P_pct, status, binding, aim_binds, end_P_pct, the plan
    (lime_kg, slag_kg, scrap_kg, cost_per_t), and d_<quantity>: change for an aim lower by
    step_pct (keys of QUANTITIES, and d_cost as in `MarginalCost`). Zero where the least
    basicity sets the lime; NaN where the aim has no plan.

    Raises
    ------
    InputError : not one heat, no aim, an aim or step out of range.
    """
    import pandas as pd

    only_one(heats)
    row = parameters()["aim_P_pct"]
    base = with_values(lime_free(phosphorus_free(heats)), aim_temp_C=_aim_temp(heats))
    aims = _around(base) if aims_pct is None else np.atleast_1d(np.asarray(aims_pct, dtype=float))
    if not ((aims >= row.low) & (aims <= row.high)).all():
        message = f"must be {row.low:g} to {row.high:g} {row.unit} at every point"
        raise InputError([Fault("aim.P_pct", message)])
    if not 0.0 < step_pct < row.high:
        raise InputError([Fault("step_pct", f"must be above 0 and below {row.high:g} mass %")])
    table = with_values(repeated(base, aims.size), aim_P_pct=aims)
    columns: dict[str, Any] = {"aim_P_pct": aims}
    for rows, outcome in plan_heats(table):
        for name, column in _columns(outcome, step_pct).items():
            blank = np.full(aims.size, np.nan) if column.dtype == float else None
            start = np.empty(aims.size, dtype=column.dtype) if blank is None else blank
            columns.setdefault(name, start)[rows] = column
    return pd.DataFrame(columns)


def _aim_of(heats: HeatTable) -> float:
    aim = float(with_grade_aims(heats).values["aim_P_pct"][0])
    if not np.isfinite(aim):
        message = "not given; the cost of phosphorus needs an aim [mass %]"
        raise InputError([Fault("aim.P_pct", message)])
    return aim


def _around(base: HeatTable) -> Array:
    """Aims worth a look: about the end phosphorus of the least basicity, or the aim below it."""
    row, aim = parameters()["aim_P_pct"], _aim_of(base)
    ((_, outcome),) = plan_heats(with_values(base, aim_P_pct=np.nan))
    end = float(spread(outcome.steel_pct().get("P", aim), 1)[0]) if outcome.converged[0] else aim
    points = min(aim, end) * np.linspace(LOWEST, HIGHEST, POINTS)
    return np.unique(np.clip(points, row.low, row.high))


def _aim_temp(heats: HeatTable) -> Array:
    pinned = heats.values["pin_end_temp_C"]
    return np.where(np.isfinite(pinned), pinned, heats.values["aim_temp_C"])


def _unpriced(heats: HeatTable) -> tuple[str, ...]:
    """What a plan charges without a price."""
    choices = heats.choices
    used = [*choices.scrap_mix, *choices.scrap_order, choices.lime, choices.magnesia_flux]
    used += [name for name, kg in heats.masses_kg.items() if np.nan_to_num(kg).any()]
    found = [name for name in dict.fromkeys(used) if heats.materials[name].price_per_t is None]
    for name, text in (("price_hot_metal_per_t", "hot_metal"), ("price_oxygen_per_Nm3", "oxygen")):
        if not np.isfinite(heats.values[name]).all():
            found.append(text)
    return tuple(found)


def outputs_of(heats: HeatTable, ask: Ask) -> Outputs:
    """The quantities of the marginal cost as a function of the balance, for `response`."""

    def outputs(p: Problem, s: State, x: Mapping[str, Num]) -> dict[str, Num]:
        choices = heats.choices
        kg = charged_masses(p, s)
        scrap: Num = 0.0
        for name, mass in kg.items():
            if heats.materials[name].kind == "scrap":
                scrap = scrap + mass
        iron: Num = 0.0
        for oxide in ("FeO", "Fe2O3"):
            iron = iron + s.slag_species_kg[oxide] * mass_fractions(oxide)["Fe"]
        # the cost of the outcome, on numbers that carry their derivatives
        blank = np.zeros(heats.n)
        per_t = Outcome(heats, ask, p, {}, s, blank, blank, blank).cost()
        return {
            "lime_kg": kg.get(choices.lime, 0.0),
            "flux_kg": kg.get(choices.magnesia_flux, 0.0),
            "slag_kg": s.slag_kg,
            "iron_to_slag_kg": iron,
            "droplets_kg": s.droplets_kg,
            "scrap_kg": scrap,
            "coolant_kg": x.get("trim_kg", 0.0),
            "oxygen_Nm3": s.oxygen_Nm3,
            "steel_kg": s.steel_kg,
            "materials_cost": per_t * (s.steel_kg * 1e-3),
            "cost_per_t": per_t,
        }

    return outputs


def _columns(outcome: Outcome, step_pct: float) -> dict[str, Any]:
    n, heats = outcome.n, outcome.heats
    s, aim = outcome.state, heats.values["aim_P_pct"]
    good = np.array([status == "solved" for status in outcome.status], dtype=bool)
    P = spread(outcome.steel_pct().get("P", 0.0), n)
    found = {
        "end_P_pct": P,
        "lime_kg": spread(outcome.charged_kg.get(heats.choices.lime, 0.0), n),
        "slag_kg": spread(s.slag_kg, n),
        "scrap_kg": spread(outcome.kind_kg("scrap"), n),
        "cost_per_t": spread(outcome.cost(), n),
    }
    with np.errstate(all="ignore"):
        slopes = _slopes(outcome, np.flatnonzero(good))
    for key in QUANTITIES:
        found["d_" + key] = -slopes[key] * step_pct
    for key in ("materials_cost", "cost_per_t"):  # no price has no slope either
        found["d_" + key] = np.where(np.isfinite(found["cost_per_t"]), found["d_" + key], np.nan)
    found["d_cost"] = found["d_cost_per_t"] * spread(s.steel_kg, n) * 1e-3
    numbers = {name: np.where(good, column, np.nan) for name, column in found.items()}
    return {
        "status": np.array(outcome.status, dtype=object),
        "binding": np.array(outcome.binding, dtype=object),
        "aim_binds": good & (np.abs(P - aim) <= AT_AIM * aim),
        **numbers,
    }


def _slopes(outcome: Outcome, rows: Array) -> dict[str, Array]:
    """Derivative of each quantity by the aim P, for the heats that are solved."""
    found = {key: np.full(outcome.n, np.nan) for key in QUANTITIES}
    if rows.size:
        heats = outcome.heats.take(rows)
        x = {name: column[rows] for name, column in outcome.x.items()}
        names = ["aim_P_pct"]
        p = build_problem(heats, seeds=names)
        by_aim = response(p, outcome.ask, x, names, outputs_of(heats, outcome.ask)).slopes
        for key, slopes in by_aim.items():
            found[key][rows] = slopes[:, 0]
    return found
