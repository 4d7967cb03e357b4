"""Tables of one solved heat: recipe, end point, heat and element balance, inputs used.

Each is a DataFrame read off an Outcome: what the pictures show, as numbers.
"""

from __future__ import annotations

from collections.abc import Mapping
from typing import TYPE_CHECKING, Any, NamedTuple

import numpy as np

from converter_calc.balance.charge import elements_of
from converter_calc.balance.heats import HeatTable
from converter_calc.balance.schema import parameters, yield_parameter
from converter_calc.basis.units import MJ, ZERO_C_K
from converter_calc.planning.heat_terms import heat_terms
from converter_calc.planning.outcome import Outcome, at

if TYPE_CHECKING:
    import pandas as pd

#: Streams out, gathered as the shop speaks of them.
DESTINATIONS = {
    "steel": "steel",
    "slag": "slag",
    "off_gas": "gas",
    "dust": "dust",
    "iron_droplets": "droplets and ejections",
    "ejections": "droplets and ejections",
    "undissolved_lime": "undissolved lime",
}
#: Lines of the heat balance gathered for the flow picture: start of the label -> name.
FLOWS = (
    ("heat content of hot metal", "hot metal"),
    ("heat content of off gas", "off-gas"),
    ("heat content of dust", "dust"),
    ("heat content of steel", "steel"),
    ("heat content of iron droplets", "iron in slag, ejections"),
    ("heat content of ejections", "iron in slag, ejections"),
    ("heat content of slag", "slag"),
    ("heat content of undissolved lime", "slag"),
    ("heat content of", "other charge"),
    ("oxidation of carbon", "carbon"),
    ("oxidation of silicon", "silicon"),
    ("oxidation of manganese", "manganese"),
    ("oxidation of phosphorus", "phosphorus"),
    ("oxidation of iron", "iron to oxide"),
    ("oxidation of", "other metals"),
    ("slag formation", "slag formation, other reactions"),
    ("taking carbonates", "slag formation, other reactions"),
    ("other reactions", "slag formation, other reactions"),
    ("heat loss", "heat loss"),
)
#: Lines that take heat as a rule.
TAKEN_BY = {f"heat content of {name.replace('_', ' ')}" for name in DESTINATIONS} | {"heat loss"}
#: Name of a flow that stands on "out", where another name says it better.
AS_TAKEN = {
    "iron to oxide": "iron oxide reduced, net",
    "slag formation, other reactions": "other reactions",
    "hot metal": "hot metal, below 25 °C",
    "other charge": "charge below 25 °C",
}


class RecipeRow(NamedTuple):
    """One line of the recipe: amount in `unit` (kg or Nm³), per_t [unit/t steel]."""

    name: str
    amount: float
    unit: str
    per_t: float


class EndPointRow(NamedTuple):
    """One line of the end point; aim is NaN where there is none."""

    name: str
    value: float
    unit: str
    aim: float


class SlagRow(NamedTuple):
    """One oxide of the liquid slag [kg, mass %]."""

    oxide: str
    kg: float
    pct: float


def recipe_rows(outcome: Outcome, index: int = 0) -> list[RecipeRow]:
    """What to charge and blow; what is not charged is left out."""
    steel_t = float(at(outcome.state.steel_kg, index)) * 1e-3
    rows = []
    for key, x in outcome.recipe().items():
        amount = float(at(x, index))
        if amount == 0.0 and key != "hot_metal_kg":
            continue
        name, unit = key.rsplit("_", 1)
        shown = "scrap, all" if key == "scrap_total_kg" else name.replace("_", " ")
        rows.append(RecipeRow(shown, amount, "Nm³" if unit == "Nm3" else unit, amount / steel_t))
    return rows


def recipe_table(outcome: Outcome, index: int = 0) -> pd.DataFrame:
    """What to charge and blow: name, amount, unit (kg or Nm³), per_t [unit/t steel]."""
    import pandas as pd

    return pd.DataFrame(recipe_rows(outcome, index), columns=list(RecipeRow._fields))


def end_point_rows(outcome: Outcome, index: int = 0) -> list[EndPointRow]:
    """Where the blow ends, beside the aims."""
    s, values = outcome.state, outcome.heats.values
    rows: list[tuple[str, Any, str, Any]] = [
        ("temperature", s.T_K - ZERO_C_K, "°C", values["aim_temp_C"])
    ]
    for element, pct in sorted(outcome.steel_pct().items(), key=lambda item: _order(item[0])):
        if element not in ("Fe", "O"):
            rows.append((element, pct, "%", values.get(f"aim_{element}_pct", np.nan)))
    rows += [
        ("dissolved oxygen", s.O_pct * 1e4, "ppm", np.nan),
        ("steel", s.steel_kg, "kg", values["aim_steel_kg"]),
        ("slag", s.slag_kg, "kg", np.nan),
        ("CaO/SiO₂", s.basicity, "", values["aim_basicity"]),
    ]
    return [
        EndPointRow(name, float(at(x, index)), unit, float(at(aim, index)))
        for name, x, unit, aim in rows
    ]


def end_point_table(outcome: Outcome, index: int = 0) -> pd.DataFrame:
    """Where the blow ends: name, value, unit, aim (NaN where none)."""
    import pandas as pd

    return pd.DataFrame(end_point_rows(outcome, index), columns=list(EndPointRow._fields))


def slag_rows(outcome: Outcome, index: int = 0) -> list[SlagRow]:
    """Liquid slag, richest oxide first."""
    kg = {name: float(at(x, index)) for name, x in outcome.state.slag_species_kg.items()}
    total = sum(kg.values())
    rows = [SlagRow(name, x, 100.0 * x / total) for name, x in kg.items() if x != 0.0]
    return sorted(rows, key=lambda row: -row.pct)


def slag_table(outcome: Outcome, index: int = 0) -> pd.DataFrame:
    """Liquid slag: oxide, kg, pct [mass %], richest first."""
    import pandas as pd

    return pd.DataFrame(slag_rows(outcome, index), columns=list(SlagRow._fields))


def heat_balance_table(outcome: Outcome, index: int = 0) -> pd.DataFrame:
    """Every term of the heat balance above 25 °C, supplied (+) or taken (−); sums to zero.

    Columns group, term, heat_MJ, heat_MJ_per_t [MJ/t steel], share_pct [% of the heat
    supplied, which is what the outputs hold and the loss].
    """
    rows = [(t.group, t.label, float(at(t.heat_MJ, index))) for t in heat_terms(outcome)]
    return _with_shares(outcome, index, rows, ["group", "term", "heat_MJ"])


def heat_flow_table(outcome: Outcome, index: int = 0) -> pd.DataFrame:
    """The heat balance gathered to few flows, none negative: what takes heat stands on "out".

    Columns side ("in" or "out"), name, heat_MJ, heat_MJ_per_t [MJ/t steel], share_pct [% of
    the heat supplied]. The sides are equal; they pass 100 % where a reaction takes heat.
    """
    sums: dict[str, float] = {}
    for term in heat_terms(outcome):
        name = next(name for start, name in FLOWS if term.label.startswith(start))
        sums[name] = sums.get(name, 0.0) + float(at(term.heat_MJ, index))
    usual_out = {name for start, name in FLOWS if start in TAKEN_BY}
    rows = []
    for name, x in sums.items():
        if x > 0.0:
            rows.append(("in", name, x))
        elif x < 0.0:
            other = AS_TAKEN.get(name, f"{name}, takes heat")
            rows.append(("out", name if name in usual_out else other, -x))
    rows.sort(key=lambda row: (row[0], -row[2]))
    return _with_shares(outcome, index, rows, ["side", "name", "heat_MJ"])


def element_balance_table(outcome: Outcome, index: int = 0) -> pd.DataFrame:
    """Where each element goes: element, in_kg, out_kg, relative_closure, then % of it per place.

    Places: steel, slag, gas, dust, droplets and ejections, undissolved lime, each as
    `to <place>` [% of the element that leaves].
    """
    import pandas as pd

    places = list(dict.fromkeys(DESTINATIONS.values()))
    out: dict[str, dict[str, float]] = {}
    for stream in outcome.streams:
        if stream.side != "out":
            continue
        kg = {name: float(at(x, index)) for name, x in stream.species_kg.items()}
        for element, mass in elements_of(kg).items():
            gone = out.setdefault(element, dict.fromkeys(places, 0.0))
            gone[DESTINATIONS[stream.name]] += mass
    rows = []
    for element, closure in outcome.closures.items():
        if element == "energy":
            continue
        inflow, outflow = float(at(closure.inflow, index)), float(at(closure.outflow, index))
        if inflow == 0.0 and outflow == 0.0:
            continue
        row: dict[str, Any] = {"element": element, "in_kg": inflow, "out_kg": outflow}
        row["relative_closure"] = float(at(closure.relative, index))
        row |= {f"to {p}": 100.0 * x / outflow for p, x in out.get(element, {}).items()}
        rows.append(row)
    return pd.DataFrame(rows)


def energy_closure(outcome: Outcome, index: int = 0) -> dict[str, float]:
    """Energy in and out [MJ, zero: pure elements at 25 °C] and its relative closure."""
    closure = outcome.closures["energy"]
    parts = {"in_MJ": closure.inflow, "out_MJ": closure.outflow, "relative": closure.relative}
    return {name: float(at(x, index)) for name, x in parts.items()}


def streams_table(outcome: Outcome, index: int = 0) -> pd.DataFrame:
    """Every stream: name, side, kind, temperature_C, mass_kg, enthalpy_MJ, then kg by species."""
    import pandas as pd

    rows = []
    for stream in outcome.streams:
        mass = float(at(stream.mass_kg, index))
        if mass == 0.0:
            continue
        row: dict[str, Any] = {"name": stream.name, "side": stream.side, "kind": stream.kind}
        row["temperature_C"] = float(at(stream.temperature_C, index))
        row |= {"mass_kg": mass, "enthalpy_MJ": float(at(stream.enthalpy_J, index)) / MJ}
        rows.append(row | {f"{name}_kg": float(at(kg, index))
                           for name, kg in stream.species_kg.items()})  # fmt: skip
    return pd.DataFrame(rows)


def warnings_table(outcome: Outcome, index: int = 0) -> pd.DataFrame:
    """Warnings of one heat: code, field, message."""
    import pandas as pd

    return pd.DataFrame(outcome.warnings(index), columns=["code", "field", "message"])


def inputs_table(heats: HeatTable, index: int = 0) -> pd.DataFrame:
    """Every input that the calculation used, defaults included: field, value, unit, description.

    `value` holds numbers and texts. What is not given and has no default is left out.
    """
    import pandas as pd

    rows: list[tuple[str, Any, str, str]] = [("heat_id", heats.ids[index], "", "Name of the heat")]
    known = parameters()
    for name, array in heats.values.items():
        value = float(array[index])
        if np.isfinite(value) and not name.startswith("hm_"):
            row = known.get(name) or yield_parameter(name.removesuffix("_yield_factor"))
            rows.append((row.place, value, row.unit, row.description))
    for element, pct in heats.hm_pct.items():
        value = float(pct[index])
        if value != 0.0:
            rows.append(
                (f"hot_metal.{element}_pct", value, "mass %", f"{element} in the hot metal")
            )
    for name, kg in heats.masses_kg.items():
        if np.isfinite(kg[index]):
            rows.append((f"charge.{name}_kg", float(kg[index]), "kg", f"{name} charged"))
    rows += _choices(heats)
    return pd.DataFrame(rows, columns=["field", "value", "unit", "description"])


def _choices(heats: HeatTable) -> list[tuple[str, Any, str, str]]:
    choices, known = heats.choices, parameters()
    texts: dict[str, Any] = {
        "scrap_mix": _shares(choices.scrap_mix),
        "scrap_order": ", ".join(choices.scrap_order),
        "dust_pct": _shares(choices.dust_species),
        "grade": heats.grade,
        **{
            name: getattr(choices, name)
            for name in ("lime", "magnesia_flux", "coolant", "fuel", "ask", "blowing")
        },
    }
    rows: list[tuple[str, Any, str, str]] = [
        (known[name].place, text, "", known[name].description)
        for name, text in texts.items()
        if text
    ]
    rows += [(f"law.{topic}", law, "", f"Law of {topic}") for topic, law in choices.laws.items()]
    return rows


def _shares(shares: Mapping[str, float]) -> str:
    return ", ".join(f"{name} {100.0 * share:.4g} %" for name, share in shares.items())


def _with_shares(
    outcome: Outcome, index: int, rows: list[tuple[str, str, float]], columns: list[str]
) -> pd.DataFrame:
    import pandas as pd

    supplied = float(at(outcome.heat_input_MJ(), index))
    steel_t = float(at(outcome.state.steel_kg, index)) * 1e-3
    table = pd.DataFrame(rows, columns=columns)
    table["heat_MJ_per_t"] = table["heat_MJ"] / steel_t
    table["share_pct"] = table["heat_MJ"] * (100.0 / supplied)
    return table


def _order(element: str) -> tuple[int, str]:
    first = ("C", "Si", "Mn", "P", "S")
    return (first.index(element) if element in first else len(first), element)
