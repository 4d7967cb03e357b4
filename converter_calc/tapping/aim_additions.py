"""The additions that a converter aim counts with, before anything is known of the heat itself.

On a tonne of steel with the residuals and recoveries of the practice. Source: mass balance.
"""

from __future__ import annotations

import itertools
from collections.abc import Mapping
from dataclasses import replace
from typing import NamedTuple

import numpy as np

from converter_calc.tapping.additions import Addition
from converter_calc.tapping.grade_library import Grade
from converter_calc.tapping.least_cost import Demand, Want, choose
from converter_calc.tapping.pouring import TapCase
from converter_calc.tapping.tap_practice import TapPractice

TAPPED_KG = 1000.0


class AimTap(NamedTuple):
    """One choice of additions: kg/t each, what they bring [kg/t], and the carbon it leaves."""

    kg: dict[str, float]
    gains: dict[str, dict[str, float]]
    C_tap_pct: float | None

    def brought_kg(self, element: str) -> float:
        """Kilograms of the element that the additions leave in the steel [kg/t]."""
        return sum(kg * self.gains[name].get(element, 0.0) for name, kg in self.kg.items())

    @property
    def steel_kg(self) -> float:
        """Steel in the ladle per tonne tapped [kg]."""
        brought = (kg * sum(self.gains[name].values()) for name, kg in self.kg.items())
        return TAPPED_KG + sum(brought)


def target_carbon(grade: Grade, practice: TapPractice) -> float | None:
    """Carbon aimed at in the ladle [mass %]; None where the grade has no limit."""
    if "C" in grade.targets:
        return grade.targets["C"]
    low, high = grade.limits.get("C", (None, None))
    if high is None:
        return None
    if low is not None:
        return 0.5 * (low + high)
    return high - min(practice.margin_C_pct, 0.5 * high)


def size_additions(
    targets_pct: Mapping[str, float],
    chosen: Mapping[str, Addition],
    residual_pct: Mapping[str, float],
    recovery: Mapping[str, float],
) -> dict[str, float]:
    """Additions that bring 1000 kg of tapped steel to the targets, all at once.

    For each element e: 10 residual_e + sum_j a_j gain_je = target_e/100 * (1000 + sum_j a_j m_j),
    where a_j [kg/t], gain_je [kg/kg] and m_j its sum over the elements. An addition that
    would come out negative (another one brings its element already) is left out.

    Parameters
    ----------
    targets_pct, residual_pct : element -> mass % in the ladle, before the tap.
    chosen : element -> addition that supplies it.
    recovery : element -> share of an addition that ends in the steel.

    Returns
    -------
    Name of the addition -> kg per tonne tapped, in the order of the targets.
    """
    left = list(targets_pct)
    while left:
        gains = [chosen[element].gain_kg(recovery) for element in left]
        share = [targets_pct[element] / 100.0 for element in left]
        matrix = [
            [gain.get(element, 0.0) - x * sum(gain.values()) for gain in gains]
            for element, x in zip(left, share, strict=True)
        ]
        missing = [x * TAPPED_KG - 10.0 * residual_pct.get(element, 0.0)
                   for element, x in zip(left, share, strict=True)]  # fmt: skip
        kg = np.linalg.solve(np.array(matrix), np.array(missing))
        worst = int(np.argmin(kg))
        if kg[worst] >= 0.0:
            return {chosen[e].name: float(a) for e, a in zip(left, kg, strict=True)}
        del left[worst]
    return {}


def choose_for_aim(
    target_C: float | None, targets: Mapping[str, float], grade: Grade, practice: TapPractice
) -> AimTap:
    """Additions of the converter aim: of least cost where prices are given, else in order."""
    cheapest = _cheapest(target_C, targets, grade, practice) if practice.priced else None
    return cheapest or _in_order(target_C, targets, practice)


def _cheapest(
    target_C: float | None, targets: Mapping[str, float], grade: Grade, practice: TapPractice
) -> AimTap | None:
    """Least cost for which the carbon fits; else the least carbon; None where nothing will do."""
    ends = (practice.lowest_end_C_pct, practice.highest_end_C_pct)
    budget = [] if target_C is None else [Want("C", "high", target_C, "carbon target")]
    tap = _priced_tap(target_C, ends[0], targets, budget, grade, practice)
    if tap is None and budget:
        tap = _priced_tap(target_C, ends[0], targets, [], grade, practice, carbon_only=True)
    if tap is None or tap.C_tap_pct is None or tap.C_tap_pct <= ends[1] or target_C is None:
        return tap
    exact = [Want("C", side, target_C, "carbon target") for side in ("low", "high")]
    return _priced_tap(target_C, ends[1], targets, exact, grade, practice)


def _priced_tap(
    target_C: float | None,
    end_C_pct: float,
    targets: Mapping[str, float],
    carbon: list[Want],
    grade: Grade,
    practice: TapPractice,
    *,
    carbon_only: bool = False,
) -> AimTap | None:
    """The linear programme on a tonne that ends the blow with the residuals of the practice."""
    left = {**practice.residual_pct, "C": end_C_pct}
    left["Fe"] = 100.0 - sum(left.values())
    plain = replace(practice, first_oxygen_share={}, air_oxygen_kg_per_t=0.0)
    steel = {element: np.array([pct]) for element, pct in left.items()}
    case = TapCase(np.array([TAPPED_KG]), steel, np.array([1900.0]), {}, plain, "none")
    wants = [Want(e, "low", pct, "ladle target") for e, pct in targets.items()]
    wants += [
        Want(e, "high", high, f"maximum of {grade.name}")
        for e, (_, high) in grade.limits.items()
        if high is not None and e not in {"C", "P", "S"}
    ]
    found = choose(Demand(case, np.zeros(1), {}), [*wants, *carbon], [], by_carbon=carbon_only)
    if not found.feasible[0]:
        return None
    kg = {name: float(x[0]) for name, x in found.kg_per_t.items() if x[0] > 0.0}
    return _told(target_C, kg, practice)


def _in_order(
    target_C: float | None, targets: Mapping[str, float], practice: TapPractice
) -> AimTap:
    """The first set of additions, in the shop's order, whose carbon fits; else the leanest."""
    orders = [practice.alloy_order[element] for element in targets]
    tried: list[AimTap] = []
    for names in itertools.product(*orders):
        chosen = {e: practice.additions[name] for e, name in zip(targets, names, strict=True)}
        tap = _fill(target_C, targets, chosen, practice)
        if tap.C_tap_pct is None or tap.C_tap_pct >= practice.lowest_end_C_pct:
            return tap
        tried.append(tap)
    return min(tried, key=lambda tap: tap.brought_kg("C"))


def _fill(
    target_C: float | None,
    targets: Mapping[str, float],
    chosen: dict[str, Addition],
    practice: TapPractice,
) -> AimTap:
    """Size one set; where it leaves more carbon than can be caught, carburiser joins."""
    tap = _size(target_C, targets, chosen, practice.residual_pct, practice)
    if target_C is None or tap.C_tap_pct is None or tap.C_tap_pct <= practice.highest_end_C_pct:
        return tap
    filler = practice.additions[practice.alloy_order["C"][0]]
    residual = {**practice.residual_pct, "C": practice.highest_end_C_pct}
    wanted, supply = {**targets, "C": target_C}, {**chosen, "C": filler}
    return _size(target_C, wanted, supply, residual, practice)


def _size(
    target_C: float | None,
    targets: Mapping[str, float],
    chosen: Mapping[str, Addition],
    residual: Mapping[str, float],
    practice: TapPractice,
) -> AimTap:
    return _told(target_C, size_additions(targets, chosen, residual, practice.recovery), practice)


def _told(target_C: float | None, kg: dict[str, float], practice: TapPractice) -> AimTap:
    """The choice with what it brings, and the carbon that it leaves for the converter."""
    gains = {name: practice.additions[name].gain_kg(practice.recovery) for name in kg}
    tap = AimTap(kg, gains, None)
    if target_C is None:
        return tap
    return tap._replace(C_tap_pct=(target_C / 100.0 * tap.steel_kg - tap.brought_kg("C")) / 10.0)
