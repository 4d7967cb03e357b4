"""Grades in a plan: aims filled in from the grade, tramp elements held against it."""

from __future__ import annotations

import numpy as np

from converter_calc.balance.heats import HeatTable
from converter_calc.planning.grades import (
    ConverterAim,
    TrampCheck,
    converter_aim,
    grade,
    largest_fitting_share,
    tap_practice,
    tell_tramp,
    worst_element,
)
from converter_calc.planning.limits import mark_infeasible, still_open
from converter_calc.planning.outcome import Outcome, spread
from converter_calc.planning.solving import with_values


def aim_of(heats: HeatTable) -> ConverterAim | None:
    """Converter aim derived from the grade of these heats; None where no grade is named.

    Raises InputError for an unknown grade, InfeasibleError where the grade leaves nothing.
    """
    if not heats.grade:
        return None
    return converter_aim(grade(heats.grade, heats.grades), tap_practice(heats.tap))


def with_grade_aims(heats: HeatTable) -> HeatTable:
    """The heats with each aim that is missing filled in from the grade."""
    aim = aim_of(heats)
    if aim is None:
        return heats
    changes = {}
    for name, pct in (("aim_C_pct", aim.C_pct), ("aim_P_pct", aim.P_pct), ("aim_S_pct", aim.S_pct)):
        given = heats.values[name]
        if pct is not None and not np.isfinite(given).all():
            changes[name] = np.where(np.isfinite(given), given, pct)
    return with_values(heats, **changes) if changes else heats


def tramp_checks(outcome: Outcome, aim: ConverterAim) -> list[TrampCheck]:
    """Tramp elements of the scrap charged against the limits of the grade."""
    heats, s = outcome.heats, outcome.state
    scrap = {
        name: spread(kg, outcome.n)
        for name, kg in outcome.charged_kg.items()
        if heats.materials[name].kind == "scrap"
    }
    total = sum(scrap.values(), np.zeros(outcome.n))
    limits = {el: pct for el, pct in aim.tramp_max.items() if el in s.metal_species_kg}
    if not scrap or not limits or not (total > 0.0).all():
        return []
    hot_metal = spread(s.hot_metal_kg, outcome.n)
    stays = {
        el: float(np.mean(np.asarray(s.metal_species_kg[el] / s.totals.of(el)))) for el in limits
    }
    charge = total + hot_metal
    return largest_fitting_share(
        {
            name: {el: 100.0 * outcome.p.contents[name].elements.get(el, 0.0) for el in limits}
            for name in scrap
        },
        {name: kg / total for name, kg in scrap.items()},
        total,
        charge,
        spread(s.metal_kg, outcome.n) / charge,
        limits,
        rest_pct={
            el: (spread(s.totals.of(el), outcome.n) - _by_scrap(outcome, scrap, el))
            * 100.0
            / np.where(hot_metal > 0.0, hot_metal, 1.0)
            for el in limits
        },
        stays_share=stays,
    )


def _by_scrap(outcome: Outcome, scrap: dict[str, np.ndarray], element: str) -> np.ndarray:
    return sum(
        (kg * outcome.p.contents[name].elements.get(element, 0.0) for name, kg in scrap.items()),
        np.zeros(outcome.n),
    )


def judge_grade(outcome: Outcome) -> None:
    """Refuse heats whose scrap breaks a tramp limit of the grade, with the share that fits."""
    aim = aim_of(outcome.heats)
    if aim is None:
        return
    checks = tramp_checks(outcome, aim)
    for row in np.flatnonzero(still_open(outcome)).tolist():
        worst = worst_element(checks, row)
        if worst is None:
            continue
        mark_infeasible(
            outcome,
            np.array([row]),
            lambda r, c=worst: f"tramp limit of grade {outcome.heats.grade}: {tell_tramp(c, r)}",
            lambda r, c=worst: [
                f"no more than {100.0 * c.fitting_share[r]:.2f} % of {c.offender[r]} in the mix",
                f"scrap of this mix up to {100.0 * c.fitting_scrap_share[r]:.2f} % of the charge",
                "a grade with a wider limit",
            ],
        )
