"""What the converter has to reach so that the ladle analysis falls inside the grade.

The balance is written on 1000 kg of steel at the end of the blow: what the additions bring in
is added, what the carried-over slag gives back is added, and the sum is held against the grade.
Everything the additions bring counts with the shop's recoveries; phosphorus and sulphur wholly.
Source of the method: mass balance; the numbers in it carry theirs in each term.
"""

from __future__ import annotations

import itertools
from collections.abc import Mapping
from dataclasses import dataclass
from typing import NamedTuple

import numpy as np

from converter_calc.basis.errors import InfeasibleError
from converter_calc.tapping.grade_library import Grade
from converter_calc.tapping.tap_practice import Addition, TapPractice

TAPPED_KG = 1000.0
ALWAYS_AIMED = ("Mn", "Si")
NEVER_ADDED = frozenset({"C", "P", "S", "Fe"})
BALANCE = "mass balance of the tap"


class Term(NamedTuple):
    """One step of an aim: those labelled "C: ..." in mass % add up to the carbon aim."""

    label: str
    value: float
    unit: str
    source: str


@dataclass(frozen=True)
class ConverterAim:
    """Aims at the end of the blow, derived from a grade.

    Attributes
    ----------
    C_pct, P_pct, S_pct : carbon aimed at, highest phosphorus and sulphur [mass %]; None
        where the grade has no limit.
    Mn_pct : highest end manganese [mass %]; None = left for the ladle.
    tramp_max : element that stays in the steel -> highest content at the end of the blow
        [mass %].
    additions_kg_per_t : addition -> kg per tonne of tapped steel.
    needs_vacuum : the converter cannot bring the carbon of the grade.
    terms : the steps, in order.
    notes : sentences for the charge sheet.
    """

    C_pct: float | None
    P_pct: float | None
    S_pct: float | None
    Mn_pct: float | None
    tramp_max: dict[str, float]
    additions_kg_per_t: dict[str, float]
    needs_vacuum: bool
    terms: list[Term]
    notes: list[str]


class _Tap(NamedTuple):
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


def converter_aim(grade: Grade, practice: TapPractice) -> ConverterAim:
    """Carbon, phosphorus, sulphur and tramp aims of the converter for this grade.

    Carbon: target of the grade (its middle, or a margin under the maximum) less what the
    additions bring; not under the lowest end carbon of the practice (then vacuum is told) nor
    above the highest (then carburiser fills up). Phosphorus and sulphur: maximum less margin,
    additions and return from the carried-over slag.

    Parameters
    ----------
    grade : the limits [mass %].
    practice : margins, recoveries, additions (`tap_practice`).

    Raises
    ------
    InfeasibleError : nothing is left for the phosphorus or the sulphur of the metal.
    """
    target_C = _target_carbon(grade, practice)
    targets = ladle_targets(grade, practice)
    tap = _choose_additions(target_C, targets, practice)
    terms: list[Term] = []
    notes: list[str] = []
    _tell_additions(tap, targets, grade, practice, terms)
    C_pct, needs_vacuum = _carbon(target_C, tap, grade, practice, terms, notes)
    P_pct = _residue("P", tap, grade, practice, terms, notes)
    S_pct = _residue("S", tap, grade, practice, terms, notes)
    _tell_excess(tap, grade, notes)
    return ConverterAim(
        C_pct=C_pct,
        P_pct=P_pct,
        S_pct=S_pct,
        Mn_pct=_manganese(tap, grade, practice, terms),
        tramp_max=_tramp_max(tap, targets, grade, practice, terms),
        additions_kg_per_t=dict(tap.kg),
        needs_vacuum=needs_vacuum,
        terms=terms,
        notes=notes,
    )


def ladle_targets(grade: Grade, practice: TapPractice) -> dict[str, float]:
    """Element -> ladle content that tap additions are made for [mass %].

    The grade's own targets; else the middle of a two-sided range; for manganese with only a
    maximum, half of it; else nothing is added. Only what lies above the residual is listed.
    """
    targets: dict[str, float] = {}
    for element in dict.fromkeys([*ALWAYS_AIMED, *grade.limits, *grade.targets]):
        low, high = grade.limits.get(element, (None, None))
        if element in NEVER_ADDED or element not in practice.alloy_order:
            continue
        if element in grade.targets:
            target = grade.targets[element]
        elif high is not None and (low is not None or element == "Mn"):
            target = 0.5 * ((low or 0.0) + high)
        else:
            continue
        if target > practice.residual_pct.get(element, 0.0):
            targets[element] = target
    return targets


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


def _target_carbon(grade: Grade, practice: TapPractice) -> float | None:
    if "C" in grade.targets:
        return grade.targets["C"]
    low, high = grade.limits.get("C", (None, None))
    if high is None:
        return None
    if low is not None:
        return 0.5 * (low + high)
    return high - min(practice.margin_C_pct, 0.5 * high)


def _choose_additions(
    target_C: float | None, targets: Mapping[str, float], practice: TapPractice
) -> _Tap:
    """The first set of additions, in the shop's order, whose carbon fits; else the leanest."""
    orders = [practice.alloy_order[element] for element in targets]
    tried: list[_Tap] = []
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
) -> _Tap:
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
) -> _Tap:
    kg = size_additions(targets, chosen, residual, practice.recovery)
    gains = {a.name: a.gain_kg(practice.recovery) for a in chosen.values() if a.name in kg}
    tap = _Tap(kg, gains, None)
    if target_C is None:
        return tap
    return tap._replace(C_tap_pct=(target_C / 100.0 * tap.steel_kg - tap.brought_kg("C")) / 10.0)


def _tell_additions(
    tap: _Tap,
    targets: Mapping[str, float],
    grade: Grade,
    practice: TapPractice,
    terms: list[Term],
) -> None:
    for element, target in targets.items():
        own = element in grade.targets and not grade.invented
        source = "usual aim, common practice, no source" if own else grade.source
        terms.append(Term(f"ladle target of {element}", target, "mass %", source))
    for name, kg in tap.kg.items():
        terms.append(Term(f"{name} added", kg, "kg/t", practice.additions[name].source))


def _carried_terms(element: str, tap: _Tap, aimed_pct: float, practice: TapPractice) -> list[Term]:
    """From the content aimed at in the ladle back to the tap: dilution, then each addition."""
    more = aimed_pct * (tap.steel_kg - TAPPED_KG) / TAPPED_KG
    terms = [Term(f"{element}: dilution by the additions", more, "mass %", BALANCE)]
    for name, kg in tap.kg.items():
        brought = kg * tap.gains[name].get(element, 0.0) / 10.0
        if brought > 0.0:
            source = practice.additions[name].source
            terms.append(Term(f"{element}: brought by {name}", -brought, "mass %", source))
    return terms


def _carbon(
    target: float | None,
    tap: _Tap,
    grade: Grade,
    practice: TapPractice,
    terms: list[Term],
    notes: list[str],
) -> tuple[float | None, bool]:
    if target is None or tap.C_tap_pct is None:
        notes.append(f"{grade.name} has no carbon limit: give the carbon aim itself")
        return None, False
    terms.append(Term("C: target of the grade", target, "mass %", grade.source))
    terms.extend(_carried_terms("C", tap, target, practice))
    lowest = practice.lowest_end_C_pct
    if tap.C_tap_pct >= lowest:
        return tap.C_tap_pct, False
    source = practice.sources["lowest_end_C_pct"]
    raised = lowest - tap.C_tap_pct
    terms.append(Term("C: raised to the lowest end carbon", raised, "mass %", source))
    notes.append(
        f"{grade.name} asks for {tap.C_tap_pct:.3f} % C at tap, under the {lowest:g} % of the"
        " converter: vacuum decarburisation is needed"
    )
    return lowest, True


def _residue(
    element: str,
    tap: _Tap,
    grade: Grade,
    practice: TapPractice,
    terms: list[Term],
    notes: list[str],
) -> float | None:
    """Highest phosphorus or sulphur at the end of the blow [mass %]."""
    highest = grade.highest_pct(element)
    if highest is None:
        return None
    margin, slag_pct, share, lowest = (
        (practice.margin_P_pct, practice.slag_P_pct, practice.P_return_share,
         practice.lowest_end_P_pct)
        if element == "P"
        else (practice.margin_S_pct, practice.slag_S_pct, practice.S_return_share,
              practice.lowest_end_S_pct)
    )  # fmt: skip
    returned = practice.carried_slag_kg_per_t * slag_pct / 100.0 * share / 10.0
    sources = practice.sources
    steps = [
        Term(f"{element}: maximum of the grade", highest, "mass %", grade.source),
        Term(f"{element}: margin", -margin, "mass %", sources[f"margin_{element}_pct"]),
        *_carried_terms(element, tap, highest - margin, practice),
        Term(f"{element}: returned by the carried-over slag", -returned, "mass %",
             sources["carried_slag_kg_per_t"]),
    ]  # fmt: skip
    terms.extend(steps)
    aim = sum(step.value for step in steps)
    if aim <= 0.0:
        raise InfeasibleError(
            f"{grade.name}: nothing is left for {element} in the metal ({aim:.4f} mass %)"
            f" of the maximum {highest:g} mass %",
            binding=f"{element} of the grade",
            frees=["less slag carried over", "purer additions", "a smaller margin"],
            nearest={f"{element}_pct": 0.0},
        )
    if aim < lowest:
        notes.append(
            f"{element} aim {aim:.4f} % lies under {lowest:g} %: one plain blow seldom gets there"
        )
    return aim


def _manganese(tap: _Tap, grade: Grade, practice: TapPractice, terms: list[Term]) -> float | None:
    """None where the ladle sets it; the limit itself where the residual may break it."""
    highest = grade.highest_pct("Mn")
    residual = practice.residual_pct.get("Mn", 0.0)
    after = (10.0 * residual + tap.brought_kg("Mn")) / tap.steel_kg * 100.0
    if highest is None or after <= highest:
        return None
    aim = max(highest * tap.steel_kg / 1000.0 - tap.brought_kg("Mn") / 10.0, 0.0)
    terms.append(Term("Mn: highest that the grade lets end the blow", aim, "mass %", grade.source))
    return aim


def _tell_excess(tap: _Tap, grade: Grade, notes: list[str]) -> None:
    """Note each element that the additions alone carry over its maximum."""
    for element, (_, high) in grade.limits.items():
        if high is None or element in {"C", "P", "S"}:
            continue
        after = tap.brought_kg(element) / tap.steel_kg * 100.0
        if after > high:
            notes.append(f"additions bring {after:.4f} % {element}, above the maximum {high:g} %")


def _tramp_max(
    tap: _Tap,
    targets: Mapping[str, float],
    grade: Grade,
    practice: TapPractice,
    terms: list[Term],
) -> dict[str, float]:
    """Highest content at the end of the blow of each element that stays in the steel.

    Of an element that is added on purpose the target is free for the scrap; of others the
    maximum less what the additions bring. Dilution by the additions is left as reserve.
    """
    found: dict[str, float] = {}
    for element in practice.stays_share:
        highest = grade.highest_pct(element)
        if highest is None and element not in targets:
            continue
        if element in targets:
            limit = targets[element]
        else:
            limit = max((highest or 0.0) - tap.brought_kg(element) / 10.0, 0.0)
        found[element] = limit
        terms.append(Term(f"{element}: highest at tap", limit, "mass %", grade.source))
    return found
