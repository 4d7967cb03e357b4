"""Grades in a plan: aims filled in from the grade, tramp elements held against it."""

from __future__ import annotations

import numpy as np

from converter_calc.balance.heats import HeatTable
from converter_calc.basis.dual import Array
from converter_calc.planning.grades import (
    ConverterAim,
    TrampCheck,
    converter_aim,
    grade,
    largest_fitting_share,
    tell_tramp,
    worst_element,
)
from converter_calc.planning.ladle import FIRST_DROP_K, practice_of, tap_temperature_for
from converter_calc.planning.outcome import Caution, Outcome, spread
from converter_calc.planning.solving import plan_groups, solve_heats, with_values
from converter_calc.planning.verdicts import mark_infeasible, still_open
from converter_calc.tapping.tap_practice import named_additions

#: Turns of planning and pouring, the change at which they end [K], and a drop beyond belief [K].
TURNS = 6
SETTLED_K = 1e-3
MOST_DROP_K = 400.0
#: Converter aims by all that they follow from, and how many are kept.
_AIMS: dict[str, ConverterAim] = {}
AIMS_KEPT = 64


def aim_of(heats: HeatTable) -> ConverterAim | None:
    """Converter aim derived from the grade of these heats; None where no grade is named.

    Raises InputError for an unknown grade, InfeasibleError where the grade leaves nothing.
    """
    if not heats.grade:
        return None
    own = [heats.materials.get(name) for name in named_additions(heats.tap)]
    key = repr((heats.grade, heats.grades, heats.tap, own))
    if key not in _AIMS:  # asked several times a heat: for the aims, the scrap, the notes
        if len(_AIMS) >= AIMS_KEPT:
            _AIMS.clear()
        _AIMS[key] = converter_aim(grade(heats.grade, heats.grades), practice_of(heats))
    return _AIMS[key]


def with_grade_aims(heats: HeatTable) -> HeatTable:
    """The heats with each aim that is missing filled in from the grade, and the tap temperature
    from the temperature wanted in the ladle.
    """
    aim = aim_of(heats)
    if aim is not None:
        heats = _with_contents(heats, aim)
    return with_tap_temperature(heats)


def with_tap_temperature(heats: HeatTable) -> HeatTable:
    """The heats with a missing aim temperature derived from the one wanted in the ladle.

    Each turn plans the heats and pours them; the ladle follows the tap nearly kelvin by kelvin.
    """
    wanted_C = practice_of(heats).ladle_temp_C if heats.tap else np.nan
    missing = ~np.isfinite(heats.values["aim_temp_C"])
    if not np.isfinite(wanted_C) or not missing.any():
        return heats
    tap_C = np.where(missing, wanted_C + FIRST_DROP_K, heats.values["aim_temp_C"])
    for _ in range(TURNS):
        trial = with_values(heats, aim_temp_C=tap_C)
        found = tap_C.copy()
        for rows, group, ask in plan_groups(trial):
            with np.errstate(all="ignore"):
                better = tap_temperature_for(solve_heats(group, ask))
            good = missing[rows] & np.isfinite(better) & (np.abs(better - wanted_C) < MOST_DROP_K)
            found[rows[good]] = better[good]
        moved, tap_C = np.max(np.abs(found - tap_C)), found
        if moved < SETTLED_K:
            break
    return with_values(heats, aim_temp_C=tap_C)


def _with_contents(heats: HeatTable, aim: ConverterAim) -> HeatTable:
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
    if not scrap or not limits:
        return []
    hot_metal = spread(s.hot_metal_kg, outcome.n)
    charge = total + hot_metal
    none = total <= 0.0  # a heat without scrap: any shares that sum to one will do
    whole = np.where(none, 1.0, total)
    return largest_fitting_share(
        {
            name: {el: 100.0 * outcome.p.contents[name].elements.get(el, 0.0) for el in limits}
            for name in scrap
        },
        {name: np.where(none, 1.0 / len(scrap), kg / whole) for name, kg in scrap.items()},
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
        stays_share={el: _staying(outcome, el) for el in limits},
    )


def _staying(outcome: Outcome, element: str) -> Array:
    """Share of an element charged that the metal keeps, (n,)."""
    charged = spread(outcome.state.totals.of(element), outcome.n)
    kept = spread(outcome.state.metal_species_kg[element], outcome.n)
    return np.where(charged > 0.0, kept / np.where(charged > 0.0, charged, 1.0), 1.0)


def _by_scrap(outcome: Outcome, scrap: dict[str, Array], element: str) -> Array:
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
            [
                (f"tramp limit of grade {outcome.heats.grade}: {tell_tramp(worst, r)}")
                for r in np.array([row]).tolist()
            ],
            [_frees(worst, r) for r in np.array([row]).tolist()],
        )


def _frees(check: TrampCheck, row: int) -> list[str]:
    frees = []
    if check.fits_when_cut[row]:
        share = 100.0 * check.fitting_share[row]
        frees.append(f"no more than {share:.2f} % of {check.offender[row]} in the mix")
    whole = 100.0 * check.fitting_scrap_share[row]
    frees.append(f"scrap of this mix up to {whole:.2f} % of the charge")
    return [*frees, "a grade with a wider limit"]


def grade_notes(outcome: Outcome) -> list[Caution]:
    """What the grade has to say beside the aims: vacuum needed, carburiser, manganese."""
    aim = aim_of(outcome.heats)
    if aim is None:
        return []
    found: list[Caution] = [
        Caution(
            "grade", "aim.grade", np.ones(1, dtype=bool), note.replace("{", "{{").replace("}", "}}")
        )
        for note in aim.notes
    ]
    have = outcome.steel_pct().get("Mn")
    if aim.Mn_pct is not None and have is not None:
        found.append(
            Caution(
                "manganese-above-grade",
                "aim.grade",
                np.asarray(have) > aim.Mn_pct,
                "the steel ends at {have:.3f} % Mn, above the {most:.3f} % that the grade leaves",
                {"have": have, "most": aim.Mn_pct},
            )
        )
    return found
