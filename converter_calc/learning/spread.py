"""With what probability a heat hits its aims, and which measurement to improve.

The recipe is fixed; what is true of the heat differs from what the instruments read by their
errors. Each draw of these is a heat of its own, predicted by the same balance as any other.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass, field
from typing import Any

import numpy as np

from converter_calc.balance.asks import Ask, evaluate_ask
from converter_calc.balance.heats import HeatTable
from converter_calc.balance.problem import build_problem
from converter_calc.basis.dual import Array
from converter_calc.basis.errors import Fault, InputError
from converter_calc.basis.units import MJ
from converter_calc.learning.errors_of_inputs import ErrorModel, Extra, error_model
from converter_calc.learning.spread_draws import (
    SHARED_FROM,
    Draws,
    charges,
    draw,
    end_points,
    normal_draws,
    plan_draws,
    together,
)
from converter_calc.learning.spread_numbers import (
    CONFIDENCE,
    Chance,
    Distribution,
    Window,
    all_hits,
    chance,
    distribution,
    windows_of,
)
from converter_calc.learning.spread_worth import Parts, Share, Worth
from converter_calc.planning.grading import with_grade_aims
from converter_calc.planning.outcome import Outcome
from converter_calc.planning.plan import (
    as_heats,
    plan_heats,
    predict_heats,
    raise_unless_solved,
)
from converter_calc.planning.solving import complete_charge, with_values

PREDICT = Ask(end="root_C", heat="T_K")
#: Draws planned anew for the charge needed: such a plan costs three times a prediction.
NEEDS_DRAWS = 2048
#: Label, unit of each result.
RESULTS = {
    "end_temp_C": ("temperature", "C"),
    "end_C_pct": ("[C]", "%"),
    "end_P_pct": ("[P]", "%"),
    "end_Mn_pct": ("[Mn]", "%"),
    "end_S_pct": ("[S]", "%"),
    "end_O_ppm": ("dissolved oxygen", "ppm"),
    "steel_kg": ("steel tapped", "kg"),
    "slag_kg": ("liquid slag", "kg"),
    "slag_P2O5_pct": ("(P2O5)", "%"),
    "slag_T_Fe_pct": ("total iron of slag", "%"),
    "basicity": ("CaO/SiO2", ""),
}
NEEDS = {
    "scrap_kg": ("scrap, all", "kg"),
    "trim_kg": ("coolant (+) or fuel (-)", "kg"),
    "hot_metal_kg": ("hot metal", "kg"),
    "lime_kg": ("lime", "kg"),
    "flux_kg": ("magnesia flux", "kg"),
    "oxygen_Nm3": ("oxygen", "Nm3"),
}


@dataclass(frozen=True)
class Spread:
    """What one heat may come to.

    chances : each window; all_windows : all at once. shares : largest part in the temperature
    first; explained : share of each variance that the polynomials behind them confirm on draws
    not fitted. needs : charge that the heat would want if the truth were known; empty where the
    charge was given. draws : all draws, scrambling by scrambling. charge : the fixed recipe.
    """

    heat_id: str
    seed: int
    replicates: int
    unsolved: int
    below_zero: int
    model: ErrorModel
    results: dict[str, Distribution]
    chances: tuple[Chance, ...]
    all_windows: Chance
    shares: tuple[Share, ...]
    explained: dict[str, float]
    worth: tuple[Worth, ...]
    needs: dict[str, Distribution]
    charge: HeatTable = field(repr=False)
    planned: Outcome = field(repr=False)
    draws: Draws = field(repr=False)

    @property
    def windows(self) -> tuple[Window, ...]:
        """The windows that count."""
        return tuple(c.window for c in self.chances if c.window is not None)

    def largest(self, result: str, least: float = 0.05) -> list[tuple[str, float]]:
        """Errors that make most of the scatter of a result: label and total share, 0 to 1."""
        parts = [(share.label, share.total.get(result, 0.0)) for share in self.shares]
        return sorted((p for p in parts if p[1] >= least), key=lambda part: -part[1])

    def document(self) -> dict[str, Any]:
        """All of it but the draws as plain numbers, ready for JSON."""
        return {
            "heat_id": self.heat_id,
            "draws": int(self.draws.solved.size),
            "scramblings": self.replicates,
            "seed": self.seed,
            "confidence_of_intervals": CONFIDENCE,
            "unsolved_draws": self.unsolved,
            "errors": {
                error.name: {
                    "sd": error.sd, "unit": error.unit, "kind": error.kind,
                    "given": error.given, "source": error.source,
                }
                for error in self.model.errors
            },
            "windows": {c.name: _chance_document(c) for c in self.chances},
            "all_windows": _chance_document(self.all_windows),
            "end_point": {name: _numbers(d) for name, d in self.results.items()},
            "charge_needed": {name: _numbers(d) for name, d in self.needs.items()},
            "shares_of_variance": [
                {"errors": list(s.errors), "first": s.first, "total": s.total}
                for s in self.shares
            ],
            "explained_share_of_variance": self.explained,
            "probability_gained": {
                w.error: {"error_halved": w.halved[0], "error_removed": w.removed[0]}
                for w in self.worth
            },
        }  # fmt: skip


def spread(
    heat: Any,
    draws: int = 20000,
    seed: int = 1,
    *,
    extra: Extra | None = None,
    charged: bool = False,
    needs: bool = True,
    shares: bool = True,
    windows: Sequence[Window] | None = None,
) -> Spread:
    """Distribution of the end point of one heat, and its chances.

    Parameters
    ----------
    heat : as for `plan`; or an Outcome. charged : the charge is complete (`predict`), nothing
    is planned. draws : least number of draws. seed : of the draws; the same seed gives the same
    numbers. extra : flat names of inputs and their covariance, beside the errors of the shop,
    as a tuning gives them. needs, shares : whether the charge needed and the shares of variance
    are wanted. windows : what counts as hit, in place of the windows of the heat.

    Raises
    ------
    InputError : input, [errors], [window], draws or extra is wrong. InfeasibleError,
    ConvergenceError : the heat cannot be planned. DataError : correlations contradict.
    """
    from threadpoolctl import threadpool_limits

    planned = heat if isinstance(heat, Outcome) else planned_heat(heat, charged=charged)
    if planned.n != 1:
        raise InputError([Fault("spread", f"takes one heat, given {planned.n}; see spread_table")])
    charge, x = charge_of(planned)
    model = error_model(charge, PREDICT, x, extra)
    plan = plan_draws(draws, seed)
    half = plan.replicates // 2

    def ends(first: int, last: int) -> Draws:
        z = normal_draws(plan, model.size, first, last)
        return draw(charge, PREDICT, x, model, z, end_points)

    def rest() -> tuple[Draws, Draws | None]:
        found = _needed(planned, model, seed) if needs and planned.ask.heat != "T_K" else None
        return ends(half, plan.replicates), found

    mine, (others, need) = together(lambda: ends(0, half), rest, pays=plan.draws >= SHARED_FROM)
    drawn = mine.joined(others)
    p = build_problem(charge)
    state = evaluate_ask(p, PREDICT, dict(x))
    read = end_points(charge, PREDICT, p, state, x)
    as_read = {name: float(values[0]) for name, values in read.items()}
    wanted = tuple(windows) if windows is not None else windows_of(charge, 0, as_read)
    hits = all_hits(wanted, drawn.values)
    chances = tuple(
        chance(w.name, w.label, w.holds(drawn.values[w.name]), plan.replicates, w) for w in wanted
    )
    part = None
    if shares and model.size:
        with threadpool_limits(limits=1, user_api="blas"):
            found = Parts.of(model, drawn, wanted, plan.replicates)
            part = found.shares(), found.explained(), found.worth()
    return Spread(
        heat_id=charge.ids[0],
        seed=seed,
        replicates=plan.replicates,
        unsolved=int(np.count_nonzero(~drawn.solved)),
        below_zero=drawn.below_zero,
        model=model,
        results={
            name: distribution(name, label, unit, as_read[name], drawn.values[name])
            for name, (label, unit) in RESULTS.items()
        },
        chances=chances,
        all_windows=chance("all", "all together", hits, plan.replicates),
        shares=part[0] if part else (),
        explained=part[1] if part else {},
        worth=part[2] if part else (),
        needs=_need_numbers(planned, need) if need is not None else {},
        charge=charge,
        planned=planned,
        draws=drawn,
    )


def planned_heat(heat: Any, *, charged: bool) -> Outcome:
    """The heat planned, or predicted where its charge is complete.

    Raises what `plan` and `predict` raise.
    """
    heats = as_heats(heat)
    if heats.n != 1:
        raise InputError([Fault("spread", f"takes one heat, given {heats.n}; see spread_table")])
    groups = predict_heats(with_grade_aims(heats)) if charged else plan_heats(heats)
    outcome = groups[0][1]
    raise_unless_solved(outcome)
    return outcome


def charge_of(planned: Outcome) -> tuple[HeatTable, dict[str, Array]]:
    """The recipe as a complete charge, its end free, and the solution of its prediction.

    A pinned end temperature becomes the aim, and the heat loss found with it is kept. The
    prediction of a charge just planned ends where the plan does, so nothing is solved again.
    """
    charge = complete_charge(planned)
    pin = charge.values["pin_end_temp_C"]
    if np.isfinite(pin).any():
        loss = np.broadcast_to(planned.state.heat_loss_J, (planned.n,)) / MJ
        charge = with_values(
            charge,
            pin_end_temp_C=np.nan,
            aim_temp_C=np.where(np.isfinite(pin), pin, charge.values["aim_temp_C"]),
            pin_heat_loss_MJ=np.where(np.isfinite(pin), loss, charge.values["pin_heat_loss_MJ"]),
        )
    s, n = planned.state, planned.n
    end: dict[str, Any] = {"metal_kg": s.metal_kg, "slag_kg": s.slag_kg, "T_K": s.T_K}
    end |= {"f_Mn": planned.x["f_Mn"], "f_P": planned.x["f_P"], "root_C": s.C_pct**-0.5}
    x = {name: np.array(np.broadcast_to(end[name], (n,)), dtype=float) for name in PREDICT.unknowns}
    return charge, x


def _needed(planned: Outcome, model: ErrorModel, seed: int) -> Draws:
    """The plan of NEEDS_DRAWS truths."""
    plan = plan_draws(NEEDS_DRAWS, seed)
    z = normal_draws(plan, model.size, 0, plan.replicates)
    return draw(planned.heats, planned.ask, planned.x, model, z, charges, all_ways=False)


def _need_numbers(planned: Outcome, need: Draws) -> dict[str, Distribution]:
    as_planned = charges(planned.heats, planned.ask, planned.p, planned.state, planned.x)
    return {
        name: distribution(name, *NEEDS[name], float(as_planned[name][0]), need.values[name])
        for name in NEEDS
        if name in need.values
    }


def _numbers(d: Distribution) -> dict[str, Any]:
    def plain(x: float) -> float | None:
        return x if np.isfinite(x) else None

    return {
        "unit": d.unit,
        "as_read": plain(d.as_read),
        "mean": plain(d.mean),
        "sd": plain(d.sd),
        "quantiles": {f"{q:g}": plain(x) for q, x in d.quantiles.items()},
    }


def _chance_document(c: Chance) -> dict[str, Any]:
    found: dict[str, Any] = {
        "probability": c.probability,
        "interval": [c.low, c.high],
        "interval_by_count": list(c.by_count),
    }
    if c.window is not None:
        w = c.window
        found |= {
            "aim": w.aim,
            "low": w.low if np.isfinite(w.low) else None,
            "high": w.high if np.isfinite(w.high) else None,
        }
    return found
