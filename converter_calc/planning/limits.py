"""Can the heat be made? Limits of shop and chemistry, what binds, and what would free it.

A plan is solved first as if nothing were limited. Then every limit is looked at, the one
that binds is named, and the nearest reachable end point comes from solving the same
equations with the quantity at its limit and the aim let go.
"""

from __future__ import annotations

from dataclasses import replace
from typing import Any

import numpy as np

from converter_calc.balance.asks import Ask
from converter_calc.balance.heats import HeatTable
from converter_calc.basis.dual import Array
from converter_calc.planning.outcome import Outcome, at, spread
from converter_calc.planning.solving import solve_heats, with_masses, with_values
from converter_calc.planning.verdicts import (
    EndPoint,
    end_point_of,
    lime_in_vain,
    mark_infeasible,
    reachable,
    still_open,
)

__all__ = ["judge", "lime_in_vain", "mark_infeasible", "still_open", "unsolved_ask"]

#: A limit counts as broken beyond this share of it: rounding, not practice.
SLACK = 1e-7


def judge(outcome: Outcome) -> None:
    """Fill status, binding, frees and nearest of every heat of a plan."""
    n = outcome.n
    outcome.status = ["solved"] * n
    outcome.binding, outcome.frees, outcome.nearest = [""] * n, [[]] * n, [{}] * n
    _judge_unsolved(outcome)
    for check in (_short_of_heat, _no_trim, _scrap_limits, _stocks, _weights):
        check(outcome)


def _judge_unsolved(outcome: Outcome) -> None:
    """Heats without a solution: is it the lime that cannot dissolve any further?"""
    for row in np.flatnonzero(~outcome.converged).tolist():
        outcome.status[row] = "not converged"
        outcome.binding[row] = "the equations of this heat have no solution that was found"
        outcome.frees[row] = ["check the inputs and pins of this heat against ordinary practice"]
    if not outcome.ask.lime:
        return
    rows = np.flatnonzero(~outcome.converged | lime_in_vain(outcome))
    if not rows.size:
        return
    most = solve_heats(outcome.heats.take(rows), replace(outcome.ask, lime_rule="lime_limit"))
    by_basicity = solve_heats(with_values(most.heats, aim_P_pct=np.nan), outcome.ask)
    for place, row in enumerate(rows.tolist()):
        _judge_lime(outcome, row, most, by_basicity, place)


def _judge_lime(
    outcome: Outcome, row: int, most: Outcome, by_basicity: Outcome, place: int
) -> None:
    """One heat against the most lime that dissolves: phosphorus or basicity out of reach?"""
    if not most.converged[place]:
        return
    P, B = (float(at(x, place)) for x in (most.steel_pct().get("P", 0.0), most.state.basicity))
    aim_P, aim_B = (float(most.heats.values[k][place]) for k in ("aim_P_pct", "aim_basicity"))
    best = most
    if by_basicity.converged[place]:
        other = float(at(by_basicity.steel_pct().get("P", 0.0), place))
        if other < P:
            best, P = by_basicity, other
    if aim_P < P:
        mark_infeasible(
            outcome,
            np.array([row]),
            [
                (
                    f"phosphorus (aim.P_pct): at the most lime that dissolves the steel ends at "
                    f"{P:.4g} % P, the aim is {aim_P:.4g} % P"
                )
                for _ in np.array([row]).tolist()
            ],
            [
                [
                    "a lower tapping temperature",
                    "more iron oxide in the slag (lower end carbon, softer blow)",
                    "two slags, or hot metal treated for phosphorus before",
                    "less phosphorus in hot metal and scrap",
                ]
                for _ in np.array([row]).tolist()
            ],
            [end_point_of(best, place)],
        )
    elif aim_B > B and not outcome.converged[row]:
        mark_infeasible(
            outcome,
            np.array([row]),
            [
                (
                    f"basicity (aim.basicity): lime stops dissolving at CaO/SiO2 = {B:.2f}, "
                    f"the least asked for is {aim_B:.2f}"
                )
                for _ in np.array([row]).tolist()
            ],
            [
                ["a lower aim.basicity", "more fluid slag (more iron oxide)"]
                for _ in np.array([row]).tolist()
            ],
            [end_point_of(most, place)],
        )


def _let_temperature_go(outcome: Outcome, rows: Array, scrap_kg: Any) -> list[EndPoint]:
    """The same heats with the free scrap set and the end temperature free."""
    heats = outcome.heats.take(rows)
    heats = with_values(
        heats,
        scrap_kg=scrap_kg,
        scrap_share_pct=np.nan,
        hot_metal_kg=spread(outcome.hot_metal_kg, outcome.n)[rows],
    )
    return reachable(heats, replace(outcome.ask, heat="T_K", hot_metal=False))


def _trim_for(outcome: Outcome, rows: Array, scrap_kg: Any) -> Array:
    """Coolant (positive) or fuel (negative) that would close the heat balance [kg]."""
    heats = outcome.heats.take(rows)
    heats = with_values(heats, scrap_kg=scrap_kg, scrap_share_pct=np.nan)
    solved = solve_heats(heats, replace(outcome.ask, heat="trim_kg"))
    return np.where(solved.converged, solved.x["trim_kg"], np.nan)


def _short_of_heat(outcome: Outcome) -> None:
    if outcome.ask.heat != "scrap_kg":
        return
    scrap = outcome.x["scrap_kg"]
    rows = np.flatnonzero(still_open(outcome) & (scrap < -SLACK * outcome.p.scale_kg))
    if not rows.size:
        return
    nearest = _let_temperature_go(outcome, rows, 0.0)
    fuel = -_trim_for(outcome, rows, 0.0)
    place = {int(row): k for k, row in enumerate(rows)}
    name = outcome.heats.choices.fuel
    mark_infeasible(
        outcome,
        rows,
        [
            ("heat: the hot metal is too cold or too lean to reach the aim without fuel")
            for _ in rows.tolist()
        ],
        [
            [
                f'about {fuel[place[row]]:.0f} kg of {name} as fuel (choice.ask = "trim")',
                "hotter hot metal or hot metal richer in silicon",
                "a lower tapping temperature",
            ]
            for row in rows.tolist()
        ],
        nearest,
    )


def _no_trim(outcome: Outcome) -> None:
    """Coolant or fuel was needed, but its stock does not suffice."""
    if outcome.ask.heat != "trim_kg":
        return
    trim = outcome.x["trim_kg"]
    choices = outcome.heats.choices
    for name, need in ((choices.coolant, trim), (choices.fuel, -trim)):
        stock = _stock(outcome.heats, name)
        rows = np.flatnonzero(still_open(outcome) & (need > stock * (1.0 + SLACK) + 1e-9))
        if not rows.size:
            continue
        heats = with_masses(outcome.heats.take(rows), {name: stock})
        nearest = reachable(heats, replace(outcome.ask, heat="T_K"))
        mark_infeasible(
            outcome,
            rows,
            [
                (f"stock: the heat needs {need[row]:.0f} kg of {name}, {stock:.0f} kg are at hand")
                for row in rows.tolist()
            ],
            [
                [
                    f"more {name} (materials.{name}.stock_kg)",
                    "another share of scrap",
                    "another tapping temperature",
                ]
                for _ in rows.tolist()
            ],
            nearest,
        )


def _stock(heats: HeatTable, name: str) -> float:
    stock = heats.materials[name].stock_kg
    return np.inf if stock is None or not np.isfinite(stock) else float(stock)


def scrap_cap_kg(outcome: Outcome) -> tuple[Array, list[str]]:
    """Most free scrap that the limits allow [kg], and the limit that sets it, per heat."""
    heats, n = outcome.heats, outcome.n
    choices, values = heats.choices, heats.values
    caps: list[tuple[Any, str]] = []
    fixed = spread(outcome.kind_kg("scrap"), n) - spread(outcome.state.scrap_free_kg, n)
    mix = choices.scrap_mix
    if choices.scrap_order:
        stocks = [_stock(heats, name) for name in choices.scrap_order]
        caps.append((np.full(n, sum(stocks)), "stock of all scrap in choice.scrap_order"))
    else:
        for name, share in mix.items():
            caps.append((np.full(n, _stock(heats, name) / share), f"materials.{name}.stock_kg"))
    caps.append((values["limit_scrap_box_kg"] - fixed, "limit.scrap_box_kg"))
    volume = scrap_volume_m3_per_kg(heats)
    if volume > 0.0:
        caps.append((values["limit_scrap_box_m3"] / volume - fixed, "limit.scrap_box_m3"))
    if not outcome.ask.hot_metal:
        room = values["limit_charge_kg"] - spread(outcome.hot_metal_kg, n) - fixed
        caps.append((room, "limit.charge_kg"))
    table = np.stack([np.where(np.isfinite(cap), cap, np.inf) for cap, _ in caps])
    first = table.argmin(axis=0)
    return table.min(axis=0), [caps[k][1] for k in first.tolist()]


def scrap_volume_m3_per_kg(heats: HeatTable) -> float:
    """Volume of the scrap mix as it lies in the box [m3/kg]; 0 where no density is given."""
    volume = 0.0
    for name, share in heats.choices.scrap_mix.items():
        density = heats.materials[name].bulk_density_kg_per_m3
        if density:
            volume += share / density
    return volume


def _scrap_limits(outcome: Outcome) -> None:
    """Free scrap above a stock, the box or the vessel; a kind above its largest share."""
    _largest_shares(outcome)
    if outcome.ask.heat != "scrap_kg":
        return
    cap, name = scrap_cap_kg(outcome)
    scrap = outcome.x["scrap_kg"]
    rows = np.flatnonzero(still_open(outcome) & (scrap > cap * (1.0 + SLACK)))
    if not rows.size:
        return
    cap = np.maximum(cap, 0.0)
    nearest = _let_temperature_go(outcome, rows, cap[rows])
    trim = _trim_for(outcome, rows, cap[rows])
    place = {int(row): k for k, row in enumerate(rows)}
    coolant = outcome.heats.choices.coolant
    mark_infeasible(
        outcome,
        rows,
        [
            (
                f"{name[row]}: the heat balance asks for {scrap[row]:.0f} kg of scrap, "
                f"{cap[row]:.0f} kg are allowed"
            )
            for row in rows.tolist()
        ],
        [
            [
                (
                    f"about {trim[place[row]]:.0f} kg of {coolant} as coolant beside "
                    f"{cap[row]:.0f} "
                    'kg of scrap (choice.ask = "trim" with charge.scrap_kg)'
                ),
                "less hot metal",
                "a higher limit or stock of scrap",
            ]
            for row in rows.tolist()
        ],
        nearest,
    )


def _largest_shares(outcome: Outcome) -> None:
    total = spread(outcome.kind_kg("scrap"), outcome.n)
    for name, kg in outcome.charged_kg.items():
        most = outcome.heats.materials[name].max_share_pct
        if most is None or outcome.heats.materials[name].kind != "scrap":
            continue
        share = 100.0 * spread(kg, outcome.n) / np.where(total > 0.0, total, np.inf)
        rows = np.flatnonzero(still_open(outcome) & (share > most * (1.0 + SLACK)))
        mark_infeasible(
            outcome,
            rows,
            [
                (
                    f"materials.{name}.max_share_pct: {name} is {share[row]:.1f} % of the scrap, "
                    f"{most:.1f} % are allowed"
                )
                for row in rows.tolist()
            ],
            [
                [f"{name} at {most:.1f} % of the scrap or less (choice.scrap_mix)"]
                for _ in rows.tolist()
            ],
            _with_share(outcome, rows, name, most) if rows.size else None,
        )


def _with_share(outcome: Outcome, rows: Array, name: str, most_pct: float) -> list[EndPoint] | None:
    """The same heats with one scrap at its largest share, the others of the mix in its place."""
    heats = outcome.heats.take(rows)
    mix = heats.choices.scrap_mix
    rest = sum(share for key, share in mix.items() if key != name)
    if name not in mix or rest <= 0.0:
        return None
    most = most_pct * 0.01
    cut = {key: most if key == name else x * (1.0 - most) / rest for key, x in mix.items()}
    cut = {key: share for key, share in cut.items() if share > 0.0}
    return reachable(replace(heats, choices=replace(heats.choices, scrap_mix=cut)), outcome.ask)


def _stocks(outcome: Outcome) -> None:
    """Any other material charged beyond its stock."""
    for name, kg in outcome.charged_kg.items():
        stock = _stock(outcome.heats, name)
        need = spread(kg, outcome.n)
        rows = np.flatnonzero(still_open(outcome) & (need > stock * (1.0 + SLACK) + 1e-9))
        mark_infeasible(
            outcome,
            rows,
            [
                (
                    f"materials.{name}.stock_kg: the heat needs {need[row]:.0f} kg of {name}, "
                    f"{stock:.0f} kg are at hand"
                )
                for row in rows.tolist()
            ],
            [[f"more {name}", f"another material in place of {name}"] for _ in rows.tolist()],
            _with_stock(outcome, rows, name, stock) if rows.size else None,
        )


def _with_stock(outcome: Outcome, rows: Array, name: str, stock: float) -> list[EndPoint] | None:
    """The same heats with no more lime or magnesia flux than there is; None for the rest."""
    choices, ask = outcome.heats.choices, outcome.ask
    if ask.lime and name == choices.lime:
        ask = replace(ask, lime=False)
    elif ask.flux and name == choices.magnesia_flux:
        ask = replace(ask, flux=False)
    else:
        return None
    return reachable(with_masses(outcome.heats.take(rows), {name: stock}), ask)


def _weights(outcome: Outcome) -> None:
    """Vessel charge, scrap box and slag against their limits."""
    values, n = outcome.heats.values, outcome.n
    scrap = spread(outcome.kind_kg("scrap"), n)
    charge = spread(outcome.hot_metal_kg, n) + scrap
    volume = np.zeros(n)
    for name, kg in outcome.charged_kg.items():
        material = outcome.heats.materials[name]
        if material.kind == "scrap" and material.bulk_density_kg_per_m3:
            volume += spread(kg, n) / material.bulk_density_kg_per_m3
    slag = spread(outcome.state.slag_kg, n)
    for limit, have, label, unit in (
        ("charge_kg", charge, "hot metal and scrap", "kg"),
        ("scrap_box_kg", scrap, "scrap", "kg"),
        ("scrap_box_m3", volume, "scrap", "m3"),
        ("slag_kg", slag, "slag", "kg"),
    ):
        most = values["limit_" + limit]
        over = np.nan_to_num(have / most, nan=0.0) > 1.0 + SLACK
        rows = np.flatnonzero(still_open(outcome) & over)
        mark_infeasible(
            outcome,
            rows,
            [
                (
                    f"limit.{limit}: {have[row]:.0f} {unit} of {label}, "
                    f"{most[row]:.0f} {unit} are allowed"
                )
                for row in rows.tolist()
            ],
            [
                [
                    (
                        f"a heat smaller by {100.0 * (1.0 - most[row] / have[row]):.1f} %, which "
                        "reaches the same aim"
                    ),
                    *(
                        ["less silicon in the hot metal", "a higher P aim or lower aim.basicity"]
                        if label == "slag"
                        else []
                    ),
                ]
                for row in rows.tolist()
            ],
            _smaller(outcome, rows, most[rows] / have[rows]) if rows.size else None,
        )


def _smaller(outcome: Outcome, rows: Array, factor: Array) -> list[EndPoint]:
    """The same heats with every mass that is given scaled down."""
    heats = outcome.heats.take(rows)
    names = ("hot_metal_kg", "aim_steel_kg", "scrap_kg", "retained_slag_kg", "stirring_gas_Nm3")
    scaled = with_values(heats, **{name: heats.values[name] * factor for name in names})
    masses = {name: kg * factor for name, kg in heats.masses_kg.items()}
    return reachable(with_masses(scaled, masses), outcome.ask)


def unsolved_ask(ask: Ask) -> str:
    """Trade name of what the heat balance was asked for."""
    return {"scrap_kg": "scrap", "trim_kg": "coolant or fuel", "T_K": "end temperature"}.get(
        ask.heat, "heat loss"
    )
