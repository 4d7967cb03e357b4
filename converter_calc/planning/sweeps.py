"""Scrap share swept over hot-metal temperature and silicon, all points in one solve.

Every number is that of the planner; a sweep only lays out the heats and reads the answers.
The sweeps of lime and phosphorus stand in `lime_sweeps`.
"""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import replace
from typing import TYPE_CHECKING, Any, NamedTuple

import numpy as np

from converter_calc.balance.heats import HeatTable
from converter_calc.balance.schema import parameters
from converter_calc.basis.dual import Array, Num
from converter_calc.basis.elements import molar_mass
from converter_calc.basis.errors import Fault, InputError
from converter_calc.planning.outcome import Outcome, at, spread
from converter_calc.planning.plan import plan_heats
from converter_calc.planning.solving import with_masses, with_values
from converter_calc.planning.verdicts import lime_in_vain

if TYPE_CHECKING:
    import pandas as pd

#: Most points of one sweep; bounds its time (about 0.4 ms a point) and memory.
MOST_POINTS = 20000


class Column(NamedTuple):
    """A column of a sweep: label, unit and what it counts."""

    label: str
    unit: str
    note: str = ""


def scrap_ratio_map(
    heats: HeatTable,
    scrap_share_pct: Any,
    hot_metal_temp_C: Any,
    Si_pct: Any = None,
) -> pd.DataFrame:
    """Plans of one heat over scrap share, hot-metal temperature and silicon.

    The scrap share is given at each point, so coolant and fuel are free and close the heat
    balance; coolant, fuel and scrap that the heat gives by name are let go (named scraps set
    the mix). A pinned end temperature counts as the aim.

    Parameters
    ----------
    heats : one heat. scrap_share_pct : scrap of hot metal and scrap [mass %], (a,), 0 to 80.
    hot_metal_temp_C : (b,) [C]. Si_pct : silicon of the hot metal [mass %], (c,); None: today's.

    Returns
    -------
    DataFrame, a row a point, scrap share running fastest; columns as in `map_columns`. A
    point beyond a limit keeps the numbers of its balance with `feasible` False and `binding`
    saying why; numbers are NaN where the balance has no answer, or only one with lime that
    does not dissolve.

    Raises
    ------
    InputError : not one heat, an axis out of the range of its input, more than MOST_POINTS.
    """
    import pandas as pd

    only_one(heats)
    silicon = heats.hm_pct.get("Si", np.zeros(1)) if Si_pct is None else Si_pct
    axes = [
        _axis("hm_Si_pct", silicon),
        _axis("hot_metal_temp_C", hot_metal_temp_C),
        _axis("scrap_share_pct", scrap_share_pct),
    ]
    n = int(np.prod([axis.size for axis in axes]))
    if n > MOST_POINTS:
        raise InputError([Fault("sweep", f"{n} points, {MOST_POINTS} are allowed")])
    Si, temp, share = (grid.ravel() for grid in np.meshgrid(*axes, indexing="ij"))
    table = with_silicon(repeated(_free_trim(heats), n), Si)
    table = with_values(table, scrap_share_pct=share, hot_metal_temp_C=temp, scrap_kg=np.nan)
    found: dict[str, Any] = {"scrap_share_pct": share, "hot_metal_temp_C": temp, "hm_Si_pct": Si}
    return pd.DataFrame(found | merged(n, plan_heats(table), _map_numbers))


def map_columns(heats: HeatTable) -> dict[str, Column]:
    """Label, unit and contents of each column of `scrap_ratio_map`, for this heat's materials.

    Masses in kg a heat, cost in the shop's currency, CO2 in kg per tonne of steel.
    """
    used = used_materials(heats)
    priced = [name for name in used if heats.materials[name].price_per_t is not None]
    for name, text in (("price_hot_metal_per_t", "hot metal"), ("price_oxygen_per_Nm3", "oxygen")):
        if np.isfinite(heats.values[name]).all():
            priced.append(text)
    upstream = [name for name in used if heats.materials[name].CO2_kg_per_t is not None]
    making = f"making of {_listed(upstream)} (of nothing else)"
    burnt = "all carbon that leaves in the gas, burnt to CO2"
    return {
        "scrap_share_pct": Column("scrap share", "% of hot metal and scrap"),
        "hot_metal_temp_C": Column("hot metal temperature", "°C"),
        "hm_Si_pct": Column("silicon of the hot metal", "mass %"),
        "hot_metal_kg": Column("hot metal", "kg"),
        "scrap_kg": Column("scrap", "kg"),
        "coolant_kg": Column(f"coolant ({_plain(heats.choices.coolant)})", "kg"),
        "fuel_kg": Column(f"fuel ({_plain(heats.choices.fuel)})", "kg"),
        "trim_kg": Column("coolant (+) or fuel (−)", "kg"),
        "oxygen_Nm3": Column("oxygen", "Nm³"),
        "lime_kg": Column("lime", "kg"),
        "flux_kg": Column("magnesia flux", "kg"),
        "slag_kg": Column("slag", "kg"),
        "steel_kg": Column("steel", "kg"),
        "yield_pct": Column("metallic yield", "%"),
        "end_P_pct": Column("end phosphorus", "mass %"),
        "cost_per_t": Column(
            "cost of materials", "currency/t steel", f"of {_listed(priced)} (of nothing else)"
        ),
        "CO2_gas_kg_per_t": Column("CO2 of the off-gas", "kg/t steel", burnt),
        "CO2_materials_kg_per_t": Column("CO2 of materials", "kg/t steel", making),
        "CO2_kg_per_t": Column("CO2", "kg/t steel", f"{burnt}, and the {making}"),
        "feasible": Column("feasible", ""),
        "binding": Column("what binds", ""),
    }


def today_point(outcome: Outcome, index: int = 0) -> dict[str, float]:
    """Where a planned heat lies on the map: scrap share [mass %], temperature [C], Si [mass %]."""
    scrap, hot_metal = outcome.kind_kg("scrap"), outcome.hot_metal_kg
    point = {
        "scrap_share_pct": 100.0 * scrap / (scrap + hot_metal),
        "hot_metal_temp_C": outcome.heats.values["hot_metal_temp_C"],
        "hm_Si_pct": outcome.heats.hm_pct.get("Si", 0.0),
    }
    return {name: float(at(x, index)) for name, x in point.items()}


def used_materials(heats: HeatTable) -> list[str]:
    """Materials that a plan of these heats may charge, each once."""
    choices = heats.choices
    names = [*choices.scrap_mix, *choices.scrap_order, *heats.masses_kg, choices.lime]
    names += [choices.magnesia_flux, choices.coolant, choices.fuel]
    return list(dict.fromkeys(names))


def only_one(heats: HeatTable) -> None:
    """Raise InputError unless the table holds one heat."""
    if heats.n != 1:
        raise InputError([Fault("sweep", f"starts from one heat, given {heats.n}")])


def repeated(heats: HeatTable, n: int) -> HeatTable:
    """One heat n times, numbered."""
    table = heats.take(np.zeros(n, dtype=int))
    return replace(table, ids=[f"{heats.ids[0]} point {k + 1}" for k in range(n)])


def with_silicon(heats: HeatTable, Si_pct: Array) -> HeatTable:
    """A copy with another silicon of the hot metal [mass %, (n,)]; iron makes up the rest."""
    copy = with_values(heats, hm_Si_pct=Si_pct)
    others = {el: pct for el, pct in heats.hm_pct.items() if el != "Fe"}
    others["Si"] = np.array(np.broadcast_to(Si_pct, (heats.n,)), dtype=float)
    copy.hm_pct = others | {"Fe": 100.0 - sum(others.values(), np.zeros(heats.n))}
    return copy


def merged(n: int, groups: list[tuple[Array, Outcome]], read: Any) -> dict[str, Any]:
    """Columns (n,) from groups of heats; `read` gives the columns of one outcome."""
    table: dict[str, Any] = {}
    for rows, outcome in groups:
        for name, x in read(outcome).items():
            if name not in table:
                table[name] = np.full(n, np.nan) if x.dtype == float else np.zeros(n, x.dtype)
            table[name][rows] = x
    return table


def gas_CO2_kg(outcome: Outcome) -> Num:
    """Carbon of the off-gas as CO2 [kg]: what it becomes once burnt at the mouth or later."""
    gas = outcome.state.gas_kg
    return gas["CO2"] + gas["CO"] * (molar_mass("CO2") / molar_mass("CO"))


def materials_CO2_kg(outcome: Outcome) -> Num:
    """CO2 that the charged materials bring along from their making [kg], where the shop says."""
    total: Num = 0.0
    for name, kg in outcome.charged_kg.items():
        per_t = outcome.heats.materials[name].CO2_kg_per_t
        if per_t is not None:
            total = total + kg * (per_t * 1e-3)
    return total


def _axis(name: str, given: Any) -> Array:
    """One axis of a sweep as an array, inside the range of its input."""
    axis = np.atleast_1d(np.asarray(given, dtype=float))
    row = parameters()[name]
    if axis.ndim != 1 or not axis.size:
        raise InputError([Fault(name, "must be a row of numbers")])
    if not ((axis >= row.low) & (axis <= row.high)).all():
        message = f"must be {row.low:g} to {row.high:g} {row.unit} at every point"
        raise InputError([Fault(name, message)])
    return axis


def _free_trim(heats: HeatTable) -> HeatTable:
    """The heat with scrap, coolant and fuel left to the sweep."""
    scraps: dict[str, float] = {}
    free = {heats.choices.coolant, heats.choices.fuel}
    for name, kg in heats.masses_kg.items():
        if heats.materials[name].kind == "scrap" and np.isfinite(kg).all():
            scraps[name] = float(kg[0])
            free.add(name)
    copy = with_masses(heats, {name: np.nan for name in free if name in heats.masses_kg})
    end = copy.values["pin_end_temp_C"]
    aim = np.where(np.isfinite(end), end, copy.values["aim_temp_C"])
    copy = with_values(copy, pin_end_temp_C=np.nan, aim_temp_C=aim)
    choices = replace(copy.choices, ask=None)
    if any(scraps.values()):
        choices = replace(choices, scrap_mix=_whole_mix(heats, scraps), scrap_order=[])
    return replace(copy, choices=choices)


def _whole_mix(heats: HeatTable, named: Mapping[str, float]) -> dict[str, float]:
    """Shares of all scrap that the heat gives: scraps by name, and a given total by its mix."""
    total = dict(named)
    beside = float(np.nan_to_num(heats.values["scrap_kg"][0]))
    for name, share in heats.choices.scrap_mix.items():
        total[name] = total.get(name, 0.0) + beside * share
    whole = sum(total.values())
    return {name: kg / whole for name, kg in total.items() if kg > 0.0}


def _map_numbers(outcome: Outcome) -> dict[str, Any]:
    s, n = outcome.state, outcome.n
    kg, choices = outcome.charged_kg, outcome.heats.choices
    scrap = outcome.kind_kg("scrap")
    gas, making = (x * 1e3 / s.steel_kg for x in (gas_CO2_kg(outcome), materials_CO2_kg(outcome)))
    coolant, fuel = (spread(kg.get(name, 0.0), n) for name in (choices.coolant, choices.fuel))
    numbers: dict[str, Num] = {
        "hot_metal_kg": outcome.hot_metal_kg,
        "scrap_kg": scrap,
        "coolant_kg": coolant,
        "fuel_kg": fuel,
        "trim_kg": coolant - fuel,
        "oxygen_Nm3": outcome.oxygen_Nm3,
        "lime_kg": kg.get(choices.lime, 0.0),
        "flux_kg": kg.get(choices.magnesia_flux, 0.0),
        "slag_kg": s.slag_kg,
        "steel_kg": s.steel_kg,
        "yield_pct": 100.0 * s.steel_kg / (outcome.hot_metal_kg + scrap),
        "end_P_pct": outcome.steel_pct().get("P", 0.0),
        "cost_per_t": outcome.cost() if _any_price(outcome) else np.nan,
        "CO2_gas_kg_per_t": gas,
        "CO2_materials_kg_per_t": making,
        "CO2_kg_per_t": gas + making,
    }
    good = np.logical_and(outcome.converged, np.logical_not(lime_in_vain(outcome)))
    table: dict[str, Any] = {
        name: np.where(good, spread(x, n), np.nan) for name, x in numbers.items()
    }
    table["feasible"] = np.array([status == "solved" for status in outcome.status], dtype=bool)
    table["binding"] = np.array(outcome.binding, dtype=object)
    return table


def _any_price(outcome: Outcome) -> bool:
    heats = outcome.heats
    by_name = any(heats.materials[name].price_per_t is not None for name in outcome.charged_kg)
    given = ("price_hot_metal_per_t", "price_oxygen_per_Nm3")
    return by_name or any(bool(np.isfinite(heats.values[name]).any()) for name in given)


def _plain(name: str) -> str:
    return name.replace("_", " ")


def _listed(names: list[str]) -> str:
    return ", ".join(_plain(name) for name in names) if names else "no material"
