"""Fluxes by least cost at the aim: which carriers of lime and magnesia, and how much of each.

The masses of all fluxes are free; the balance answers with scrap (or coolant) and oxygen for
the aim temperature and carbon. Least cost per tonne of steel, or greatest value of the heat
where a tonne of steel is given a value, subject to the phosphorus aim, the least basicity,
the MgO aim, lime that dissolves, and the limits of the user, by sequential quadratic
programming with exact derivatives of the one balance.
"""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass, replace

import numpy as np

from converter_calc.balance.heats import HeatTable
from converter_calc.basis.dual import Array, Num
from converter_calc.basis.errors import Fault, InputError
from converter_calc.metallurgy.flux_mixes import (
    LIME_CARRIERS,
    MAGNESIA_CARRIERS,
    check_materials,
    flux_mixes,
    fluxes_free,
)
from converter_calc.metallurgy.flux_search import LABELS, FluxLimits, FluxSearch
from converter_calc.planning.explain import Term
from converter_calc.planning.outcome import Outcome, spread
from converter_calc.planning.plan import plan_heats
from converter_calc.planning.sweeps import gas_CO2_kg, materials_CO2_kg, only_one

CANDIDATES = (*LIME_CARRIERS, *MAGNESIA_CARRIERS, "fluorspar", "recycled_slag")
#: Most value of a tonne of steel taken, in any currency; what is above is a slip.
MOST_STEEL_VALUE = 1e9


@dataclass(frozen=True)
class FluxUse:
    """One flux in the least-cost mix.

    kg : mass. price_per_t : price [currency/t]. enters_below_per_t : price below which an
    unused flux would come in [currency/t]; NaN for one that is used or at its most.
    """

    material: str
    kg: float
    kg_per_t: float
    price_per_t: float
    enters_below_per_t: float


@dataclass(frozen=True)
class FluxChoice:
    """The least-cost fluxes of one heat.

    uses : each candidate. cost_per_t : cost of all priced items [currency/t steel].
    binding : conditions that hold just so -> what easing each by one unit saves
    [currency/t steel]: phosphorus and magnesia by 0.001 % and 1 %, basicity by 0.1; for the
    rest 1 % of the limit. left_out : candidates without a price. outcome : the planned heat.
    beside : cost per tonne with the heat's own lime and magnesia flux (NaN: no plan, no price).
    steel_value_per_t : value of a tonne of steel reckoned with; None: least cost per tonne.
    """

    uses: list[FluxUse]
    cost_per_t: float
    beside: float
    binding: Mapping[str, float]
    left_out: tuple[str, ...]
    outcome: Outcome
    steel_value_per_t: float | None = None

    def terms(self) -> list[Term]:
        """The choice as lines of an explanation."""
        s, outcome = self.outcome.state, self.outcome
        steel_t = float(spread(s.steel_kg, 1)[0]) * 1e-3
        lines = [Term(use.material, use.kg, "kg", f"at {use.price_per_t:g} a tonne")
                 for use in self.uses if use.kg > 0.0]  # fmt: skip
        numbers: list[tuple[str, Num, str]] = [
            ("end phosphorus", outcome.steel_pct()["P"], "%"),
            ("CaO/SiO2", s.basicity, ""),
            ("MgO of the slag", s.slag_pct["MgO"], "%"),
            ("scrap", outcome.kind_kg("scrap"), "kg"),
            ("slag", s.slag_kg, "kg"),
            ("CO2 of the off-gas", gas_CO2_kg(outcome) / steel_t, "kg/t"),
            ("CO2 of making the materials", materials_CO2_kg(outcome) / steel_t, "kg/t"),
        ]
        lines += [Term(label, float(spread(x, 1)[0]), unit) for label, x, unit in numbers]
        lines += [Term(f"easing: {LABELS[key]}", saved, "currency/t", "shadow price")
                  for key, saved in self.binding.items()]  # fmt: skip
        return lines


def choose_fluxes(
    heats: HeatTable,
    candidates: Sequence[str] | None = None,
    limits: FluxLimits | None = None,
    steel_value_per_t: float | None = None,
) -> FluxChoice:
    """Fluxes of one heat by least cost at the aim.

    Parameters
    ----------
    heats : one heat; its own lime and magnesia flux are let go, other given masses stay.
    candidates : materials; None: CANDIDATES. Those without a price are left out. limits :
        None: as `FluxLimits` stands. steel_value_per_t : value of a tonne of steel [currency];
    then the value of the steel less all costs is greatest, so that scrap melted counts. None:
    least cost per tonne of steel, however much steel that makes.

    Returns
    -------
    FluxChoice. Its outcome is the plan with these masses, warnings included.

    Raises
    ------
    InputError : not one heat, a limit or value out of range, an unknown material, no price of
    hot metal, oxygen or scrap, or none of any candidate. InfeasibleError : no mix of these
    reaches the aims.
    ConvergenceError : the search did not end.
    """
    only_one(heats)
    limits = limits or FluxLimits()
    base = fluxes_free(heats, {})
    wanted = list(dict.fromkeys(CANDIDATES if candidates is None else candidates))
    check_materials(base, [*wanted, *limits.most_kg])
    _check_limits(limits, steel_value_per_t)
    priced = [name for name in wanted if base.materials[name].price_per_t is not None]
    _check_prices(base, priced)
    search = FluxSearch(base, priced, limits, steel_value_per_t)
    best, beside = _start(base, search)
    z = search.run(best)
    return _choice(search, z, wanted, beside)


def _check_limits(limits: FluxLimits, steel_value_per_t: float | None) -> None:
    numbers = {
        "fluorspar_kg_per_t": limits.fluorspar_kg_per_t,
        "recycled_P_kg_per_t": limits.recycled_P_kg_per_t,
        **{f"most_kg.{name}": kg for name, kg in limits.most_kg.items()},
    }
    faults = [Fault(name, f"must be 0 or more, given {x:g}")
              for name, x in numbers.items() if not x >= 0.0]  # fmt: skip
    if steel_value_per_t is not None and not 0.0 < steel_value_per_t <= MOST_STEEL_VALUE:
        message = f"must be above 0, at most {MOST_STEEL_VALUE:g}, given {steel_value_per_t:g}"
        faults.append(Fault("steel_value_per_t", message))
    if faults:
        raise InputError(faults)


def _check_prices(heats: HeatTable, priced: Sequence[str]) -> None:
    faults = []
    for name in ("price_hot_metal_per_t", "price_oxygen_per_Nm3"):
        if not np.isfinite(heats.values[name]).all():
            place = "price." + name.removeprefix("price_")
            faults.append(Fault(place, "not given; the least cost needs it"))
    choices = heats.choices
    faults += [
        Fault(f"materials.{name}.price_per_t", "not given; the least cost needs it")
        for name in dict.fromkeys([*choices.scrap_mix, *choices.scrap_order])
        if heats.materials[name].price_per_t is None
    ]
    if not priced:
        faults.append(Fault("materials", "no candidate flux has a price_per_t"))
    if faults:
        raise InputError(faults)


def _start(base: HeatTable, search: FluxSearch) -> tuple[Array, float]:
    """Masses of the heat's own pair and its cost a tonne, else those of the first pair solved."""
    own = (base.choices.lime, base.choices.magnesia_flux)
    pairs = [own, *((a, b) for a in LIME_CARRIERS for b in MAGNESIA_CARRIERS)]
    most = np.array([high for _, high in search.bounds()])
    for pair in dict.fromkeys(pairs):
        if not set(pair) <= set(search.names):
            continue
        row = flux_mixes(base, [pair]).table.iloc[0]
        if row["status"] == "solved":
            kg = {pair[0]: row["lime_kg"], pair[1]: row["magnesia_kg"]}
            z = np.array([kg.get(name, 0.0) for name in search.names]) / search.unit_kg
            return np.minimum(z, most), float(row["cost_per_t"]) if pair == own else np.nan
    return np.minimum(np.ones(len(search.names)), most), np.nan


def _choice(search: FluxSearch, z: Array, wanted: Sequence[str], beside: float) -> FluxChoice:
    _, values, _ = search.at(z)
    ((_, outcome),) = plan_heats(search.heats(z))
    steel_t = values["steel_t"]
    per = steel_t if search.steel_value is None else 1.0  # the aim is a tonne or the heat
    optimum = search.optimum(z)
    most = np.array([high for _, high in search.bounds()])
    uses = []
    for k, name in enumerate(search.names):
        price = float(search.base.materials[name].price_per_t or 0.0)
        # one unit of z costs price x unit / 1000 / per; it enters where that is less
        enters = price - optimum.reduced[k] * per * 1e3 / search.unit_kg
        kg = float(z[k] * search.unit_kg)
        unused = z[k] == 0.0 and most[k] > 0.0
        uses.append(FluxUse(name, kg, kg / steel_t, price, float(enters) if unused else np.nan))
    eased = {
        name: _saved(search, name, float(x) * per / steel_t)
        for name, x in zip(optimum.tight, optimum.prices, strict=True)
    }
    left_out = tuple(name for name in wanted if name not in search.names)
    return FluxChoice(uses, values["cost"], beside, eased, left_out, outcome, search.steel_value)


def _saved(search: FluxSearch, name: str, price: float) -> float:
    """Cost saved [currency/t] by easing a condition by the unit that the trade thinks in."""
    values = search.base.values
    steps = {
        "phosphorus": 0.001 / float(values["aim_P_pct"][0]),
        "basicity": 0.1 / float(values["aim_basicity"][0]),
        "magnesia": 1.0 / float(np.nan_to_num(values["aim_MgO_pct"][0], nan=8.0)),
    }
    return price * steps.get(name, 0.01)


def with_fluxes(heats: HeatTable, choice: FluxChoice) -> HeatTable:
    """The heat with the fluxes of a choice given, ready to plan or to save."""
    roles = {heats.choices.lime: 0.0, heats.choices.magnesia_flux: 0.0}
    masses = {use.material: use.kg for use in choice.uses if use.kg > 0.0}
    found = fluxes_free(heats, {**roles, **masses})
    return replace(found, why=heats.why)
