"""From heats to solved outcomes: which ask a heat poses, and solving a group of them."""

from __future__ import annotations

from collections.abc import Iterable, Iterator
from dataclasses import replace
from typing import Any

import numpy as np

from converter_calc.balance.asks import Ask, evaluate_ask
from converter_calc.balance.heats import HeatTable
from converter_calc.balance.newton import residual_norm
from converter_calc.balance.problem import build_problem
from converter_calc.balance.solving import Memory, solve_ask
from converter_calc.basis.dual import Array
from converter_calc.basis.errors import Fault, InputError
from converter_calc.basis.tolerances import RESIDUAL_STALLED
from converter_calc.planning.outcome import Outcome

ASKS = ("scrap", "steel", "trim")


def given(heats: HeatTable, name: str) -> Array:
    """Where a numeric input is given, (n,) bool."""
    return np.isfinite(heats.values[name])


def material_given(heats: HeatTable, name: str) -> Array:
    """Where the mass of a material is given, (n,) bool."""
    kg = heats.masses_kg.get(name)
    return np.zeros(heats.n, dtype=bool) if kg is None else np.isfinite(kg)


def scrap_given(heats: HeatTable) -> Array:
    """Where any scrap mass is given, (n,) bool."""
    mask = given(heats, "scrap_kg")
    for name in heats.masses_kg:
        if heats.materials[name].kind == "scrap":
            mask = mask | material_given(heats, name)
    return mask


def with_values(heats: HeatTable, **changes: Any) -> HeatTable:
    """A copy with some numeric inputs replaced; what is not replaced is shared, not copied."""
    copy = replace(
        heats,
        values=dict(heats.values),
        masses_kg=dict(heats.masses_kg),
        hm_pct=dict(heats.hm_pct),
        returned=dict(heats.returned),
    )
    for name, x in changes.items():
        copy.values[name] = np.array(np.broadcast_to(np.asarray(x, dtype=float), (heats.n,)))
    return copy


def with_masses(heats: HeatTable, masses: dict[str, Any]) -> HeatTable:
    """A copy with the masses of some materials given [kg]."""
    copy = with_values(heats)
    for name, kg in masses.items():
        copy.masses_kg[name] = np.array(np.broadcast_to(np.asarray(kg, dtype=float), (heats.n,)))
    return copy


def _end_temperature(heats: HeatTable) -> HeatTable:
    """A pinned end temperature takes the place of the aim."""
    pin = heats.values["pin_end_temp_C"]
    if not np.isfinite(pin).any():
        return heats
    aim = np.where(np.isfinite(pin), pin, heats.values["aim_temp_C"])
    return with_values(heats, aim_temp_C=aim)


def _faults(heats: HeatTable, checks: Iterable[tuple[Array, str, str]]) -> None:
    faults = []
    for mask, field, message in checks:
        rows = np.flatnonzero(mask)
        if rows.size:
            where = "" if heats.n == 1 else f" (heat {heats.ids[rows[0]]}"
            more = f" and {rows.size - 1} more)" if where and rows.size > 1 else where and ")"
            faults.append(Fault(field, message + where + more))
    if faults:
        raise InputError(faults)


def plan_groups(heats: HeatTable) -> list[tuple[Array, HeatTable, Ask]]:
    """Rows that pose the same question, with the question: (row numbers, heats, ask).

    Raises InputError where a heat lacks what its question needs.
    """
    heats = _end_temperature(heats)
    hot_metal, steel = given(heats, "hot_metal_kg"), given(heats, "aim_steel_kg")
    pinned_end = given(heats, "pin_end_temp_C")
    share, scrap = given(heats, "scrap_share_pct"), scrap_given(heats)
    ask = heats.choices.ask
    free_scrap = ~(share | scrap)
    if ask == "trim":
        free_scrap = np.zeros(heats.n, dtype=bool)
    elif ask in ("scrap", "steel"):  # scraps given by name come on top
        free_scrap = ~(share | given(heats, "scrap_kg"))
    _faults(
        heats,
        [
            (
                ~hot_metal & ~steel,
                "hot_metal.mass_kg",
                "not given; give hot_metal.mass_kg, or aim.steel_kg to have it solved for",
            ),
            (
                hot_metal & steel,
                "hot_metal.mass_kg",
                "given beside aim.steel_kg, from which it would follow; leave one of the two out",
            ),
            (
                ~steel & (ask == "steel"),
                "aim.steel_kg",
                'not given; choice.ask = "steel" needs the steel to tap',
            ),
            *(
                (
                    given(heats, name) & (ask == "scrap"),
                    f"charge.{name}",
                    'given although choice.ask = "scrap" solves for it; leave one of the two out',
                )
                for name in ("scrap_share_pct", "scrap_kg")
            ),
            (
                ~(share | scrap) & (ask == "trim"),
                "charge.scrap_kg",
                'not given; choice.ask = "trim" needs the scrap (0 for none)',
            ),
            (
                ~given(heats, "aim_temp_C"),
                "aim.temp_C",
                "not given; a plan needs the tapping temperature [C]",
            ),
            (
                ~given(heats, "aim_C_pct"),
                "aim.C_pct",
                "not given; a plan needs the carbon at the end of the blow [mass %]",
            ),
            (
                free_scrap & pinned_end,
                "pin.end_temp_C",
                (
                    "given while scrap is free; with the end temperature pinned the heat loss "
                    "closes the balance, so scrap must be given"
                ),
            ),
            (
                free_scrap
                & ~share
                & (not heats.choices.scrap_mix and not heats.choices.scrap_order),
                "choice.scrap_mix",
                "not given; name the scrap to charge, as scrap_mix or scrap_order",
            ),
        ],
    )
    free_lime = ~material_given(heats, heats.choices.lime)
    free_flux = ~material_given(heats, heats.choices.magnesia_flux)
    key = (
        free_scrap.astype(int)
        + 2 * (~hot_metal).astype(int)
        + 4 * free_lime.astype(int)
        + 8 * free_flux.astype(int)
        + 16 * pinned_end.astype(int)
    )
    groups = []
    for kind in np.unique(key):
        rows = np.flatnonzero(key == kind)
        heat = "heat_loss_J" if kind & 16 else "scrap_kg" if kind & 1 else "trim_kg"
        ask_of = Ask(heat=heat, hot_metal=bool(kind & 2), lime=bool(kind & 4), flux=bool(kind & 8))
        groups.append((rows, heats.take(rows) if rows.size < heats.n else heats, ask_of))
    return groups


def predict_groups(heats: HeatTable) -> list[tuple[Array, HeatTable, Ask]]:
    """Like plan_groups, for a complete charge."""
    heats = _end_temperature(heats)
    oxygen, pinned_end = given(heats, "oxygen_Nm3"), given(heats, "pin_end_temp_C")
    _faults(
        heats,
        [
            (
                ~given(heats, "hot_metal_kg"),
                "hot_metal.mass_kg",
                "not given; to predict, the charge must be complete",
            ),
            (
                ~oxygen & ~given(heats, "aim_C_pct"),
                "charge.oxygen_Nm3",
                "not given; to predict, give the oxygen blown, or aim.C_pct to have it solved for",
            ),
        ],
    )
    groups = []
    key = oxygen.astype(int) + 2 * pinned_end.astype(int)
    for kind in np.unique(key):
        rows = np.flatnonzero(key == kind)
        ask = Ask(
            end="root_C" if kind & 1 else "oxygen_Nm3", heat="heat_loss_J" if kind & 2 else "T_K"
        )
        groups.append((rows, heats.take(rows) if rows.size < heats.n else heats, ask))
    return groups


def solve_heats(heats: HeatTable, ask: Ask) -> Outcome:
    """Solve heats that pose the same question. Limits are not looked at here."""
    (outcome,) = solve_in_parts(heats, ask, max(heats.n, 1))
    return outcome


def solve_in_parts(
    heats: HeatTable, ask: Ask, rows: int, memory: Memory | None = None
) -> Iterator[Outcome]:
    """The same, an outcome for each `rows` heats: what is read off a long table stays small."""
    p = build_problem(heats)
    solved = solve_ask(p, ask, memory)
    for first in range(0, max(heats.n, 1), rows):
        part = slice(first, min(first + rows, heats.n))
        x = {name: values[part] for name, values in solved.unknowns.items()}
        whole = part == slice(0, heats.n)
        some = p if whole else p.take(part)
        with np.errstate(all="ignore"):
            state = evaluate_ask(some, ask, dict(x))
            left = residual_norm([state.residuals[name] for name in ask.residuals], (some.n,))
        yield Outcome(
            heats if whole else heats.take(part),
            ask,
            some,
            x,
            state,
            left <= RESIDUAL_STALLED,
            left,
            solved.steps[part],
        )


def complete_charge(outcome: Outcome) -> HeatTable:
    """The planned heat as a complete charge, ready to predict: masses and oxygen given."""
    unasked = ("carryover_slag", "retained_slag", "lining")
    masses = {name: kg for name, kg in outcome.charged_kg.items() if name not in unasked}
    heats = with_masses(outcome.heats, masses)
    return with_values(
        heats,
        hot_metal_kg=outcome.hot_metal_kg,
        oxygen_Nm3=outcome.oxygen_Nm3,
        scrap_kg=np.nan,
        scrap_share_pct=np.nan,
    )
