"""What the converter has to reach so that the ladle analysis falls inside the grade.

The balance is written on 1000 kg of steel at the end of the blow: what the additions bring in
is added, what the carried-over slag gives back is added, and the sum is held against the grade.
Everything the additions bring counts with the shop's recoveries; phosphorus and sulphur wholly.
Source of the method: mass balance; the numbers in it carry theirs in each term.
"""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass
from typing import NamedTuple

from converter_calc.basis.errors import InfeasibleError
from converter_calc.tapping.aim_additions import (
    TAPPED_KG,
    AimTap,
    choose_for_aim,
    target_carbon,
)
from converter_calc.tapping.grade_library import Grade
from converter_calc.tapping.tap_practice import TapPractice

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
    target_C = target_carbon(grade, practice)
    targets = ladle_targets(grade, practice)
    tap = choose_for_aim(target_C, targets, grade, practice)
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


def _tell_additions(
    tap: AimTap,
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


def _carried_terms(
    element: str, tap: AimTap, aimed_pct: float, practice: TapPractice
) -> list[Term]:
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
    tap: AimTap,
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
    tap: AimTap,
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


def _manganese(tap: AimTap, grade: Grade, practice: TapPractice, terms: list[Term]) -> float | None:
    """None where the ladle sets it; the limit itself where the residual may break it."""
    highest = grade.highest_pct("Mn")
    residual = practice.residual_pct.get("Mn", 0.0)
    after = (10.0 * residual + tap.brought_kg("Mn")) / tap.steel_kg * 100.0
    if highest is None or after <= highest:
        return None
    aim = max(highest * tap.steel_kg / 1000.0 - tap.brought_kg("Mn") / 10.0, 0.0)
    terms.append(Term("Mn: highest that the grade lets end the blow", aim, "mass %", grade.source))
    return aim


def _tell_excess(tap: AimTap, grade: Grade, notes: list[str]) -> None:
    """Note each element that the additions alone carry over its maximum."""
    for element, (_, high) in grade.limits.items():
        if high is None or element in {"C", "P", "S"}:
            continue
        after = tap.brought_kg(element) / tap.steel_kg * 100.0
        if after > high:
            notes.append(f"additions bring {after:.4f} % {element}, above the maximum {high:g} %")


def _tramp_max(
    tap: AimTap,
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
