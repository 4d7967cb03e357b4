"""From solved heats to the ladle: additions, deoxidation, temperature, analysis against grade.

Works on an Outcome of n heats. Additions and temperature depend on each other a little, through
the oxygen that stays dissolved; they are worked out in turn until nothing moves.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass, field
from typing import Any

import numpy as np

from converter_calc.balance.heats import HeatTable
from converter_calc.basis.dual import Array
from converter_calc.basis.units import MJ, ZERO_C_K
from converter_calc.planning.outcome import Outcome, spread
from converter_calc.tapping.additions import from_materials
from converter_calc.tapping.aim_additions import target_carbon
from converter_calc.tapping.aims import ladle_targets
from converter_calc.tapping.grade_library import Grade, grade
from converter_calc.tapping.ladle_heat import LadleHeat, ladle_heat, ladle_T_K
from converter_calc.tapping.least_cost import Choice, Demand, Want, choose
from converter_calc.tapping.pouring import Poured, TapCase, equilibrium_oxygen_pct, pour
from converter_calc.tapping.tap_practice import TapPractice, named_additions, tap_practice

#: Where the turns of additions and temperature start below the tap temperature [K].
FIRST_DROP_K = 40.0
TURNS = 12
SETTLED_K = 1e-6
NO_GRADE = Grade("no grade", "", "", {}, "none named", "", invented=True)
#: Elements of a grade that the balance does not follow into the steel.
NOT_CARRIED = ("N", "H")
NOT_WORKED_OUT = "not worked out"
#: Difference of a content from its limit that is rounding, relative.
ROUNDING = 1e-7


@dataclass
class LadlePlan:
    """The tap of n heats.

    grade : what is held against (`NO_GRADE` where none is named). case : steel and slag at the
    end of the blow. choice, added_kg : the additions, planned and those of the practice.
    poured, heat : mass and heat balance. already : limits that the steel breaks before
    anything is added, per heat.
    """

    ids: list[str]
    grade: Grade
    case: TapCase
    choice: Choice
    added_kg: dict[str, Array]
    poured: Poured
    heat: LadleHeat
    wants: list[Want]
    already: list[list[str]] = field(default_factory=list)

    @property
    def practice(self) -> TapPractice:
        """The shop's practice."""
        return self.case.practice

    @property
    def n(self) -> int:
        """Number of heats."""
        return self.case.n

    @property
    def tap_temp_C(self) -> Array:
        """Steel temperature at the end of the blow [C]."""
        return self.case.T_K - ZERO_C_K

    @property
    def ladle_temp_C(self) -> Array:
        """Steel temperature in the ladle after standing [C]."""
        return self.heat.T_K - ZERO_C_K

    @property
    def cost(self) -> dict[str, Array]:
        """Cost of each addition that has a price, in the shop's currency."""
        priced = self.practice.additions
        return {
            name: kg * (1e-3 * (priced[name].price_per_t or 0.0))
            for name, kg in self.added_kg.items()
            if priced[name].price_per_t is not None
        }

    @property
    def cost_per_t(self) -> Array:
        """Cost of the priced additions per tonne of steel in the ladle; NaN where none has one."""
        if not self.cost:
            return np.full(self.n, np.nan)
        return sum(self.cost.values(), np.zeros(self.n)) / (self.poured.steel_kg * 1e-3)

    def recovery(self, name: str) -> Array:
        """Share of what an addition is made for that ends dissolved in the steel, (n,).

        Of aluminium that kills the steel: after the oxygen has taken its part.
        """
        practice, killer = self.practice, self.case.killer
        addition = practice.additions[name]
        element = addition.supplies
        if not element:
            return np.full(self.n, np.nan)
        if element != killer:
            return np.full(self.n, addition.recovered_share(element, practice.recovery))
        brought = sum(
            (
                kg * (practice.additions[other].elements_pct().get(element, 0.0) * 0.01)
                for other, kg in self.added_kg.items()
            ),
            np.zeros(self.n),
        )
        before = self.case.steel_kg * self.case.steel_pct.get(element, 0.0) * 0.01
        with np.errstate(invalid="ignore", divide="ignore"):
            share = (self.poured.steel[element] - before) / brought
        return np.where(brought > 0.0, np.maximum(share, 0.0), np.nan)

    def phosphorus_returned_kg(self) -> Array:
        """Phosphorus that the carried-over slag gives back [kg], (n,)."""
        return np.zeros(self.n) + self.poured.reduced.metal.get("P", 0.0)

    def mark(self, element: str, index: int) -> str:
        """Where a content lies: below, near lower limit, inside, near upper limit, above.

        Gases that the balance does not carry are marked as not worked out.
        """
        low, high = self.grade.limits.get(element, (None, None))
        kg = self.poured.steel.get(element)
        if kg is None and element in NOT_CARRIED:
            return NOT_WORKED_OUT
        x = 0.0 if kg is None else 100.0 * float(kg[index] / self.poured.steel_kg[index])
        return mark_of(x, low, high, self.practice.near_share)

    def columns(self) -> dict[str, Any]:
        """The table of results, a column a quantity, arrays (n,)."""
        steel, n = self.poured.steel_kg, self.n
        table: dict[str, Any] = {
            "heat_id": np.array(self.ids, dtype=object),
            "tap_status": np.array(self.status(), dtype=object),
            "grade": np.array([self.grade.name] * n, dtype=object),
            "tap_temp_C": self.tap_temp_C,
            "ladle_temp_C": self.ladle_temp_C,
            "ladle_steel_kg": steel,
            "ladle_slag_kg": self.poured.slag_kg,
        }
        table |= {f"add_{name}_kg": kg for name, kg in self.added_kg.items()}
        table |= {f"ladle_{e}_pct": x for e, x in self.poured.steel_pct().items() if e != "O"}
        table["ladle_O_ppm"] = 1e4 * self.poured.steel_pct()["O"]
        table["P_returned_pct"] = 100.0 * self.phosphorus_returned_kg() / steel
        table["additions_cost_per_t"] = self.cost_per_t
        table["outside_grade"] = np.array(
            [" ".join(self.outside(row)) for row in range(n)], dtype=object
        )
        return table

    def outside(self, index: int) -> list[str]:
        """Elements outside the grade."""
        return [e for e in self.grade.limits if self.mark(e, index) in ("below", "above")]

    def status(self) -> list[str]:
        """`solved`, or `infeasible` where no additions keep the grade."""
        return ["solved" if good else "infeasible" for good in self.choice.feasible.tolist()]


def mark_of(x: float, low: float | None, high: float | None, near_share: float) -> str:
    """Mark of a content [mass %] against its limits; see `LadlePlan.mark`."""
    if low is not None and x < low * (1.0 - ROUNDING):
        return "below"
    if high is not None and x > high * (1.0 + ROUNDING):
        return "above"
    width = (high or 0.0) - (low or 0.0) if high is not None else (low or 0.0)
    near = near_share * width
    if low is not None and x < low + near:
        return "near lower limit"
    if high is not None and x > high - near:
        return "near upper limit"
    return "inside"


def practice_of(heats: HeatTable) -> TapPractice:
    """Tap practice of these heats, with materials of the shop that it names as additions."""
    return tap_practice(heats.tap, from_materials(heats.materials, named_additions(heats.tap)))


def grade_of(heats: HeatTable) -> Grade:
    """Grade of these heats, `NO_GRADE` where none is named."""
    return grade(heats.grade, heats.grades) if heats.grade else NO_GRADE


def killer_of(steel_grade: Grade, practice: TapPractice) -> str:
    """What kills the steel: as the practice says; else silicon where the grade has a silicon
    target and no aluminium; else aluminium.
    """
    if practice.kill:
        return practice.kill
    targets = ladle_targets(steel_grade, practice)
    return "Si" if "Si" in targets and "Al" not in targets else "Al"


def tap_case(outcome: Outcome, practice: TapPractice, killer: str) -> TapCase:
    """Steel and slag at the end of the blow of all heats of an outcome."""
    n, s = outcome.n, outcome.state
    return TapCase(
        steel_kg=spread(s.steel_kg, n),
        steel_pct={e: spread(x, n) for e, x in outcome.steel_pct().items()},
        T_K=spread(s.T_K, n),
        slag_pct={name: spread(x, n) for name, x in outcome.slag_pct().items()},
        practice=practice,
        killer=killer,
    )


def ladle_of(outcome: Outcome, rows: Array | None = None) -> LadlePlan:
    """The tap of heats of an outcome: additions planned, ladle worked out.

    rows : row numbers of the heats wanted, all if not given. A heat that is not solved has no
    steel to tap: leave it out.
    """
    practice, steel_grade = practice_of(outcome.heats), grade_of(outcome.heats)
    case = tap_case(outcome, practice, killer_of(steel_grade, practice))
    ids = outcome.heats.ids
    if rows is not None:
        case, ids = case.take(rows), [ids[row] for row in rows.tolist()]
    return plan_ladle(case, steel_grade, ids)


def plan_ladle(case: TapCase, steel_grade: Grade, ids: list[str]) -> LadlePlan:
    """Additions and ladle for n heats of one grade.

    case : steel and slag at the end of the blow. Raises nothing for heats that no additions
    bring into the grade: `choice` says so.
    """
    practice = case.practice
    hard, preferred, killer_pct = wanted(steel_grade, practice, case.killer)
    T_K = case.T_K - FIRST_DROP_K
    stays = 10.0 * _first_oxygen(case, killer_pct, hard, T_K)
    for _ in range(TURNS):
        demand = Demand(case, stays, practice.additions_kg_per_t)
        choice = _chosen(demand, hard, preferred, steel_grade)
        added = _added_kg(case, choice)
        poured = pour(case, added, T_K)
        new_K = ladle_T_K(case, poured)
        moved = np.abs(new_K - T_K)
        T_K, stays = new_K, poured.steel["O"] * (1e3 / case.steel_kg)
        if not np.any(moved > SETTLED_K):
            break
    heat = ladle_heat(case, poured)
    already = [demand.already(hard, row) for row in range(case.n)]
    return LadlePlan(ids, steel_grade, case, choice, added, poured, heat, hard, already)


def pour_given(
    case: TapCase, steel_grade: Grade, ids: list[str], added_kg: dict[str, Array]
) -> LadlePlan:
    """The ladle with additions that are given [kg], nothing planned."""
    T_K = case.T_K - FIRST_DROP_K
    for _ in range(TURNS):
        poured = pour(case, added_kg, T_K)
        new_K = ladle_T_K(case, poured)
        moved = np.abs(new_K - T_K)
        T_K = new_K
        if not np.any(moved > SETTLED_K):
            break
    heat = ladle_heat(case, poured)
    n = case.n
    everything = np.ones(n, dtype=bool)
    choice = Choice({}, everything, everything, [""] * n, [[] for _ in range(n)])
    return LadlePlan(
        ids, steel_grade, case, choice, added_kg, poured, heat, [], [[] for _ in range(n)]
    )


def _added_kg(case: TapCase, choice: Choice) -> dict[str, Array]:
    tonnes = case.steel_kg * 1e-3
    kg_per_t = {name: x + np.zeros(case.n) for name, x in choice.kg_per_t.items()}
    for name, x in case.practice.additions_kg_per_t.items():
        kg_per_t[name] = kg_per_t.get(name, np.zeros(case.n)) + x
    return {name: x * tonnes for name, x in kg_per_t.items() if np.any(x > 0.0)}


def wanted(
    steel_grade: Grade, practice: TapPractice, killer: str
) -> tuple[list[Want], list[Want], float]:
    """Limits and targets of the ladle, those kept if possible, and the killer's content [%]."""
    own = f"of {steel_grade.name}"
    least = practice.aim_at == "minimum"
    hard = [
        Want(e, "high", high, f"at most {high:g} % {own}")
        for e, (_, high) in steel_grade.limits.items()
        if high is not None
    ]
    targets = ladle_targets(steel_grade, practice)
    if killer == "Al":
        most = steel_grade.highest_pct("Al")
        room = practice.soluble_Al_pct if most is None else 0.5 * most
        targets.setdefault("Al", min(practice.soluble_Al_pct, room))
    for element, middle in targets.items():
        low = steel_grade.lowest_pct(element)
        if not least or (element == killer and low is None):
            hard.append(Want(element, "low", middle, f"{middle:g} % aimed at"))
        elif low is not None:
            hard.append(Want(element, "low", low, f"at least {low:g} % {own}"))
    preferred = []
    carbon = target_carbon(steel_grade, practice)
    if carbon is not None:
        low = steel_grade.lowest_pct("C")
        if low is not None:
            short = low if least else max(low, carbon - practice.C_tolerance_pct)
            hard.append(Want("C", "low", short, f"{carbon:g} % aimed at"))
        most = carbon + practice.C_tolerance_pct
        preferred.append(Want("C", "high", most, f"{carbon:g} % aimed at"))
    killer_pct = next(
        (want.pct for want in hard if want.element == killer and want.side == "low"), 0.0
    )
    return hard, preferred, killer_pct


def _chosen(
    demand: Demand, hard: Sequence[Want], preferred: Sequence[Want], steel_grade: Grade
) -> Choice:
    """Additions; where carburiser has to be added at all, it fills up to the carbon target."""
    choice = choose(demand, hard, preferred)
    practice = demand.case.practice
    carbon = target_carbon(steel_grade, practice)
    fillers = [n for n in choice.kg_per_t if practice.additions[n].supplies == "C"]
    if carbon is None or practice.aim_at == "minimum" or not fillers:
        return choice
    filled = sum((choice.kg_per_t[name] for name in fillers), np.zeros(demand.case.n)) > 0.0
    rows = np.flatnonzero(filled & choice.feasible)
    if not rows.size:
        return choice
    exact = [
        want._replace(pct=carbon) if want.element == "C" and want.side == "low" else want
        for want in hard
    ]
    part = Demand(demand.case.take(rows), demand.stays[rows], practice.additions_kg_per_t)
    again = choose(part, exact, preferred)
    rows, good = rows[again.feasible], again.feasible
    for name, kg in choice.kg_per_t.items():
        kg[rows] = again.kg_per_t.get(name, np.zeros(good.size))[good]
    choice.programmes += again.programmes
    return choice


def _first_oxygen(case: TapCase, killer_pct: float, hard: Sequence[Want], T_K: Array) -> Array:
    if case.killer == "none":
        return np.zeros(case.n)
    others = {e: x for e, x in case.steel_pct.items() if e not in ("O", "Fe", case.killer)}
    others |= {want.element: np.full(case.n, want.pct) for want in hard if want.side == "low"}
    others.pop(case.killer, None)
    return equilibrium_oxygen_pct(case, np.full(case.n, killer_pct), T_K, others)


def tap_temperature_for(outcome: Outcome) -> Array:
    """Tap temperature [C] with which the ladle would be as warm as wanted, heat by heat.

    To first order: the tap temperature plus what the ladle misses. NaN for a heat that is not
    solved, and where the practice wants no ladle temperature.
    """
    found = np.full(outcome.n, np.nan)
    rows = np.flatnonzero(outcome.converged)
    if rows.size:
        ladle = ladle_of(outcome, rows)
        found[rows] = ladle.tap_temp_C + ladle.practice.ladle_temp_C - ladle.ladle_temp_C
    return found


def heat_lost_MJ(ladle: LadlePlan) -> Array:
    """Heat lost from tap to ladle sample [MJ], (n,)."""
    return sum(ladle.heat.losses_J.values(), np.zeros(ladle.n)) / MJ
