"""Draws of the true inputs of a heat, and what becomes of the heat in each of them.

Quasi-random: several scramblings of a Sobol sequence, each a fair sample on its own, so that
their scatter tells how sure a number is (A.B. Owen, J. Complexity 14 (1998) 466; from memory).
"""

from __future__ import annotations

import os
import threading
from collections.abc import Callable, Mapping
from dataclasses import dataclass
from typing import Any, TypeVar

import numpy as np

from converter_calc.balance.asks import Ask, evaluate_ask
from converter_calc.balance.heats import HeatTable
from converter_calc.balance.problem import Problem, build_problem
from converter_calc.balance.state import State
from converter_calc.basis.dual import Array
from converter_calc.basis.errors import ConvergenceError, Fault, InputError
from converter_calc.basis.units import ZERO_C_K
from converter_calc.learning.errors_of_inputs import ErrorModel
from converter_calc.learning.spread_solve import solve_draws
from converter_calc.learning.spread_truth import true_heats
from converter_calc.planning.outcome import Outcome
from converter_calc.planning.sweeps import repeated
from converter_calc.planning.verdicts import lime_in_vain

#: Least scramblings of a run; fewer would tell little about their scatter.
REPLICATES = 16
LEAST_DRAWS, MOST_DRAWS = 256, 1_000_000
#: Draws from which a second process pays.
SHARED_FROM = 8192
#: What is kept of each draw.
OUTPUTS = (
    *("end_temp_C", "end_C_pct", "end_P_pct", "end_Mn_pct", "end_S_pct", "end_O_ppm"),
    *("steel_kg", "slag_kg", "slag_P2O5_pct", "slag_T_Fe_pct", "basicity"),
)
T1 = TypeVar("T1")
T2 = TypeVar("T2")


@dataclass(frozen=True)
class Plan:
    """How many draws: `replicates` scramblings of 2 ** `log2` draws each."""

    replicates: int
    log2: int
    seed: int

    @property
    def draws(self) -> int:
        """All draws."""
        return self.replicates << self.log2


def plan_draws(draws: int, seed: int) -> Plan:
    """At least `draws` draws, in 16 to 31 scramblings of a power of two each.

    Raises InputError outside LEAST_DRAWS to MOST_DRAWS.
    """
    if not LEAST_DRAWS <= draws <= MOST_DRAWS:
        message = f"must be {LEAST_DRAWS} to {MOST_DRAWS}, given {draws}"
        raise InputError([Fault("draws", message)])
    if seed < 0:
        raise InputError([Fault("seed", f"must not be negative, given {seed}")])
    log2 = (draws // REPLICATES).bit_length() - 1
    return Plan(-(-draws >> log2), log2, seed)


def normal_draws(plan: Plan, dimensions: int, first: int, last: int) -> Array:
    """Standard normal numbers of the scramblings first to last, (k, draws)."""
    from scipy.special import ndtri
    from scipy.stats import qmc

    if not dimensions:
        return np.zeros((0, (last - first) << plan.log2))
    parts = []
    for replicate in range(first, last):
        dice = np.random.default_rng([plan.seed, replicate])
        points = qmc.Sobol(dimensions, scramble=True, rng=dice).random_base2(plan.log2)
        parts.append(points + 2.0**-32)  # never 0: the middle of the finest cell
    return np.asarray(ndtri(np.ascontiguousarray(np.concatenate(parts).T)))


@dataclass(frozen=True)
class Draws:
    """n draws of a heat: z (k, n), results (n,) each, NaN where not solved."""

    z: Array
    values: dict[str, Array]
    solved: Array
    below_zero: int

    def joined(self, other: Draws) -> Draws:
        """These, and the others after them."""
        return Draws(
            np.concatenate([self.z, other.z], axis=1),
            {name: np.concatenate([x, other.values[name]]) for name, x in self.values.items()},
            np.concatenate([self.solved, other.solved]),
            self.below_zero + other.below_zero,
        )


Read = Callable[[HeatTable, Ask, Problem, State, Mapping[str, Array]], dict[str, Array]]


def draw(
    heats: HeatTable,
    ask: Ask,
    x: Mapping[str, Array],
    model: ErrorModel,
    z: Array,
    read: Read,
    *,
    all_ways: bool = True,
) -> Draws:
    """Solve one heat for the drawn truths.

    Parameters
    ----------
    heats, ask, x : the heat as read, its question and the solution. z : (k, n). read : what is
    wanted of the solved draws. all_ways : as in `solve_draws`.
    """
    from threadpoolctl import threadpool_limits

    n = z.shape[1]
    table, below = true_heats(repeated(heats, n), model, z)
    with threadpool_limits(limits=1, user_api="blas"), np.errstate(all="ignore"):
        p = build_problem(table)
        unknowns, solved = solve_draws(p, ask, x, z, all_ways=all_ways)
        state = evaluate_ask(p, ask, dict(unknowns))
        found = read(table, ask, p, state, unknowns)
    good = solved.copy()
    for values in found.values():
        good &= np.isfinite(values)
    if not good.all():
        found = {name: np.where(good, values, np.nan) for name, values in found.items()}
    return Draws(z, found, good, below)


def end_points(
    _: HeatTable, ask: Ask, p: Problem, s: State, x: Mapping[str, Array]
) -> dict[str, Array]:
    """OUTPUTS of solved heats; zero where an element is not charged."""
    del ask, x
    per_metal = 100.0 / s.metal_kg
    numbers: dict[str, Any] = {
        "end_temp_C": s.T_K - ZERO_C_K,
        "end_C_pct": s.C_pct,
        **{f"end_{el}_pct": s.metal_species_kg.get(el, 0.0) * per_metal for el in ("P", "Mn", "S")},
        "end_O_ppm": s.O_pct * 1e4,
        "steel_kg": s.steel_kg,
        "slag_kg": s.slag_kg,
        "slag_P2O5_pct": s.slag_species_kg.get("P2O5", 0.0) * (100.0 / s.slag_kg),
        "slag_T_Fe_pct": s.laws["T_Fe_pct"],
        "basicity": s.basicity,
    }
    return {name: _column(numbers[name], p.n) for name in OUTPUTS}


def charges(
    heats: HeatTable, ask: Ask, p: Problem, s: State, x: Mapping[str, Array]
) -> dict[str, Array]:
    """What planned heats ask for, as the shop's instruments show it: only what is free.

    NaN where no lime that dissolves reaches the phosphorus aim.
    """
    n = p.n
    none = np.zeros(n)
    outcome = Outcome(heats, ask, p, dict(x), s, none == 0.0, none, none)
    numbers: dict[str, Any] = {"oxygen_Nm3": outcome.oxygen_Nm3}
    if ask.heat == "scrap_kg":
        numbers["scrap_kg"] = outcome.kind_kg("scrap")
    if ask.heat == "trim_kg":
        numbers["trim_kg"] = x["trim_kg"]
    if ask.lime:
        numbers["lime_kg"] = x["lime_kg"]
    if ask.flux:
        numbers["flux_kg"] = x["flux_kg"]
    if ask.hot_metal:
        numbers["hot_metal_kg"] = outcome.hot_metal_kg
    reached = ~lime_in_vain(outcome) if ask.lime else none == 0.0
    return {name: np.where(reached, _column(values, n), np.nan) for name, values in numbers.items()}


def _column(x: Any, n: int) -> Array:
    return np.array(np.broadcast_to(np.asarray(x, dtype=float), (n,)))


def together(first: Callable[[], T1], second: Callable[[], T2], *, pays: bool) -> tuple[T1, T2]:
    """Both results; the second from a process of its own where that pays and is safe.

    A process is forked, which is safe only while no other thread runs.
    """
    safe = hasattr(os, "fork") and threading.active_count() == 1 and (os.cpu_count() or 1) > 1
    if not (pays and safe):
        return first(), second()
    import multiprocessing

    context = multiprocessing.get_context("fork")
    ours, theirs = context.Pipe(duplex=False)

    def work() -> None:
        try:
            theirs.send((second(), None))
        except Exception as error:
            theirs.send((None, error))

    process = context.Process(target=work, daemon=True)
    process.start()
    theirs.close()
    try:
        mine = first()
        found, error = ours.recv()
    except EOFError as lost:
        raise ConvergenceError("a process that drew a part of the heats was killed") from lost
    finally:
        ours.close()
        process.join()
    if error is not None:
        raise error
    return mine, found
