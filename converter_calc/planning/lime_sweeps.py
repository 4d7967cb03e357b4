"""End phosphorus against lime for every published law, the lines beside it, and its drivers.

The temperature stays at its aim throughout: scrap or coolant follows, as the heat leaves open.
"""

from __future__ import annotations

from collections.abc import Callable, Sequence
from dataclasses import dataclass, replace
from typing import TYPE_CHECKING, Any

import numpy as np

from converter_calc.balance.asks import Ask
from converter_calc.balance.heats import HeatTable
from converter_calc.balance.schema import parameters
from converter_calc.basis.dual import Array
from converter_calc.basis.errors import Fault, InputError
from converter_calc.basis.units import ZERO_C_K
from converter_calc.laws import magnesia, phosphorus
from converter_calc.planning.grading import with_grade_aims
from converter_calc.planning.outcome import Outcome, spread
from converter_calc.planning.solving import plan_groups, solve_heats, with_masses, with_values
from converter_calc.planning.sweeps import only_one, repeated, with_silicon
from converter_calc.planning.verdicts import lime_in_vain

if TYPE_CHECKING:
    import pandas as pd

MOST_LIME_POINTS = 2000
#: A crossing is narrowed down by so many points, so many times, then read off a straight line.
POINTS, ROUNDS = 17, 3
#: Steps of the effects: tap temperature [K], iron-oxide factor, silicon [mass %].
TEMPERATURE_STEPS_K = np.arange(-40.0, 41.0, 10.0)
IRON_OXIDE_STEPS = np.arange(0.6, 1.61, 0.1)
SILICON_STEPS_PCT = np.arange(-0.3, 0.41, 0.1)
LEAST_SILICON_PCT = 0.05


@dataclass(frozen=True)
class LimeLines:
    """Marks on the lime axis of one heat [kg of lime]; NaN where there is none.

    lime : the material. law : the law chosen. least_basicity_kg : brings the slag to the
    basicity asked for, aim_basicity. dissolution_stops_kg : more does not dissolve (chosen law).
    MgO_saturation_kg : from here on the slag is saturated with magnesia and spares the lining;
    NaN too where the magnesia flux follows saturation anyway. for_aim_kg : law -> lime that
    meets aim_P_pct [mass %]; NaN where no lime that dissolves does.
    """

    lime: str
    law: str
    aim_basicity: float
    aim_P_pct: float
    least_basicity_kg: float
    dissolution_stops_kg: float
    MgO_saturation_kg: float
    for_aim_kg: dict[str, float]


def lime_curve(heats: HeatTable, lime_kg: Any, laws: Sequence[str] | None = None) -> pd.DataFrame:
    """End phosphorus of one heat against its lime, by the chosen law and others.

    Lime is given at each point; magnesia flux follows its aim and scrap (or coolant) the aim
    temperature, as in a plan. Each law is taken times the practice's approach factor. A
    pinned phosphorus or partition ratio is let go.

    Parameters
    ----------
    heats : one heat. lime_kg : mass of choice.lime [kg], (n,), 0 or more. laws : names, of
        which the chosen law comes first in any case. None: all published laws.

    Returns
    -------
    DataFrame, n rows a law: law, chosen, lime_kg, end_P_pct, L_P, basicity,
    undissolved_lime_kg, slag_kg, slag_T_Fe_pct, slag_MgO_pct, MgO_saturation_pct, end_temp_C,
    scrap_kg, in_range (the law is used within its range). NaN where a point has no solution.

    Raises
    ------
    InputError : not one heat, lime negative or not finite, too many points, input missing.
    DataError : unknown law.
    """
    import pandas as pd

    lime = np.atleast_1d(np.asarray(lime_kg, dtype=float))
    if lime.ndim != 1 or not 0 < lime.size <= MOST_LIME_POINTS:
        raise InputError([Fault("lime_kg", f"must be 1 to {MOST_LIME_POINTS} masses")])
    if not (np.isfinite(lime).all() and (lime >= 0.0).all()):
        raise InputError([Fault("lime_kg", "must be 0 kg or more at every point")])
    only_one(heats)
    base = phosphorus_free(heats)
    table = repeated(with_masses(base, {base.choices.lime: 0.0}), lime.size)
    table = with_masses(table, {base.choices.lime: lime})
    chosen = base.choices.laws["phosphorus"]
    parts: list[Any] = []
    for law in _in_order(base, laws):
        group, ask = asked(with_law(table, law))
        outcome = solve_heats(group, ask)
        parts.append(pd.DataFrame(_lime_columns(outcome, law, lime, chosen)))
    curve: pd.DataFrame = pd.concat(parts, ignore_index=True)
    return curve


def lime_lines(heats: HeatTable, curve: pd.DataFrame | None = None) -> LimeLines:
    """The lines of the lime curve of one heat: basicity, dissolution, magnesia, P aim.

    For the chosen law the lime that meets the aim is solved for. For the other laws it is
    read off `curve`, the result of `lime_curve` for this heat, by a cubic through four of its
    points (within 0.2 % of the aim for 25 points over the usual range); without a curve only
    the chosen law is there. Lime in kg.

    Raises as `lime_curve`.
    """
    only_one(heats)
    base = phosphorus_free(heats)
    free = lime_free(base)
    _, ask = asked(free)
    chosen = base.choices.laws["phosphorus"]
    most = solve_heats(free, replace(ask, lime_rule="lime_limit"))
    dissolved = _lime_of(most)
    by_basicity = _lime_of(solve_heats(with_values(free, aim_P_pct=np.nan), ask))
    aim = float(free.values["aim_P_pct"][0])
    for_aim = {chosen: np.nan}
    if np.isfinite(aim):
        for_aim[chosen] = _lime_for_aim(free, ask, most)
        if curve is not None:
            for law, part in curve[~curve["chosen"]].groupby("law", sort=False):
                for_aim[str(law)] = _read_off(
                    part["lime_kg"].to_numpy(), part["end_P_pct"].to_numpy(), aim, dissolved
                )
    return LimeLines(
        lime=base.choices.lime,
        law=chosen,
        aim_basicity=float(base.values["aim_basicity"][0]),
        aim_P_pct=aim,
        least_basicity_kg=by_basicity,
        dissolution_stops_kg=dissolved,
        MgO_saturation_kg=_saturated_from(base, np.nanmax([dissolved, by_basicity, 1.0])),
        for_aim_kg=for_aim,
    )


def phosphorus_effects(heats: HeatTable) -> dict[str, pd.DataFrame]:
    """End phosphorus of one heat against what drives it, by the chosen law.

    The plan of the heat gives the basicity, at which lime then holds the slag while one thing
    changes: "tap_temperature" (end_temp_C), "iron_oxide" (iron_oxide_factor; no effect where
    the iron of the slag is pinned) and "slag_weight" (by silicon of the hot metal, hm_Si_pct).
    Each table also has end_P_pct, L_P, slag_kg_per_t, slag_T_Fe_pct, basicity, lime_kg.

    Raises InputError as a plan does.
    """
    only_one(heats)
    base = phosphorus_free(heats)
    group, ask = asked(base)
    today = solve_heats(group, ask)
    held = with_values(
        lime_free(base), aim_basicity=float(np.ravel(today.state.basicity)[0]), aim_P_pct=np.nan
    )
    row = parameters()["aim_temp_C"]
    temp = held.values["aim_temp_C"][0] + TEMPERATURE_STEPS_K
    temp = temp[(temp >= row.low) & (temp <= row.high)]
    factor = held.values["iron_oxide_factor"][0] * IRON_OXIDE_STEPS
    silicon = held.hm_pct.get("Si", np.zeros(1))[0] + SILICON_STEPS_PCT
    silicon = silicon[silicon >= LEAST_SILICON_PCT]
    tables = {
        "tap_temperature": ("end_temp_C", temp,
                            with_values(repeated(held, temp.size), aim_temp_C=temp)),
        "iron_oxide": ("iron_oxide_factor", factor,
                       with_values(repeated(held, factor.size), iron_oxide_factor=factor)),
        "slag_weight": ("hm_Si_pct", silicon,
                        with_silicon(repeated(held, silicon.size), silicon)),
    }  # fmt: skip
    return {kind: _effect(name, x, table) for kind, (name, x, table) in tables.items()}


def phosphorus_free(heats: HeatTable) -> HeatTable:
    """Heats with their aims complete and nothing pinned that the laws are to say."""
    aims = with_grade_aims(heats)
    end = aims.values["pin_end_temp_C"]
    aim = np.where(np.isfinite(end), end, aims.values["aim_temp_C"])
    return with_values(
        aims, pin_L_P=np.nan, pin_end_P_pct=np.nan, pin_end_temp_C=np.nan, aim_temp_C=aim
    )


def lime_free(heats: HeatTable) -> HeatTable:
    """Heats with lime, basicity and CaO let go."""
    lime = heats.choices.lime
    free = with_masses(heats, {lime: np.nan}) if lime in heats.masses_kg else heats
    return with_values(free, pin_basicity=np.nan, pin_slag_CaO_pct=np.nan)


def asked(heats: HeatTable) -> tuple[HeatTable, Ask]:
    """The one question that all rows of a sweep pose."""
    ((_, group, ask),) = plan_groups(heats)
    return group, ask


def with_law(heats: HeatTable, law: str) -> HeatTable:
    """Heats under another phosphorus law."""
    chosen = {**heats.choices.laws, "phosphorus": law}
    return replace(heats, choices=replace(heats.choices, laws=chosen))


def _in_order(heats: HeatTable, laws: Sequence[str] | None) -> list[str]:
    """The chosen law, then the others; each is looked up, so an unknown one raises here."""
    others = phosphorus.laws() if laws is None else laws
    names = list(dict.fromkeys([heats.choices.laws["phosphorus"], *others]))
    for name in names:
        phosphorus.describe(name)
    return names


def _lime_columns(outcome: Outcome, law: str, lime: Array, chosen: str) -> dict[str, Any]:
    s, n = outcome.state, outcome.n
    slag = {name: np.asarray(pct) for name, pct in s.slag_pct.items()}
    inside = np.ones(n, dtype=bool)
    for found in phosphorus.out_of_range(law, slag, s.T_K, s.C_pct):
        inside &= ~np.broadcast_to(found[3], (n,))
    numbers = {
        "end_P_pct": outcome.steel_pct()["P"],
        "L_P": s.laws["L_P"],
        "basicity": s.basicity,
        "undissolved_lime_kg": s.undissolved_kg,
        "slag_kg": s.slag_kg,
        "slag_T_Fe_pct": s.laws["T_Fe_pct"],
        "slag_MgO_pct": slag.get("MgO", 0.0),
        "MgO_saturation_pct": magnesia.saturation_pct(s.liquid_basicity, s.T_K),
        "end_temp_C": s.T_K - ZERO_C_K,
        "scrap_kg": outcome.kind_kg("scrap"),
    }
    return {
        "law": np.full(n, law, dtype=object),
        "chosen": np.full(n, law == chosen),
        "lime_kg": lime,
        **{name: np.where(outcome.converged, spread(x, n), np.nan) for name, x in numbers.items()},
        "in_range": inside,
    }


def _lime_of(solved: Outcome) -> float:
    """Lime that one heat asks for [kg]; NaN without an answer."""
    return float(solved.x["lime_kg"][0]) if solved.converged[0] else np.nan


def _read_off(lime: Array, P_pct: Array, aim: float, most_kg: float) -> float:
    """Lime at which a curve of end phosphorus falls to the aim [kg]; NaN beyond most_kg.

    Inverse interpolation of lime over ln P. Beyond most_kg the curve has a corner, so only
    points before it are used.
    """
    order = np.argsort(lime)
    lime, P_pct = lime[order], P_pct[order]
    use = np.isfinite(P_pct) & (lime <= most_kg)
    lime, height = lime[use], np.log(P_pct[use] / aim)
    below = np.flatnonzero(height <= 0.0)
    if lime.size < 2 or height[0] <= 0.0:
        return np.nan
    first = int(below[0]) if below.size else lime.size
    low = min(max(first - 2, 0), max(lime.size - 4, 0))
    x, y = height[low : low + 4], lime[low : low + 4]
    if (np.diff(x) >= 0.0).any():
        return np.nan
    for k in range(1, x.size):  # Neville's scheme at ln(P/aim) = 0
        y = (x[k:] * y[:-1] - x[:-k] * y[1:]) / (x[k:] - x[:-k])
    return float(y[0]) if y[0] <= most_kg else np.nan


def _lime_for_aim(free: HeatTable, ask: Ask, most: Outcome) -> float:
    """Lime at which the chosen law just meets the P aim [kg]; NaN where none does.

    most : the heat with the most lime that dissolves. Where even that leaves too much
    phosphorus, Newton would only wander.
    """
    aim = free.values["aim_P_pct"][0]
    if not most.converged[0] or float(np.ravel(most.steel_pct()["P"])[0]) > aim:
        return np.nan
    low_B = parameters()["aim_basicity"].low
    solved = solve_heats(with_values(free, aim_basicity=low_B), ask)
    if solved.converged[0] and not lime_in_vain(solved)[0]:
        return float(solved.x["lime_kg"][0])

    def excess(outcome: Outcome) -> Array:
        excess_pct: Array = spread(outcome.steel_pct()["P"], outcome.n) - aim
        return excess_pct

    return crossing(free, excess, float(most.x["lime_kg"][0]))


def _saturated_from(base: HeatTable, scale_kg: float) -> float:
    def shortage(outcome: Outcome) -> Array:
        s = outcome.state
        saturation = magnesia.saturation_pct(s.liquid_basicity, s.T_K)
        return spread(saturation - s.slag_pct.get("MgO", 0.0), outcome.n)

    by_flux = ~np.isfinite(base.values["aim_MgO_pct"]).all()
    if by_flux and base.choices.magnesia_flux not in base.masses_kg:
        return np.nan
    return crossing(base, shortage, 2.0 * scale_kg)


def crossing(
    heats: HeatTable, margin: Callable[[Outcome], Array], most_kg: float, least_kg: float = 0.0
) -> float:
    """First lime [kg] between the two at which `margin` falls through zero; NaN if none.

    heats : one heat. margin : of an outcome of n limes, (n,).
    """
    low, high = least_kg, most_kg
    for _ in range(ROUNDS):
        lime = np.linspace(low, high, POINTS)
        table = repeated(with_masses(heats, {heats.choices.lime: 0.0}), POINTS)
        group, ask = asked(with_masses(table, {heats.choices.lime: lime}))
        outcome = solve_heats(group, ask)
        above = np.where(outcome.converged, margin(outcome), np.nan)
        falls = np.flatnonzero((above[:-1] > 0.0) & (above[1:] <= 0.0))
        if not falls.size:
            return np.nan
        k = int(falls[0])
        low, high = float(lime[k]), float(lime[k + 1])
        share = above[k] / (above[k] - above[k + 1])
    return low + float(share) * (high - low)


def _effect(name: str, x: Array, table: HeatTable) -> pd.DataFrame:
    import pandas as pd

    group, ask = asked(table)
    outcome = solve_heats(group, ask)
    s, n = outcome.state, outcome.n
    numbers = {
        "end_P_pct": outcome.steel_pct()["P"],
        "L_P": s.laws["L_P"],
        "slag_kg_per_t": 1e3 * s.slag_kg / s.steel_kg,
        "slag_T_Fe_pct": s.laws["T_Fe_pct"],
        "basicity": s.basicity,
        "lime_kg": outcome.charged_kg.get(outcome.heats.choices.lime, 0.0),
    }
    columns = {key: np.where(outcome.converged, spread(y, n), np.nan) for key, y in numbers.items()}
    return pd.DataFrame({name: x, **columns})
