"""The verdict on a heat: marking it as infeasible, and the end point that it can reach."""

from __future__ import annotations

from collections.abc import Sequence

import numpy as np

from converter_calc.balance.asks import Ask
from converter_calc.balance.closures import basicity_margin, lime_limit, phosphorus_margin
from converter_calc.balance.heats import HeatTable
from converter_calc.basis.dual import Array
from converter_calc.basis.units import ZERO_C_K
from converter_calc.planning.outcome import Outcome, at, spread
from converter_calc.planning.solving import solve_heats, with_values

#: An aim counts as what sets the lime within this relative distance of it.
AT_AIM = 1e-4
EndPoint = dict[str, float]


def still_open(outcome: Outcome) -> Array:
    """Heats that no limit has stopped yet, (n,) bool."""
    return np.array([status == "solved" for status in outcome.status], dtype=bool)


def mark_infeasible(
    outcome: Outcome,
    rows: Array,
    binding: Sequence[str],
    frees: Sequence[list[str]],
    nearest: list[EndPoint] | None = None,
) -> None:
    """Mark heats as infeasible; binding, frees and nearest hold an entry for each of `rows`."""
    for place, row in enumerate(rows.tolist()):
        outcome.status[row] = "infeasible"
        outcome.binding[row] = binding[place]
        outcome.frees[row] = frees[place]
        if nearest is not None:
            outcome.nearest[row] = nearest[place]


def end_point_of(outcome: Outcome, index: int) -> EndPoint:
    """End point of one heat as few plain numbers."""
    s, steel = outcome.state, outcome.steel_pct()
    found = {
        "end_temp_C": s.T_K - ZERO_C_K,
        "end_C_pct": steel["C"],
        "end_P_pct": steel.get("P", 0.0),
        "steel_kg": s.steel_kg,
        "slag_kg": s.slag_kg,
    }
    return {name: float(at(x, index)) for name, x in found.items()}


def lime_in_vain(outcome: Outcome) -> Array:
    """Heats in which the phosphorus aim asks for lime that does not dissolve any more, (n,) bool.

    Such lime holds no phosphorus back; it only cools and takes the place of scrap.
    """
    p, n = outcome.p, outcome.n
    aim = outcome.heats.values["aim_P_pct"]
    if not np.isfinite(aim).any() or "P" not in outcome.state.metal_species_kg:
        return np.zeros(n, dtype=bool)
    with np.errstate(invalid="ignore"):
        by_P = np.abs(spread(phosphorus_margin(p, outcome.state), n)) < AT_AIM
        beyond = spread(lime_limit(p, outcome.x, outcome.state), n) > 0.0
        above = spread(basicity_margin(p, outcome.state), n) > AT_AIM
    pinned = np.isfinite(outcome.heats.values["pin_basicity"])
    pinned |= np.isfinite(outcome.heats.values["pin_slag_CaO_pct"])
    return outcome.converged & by_P & beyond & above & ~pinned


def reachable(heats: HeatTable, ask: Ask) -> list[EndPoint]:
    """End points of heats; where the phosphorus aim is out of reach too, it is let go.

    Empty for a heat that has no end point even so.
    """
    solved = solve_heats(heats, ask)
    good = solved.converged & ~(lime_in_vain(solved) if ask.lime else False)
    found = [end_point_of(solved, row) if good[row] else {} for row in range(heats.n)]
    rows = np.flatnonzero(~good)
    if rows.size and ask.lime:
        again = solve_heats(with_values(heats.take(rows), aim_P_pct=np.nan), ask)
        for place, row in enumerate(rows.tolist()):
            if again.converged[place]:
                found[row] = end_point_of(again, place)
    return found
