"""Numbers as people type them, and the labels of the fields they type them into."""

from __future__ import annotations

import math
import re
from functools import cache

from converter_calc.balance.schema import (
    Parameter,
    element_parameter,
    is_element_column,
    material_parameter,
    parameters,
)

#: Shown in place of the table's words where a shorter trade word says the same.
LABELS = {
    "hot_metal_kg": "Hot metal",
    "hot_metal_temp_C": "Temperature",
    "aim_temp_C": "End temperature",
    "aim_C_pct": "End carbon",
    "aim_P_pct": "Most phosphorus",
    "aim_S_pct": "Most sulphur",
    "aim_Mn_pct": "Most manganese",
    "aim_steel_kg": "Steel to tap",
    "aim_basicity": "Least CaO/SiO₂",
    "aim_MgO_pct": "MgO of the slag",
    "oxygen_Nm3": "Oxygen blown",
    "scrap_kg": "Scrap by the mix",
    "scrap_share_pct": "Scrap share",
    "stirring_gas_Nm3": "Stirring gas",
    "retained_slag_kg": "Retained slag",
    "wait_min": "Wait since last tap",
    "blow_min": "Blow",
    "slag_off_share_pct": "First slag poured off",
    "slag_off_temp_C": "Metal at slag-off",
    "slag_off_C_pct": "Carbon at slag-off",
    "slag_off_basicity": "First slag, CaO/SiO₂",
    "slag_off_T_Fe_pct": "First slag, total iron",
    "slag_off_MgO_pct": "First slag, MgO",
    "slag_off_P_approach": "P approach at slag-off",
    "slag_off_scrap_kg": "Scrap before slag-off",
    "slag_off_blow_share_pct": "Blow before slag-off",
    "slag_off_pause_min": "Pause for slag-off",
    "kept_slag_share_pct": "End slag kept",
    "kept_slag_temp_C": "Kept slag, temperature",
    "kept_slag_mass_kg": "Kept slag, given mass",
    "pretreated_P_pct": "P after treatment",
    "pretreated_Si_pct": "Si after treatment",
    "pretreated_S_pct": "S after treatment",
    "pretreated_C_loss_pct": "Carbon lost by it",
    "pretreated_iron_loss_pct": "Iron lost by it",
    "pretreated_temp_drop_C": "Temperature lost by it",
    "pretreated_cost_per_t": "Cost of treatment",
    "pretreated_CO2_kg_per_t": "CO₂ of treatment",
}
UNITS = {"C": "°C", "mass %": "%", "Nm3": "Nm³", "currency/Nm3": "currency/Nm³", "m3": "m³",
         "kg/m3": "kg/m³", "per t": "currency/t"}  # fmt: skip
MOST_SIGNS = 40
_SPACES = re.compile(r"[\s\u00a0\u202f]")
_GROUPED = re.compile(r"[+-]?\d{1,3}([\s\u00a0\u202f]\d{3})+([.,]\d+)?")
_NUMBER = re.compile(r"[+-]?(\d+\.?\d*|\.\d+)([eE][+-]?\d{1,2})?")
_COMMA = re.compile(r"[+-]?(\d+,?\d*|,\d+)([eE][+-]?\d{1,2})?")
_UNCLEAR = re.compile(r"[+-]?[1-9]\d{0,2},\d{3}")


def parse_number(text: str) -> float:
    """The number a person typed: decimal point or decimal comma, spaces between thousands.

    Raises ValueError, with a message to show, for anything else, and for a comma that could
    as well stand between thousands ("1,350").
    """
    given = text.strip()
    shown = given if len(given) <= MOST_SIGNS else given[:MOST_SIGNS] + " …"
    if _GROUPED.fullmatch(given):
        given = _SPACES.sub("", given)
    if len(given) <= MOST_SIGNS:
        if _UNCLEAR.fullmatch(given):
            both = given.replace(",", ""), given.replace(",", ".")
            raise ValueError(f"{shown!r} could be {both[0]} or {both[1]}; write a decimal point")
        if _NUMBER.fullmatch(given) or _COMMA.fullmatch(given):
            number = float(given.replace(",", "."))
            if math.isfinite(number):
                return number
    raise ValueError(f"{shown!r} is no number")


def number_text(x: float) -> str:
    """A number as it is written into a field: every digit, no needless zeros."""
    text = repr(float(x))
    return text.removesuffix(".0")


def unit_of(row: Parameter) -> str:
    """Unit as it is shown."""
    return UNITS.get(row.unit, row.unit)


@cache
def row_of(name: str) -> Parameter:
    """The input of a flat name: of the table, an element, or the mass of a material [kg]."""
    if name in parameters():
        return parameters()[name]
    if is_element_column(name):
        return element_parameter(name[3:-4])
    return material_parameter(name.removesuffix("_kg"))


@cache
def label_of(name: str) -> str:
    """Label of a field, its unit included; plain text."""
    row = row_of(name)
    if is_element_column(name):
        label = name[3:-4]
    elif name in LABELS:
        label = LABELS[name]
    elif name not in parameters():
        label = name.removesuffix("_kg").replace("_", " ").capitalize()
    else:
        label = _words(row)
    unit = unit_of(row)
    return f"{label}, {unit}" if unit else label


def _words(row: Parameter) -> str:
    """The key of a field in words, unit endings cut off."""
    key = re.sub(r"_(pct|kg_per_t|MJ_per_t|MJ_per_min|MJ|kg|C|Nm3|m3|min|ppm|atm)$", "", row.key)
    if row.section == "price":
        key = re.sub(r"_per_(t|Nm3)$", "", row.key)
    words = key.replace("_", " ").replace("temp", "temperature")
    return words[:1].upper() + words[1:]


@cache
def help_of(name: str) -> str | None:
    """Short help of a field: what it is and its range; None where the label says it all."""
    row = row_of(name)
    if is_element_column(name) or name not in parameters():
        return None
    return f"{row.description}. {range_text(row)}."


def range_text(row: Parameter) -> str:
    """The allowed range in words."""
    unit = f" {unit_of(row)}" if row.unit else ""
    return f"{number_text(row.low)} to {number_text(row.high)}{unit}"


def field_fault(name: str, text: str) -> str | None:
    """What is wrong with a filled field, or None."""
    return number_fault(row_of(name), text)


def number_fault(row: Parameter, text: str) -> str | None:
    """What is wrong with a text as a number of a row of the schema, or None."""
    try:
        number = parse_number(text)
    except ValueError as error:
        return str(error)
    if not row.low <= number <= row.high:
        return f"{number_text(number)} is outside {range_text(row)}"
    return None
