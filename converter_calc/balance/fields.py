"""Checks of single values against the schema, each fault one line."""

from __future__ import annotations

import math
from collections.abc import Mapping, Sequence
from typing import Any

from converter_calc.balance.schema import Parameter, nearest
from converter_calc.basis.errors import Fault
from converter_calc.basis.units import ZERO_C_K

LONGEST_SHOWN = 60


def show(given: Any) -> str:
    """A value as the user wrote it, cut short."""
    try:
        text = repr(given)
    except ValueError:  # an integer of thousands of digits has no text
        return "a very long number"
    text = text if text.isprintable() else ascii(text)
    return text if len(text) <= LONGEST_SHOWN else text[: LONGEST_SHOWN - 3] + "..."


def take_number(given: Any, row: Parameter, place: str, faults: list[Fault]) -> float | None:
    """`given` as a number within the bounds of `row`; None and a fault where it is not."""
    if isinstance(given, bool) or not isinstance(given, int | float):
        faults.append(Fault(place, f"must be a number, given {show(given)}"))
        return None
    try:
        number = float(given)
    except OverflowError:
        number = math.inf
    if not math.isfinite(number):
        faults.append(Fault(place, f"must be a finite number, given {show(given)}"))
        return None
    if not row.low <= number <= row.high:
        faults.append(Fault(place, outside(number, row)))
        return None
    return number


def outside(number: float, row: Parameter) -> str:
    """The sentence for a number out of bounds, with a guess at the unit where one fits."""
    unit = f" {row.unit}" if row.unit else ""
    text = f"must be {row.low:g} to {row.high:g}{unit}, given {number:g}"
    if number < 0.0 <= row.low:
        return f"must not be negative ({row.low:g} to {row.high:g}{unit}), given {number:g}"
    guesses: dict[str, float] = {}
    if row.unit == "C":
        guesses = {"K": number - ZERO_C_K, "°F": (number - 32.0) / 1.8}
    elif row.unit == "kg":
        guesses = {"t": number * 1000.0}
    for guess, value in guesses.items():
        if row.low <= value <= row.high:
            return f"{text} (is it in {guess}?)"
    return text


def take_text(given: Any, allowed: Sequence[str], place: str, faults: list[Fault]) -> str | None:
    """`given` as one of the texts allowed (any text where none are listed)."""
    if not isinstance(given, str):
        faults.append(Fault(place, f"must be text, given {show(given)}"))
        return None
    if allowed and given not in allowed:
        message = f"{show(given)} is not known (allowed: {', '.join(allowed)})"
        faults.append(Fault(place, message + nearest(given, allowed)))
        return None
    return given


def take_table(given: Any, place: str, faults: list[Fault]) -> Mapping[str, Any] | None:
    """`given` as a table with text keys."""
    if not isinstance(given, Mapping):
        faults.append(Fault(place, f"must be a table, given {show(given)}"))
        return None
    if not all(isinstance(key, str) for key in given):
        faults.append(Fault(place, "the keys of a table must be text"))
        return None
    return given


def take_shares(
    given: Any, place: str, faults: list[Fault], unit: str = "share"
) -> dict[str, float] | None:
    """`given` as a table of finite numbers that are not negative, one above zero."""
    table = take_table(given, place, faults)
    if table is None:
        return None
    row = Parameter("", "", "", "number", "", "", 0.0, 1e6, (), "", "")
    shares: dict[str, float] = {}
    before = len(faults)
    for key, part in table.items():
        number = take_number(part, row, f"{place}.{key}", faults)
        if number is not None:
            shares[key] = number
    if len(faults) > before:
        return None
    if not sum(shares.values()) > 0.0:
        faults.append(Fault(place, f"holds no {unit} above zero"))
        return None
    return shares
