"""Atomic weights and chemical formulas."""

from __future__ import annotations

import csv
import difflib
import re
from collections.abc import Iterator
from functools import cache
from importlib.resources import files

from converter_calc.basis.errors import DataError

_TOKEN = re.compile(r"([A-Z][a-z]?|\(|\))(\d+(?:\.\d+)?|\.\d+)?")


@cache
def _atomic_weights() -> dict[str, float]:
    text = files("converter_calc.data").joinpath("elements.csv").read_text(encoding="utf-8")
    lines = [line for line in text.splitlines() if line and not line.startswith("#")]
    return {row["symbol"]: float(row["atomic_weight"]) for row in csv.DictReader(lines)}


def known_elements() -> tuple[str, ...]:
    """Symbols of all elements that have an atomic weight, in the order of the table."""
    return tuple(_atomic_weights())


def atomic_weight(symbol: str) -> float:
    """Standard atomic weight of an element [g/mol].

    Raises DataError for a symbol that is not in data/elements.csv. Source: IUPAC, named in
    that file.
    """
    weights = _atomic_weights()
    if symbol not in weights:
        near = difflib.get_close_matches(symbol.capitalize(), weights, n=1)
        hint = f"; did you mean {near[0]}?" if near else ""
        raise DataError(f"no atomic weight for element '{symbol}'{hint}")
    return weights[symbol]


def _unreadable(formula: str, why: str) -> DataError:
    return DataError(f"'{formula}' is not a chemical formula: {why}")


def _tokens(formula: str) -> Iterator[tuple[str, float, bool]]:
    """Symbols and brackets with the number behind each, and whether one stands there."""
    place = 0
    while place < len(formula):
        token = _TOKEN.match(formula, place)
        if token is None:
            why = f"'{formula[place]}' at position {place + 1} is not expected"
            raise _unreadable(formula, why)
        symbol, number = token.group(1), token.group(2)
        if number and float(number) == 0.0:
            raise _unreadable(formula, f"'{symbol}' is taken zero times")
        yield symbol, float(number or 1.0), bool(number)
        place = token.end()


@cache
def _parsed(formula: str) -> tuple[tuple[str, float], ...]:
    stack: list[dict[str, float]] = [{}]
    for symbol, count, numbered in _tokens(formula):
        if symbol == "(":
            if numbered:
                raise _unreadable(formula, "a number follows an opening bracket")
            stack.append({})
        elif symbol == ")":
            if len(stack) == 1:
                raise _unreadable(formula, "a closing bracket has no opening one")
            if not stack[-1]:
                raise _unreadable(formula, "a bracket is empty")
            for element, atoms in stack.pop().items():
                stack[-1][element] = stack[-1].get(element, 0.0) + atoms * count
        else:
            atomic_weight(symbol)
            stack[-1][symbol] = stack[-1].get(symbol, 0.0) + count
    if len(stack) > 1:
        raise _unreadable(formula, "a bracket is not closed")
    if not stack[0]:
        raise _unreadable(formula, "it is empty")
    return tuple(stack[0].items())


def parse_formula(formula: str) -> dict[str, float]:
    """Atoms of each element in a chemical formula.

    Parameters
    ----------
    formula : like "CaO", "Ca3(PO4)2", "Fe0.947O"; brackets may be nested, numbers may have
        decimals. Charges, hydration dots and spaces are not read.

    Returns
    -------
    dict of atoms [mol/mol] by element symbol, in the order of the formula (a new one each time).

    Raises DataError, naming the formula, if it cannot be read or holds an unknown element.
    Source: common chemical notation (IUPAC).
    """
    return dict(_parsed(formula))


@cache
def molar_mass(formula: str) -> float:
    """Molar mass of a formula [g/mol]; errors as for `parse_formula`.

    Source: sum of the standard atomic weights (IUPAC, data/elements.csv).
    """
    return sum(atoms * atomic_weight(element) for element, atoms in _parsed(formula))


@cache
def _fractions(formula: str) -> tuple[tuple[str, float], ...]:
    total = molar_mass(formula)
    return tuple(
        (element, atoms * atomic_weight(element) / total) for element, atoms in _parsed(formula)
    )


def mass_fractions(formula: str) -> dict[str, float]:
    """Mass of each element in one kg of a formula [kg/kg]; errors as for `parse_formula`.

    The values sum to one. Source: standard atomic weights (IUPAC, data/elements.csv).
    """
    return dict(_fractions(formula))
