"""The answer for a group of heats: recipe, end point, streams, balance, warnings.

Nothing is computed here that the balance has not solved; this module reads it off in the
units of the shop.
"""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass
from dataclasses import field as default
from functools import cached_property
from typing import Any

import numpy as np

from converter_calc.balance.asks import Ask
from converter_calc.balance.heat import sensible_heat_out_J
from converter_calc.balance.heats import HeatTable
from converter_calc.balance.problem import Problem
from converter_calc.balance.state import State
from converter_calc.balance.streams import (
    Closure,
    Stream,
    charged_masses,
    closures_of,
    off_gas_temperature_C,
    streams_of,
)
from converter_calc.basis.dual import Array, Num
from converter_calc.basis.elements import molar_mass
from converter_calc.basis.tolerances import CLOSURE
from converter_calc.basis.units import MJ, NM3_MOL, ZERO_C_K
from converter_calc.data.tables import read_toml
from converter_calc.laws import carbon_oxygen, manganese, phosphorus, sulphur

NAMED_LAWS: dict[str, Any] = {
    "phosphorus": phosphorus,
    "manganese": manganese,
    "sulphur": sulphur,
    "carbon_oxygen": carbon_oxygen,
}


@dataclass
class Caution:
    """A warning for some of n heats: where it holds, and its text with values per heat."""

    code: str
    field: str
    mask: Any
    text: str
    values: dict[str, Num] = default(default_factory=dict)

    def message(self, index: int) -> str:
        """Text for one heat."""
        return self.text.format(**{key: float(at(x, index)) for key, x in self.values.items()})


def laws_of(p: Problem) -> dict[str, dict[str, str]]:
    """Law used for each quantity: name and source."""
    found = {}
    for topic, name in p.laws.items():
        module = NAMED_LAWS.get(topic)
        if module is None:
            source = "constant or by iron oxide: common practice; equilibrium: data/minor.toml"
        else:
            note = module.describe(name)
            source = f"{note.source} ({note.known})"
        found[topic] = {"name": name, "source": source}
    for topic in ("iron_oxide", "magnesia", "lime"):
        data = read_toml(topic + ".toml")
        found[topic] = {"name": topic, "source": f"{data['source']} ({data['known']})"}
    found["iron_oxide"]["name"] = p.blowing
    return found


def at(x: Num, index: int) -> Any:
    """Value of one heat out of an array or a number that holds for all."""
    array = np.asarray(x)
    return array[index] if array.ndim and array.shape[0] > 1 else array.reshape(-1)[0]


def spread(x: Num, n: int) -> Array:
    """X as an array of n heats."""
    return np.array(np.broadcast_to(np.asarray(x, dtype=float), (n,)))


@dataclass
class Outcome:
    """Solved heats that were asked the same question.

    ids : names of the heats. ask : what was unknown. p, x, state : givens, unknowns and the
    state at the answer. converged : per heat. status : "solved", "infeasible" or
    "not converged" per heat; binding, frees : why, and what would help; nearest : the end
    point that can be reached. cautions : warnings. expected : (value, deviation) of quantities of
    the end by what heats like these have shown, where a log told. wanted : aims of the heats
    where the balance was aimed elsewhere.
    """

    heats: HeatTable
    ask: Ask
    p: Problem
    x: dict[str, Array]
    state: State
    converged: Array
    residual: Array
    steps: Array
    status: list[str] = default(default_factory=list)
    binding: list[str] = default(default_factory=list)
    frees: list[list[str]] = default(default_factory=list)
    nearest: list[dict[str, float]] = default(default_factory=list)
    cautions: list[Caution] = default(default_factory=list)
    expected: dict[str, tuple[Num, Num]] = default(default_factory=dict)
    wanted: dict[str, Num] = default(default_factory=dict)

    @property
    def n(self) -> int:
        """Number of heats."""
        return self.p.n

    @cached_property
    def streams(self) -> list[Stream]:
        """All streams in and out."""
        return streams_of(self.p, self.state)

    @cached_property
    def closures(self) -> dict[str, Closure]:
        """Closure of each element [kg] and of energy [MJ]."""
        return closures_of(self.streams, self.state.heat_loss_J, self.n)

    @cached_property
    def charged_kg(self) -> dict[str, Num]:
        """Mass of each material charged as the shop's scales show it [kg]."""
        materials = self.heats.materials
        return {
            name: self.p.read(name, kg) if materials[name].kind == "scrap" else kg
            for name, kg in charged_masses(self.p, self.state).items()
        }

    @property
    def hot_metal_kg(self) -> Num:
        """Hot metal charged as the shop's scale shows it [kg]."""
        return self.p.read("hot_metal", self.state.hot_metal_kg)

    @property
    def oxygen_Nm3(self) -> Num:
        """Oxygen blown as the shop's meter shows it [Nm3]."""
        return self.p.read("oxygen", self.state.oxygen_Nm3)

    def kind_kg(self, kind: str) -> Num:
        """Mass of all materials of a kind charged [kg]."""
        materials = self.heats.materials
        return sum(
            (kg for name, kg in self.charged_kg.items() if materials[name].kind == kind), 0.0
        )

    def recipe(self) -> dict[str, Num]:
        """What to charge [kg] and to blow [Nm3], as the shop's instruments show it.

        What comes along unasked is left out.
        """
        unasked = ("carryover_slag", "retained_slag", "lining")
        masses = {name: kg for name, kg in self.charged_kg.items() if name not in unasked}
        recipe: dict[str, Num] = {"hot_metal_kg": self.hot_metal_kg}
        recipe["scrap_total_kg"] = self.kind_kg("scrap")
        recipe |= {name + "_kg": kg for name, kg in masses.items()}
        recipe["oxygen_Nm3"] = self.oxygen_Nm3
        if self.state.stirring_kg:
            recipe["stirring_gas_Nm3"] = self.p.values["stirring_gas_Nm3"]
        return recipe

    def steel_pct(self) -> dict[str, Num]:
        """Analysis of the steel [mass %]."""
        s = self.state
        return {el: kg * (100.0 / s.metal_kg) for el, kg in s.metal_species_kg.items()}

    def slag_pct(self) -> dict[str, Num]:
        """Analysis of the liquid slag [mass %]."""
        s = self.state
        return {name: kg * (100.0 / s.slag_kg) for name, kg in s.slag_species_kg.items()}

    def end_point(self) -> dict[str, Any]:
        """Where the blow ends."""
        s = self.state
        return {
            "temperature_C": s.T_K - ZERO_C_K,
            "steel_kg": s.steel_kg,
            "steel_pct": self.steel_pct(),
            "slag_kg": s.slag_kg,
            "slag_pct": self.slag_pct(),
            "dissolved_oxygen_ppm": s.O_pct * 1e4,
            "basicity": s.basicity,
        }

    def gas_Nm3(self) -> dict[str, Num]:
        """Volume of each gas of the off-gas [Nm3]."""
        return {
            gas: kg * (1e3 / (molar_mass(gas) * NM3_MOL)) for gas, kg in self.state.gas_kg.items()
        }

    def heat_input_MJ(self) -> Num:
        """Heat supplied: what the outputs hold above 25 °C plus the loss [MJ]."""
        return (sensible_heat_out_J(self.state) + self.state.heat_loss_J) / MJ

    def cost(self) -> Num:
        """Cost of what has a price, per tonne of steel, in the shop's currency.

        NaN where nothing charged has a price.
        """
        found: Num = None
        kg = self.recipe()
        priced = [
            (kg[name + "_kg"] * 1e-3, self.heats.materials[name].price_per_t)
            for name in self.charged_kg
            if name + "_kg" in kg
        ]
        priced += [
            (self.hot_metal_kg * 1e-3, self.p.get("price_hot_metal_per_t")),
            (self.oxygen_Nm3, self.p.get("price_oxygen_per_Nm3")),
        ]
        for amount, price in priced:
            if price is not None and np.all(np.isfinite(price)):
                part = amount * price
                found = part if found is None else found + part
        return np.nan if found is None else found / (self.state.steel_kg * 1e-3)

    def columns(self) -> dict[str, Any]:
        """The table of results, a column a quantity, arrays (n,), some of them read-only views."""
        s, n = self.state, self.n
        table: dict[str, Any] = {"heat_id": np.array(self.heats.ids, dtype=object)}
        table["status"] = np.array(self.status, dtype=object)
        numbers: dict[str, Num] = self.recipe()
        more: dict[str, Num] = {
            "end_temp_C": s.T_K - ZERO_C_K,
            **{f"end_{el}_pct": pct for el, pct in self.steel_pct().items() if el != "O"},
            "end_O_ppm": s.O_pct * 1e4,
            "steel_kg": s.steel_kg,
            "yield_pct": 100.0 * s.steel_kg / (self.hot_metal_kg + self.kind_kg("scrap")),
            "slag_kg": s.slag_kg,
            **{f"slag_{name}_pct": pct for name, pct in self.slag_pct().items()},
            "slag_T_Fe_pct": s.laws["T_Fe_pct"],
            "basicity": s.basicity,
            "undissolved_lime_kg": s.undissolved_kg,
            "droplets_kg": s.droplets_kg,
            "dust_kg": sum(s.dust_kg.values()),
            "off_gas_Nm3": sum(self.gas_Nm3().values()),
            "off_gas_temp_C": off_gas_temperature_C(self.p, s),
            "heat_loss_MJ": s.heat_loss_J / MJ,
            **{name: s.laws[name] for name in ("L_P", "L_Mn", "L_S") if name in s.laws},
            "cost_per_t": self.cost(),
        }
        table |= {
            name: np.broadcast_to(np.asarray(x, dtype=float), (n,))
            for name, x in (numbers | more).items()
        }
        table["warnings"] = self.warning_codes()
        return table

    def warning_codes(self) -> Any:
        """Codes of the warnings of each heat, joined by spaces (array of text)."""
        bits = np.zeros(self.n, dtype=np.int64)
        for place, caution in enumerate(self.cautions):
            bits |= np.broadcast_to(caution.mask, (self.n,)).astype(np.int64) << place
        kinds, inverse = np.unique(bits, return_inverse=True)
        texts = [
            " ".join(c.code for place, c in enumerate(self.cautions) if kind >> place & 1)
            for kind in kinds.tolist()
        ]
        return np.array(texts, dtype=object)[inverse]

    def warnings(self, index: int) -> list[dict[str, str]]:
        """Warnings of one heat: code, field, message."""
        texts = [
            {"code": "material", "field": "materials", "message": text}
            for text in self.heats.warnings
        ]
        return texts + [
            {"code": c.code, "field": c.field, "message": c.message(index)}
            for c in self.cautions
            if bool(at(c.mask, index))
        ]

    def document(self, index: int = 0) -> dict[str, Any]:
        """One heat as plain numbers, ready for JSON."""

        def plain(x: Any) -> Any:
            if isinstance(x, Mapping):
                return {key: plain(part) for key, part in x.items()}
            number = float(at(x, index))
            return number if np.isfinite(number) else None  # CaO/SiO2 of a slag without silica

        streams = [
            {
                "name": stream.name,
                "side": stream.side,
                "kind": stream.kind,
                "temperature_C": plain(stream.temperature_C),
                "mass_kg": plain(stream.mass_kg),
                "species_kg": {
                    name: kg for name, kg in plain(stream.species_kg).items() if kg != 0.0
                },
                "enthalpy_MJ": plain(stream.enthalpy_J) / MJ,
            }
            for stream in self.streams
            if float(at(stream.mass_kg, index)) != 0.0
        ]
        balance: dict[str, Any] = {"elements": {}}
        for name, closure in self.closures.items():
            unit = "MJ" if name == "energy" else "kg"
            entry = {
                f"in_{unit}": plain(closure.inflow),
                f"out_{unit}": plain(closure.outflow),
                "relative_closure": plain(closure.relative),
            }
            (balance if name == "energy" else balance["elements"])[name] = entry
        told: dict[str, Any] = {}
        if self.expected:
            told["expected_end"] = plain(
                {name: {"value": x, "deviation": sd} for name, (x, sd) in self.expected.items()}
            )
        if self.wanted:
            told["wanted"] = plain(self.wanted)
        return told | {
            "heat_id": self.heats.ids[index],
            "status": self.status[index],
            "recipe": plain(self.recipe()),
            "end_point": plain(self.end_point()),
            "streams": streams,
            "heat_loss_MJ": plain(self.state.heat_loss_J) / MJ,
            "heat_input_MJ": plain(self.heat_input_MJ()),
            "balance": balance,
            "laws": {
                "chosen": laws_of(self.p),
                "values": plain(self.state.laws),
            },
            "off_gas_Nm3": plain(self.gas_Nm3()),
            "solver": {
                "residual": float(self.residual[index]),
                "steps": int(self.steps[index]),
                "converged": bool(self.converged[index]),
            },
            "warnings": self.warnings(index),
        }

    def check_closures(self) -> Array:
        """True for heats whose every closure is within the promise."""
        good = np.ones(self.n, dtype=bool)
        for closure in self.closures.values():
            good &= np.abs(np.broadcast_to(closure.relative, (self.n,))) <= CLOSURE
        return good
