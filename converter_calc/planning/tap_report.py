"""What a tap has to tell: warnings, terms behind each figure, one heat as plain numbers."""

from __future__ import annotations

from collections.abc import Iterator
from dataclasses import dataclass
from typing import Any

import numpy as np

from converter_calc.basis.dual import Array
from converter_calc.basis.errors import Fault, InputError
from converter_calc.basis.units import MJ
from converter_calc.data.tables import read_csv_rows
from converter_calc.laws import deoxidation
from converter_calc.planning.explain import Explanation, Term
from converter_calc.planning.ladle import NOT_WORKED_OUT, LadlePlan, heat_lost_MJ
from converter_calc.planning.outcome import Outcome, at
from converter_calc.tapping.pouring import SILICON_LAW, bound_oxygen

#: More additions than this chill and stir the ladle hard [kg/t]. Common practice, no source.
MUCH_KG_PER_T = 25.0
#: Superheat under which the ladle is in danger of skulls [K]. Common practice, no source.
LEAST_SUPERHEAT_K = 20.0
#: Carbon thrown into steel that holds more oxygen than this boils hard [ppm]. Common practice.
BOILS_ABOVE_PPM = 200.0
BALANCE = "mass balance of the tap"
THERMO = "enthalpies of data/species.csv and data/solution_heats.csv"
TOPICS = ("oxygen", "deoxidant", "temperature", "phosphorus", "additions", "analysis")


def liquidus_C(steel_pct: dict[str, Array]) -> Array:
    """Liquidus of the steel [C] by the usual linear formula; contents in mass %, (n,).

    Source: data/liquidus.csv (from memory), low-alloy steel up to about 0.5 % C.
    """
    slopes = {row["element"]: float(row["value"]) for row in read_csv_rows("liquidus.csv")}
    melts = slopes.pop("Fe")
    return melts - sum(
        (slope * steel_pct[e] for e, slope in slopes.items() if e in steel_pct),
        np.zeros_like(next(iter(steel_pct.values()))),
    )


@dataclass
class TapResult:
    """One or more heats at the end of the blow (`outcome`) and in the ladle (`ladle`)."""

    outcome: Outcome
    ladle: LadlePlan

    def warnings(self, index: int = 0) -> list[dict[str, str]]:
        """Warnings of one heat: code, field, message."""
        return ladle_warnings(self.ladle, index)

    def explain(self, topic: str, index: int = 0) -> Explanation:
        """Terms behind a figure; topic one of TOPICS. Raises InputError for another."""
        return explain_ladle(self.ladle, topic, index)

    def document(self, index: int = 0) -> dict[str, Any]:
        """One heat as plain numbers, ready for JSON: end point of the blow, and the ladle."""
        blow = self.outcome.document(index)
        return {
            "heat_id": blow["heat_id"],
            "end_point": blow["end_point"],
            "recipe": blow["recipe"],
            "tap": ladle_document(self.ladle, index),
        }


def ladle_document(ladle: LadlePlan, index: int = 0) -> dict[str, Any]:
    """The ladle of one heat as plain numbers; keys carry their unit."""
    i, poured, heat = index, ladle.poured, ladle.heat
    steel = float(poured.steel_kg[i])
    pct = {e: float(x[i]) for e, x in poured.steel_pct().items()}
    cost = ladle.cost
    additions = []
    for name, kg in ladle.added_kg.items():
        addition = ladle.practice.additions[name]
        recovery = float(ladle.recovery(name)[i])
        if kg[i] <= 0.0:
            continue
        additions.append(
            {
                "name": name,
                "for": addition.supplies,
                "mass_kg": float(kg[i]),
                "kg_per_t": float(kg[i] / ladle.case.steel_kg[i] * 1e3),
                "recovery": recovery if np.isfinite(recovery) else None,
                "cost": float(cost[name][i]) if name in cost else None,
                "source": addition.source,
            }
        )
    per_t = float(ladle.cost_per_t[i])
    return {
        "status": ladle.status()[i],
        "grade": ladle.grade.name,
        "killed_by": ladle.case.killer,
        "additions": additions,
        "additions_cost_per_t": per_t if np.isfinite(per_t) else None,
        "temperature_C": float(ladle.ladle_temp_C[i]),
        "tap_temperature_C": float(ladle.tap_temp_C[i]),
        "temperature_steps_K": {name: float(x[i]) for name, x in heat.steps_K.items()},
        "liquidus_C": float(at(liquidus_C(poured.steel_pct()), i)),
        "heat_loss_MJ": float(heat_lost_MJ(ladle)[i]),
        "steel_kg": steel,
        "steel_pct": {e: x for e, x in pct.items() if e != "O"},
        "dissolved_oxygen_ppm": 1e4 * pct["O"],
        "slag_kg": float(poured.slag_kg[i]),
        "slag_pct": {name: float(x[i]) for name, x in poured.slag_pct().items()},
        "oxygen_account_kg": {name: float(x[i]) for name, x in poured.oxygen.items()},
        "phosphorus_returned_pct": 100.0 * float(ladle.phosphorus_returned_kg()[i]) / steel,
        "limits": [_limit(ladle, e, i) for e in ladle.grade.limits],
        "streams": [
            {
                "name": s.name,
                "side": s.side,
                "kind": s.kind,
                "temperature_C": float(at(s.temperature_C, i)),
                "mass_kg": float(at(s.mass_kg, i)),
                "species_kg": {f: float(at(kg, i)) for f, kg in s.species_kg.items()},
                "enthalpy_MJ": float(at(s.enthalpy_J, i)) / MJ,
            }
            for s in heat.streams
            if float(at(s.mass_kg, i)) != 0.0
        ],
        "closure": {
            name: float(at(closure.relative, i)) for name, closure in heat.closures.items()
        },
        "warnings": ladle_warnings(ladle, i),
    }


def _limit(ladle: LadlePlan, element: str, index: int) -> dict[str, Any]:
    low, high = ladle.grade.limits[element]
    mark = ladle.mark(element, index)
    kg = ladle.poured.steel.get(element)
    x = 0.0 if kg is None else 100.0 * float(kg[index] / ladle.poured.steel_kg[index])
    return {
        "element": element,
        "pct": None if mark == NOT_WORKED_OUT else x,
        "min_pct": low,
        "max_pct": high,
        "mark": mark,
    }


def ladle_warnings(ladle: LadlePlan, i: int = 0) -> list[dict[str, str]]:
    """Warnings of one heat: code, field, message."""
    found = [
        *_grade_warnings(ladle, i),
        *_addition_warnings(ladle, i),
        *_temperature_warnings(ladle, i),
        *_law_warnings(ladle, i),
    ]
    return [dict(zip(("code", "field", "message"), parts, strict=True)) for parts in found]


def _grade_warnings(ladle: LadlePlan, i: int) -> Iterator[tuple[str, str, str]]:
    pct, name = ladle.poured.steel_pct(), ladle.grade.name
    for text in ladle.already[i]:
        yield "above-grade-before-additions", "aim.grade", text
    for element in ladle.outside(i):
        x = float(pct[element][i]) if element in pct else 0.0
        side = ladle.mark(element, i)
        yield "outside-grade", "aim.grade", f"{element} {x:.4f} % is {side} the limit of {name}"
    if ladle.choice.feasible[i] and not ladle.choice.preferred[i]:
        text = "no additions keep the carbon target; only the limit itself is kept"
        yield "carbon-margin", "tap.margin_C_pct", text


def _addition_warnings(ladle: LadlePlan, i: int) -> Iterator[tuple[str, str, str]]:
    practice = ladle.practice
    for name in ladle.choice.unpriced:
        if name in ladle.added_kg and ladle.added_kg[name][i] > 0.0:
            text = (
                f"{name} has no price; it stands in because nothing with a price supplies "
                f"{practice.additions[name].supplies}"
            )
            yield "no-price", "tap.price_per_t", text
    per_t = sum(float(kg[i]) for kg in ladle.added_kg.values())
    per_t *= 1e3 / float(ladle.case.steel_kg[i])
    if per_t > MUCH_KG_PER_T:
        text = f"{per_t:.0f} kg/t of additions: add a part in the ladle furnace, or in steps"
        yield "many-additions", "tap", text
    oxygen = 1e4 * float(ladle.case.steel_pct["O"][i])
    rich = [
        name
        for name, kg in ladle.added_kg.items()
        if kg[i] > 0.0 and practice.additions[name].pct.get("C", 0.0) > 1.0
    ]
    if rich and oxygen > BOILS_ABOVE_PPM:
        text = (
            f"carbon of {', '.join(rich)} meets {oxygen:.0f} ppm of oxygen: it boils and may throw "
            "steel and flame out; kill first or add in small lots"
        )
        yield "carbon-boil", "tap", text


def _temperature_warnings(ladle: LadlePlan, i: int) -> Iterator[tuple[str, str, str]]:
    wanted_C, is_C = ladle.practice.ladle_temp_C, float(ladle.ladle_temp_C[i])
    if np.isfinite(wanted_C) and abs(is_C - wanted_C) > 1.0:
        way = "hotter" if wanted_C > is_C else "colder"
        text = (
            f"the ladle comes to {is_C:.0f} C, {wanted_C:.0f} C is wanted: tap "
            f"{abs(wanted_C - is_C):.0f} K {way}"
        )
        yield "ladle-temperature", "tap.ladle_temp_C", text
    spare = is_C - float(at(liquidus_C(ladle.poured.steel_pct()), i))
    if spare < LEAST_SUPERHEAT_K:
        text = f"the ladle is {spare:.0f} K above liquidus; steel may freeze"
        yield "little-superheat", "tap.ladle_temp_C", text


def _law_warnings(ladle: LadlePlan, i: int) -> Iterator[tuple[str, str, str]]:
    killer, practice = ladle.case.killer, ladle.practice
    if ladle.poured.short[i]:
        text = (
            f"too little {killer}: the steel is not killed; slag and phosphorus are worked out "
            "as if it were"
        )
        yield "not-killed", "tap.kill", text
        return
    if killer == "none":
        return
    law = SILICON_LAW if killer == "Si" else practice.aluminium_oxygen
    pct, T_K = float(ladle.poured.steel_pct()[killer][i]), float(ladle.heat.T_K[i])
    for quantity, low, high, _ in deoxidation.out_of_range(law, pct, T_K):
        x = T_K if quantity == "T_K" else pct
        text = f"{law}: {quantity} {x:.4g} is outside its range of {low:g} to {high:g}"
        yield "law-range", "tap.aluminium_oxygen", text


def check_topic(topic: str) -> None:
    """Raise InputError unless `topic` can be explained."""
    if topic not in TOPICS:
        raise InputError(
            [Fault("topic", f"{topic!r} cannot be explained (allowed: {', '.join(TOPICS)})")]
        )


def explain_ladle(ladle: LadlePlan, topic: str, index: int = 0) -> Explanation:
    """Terms behind one figure of the ladle; topic one of TOPICS (InputError otherwise)."""
    makers = {
        "oxygen": _oxygen,
        "deoxidant": _deoxidant,
        "temperature": _temperature,
        "phosphorus": _phosphorus,
        "additions": _additions,
        "analysis": _analysis,
    }
    check_topic(topic)
    return makers[topic](ladle, index)


def _oxygen(ladle: LadlePlan, i: int) -> Explanation:
    sources = ladle.practice.sources
    told = {
        "from the carried-over slag": sources["slag_FeO_reduced_share"],
        "from the air": sources["air_oxygen_kg_per_t"],
        "bound by losses of additions": sources["loss_to_air_share"],
    }
    lines = [
        Term(name, float(x[i]), "kg", told.get(name, BALANCE))
        for name, x in ladle.poured.oxygen.items()
    ]
    law = SILICON_LAW if ladle.case.killer == "Si" else ladle.practice.aluminium_oxygen
    note = deoxidation.describe(law)
    if ladle.case.killer != "none":
        lines.append(Term(f"law {law}: {note.formula}", float(deoxidation.log_K(
            law, ladle.heat.T_K[i])), "log K", f"{note.source} ({note.known})"))  # fmt: skip
    value = 1e4 * float(ladle.poured.steel_pct()["O"][i])
    reason = "Oxygen that stays dissolved, and where the rest came from and went:"
    return Explanation("dissolved oxygen in the ladle", value, "ppm", reason, lines)


def _deoxidant(ladle: LadlePlan, i: int) -> Explanation:
    killer, poured, practice = ladle.case.killer, ladle.poured, ladle.practice
    if killer == "none":
        return Explanation("deoxidant", 0.0, "kg", "The steel is not killed.", [])
    bound = float(poured.killed[killer][i])
    dissolved = float(poured.steel[killer][i])
    before = float(ladle.case.steel_kg[i] * 0.01 * ladle.case.steel_pct.get(
        killer, np.zeros(ladle.n))[i])  # fmt: skip
    lost = float(poured.lost.get(killer, np.zeros(ladle.n))[i])
    brought = bound + dissolved + lost - before
    lines = [
        Term(f"{killer} of the steel before", before, "kg", BALANCE),
        Term(f"{killer} that binds oxygen", bound, "kg",
             f"{1.0 / bound_oxygen(killer):.4f} kg per kg of oxygen, atomic weights"),
        Term(f"{killer} that stays dissolved", dissolved, "kg", ladle.grade.source),
        Term(f"{killer} lost", lost, "kg", practice.sources[
            "Al_burnt_share" if killer == "Al" else f"recovery.{killer}"]),
    ]  # fmt: skip
    reason = f"{killer} brought by all additions = bound + dissolved + lost - before:"
    return Explanation(f"{killer} brought", brought, "kg", reason, lines)


def _temperature(ladle: LadlePlan, i: int) -> Explanation:
    sources = ladle.practice.sources
    told = {
        "stream and open ladle": sources["stream_K_per_min"],
        "lining of the ladle": sources["lining_effusivity"],
        "standing": sources["standing_K_per_min"],
    }
    lines = [Term("steel at the end of the blow", float(ladle.tap_temp_C[i]), "C", "")]
    lines += [
        Term(name, float(x[i]), "K", told.get(name, THERMO))
        for name, x in ladle.heat.steps_K.items()
    ]
    reason = "Tap temperature and what each step adds to it or takes off:"
    return Explanation("ladle temperature", float(ladle.ladle_temp_C[i]), "C", reason, lines)


def _phosphorus(ladle: LadlePlan, i: int) -> Explanation:
    steel = float(ladle.poured.steel_kg[i])
    case, practice = ladle.case, ladle.practice

    def pct(kg: float) -> float:
        return 100.0 * kg / steel

    tapped = float(case.steel_kg[i] * case.steel_pct["P"][i] * 0.01) if "P" in case.steel_pct else 0
    lines = [
        Term("P: of the tapped steel, diluted", pct(tapped), "mass %", BALANCE),
        Term("P: given back by the carried-over slag", pct(
            float(ladle.phosphorus_returned_kg()[i])), "mass %",
            f"{practice.carried_slag_kg_per_t:g} kg/t, {100 * practice.P_return_share:g} % of its "
            f"phosphorus: {practice.sources['P_return_share']}"),
    ]  # fmt: skip
    for name, kg in ladle.added_kg.items():
        addition = practice.additions[name]
        share = addition.recovered_share("P", practice.recovery)
        brought = float(kg[i]) * addition.pct.get("P", 0.0) * 0.01 * share
        if brought > 0.0:
            lines.append(Term(f"P: brought by {name}", pct(brought), "mass %", addition.source))
    value = float(ladle.poured.steel_pct()["P"][i]) if "P" in ladle.poured.steel else 0.0
    reason = "Phosphorus in the ladle is the sum of:"
    return Explanation("ladle phosphorus", value, "mass %", reason, lines)


def _additions(ladle: LadlePlan, i: int) -> Explanation:
    cheapest = bool(ladle.practice.priced)
    reason = (
        "Additions of least cost that keep every limit (linear programme):"
        if cheapest
        else "The first additions in the shop's order of preference that keep every limit:"
    )
    lines = [
        Term(f"{want.element}: {'at most' if want.side == 'high' else 'at least'}", want.pct,
             "mass %", want.reason)
        for want in ladle.wants
    ]  # fmt: skip
    lines += [
        Term(name, float(kg[i]), "kg", ladle.practice.additions[name].source)
        for name, kg in ladle.added_kg.items()
        if kg[i] > 0.0
    ]
    total = sum(float(kg[i]) for kg in ladle.added_kg.values())
    return Explanation("additions", total, "kg", reason, lines)


def _analysis(ladle: LadlePlan, i: int) -> Explanation:
    pct = ladle.poured.steel_pct()
    lines = [
        Term(e, float(x[i]), "mass %", ladle.mark(e, i) if e in ladle.grade.limits else BALANCE)
        for e, x in pct.items()
        if e not in ("Fe",)
    ]
    reason = f"Ladle analysis against {ladle.grade.name} ({ladle.grade.source}):"
    return Explanation("iron", float(pct["Fe"][i]), "mass %", reason, lines)
