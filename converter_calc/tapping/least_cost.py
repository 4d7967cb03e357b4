"""Which additions, and how much of each: by least cost, or in the shop's order of preference.

Everything is linear in the masses of the additions once the oxygen that stays dissolved is
known: contents after dilution, and the deoxidant that the oxygen takes, since what other
additions lose to the bath binds oxygen too. So each choice is a linear programme.
"""

from __future__ import annotations

import itertools
from collections.abc import Mapping, Sequence
from dataclasses import dataclass, field
from typing import NamedTuple

import numpy as np

from converter_calc.basis.dual import Array
from converter_calc.tapping.linear_plans import least_violation, solve_all
from converter_calc.tapping.pouring import (
    TapCase,
    bound_oxygen,
    recovered_share,
    reduced_slag,
)

TAPPED_KG = 1000.0
#: Cost of an addition without a price that has to stand in [per kg]: chosen last.
LAST_CHOICE_PER_KG = 1e3
#: A limit with less room than this counts as reached [kg/t].
EDGE_KG = 1e-7


class Want(NamedTuple):
    """A limit on the ladle analysis: `side` "low" or "high", content [mass %], whose it is."""

    element: str
    side: str
    pct: float
    reason: str


@dataclass
class Choice:
    """Additions of n heats.

    kg_per_t : addition -> kg per tonne tapped (n,); feasible : (n,); preferred : the wanted
    limits, not only the hard ones, are kept (n,); binding, frees : per heat, where infeasible;
    already : limits that the tapped steel breaks before anything is added, per heat;
    programmes : linear programmes solved; unpriced : additions that stand in without a price.
    """

    kg_per_t: dict[str, Array]
    feasible: Array
    preferred: Array
    binding: list[str] = field(default_factory=list)
    frees: list[list[str]] = field(default_factory=list)
    programmes: int = 0
    unpriced: tuple[str, ...] = ()


class Demand:
    """The rows of the programme: what steel, slag and oxygen bring to the ladle [kg/t].

    case : n heats. stays_kg_per_t : oxygen that stays dissolved after killing [kg/t tapped],
    (n,). fixed : additions that are made anyway [kg/t].
    """

    def __init__(self, case: TapCase, stays_kg_per_t: Array, fixed: Mapping[str, float]) -> None:
        self.case, practice = case, case.practice
        per_t = TAPPED_KG / case.steel_kg
        have: dict[str, Array] = {e: 10.0 * pct for e, pct in case.steel_pct.items()}
        zero: Array = np.zeros(case.n)
        dissolved = have.pop("O", zero)
        reduced = reduced_slag(case)
        for element, kg in reduced.metal.items():
            have[element] = have.get(element, zero) + kg * per_t
        oxygen: Array = dissolved + reduced.oxygen * per_t + practice.air_oxygen_kg_per_t
        for element, share in practice.first_oxygen_share.items():
            taken: Array = dissolved * (share / bound_oxygen(element))
            have[element] = have.get(element, zero) - taken
            oxygen = oxygen - taken * bound_oxygen(element)
        for name, amount in fixed.items():
            for element, per_kg in self.gains(name).items():
                have[element] = have.get(element, zero) + amount * per_kg
            oxygen = oxygen - amount * self.takes_oxygen(name)
        self.have: dict[str, Array] = have
        self.stays = stays_kg_per_t
        self.oxygen = oxygen - self.stays  # what the deoxidant has to bind
        self.mass = sum(have.values(), np.zeros(case.n)) + self.stays

    def gains(self, name: str) -> dict[str, float]:
        """Element -> kg in the steel per kg of the addition, before the killing."""
        case = self.case
        shares = case.practice.additions[name].elements_pct()
        found = {}
        for element, pct in shares.items():
            share = recovered_share(case.practice, name, element, case.killer)
            if element == case.killer == "Al" and case.practice.aluminium_by_recovery:
                share = case.practice.additions[name].recovered_share("Al", case.practice.recovery)
            found[element] = 0.01 * pct * share
        return found

    def takes_oxygen(self, name: str) -> float:
        """Oxygen of steel and slag that the losses of 1 kg of the addition bind [kg/kg]."""
        case = self.case
        return sum(
            0.01 * pct * bound_oxygen(element) * (1.0 - case.practice.loss_to_air_share)
            * (1.0 - recovered_share(case.practice, name, element, case.killer))
            for element, pct in case.practice.additions[name].elements_pct().items()
            if element != "Al" or case.killer != "Al"
        )  # fmt: skip

    def rows(
        self, names: Sequence[str], wants: Sequence[Want], *, binds: bool
    ) -> tuple[Array, Array]:
        """Matrix (m, k) and right-hand sides (n, m).

        binds : the deoxidant has oxygen left to bind; else the losses of the additions have
        taken all of it and the deoxidant stays whole.
        """
        killer = self.case.killer
        by_recovery = killer == "Al" and self.case.practice.aluminium_by_recovery
        substituted = killer != "none" and not by_recovery and binds
        bound = bound_oxygen(killer) if killer != "none" else 1.0
        gains = [self.gains(name) for name in names]
        takes = np.array([self.takes_oxygen(name) for name in names])
        mass = np.array([sum(gain.values()) for gain in gains])
        have_mass, spare = self.mass, self.oxygen / bound
        if substituted:
            mass, have_mass = mass + takes / bound, have_mass - spare
        matrix, limits = [], []
        for want in wants:
            gain = np.array([g.get(want.element, 0.0) for g in gains])
            have = self.have.get(want.element, np.zeros(self.case.n))
            if substituted and want.element == killer:
                gain, have = gain + takes / bound, have - spare
            row, limit = gain - 0.01 * want.pct * mass, 0.01 * want.pct * have_mass - have
            sign = 1.0 if want.side == "high" else -1.0
            matrix.append(sign * row)
            limits.append(np.where((sign > 0) & (limit < 0.0), np.inf, sign * limit))
        if killer != "none" and not by_recovery:
            sign = 1.0 if binds else -1.0
            matrix.append(sign * takes)
            limits.append(sign * self.oxygen)
        if not matrix:
            return np.zeros((0, len(names))), np.zeros((self.case.n, 0))
        return np.array(matrix), np.stack(limits, axis=1)

    def already(self, wants: Sequence[Want], index: int) -> list[str]:
        """Upper limits that steel and returned elements break before anything is added."""
        found = []
        for want in wants:
            have = self.have.get(want.element)
            if want.side == "high" and have is not None and want.element != self.case.killer:
                pct = 100.0 * float(have[index] / self.mass[index])
                if pct > want.pct:
                    found.append(f"{want.element} {pct:.4f} % before additions, {want.reason}")
        return found


def choose(
    demand: Demand, hard: Sequence[Want], preferred: Sequence[Want], *, by_carbon: bool = False
) -> Choice:
    """Additions that keep the limits: of least cost where prices are given, else in order.

    Parameters
    ----------
    demand : steel, slag and oxygen of n heats. hard : limits of the grade and contents aimed
    at. preferred : what is kept beside if it can be. by_carbon : the least carbon brought in
    place of the least cost.

    Returns
    -------
    Choice; where no additions keep the hard limits, those that break them least, with what
    binds and what would free it.
    """
    n, practice = demand.case.n, demand.case.practice
    wanted = [want.element for want in hard if want.side == "low"]
    unpriced: tuple[str, ...] = ()
    if practice.priced:
        names = list(practice.priced)
        unpriced = _stand_ins(demand, wanted, names)
        sets, costs = [[*names, *unpriced]], [_prices(demand, [*names, *unpriced])]
        if by_carbon:
            carbon = [demand.gains(name).get("C", 0.0) for name in sets[0]]
            costs = [np.array(carbon) * LAST_CHOICE_PER_KG + costs[0]]
    else:
        sets = _in_order(demand, wanted)
        costs = [np.ones(len(names)) for names in sets]
    every = list(dict.fromkeys(name for names in sets for name in names))
    found = Choice({name: np.zeros(n) for name in every}, np.zeros(n, bool), np.zeros(n, bool),
                   [""] * n, [[] for _ in range(n)], unpriced=unpriced)  # fmt: skip
    for wants, mark in (([*hard, *preferred], True), (list(hard), False)):
        for names, cost in zip(sets, costs, strict=True):
            left = np.flatnonzero(~found.feasible)
            if left.size:
                _try(demand, names, cost, wants, left, found, preferred=mark)
    for row in np.flatnonzero(~found.feasible).tolist():
        _tell(demand, every, hard, row, found)
    return found


def _prices(demand: Demand, names: Sequence[str]) -> Array:
    additions = demand.case.practice.additions
    prices = [additions[name].price_per_t for name in names]
    return np.array([LAST_CHOICE_PER_KG if p is None else 1e-3 * p for p in prices])


def _stand_ins(demand: Demand, wanted: Sequence[str], names: Sequence[str]) -> tuple[str, ...]:
    """Additions without a price for elements that nothing with a price supplies."""
    practice = demand.case.practice
    found = []
    for element in dict.fromkeys(wanted):
        supplied = any(practice.additions[name].supplies == element for name in names)
        if not supplied and element in practice.alloy_order:
            found.append(practice.alloy_order[element][0])
    return tuple(name for name in dict.fromkeys(found) if name not in names)


def _in_order(demand: Demand, wanted: Sequence[str]) -> list[list[str]]:
    practice = demand.case.practice

    def at_hand(element: str) -> list[str]:
        order = practice.alloy_order.get(element, ())
        return [name for name in order if not practice.use or name in practice.use]

    orders = [at_hand(element) for element in dict.fromkeys(wanted) if at_hand(element)]
    return [list(dict.fromkeys(names)) for names in itertools.product(*orders)]


def _try(
    demand: Demand,
    names: list[str],
    cost: Array,
    wants: Sequence[Want],
    left: Array,
    found: Choice,
    *,
    preferred: bool,
) -> None:
    """Solve the heats `left` with these additions, the deoxidant binding oxygen or not."""
    best = np.full(left.size, np.inf)
    x = np.zeros((left.size, len(names)))
    looked = np.arange(left.size)
    for binds in (True, False) if demand.case.killer != "none" else (True,):
        matrix, limits = demand.rows(names, wants, binds=binds)
        answer = solve_all(cost, matrix, limits[left[looked]])
        found.programmes += answer.solved
        total = np.where(answer.feasible, np.nan_to_num(answer.x) @ cost, np.inf)
        better = total < best[looked]
        x[looked[better]], best[looked[better]] = answer.x[better], total[better]
        slack = limits[left[looked]] - np.nan_to_num(answer.x) @ matrix.T
        looked = looked[~(answer.feasible & _inside(demand, wants, slack))]
        if not looked.size:
            break
    good = np.isfinite(best)
    rows = left[good]
    for place, name in enumerate(names):
        found.kg_per_t[name][rows] = x[good, place]
    found.feasible[rows] = True
    found.preferred[rows] = preferred


def _inside(demand: Demand, wants: Sequence[Want], slack: Array) -> Array:
    """Where the deoxidant binds oxygen and its upper limit leaves room, (n,) bool.

    Such an optimum is that of the whole: the deoxidant burnt is the larger of zero and what
    the oxygen asks for, which is convex, and nothing is gained by burning more of it.
    """
    edges = [
        place
        for place, want in enumerate(wants)
        if want.element == demand.case.killer and want.side == "high"
    ]
    if slack.shape[1] > len(wants):
        edges.append(len(wants))
    return np.asarray((slack[:, edges] > EDGE_KG).all(axis=1))


def _tell(demand: Demand, names: list[str], hard: Sequence[Want], row: int, found: Choice) -> None:
    """The additions that break the limits of one heat least, and which limits they break."""
    matrix, limits = demand.rows(names, hard, binds=True)
    weights = np.array([100.0 / max(want.pct, 1e-4) for want in hard])
    weights = np.concatenate([weights, np.full(matrix.shape[0] - len(hard), 1e6)])
    x, broken = least_violation(matrix, limits[row], weights)
    for place, name in enumerate(names):
        found.kg_per_t[name][row] = x[place]
    binding, frees = [], []
    for want, miss in zip(hard, broken, strict=False):
        if miss <= 0.0:
            continue
        binding.append(f"{want.element} ({want.reason})")
        by = miss / 10.0
        if want.side == "high":
            frees.append(f"{by:.4f} % less {want.element} at the end of the blow")
            frees.append(f"additions that bring less {want.element}")
        else:
            frees.append(f"an addition of {want.element} that brings less of what else binds")
            frees.append(f"{by:.4f} % less {want.element} aimed at")
    tight = [
        want
        for want, limit, line in zip(hard, limits[row], matrix, strict=False)
        if want.side == "high" and np.isfinite(limit) and limit - line @ x < 1e-7
        and f"{want.element} ({want.reason})" not in binding
    ]  # fmt: skip
    binding += [f"{want.element} ({want.reason})" for want in tight]
    for want in tight:
        frees.append(f"less {want.element} at the end of the blow, or in the additions")
        frees.append(f"a grade that allows more {want.element}")
    found.binding[row] = " against ".join(binding) or "no additions keep the grade"
    found.frees[row] = frees
