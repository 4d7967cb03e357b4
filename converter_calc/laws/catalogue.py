"""What every named law carries beside its numbers: source, range of validity, scatter."""

from __future__ import annotations

import difflib
from collections.abc import Callable, Mapping
from dataclasses import dataclass
from typing import Any, TypeVar

import numpy as np
import numpy.typing as npt

from converter_calc.basis import dual as ad
from converter_calc.basis.dual import Num
from converter_calc.basis.errors import DataError

Row = TypeVar("Row")
Outside = tuple[str, float, float, npt.NDArray[np.bool_]]
"""Quantity, lower limit, upper limit, and for each heat whether it lies outside."""


@dataclass(frozen=True)
class Range:
    """Limits of one quantity within which a law is known to hold."""

    quantity: str
    low: float
    high: float
    known: str


@dataclass(frozen=True)
class LawNote:
    """A law as a reader wants it: formula text, source, how it is known, range, scatter.

    year is 0 where not known; scatter_log10 is None where the source gives none.
    """

    name: str
    formula: str
    source: str
    year: int
    known: str
    ranges: tuple[Range, ...]
    scatter_log10: float | None = None


def read_ranges(row: Mapping[str, Any]) -> tuple[Range, ...]:
    """The `range` entries of a data row."""
    return tuple(
        Range(entry["quantity"], float(entry["low"]), float(entry["high"]), entry["known"])
        for entry in row.get("range", ())
    )


def read_note(row: Mapping[str, Any], formula: str) -> LawNote:
    """The note of a data row, with the formula as text."""
    return LawNote(
        name=row["name"],
        formula=formula,
        source=row["source"],
        year=int(row["year"]),
        known=row["known"],
        ranges=read_ranges(row),
        scatter_log10=row.get("scatter_log10"),
    )


def pick(rows: Mapping[str, Row], name: str, kind: str) -> Row:
    """The row called `name`.

    Raises
    ------
    DataError : no such row; the text gives the nearest name and all allowed ones.
    """
    try:
        return rows[name]
    except KeyError:
        near = difflib.get_close_matches(str(name), rows, n=1, cutoff=0.4)
        hint = f"; did you mean {near[0]!r}?" if near else ""
        raise DataError(
            f"unknown {kind} {name!r}{hint} (allowed: {', '.join(sorted(rows))})"
        ) from None


def find_outside(ranges: tuple[Range, ...], measure: Callable[[str], Num | None]) -> list[Outside]:
    """Ranges that at least one heat leaves.

    Parameters
    ----------
    ranges : limits of the law. measure : value of a quantity by name, None if not known.

    Returns
    -------
    List of (quantity, low, high, boolean array (n,) or (), True where outside). A value that
    is NaN counts as inside.
    """
    found: list[Outside] = []
    for limit in ranges:
        values = measure(limit.quantity)
        if values is None:
            continue
        plain = np.asarray(ad.value(values), dtype=float)
        outside = (plain < limit.low) | (plain > limit.high)
        if np.any(outside):
            found.append((limit.quantity, limit.low, limit.high, np.asarray(outside)))
    return found
