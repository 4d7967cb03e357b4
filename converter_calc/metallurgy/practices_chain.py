"""A slag practice as a chain of solved balances: its streams, closures, numbers and warnings."""

from __future__ import annotations

from collections.abc import Iterable, Mapping
from dataclasses import dataclass, field, replace
from typing import Any

import numpy as np

from converter_calc.balance.charge import elements_of
from converter_calc.balance.streams import Closure, Stream, closures_of
from converter_calc.basis.dual import Array, Num
from converter_calc.basis.elements import molar_mass
from converter_calc.basis.tolerances import CLOSURE
from converter_calc.basis.units import MJ, ZERO_C_K
from converter_calc.metallurgy.practices_stages import METAL_KEPT, SLAG_KEPT
from converter_calc.planning.outcome import Caution, Outcome, at, spread
from converter_calc.planning.sweeps import Column, gas_CO2_kg, materials_CO2_kg


@dataclass
class Handover:
    """What one stage gives and the next takes: closure of each element [kg] and energy [MJ]."""

    name: str
    closures: dict[str, Closure]

    def worst(self) -> Array:
        """Largest relative gap, (n,)."""
        return worst_of(self.closures)


@dataclass
class Chain:
    """One practice for n heats.

    practice : its name in PRACTICES. stages : (name, outcome) in order. streams : all that
    crosses the border of the whole chain. heat_loss_J : of the whole. handovers : between the
    stages. hot_metal_kg : before any treatment. pause_min, cost, CO2_kg : of what is beside the
    balances (slag-off, treatment). status, binding, frees : as for a plan.
    """

    practice: str
    stages: list[tuple[str, Outcome]]
    streams: list[Stream]
    heat_loss_J: Num
    handovers: list[Handover]
    hot_metal_kg: Array
    CO2_kg: Num = 0.0
    cautions: list[Caution] = field(default_factory=list)
    status: list[str] = field(default_factory=list)
    binding: list[str] = field(default_factory=list)
    frees: list[list[str]] = field(default_factory=list)

    def __post_init__(self) -> None:
        """Take the verdict of the first stage that has no answer."""
        for row in range(self.n):
            stage = next(
                ((name, o) for name, o in self.stages if o.status[row] != "solved"), self.stages[-1]
            )
            name, outcome = stage
            text = outcome.binding[row]
            self.status.append(outcome.status[row])
            self.binding.append(f"{name}: {text}" if text and len(self.stages) > 1 else text)
            self.frees.append(list(outcome.frees[row]))

    @property
    def first(self) -> Outcome:
        """The first stage."""
        return self.stages[0][1]

    @property
    def last(self) -> Outcome:
        """The stage that ends with the steel."""
        return self.stages[-1][1]

    @property
    def n(self) -> int:
        """Number of heats."""
        return self.last.n

    def closures(self) -> dict[str, Closure]:
        """Closure of each element [kg] and of energy [MJ] over the whole chain."""
        return closures_of(self.streams, self.heat_loss_J, self.n)

    def check_closures(self) -> Array:
        """True for heats in which stages, handovers and the whole close as promised."""
        good = worst_of(self.closures()) <= CLOSURE
        for handover in self.handovers:
            good &= handover.worst() <= CLOSURE
        for _, outcome in self.stages:
            good &= outcome.check_closures()
        return good

    def warnings(self, index: int) -> list[dict[str, str]]:
        """Warnings of one heat over all stages, each text once: code, field, message."""
        found: dict[tuple[str, str], dict[str, str]] = {}
        for caution in self.cautions:
            if bool(at(caution.mask, index)):
                message = caution.message(index)
                entry = {"code": caution.code, "field": caution.field, "message": message}
                found[caution.code, message] = entry
        for name, outcome in self.stages:
            early = len(self.stages) > 1 and outcome is not self.last
            for entry in outcome.warnings(index):
                if early and entry["code"] in NOT_AT_SLAG_OFF:
                    continue
                text = entry["message"]
                once = entry["code"] in SAID_ONCE
                message = f"{name}: {text}" if len(self.stages) > 1 and not once else text
                found.setdefault((entry["code"], message), {**entry, "message": message})
        return list(found.values())

    def charged_kg(self, name: str) -> Num:
        """A material charged in all stages, as weighed [kg]."""
        return sum((outcome.charged_kg.get(name, 0.0) for _, outcome in self.stages), 0.0)

    def kind_kg(self, kind: str) -> Num:
        """Materials of a kind charged in all stages, as weighed [kg]."""
        return sum((outcome.kind_kg(kind) for _, outcome in self.stages), 0.0)

    def numbers(self) -> dict[str, Array]:
        """The numbers of `practice_columns`, (n,) each."""
        with np.errstate(all="ignore"):
            return {name: spread(x, self.n) for name, x in _numbers(self).items()}


#: Warnings that hold for the end of the blow and say nothing at slag-off.
NOT_AT_SLAG_OFF = ("end-temperature-range", "end-carbon-range")
#: Warnings about what is charged, not about a stage.
SAID_ONCE = (
    *("material", "wet-scrap", "oily-scrap", "slopping-silicon", "analysis-blank"),
    "oxygen-ignored",
)


def worst_of(closures: Mapping[str, Closure]) -> Array:
    """Largest relative gap of all closures, (n,)."""
    gaps = [np.abs(np.atleast_1d(closure.relative)) for closure in closures.values()]
    worst: Array = np.max(np.broadcast_arrays(*gaps), axis=0)
    return worst


def part_of(stream: Stream, share: Num, name: str | None = None) -> Stream:
    """A share of a stream, perhaps under another name."""
    return replace(
        stream,
        name=name or stream.name,
        enthalpy_J=stream.enthalpy_J * share,
        species_kg={species: kg * share for species, kg in stream.species_kg.items()},
    )


def named(streams: Iterable[Stream], *names: str) -> list[Stream]:
    """The streams of these names."""
    return [stream for stream in streams if stream.name in names]


def handover_of(name: str, gives: Iterable[Stream], takes: Iterable[Stream], n: int) -> Handover:
    """The gap between what one stage gives and the next takes."""
    sides = [replace(stream, side="in") for stream in gives]
    sides += [replace(stream, side="out") for stream in takes]
    return Handover(name, closures_of(sides, 0.0, n))


def _iron_kg(streams: Iterable[Stream]) -> Num:
    return sum((elements_of(stream.species_kg).get("Fe", 0.0) for stream in streams), 0.0)


def _mass(streams: Iterable[Stream]) -> Num:
    return sum((stream.mass_kg for stream in streams), 0.0)


def _cost(chain: Chain, steel_kg: Num) -> Num:
    """Priced items of all stages per tonne of steel; NaN where nothing has a price."""
    parts = [spread(o.cost() * o.state.steel_kg, chain.n) for _, o in chain.stages]
    known = np.any([np.isfinite(part) for part in parts], axis=0)
    return np.where(known, sum(np.nan_to_num(part) for part in parts), np.nan) / steel_kg


def _numbers(chain: Chain) -> dict[str, Num]:
    last, choices = chain.last, chain.last.heats.choices
    s, steel = last.state, last.state.steel_kg
    out = [stream for stream in chain.streams if stream.side == "out"]
    kept_in = [stream for stream in chain.streams if stream.side == "in"]
    poured = named(out, "slag_poured_off")
    slags = [*poured, *named(out, "slag")]
    back = named(kept_in, SLAG_KEPT, "retained_slag")
    scrap = chain.kind_kg("scrap")
    gas = sum((gas_CO2_kg(o) for _, o in chain.stages), 0.0)
    making = sum((materials_CO2_kg(o) for _, o in chain.stages), 0.0) + chain.CO2_kg
    lost = {
        "iron_as_oxide_kg_per_t": _iron_kg(slags) - _iron_kg(back),
        "iron_in_droplets_kg_per_t": _iron_kg(named(out, "iron_droplets", "droplets_poured_off"))
        - _iron_kg(named(kept_in, METAL_KEPT)),
        "iron_in_dust_kg_per_t": _iron_kg(named(out, "dust")),
        "iron_ejected_kg_per_t": _iron_kg(named(out, "ejections")),
        "iron_in_treatment_kg_per_t": _iron_kg(named(out, "removed_by_treatment")),
    }
    per_t = 1e3 / steel
    minutes = sum((o.p.values["wait_min"] + o.p.values["blow_min"] for _, o in chain.stages), 0.0)
    two = len(chain.stages) > 1
    return {
        "hot_metal_kg": chain.hot_metal_kg,
        "scrap_kg": scrap,
        "scrap_before_kg": chain.first.kind_kg("scrap") if two else np.nan,
        "lime_kg": chain.charged_kg(choices.lime),
        "flux_kg": chain.charged_kg(choices.magnesia_flux),
        "coolant_kg": chain.charged_kg(choices.coolant),
        "fuel_kg": chain.charged_kg(choices.fuel),
        "oxygen_Nm3": sum((o.oxygen_Nm3 for _, o in chain.stages), 0.0),
        "steel_kg": steel,
        "yield_pct": 100.0 * steel / (chain.hot_metal_kg + scrap),
        "end_temp_C": s.T_K - ZERO_C_K,
        "end_C_pct": last.steel_pct()["C"],
        "end_P_pct": last.steel_pct().get("P", 0.0),
        "end_Mn_pct": last.steel_pct().get("Mn", 0.0),
        "slag_off_P_pct": chain.first.steel_pct().get("P", 0.0) if two else np.nan,
        "slag_made_kg_per_t": (_mass(slags) - _mass(back)) * per_t,
        "slag_poured_off_kg_per_t": _mass(poured) * per_t,
        "slag_end_kg_per_t": s.slag_kg * per_t,
        "slag_back_kg_per_t": _mass(back) * per_t,
        "basicity": s.basicity,
        "slag_P2O5_pct": s.slag_pct.get("P2O5", 0.0),
        "T_Fe_pct": s.laws["T_Fe_pct"],
        **{name: kg * per_t for name, kg in lost.items()},
        "iron_lost_kg_per_t": sum(lost.values(), 0.0) * per_t,
        "cost_per_t": _cost(chain, steel),
        "CO2_gas_kg_per_t": gas * per_t,
        "CO2_materials_kg_per_t": making * per_t,
        "CO2_kg_per_t": (gas + making) * per_t,
        "heat_loss_MJ": chain.heat_loss_J / MJ,
        "minutes": minutes,
        "closure": worst_of(chain.closures()),
        "handover": np.max([h.worst() for h in chain.handovers], axis=0)
        if chain.handovers
        else np.zeros(chain.n),
    }


def practice_columns() -> dict[str, Column]:
    """Label, unit and meaning of each number of a practice."""
    per_t = "kg/t steel"
    return {
        "hot_metal_kg": Column("hot metal", "kg", "before any treatment; the same for all"),
        "scrap_kg": Column("scrap", "kg"),
        "scrap_before_kg": Column("scrap melted before slag-off", "kg"),
        "lime_kg": Column("lime", "kg"),
        "flux_kg": Column("magnesia flux", "kg"),
        "coolant_kg": Column("coolant", "kg"),
        "fuel_kg": Column("fuel", "kg"),
        "oxygen_Nm3": Column("oxygen", "Nm3"),
        "steel_kg": Column("steel tapped", "kg"),
        "yield_pct": Column("metallic yield", "%", "steel of hot metal and scrap charged"),
        "end_temp_C": Column("end temperature", "C"),
        "end_C_pct": Column("end carbon", "mass %"),
        "end_P_pct": Column("end phosphorus", "mass %"),
        "end_Mn_pct": Column("end manganese", "mass %"),
        "slag_off_P_pct": Column("phosphorus at slag-off", "mass %"),
        "slag_made_kg_per_t": Column(
            "slag made", per_t, "liquid slag poured off and at the end, less what came back"
        ),
        "slag_poured_off_kg_per_t": Column("of it poured off early", per_t),
        "slag_end_kg_per_t": Column("slag at the end", per_t),
        "slag_back_kg_per_t": Column("slag kept from the heat before", per_t),
        "basicity": Column("end CaO/SiO2", ""),
        "slag_P2O5_pct": Column("P2O5 of the end slag", "mass %"),
        "T_Fe_pct": Column("total iron of the end slag", "mass %"),
        "iron_as_oxide_kg_per_t": Column("iron oxidised to slag", per_t),
        "iron_in_droplets_kg_per_t": Column("iron droplets in slag", per_t),
        "iron_in_dust_kg_per_t": Column("iron in dust", per_t),
        "iron_ejected_kg_per_t": Column("iron ejected", per_t),
        "iron_in_treatment_kg_per_t": Column("iron lost in the treatment", per_t),
        "iron_lost_kg_per_t": Column("iron lost, all", per_t),
        "cost_per_t": Column("priced items", "currency/t steel"),
        "CO2_gas_kg_per_t": Column(
            "CO2 of the off-gas", per_t, "all carbon that leaves in the gas, burnt to CO2"
        ),
        "CO2_materials_kg_per_t": Column(
            "CO2 of materials", per_t, "making of the materials whose CO2_kg_per_t is given"
        ),
        "CO2_kg_per_t": Column("CO2", per_t),
        "heat_loss_MJ": Column("heat loss", "MJ"),
        "minutes": Column("wait, blow and pause", "min"),
        "closure": Column("worst closure of the whole", "relative"),
        "handover": Column("worst gap between stages", "relative"),
    }


def stage_rows(chain: Chain, index: int = 0) -> list[dict[str, Any]]:
    """Where each stage of one heat ends: plain numbers by name."""
    rows = []
    for name, outcome in chain.stages:
        s = outcome.state
        numbers: dict[str, Num] = {
            "temp_C": s.T_K - ZERO_C_K,
            "C_pct": s.C_pct,
            "P_pct": outcome.steel_pct().get("P", 0.0),
            "Mn_pct": outcome.steel_pct().get("Mn", 0.0),
            "L_P": s.laws["L_P"],
            "metal_kg": s.steel_kg,
            "slag_kg": s.slag_kg,
            "basicity": s.basicity,
            "T_Fe_pct": s.laws["T_Fe_pct"],
            "P2O5_pct": s.slag_pct.get("P2O5", 0.0),
            "lime_kg": outcome.charged_kg.get(outcome.heats.choices.lime, 0.0),
            "scrap_kg": outcome.kind_kg("scrap"),
            "oxygen_Nm3": outcome.oxygen_Nm3,
            "closure": worst_of(outcome.closures),
        }
        law = outcome.p.laws["phosphorus"]
        rows.append(
            {"stage": name, "law": law} | {k: float(at(x, index)) for k, x in numbers.items()}
        )
    return rows


def burnt_CO2_kg(carbon_kg: Num) -> Num:
    """CO2 of carbon burnt [kg]."""
    return carbon_kg * (molar_mass("CO2") / molar_mass("C"))
