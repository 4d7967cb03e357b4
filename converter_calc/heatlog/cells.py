"""Cells of a heat log as numbers, texts and times; what cannot be read is told, never guessed.

A column comes as a pyarrow array (CSV, Parquet) or as a list of Python values (XLSX,
DataFrame). Every function returns the values of all rows and, for the cells that it cannot
take, row, what was given, and why it is refused. Blank cells are missing and no fault.
"""

from __future__ import annotations

import datetime as dt
import decimal
import math
import re
from collections.abc import Callable, Sequence
from typing import Any, NamedTuple

import numpy as np

from converter_calc.balance.fields import show
from converter_calc.basis.dual import Array
from converter_calc.heatlog.columns import ID_COLUMN

MOST_TEXT_SIGNS = 200
EARLIEST, LATEST = np.datetime64("1950-01-01", "us"), np.datetime64("2100-01-01", "us")
_NUMBER = r"^[+-]?(\d+\.?\d*|\.\d+)([eE][+-]?\d{1,5})?$"
_COMMA = re.compile(r"[+-]?\d{1,3}([.,' \u00a0\u202f]?\d{3})*[.,]\d+|[+-]?\d+,\d+")
_MISSING_WORDS = frozenset(
    ("na", "n/a", "nan", "none", "null", "nil", "missing", "unknown", "blank", "-", "--", ".",
     "?", "x", "#n/a", "#value!", "#div/0!", "#num!")
)  # fmt: skip
_TIME = r"^\d{4}-\d{2}-\d{2}([T ]\d{2}:\d{2}(:\d{2}(\.\d{1,9})?)?)?( ?(Z|[+-]\d{2}:?\d{2}))?$"
#: Control characters, line separators and marks that turn the direction of writing.
_UNFIT = r"[\p{Cc}\x{2028}\x{2029}\x{202A}-\x{202E}\x{2066}-\x{2069}]"


class Bad(NamedTuple):
    """Cells that cannot be taken: row places, what was given, why each is refused."""

    places: Any
    given: list[str]
    reasons: list[str]


NO_FAULT = Bad(np.zeros(0, dtype=np.int64), [], [])


def joined(parts: Sequence[Bad]) -> Bad:
    """Several lists of faults as one."""
    parts = [part for part in parts if len(part.places)]
    if not parts:
        return NO_FAULT
    return Bad(
        np.concatenate([part.places for part in parts]),
        [text for part in parts for text in part.given],
        [text for part in parts for text in part.reasons],
    )


def _bad(places: Any, given: Sequence[Any], why: Callable[[Any], str] | str) -> Bad:
    reasons = [why if isinstance(why, str) else why(cell) for cell in given]
    return Bad(np.asarray(places, dtype=np.int64), [shown(cell) for cell in given], reasons)


def shown(cell: Any) -> str:
    """A cell as it was given, on one line, cut short."""
    return show(cell)[1:-1] if isinstance(cell, str) else show(cell)


def why_no_number(text: str) -> str:
    """The sentence about a text that stands where a number should."""
    folded = text.strip().casefold()
    if folded in _MISSING_WORDS:
        return "must be a number; leave a cell blank where the value is missing"
    if folded.lstrip("+-") in ("inf", "infinity"):
        return "must be a finite number"
    if _COMMA.fullmatch(folded):
        return "must be a number with a point as decimal mark and no mark for thousands"
    try:
        number = float(folded) if folded.isascii() and "_" not in folded else math.nan
    except ValueError:
        number = math.nan
    return "must be a finite number" if math.isinf(number) else "must be a number"


def _wrong_type(column: Any) -> str:
    return f"must be a number, the column holds {column.type}"


def numbers_of(column: Any, decimal_mark: str = ".") -> tuple[Array, Bad]:
    """A column as numbers, NaN where blank.

    Parameters
    ----------
    column : pyarrow array or list of Python values.
    decimal_mark : "." or ","; with "," a point in a text is refused.

    Returns
    -------
    (values (n,), faults); a refused cell is NaN.
    """
    if isinstance(column, list):
        return _numbers_of_list(column, decimal_mark)
    if isinstance(column, np.ndarray):
        return _finite(np.array(column, dtype=float))
    import pyarrow as pa
    import pyarrow.types as kinds

    kind = column.type
    if kinds.is_null(kind):
        return np.full(len(column), np.nan), NO_FAULT
    if kinds.is_string(kind) or kinds.is_large_string(kind):
        return _numbers_of_texts(column, decimal_mark)
    if kinds.is_floating(kind) or kinds.is_integer(kind) or kinds.is_decimal(kind):
        values = column.cast(pa.float64(), safe=False).to_numpy(zero_copy_only=False)
        return _finite(np.array(values, dtype=float))
    places = np.flatnonzero(column.is_valid().to_numpy(zero_copy_only=False))
    given = [column[int(place)].as_py() for place in places]
    return np.full(len(column), np.nan), _bad(places, given, _wrong_type(column))


def _finite(values: Array) -> tuple[Array, Bad]:
    places = np.flatnonzero(np.isinf(values))
    given = values[places].tolist()
    values[places] = np.nan
    return values, _bad(places, given, "must be a finite number")


def _numbers_of_texts(column: Any, decimal_mark: str) -> tuple[Array, Bad]:
    import pyarrow as pa
    import pyarrow.compute as pc

    pointed = np.zeros(0, dtype=np.int64)
    given = column
    if decimal_mark == ",":
        pointed = np.flatnonzero(_mask(pc.match_substring(column, ".")))
        column = pc.replace_substring(column, ",", ".")
    blank = pa.scalar(None, type=column.type)
    texts = pc.if_else(pc.equal(column, ""), blank, column)
    try:
        numbers = texts.cast(pa.float64())
    except pa.ArrowInvalid:  # some cell is no number: find which
        trimmed = pc.utf8_trim_whitespace(texts)
        texts = pc.if_else(pc.equal(trimmed, ""), blank, trimmed)
        good = pc.match_substring_regex(texts, _NUMBER)
        numbers = pc.if_else(good, texts, blank).cast(pa.float64())
    values = np.array(numbers.to_numpy(zero_copy_only=False), dtype=float)
    wrong = ~np.isfinite(values) & texts.is_valid().to_numpy(zero_copy_only=False)
    wrong[pointed] = True
    values[wrong] = np.nan
    places = np.flatnonzero(wrong)
    cells = given.take(pa.array(places)).to_pylist()
    if decimal_mark == ",":
        return values, _bad(places, cells, "must be a number with a comma as decimal mark")
    return values, _bad(places, cells, why_no_number)


def _mask(found: Any) -> Any:
    """A boolean pyarrow array as numpy, False where missing."""
    truth = found.fill_null(False)  # noqa: FBT003
    return np.asarray(truth.to_numpy(zero_copy_only=False), dtype=bool)


def is_blank(cell: Any) -> bool:
    """Whether a Python value stands for a missing one: None, NaN, NaT, pandas' NA."""
    if cell is None or (isinstance(cell, str) and not cell.strip()):
        return True
    if isinstance(cell, float):
        return math.isnan(cell)
    return type(cell).__name__ in ("NAType", "NaTType")


def _numbers_of_list(cells: list[Any], decimal_mark: str) -> tuple[Array, Bad]:
    values = np.full(len(cells), np.nan)
    texts: dict[int, str] = {}
    places: list[int] = []
    given: list[Any] = []
    for place, cell in enumerate(cells):
        if is_blank(cell):
            continue
        if isinstance(cell, str):
            texts[place] = cell
        elif isinstance(cell, bool | np.bool_) or not isinstance(
            cell, int | float | np.integer | np.floating | decimal.Decimal
        ):
            places.append(place)
            given.append(cell)
        else:
            try:
                values[place] = float(cell)
            except OverflowError:
                values[place] = math.inf
    faults = [_bad(places, given, "must be a number")]
    values, infinite = _finite(values)
    faults.append(infinite)
    if texts:
        import pyarrow as pa

        where = np.array(list(texts), dtype=np.int64)
        column = pa.array([_encodable(text) for text in texts.values()], type=pa.string())
        values[where], wrong = _numbers_of_texts(column, decimal_mark)
        faults.append(Bad(where[wrong.places], wrong.given, wrong.reasons))
    return values, joined(faults)


def _encodable(text: str) -> str:
    """A text without half characters, which UTF-8 cannot hold; each becomes `?`."""
    return text.encode("utf-8", "replace").decode("utf-8")


def as_texts(column: Any) -> Any:
    """A column as a pyarrow array of texts; whole numbers lose a decimal point of zero."""
    import pyarrow as pa
    import pyarrow.types as kinds

    if isinstance(column, np.ndarray):
        column = column.tolist()
    if not isinstance(column, list):
        if kinds.is_string(column.type) or kinds.is_large_string(column.type):
            return column.cast(pa.string())
        column = column.to_pylist()
    return pa.array([_text(cell) for cell in column], type=pa.string())


def _text(cell: Any) -> str | None:
    if is_blank(cell):
        return None
    if isinstance(cell, float | np.floating) and float(cell).is_integer():
        return str(int(cell))
    try:
        return _encodable(str(cell))
    except ValueError:  # an integer of thousands of digits has no text
        return "\0"


def texts_of(column: Any, name: str, *, unguard: bool) -> tuple[Any, Bad]:
    """A column as texts, stripped; None where blank.

    unguard : take off the apostrophe that keeps a spreadsheet from running a text.
    Returns (object array (n,), faults): control characters, too long, a heat without name.
    """
    import pyarrow.compute as pc

    from converter_calc.basis.inert_text import unguarded

    texts = pc.utf8_trim_whitespace(as_texts(column))
    blank = _mask(pc.equal(texts, "")) | ~texts.is_valid().to_numpy(zero_copy_only=False)
    faults = []
    unfit = np.flatnonzero(_mask(pc.match_substring_regex(texts, _UNFIT)))
    long = np.flatnonzero(_mask(pc.greater(pc.utf8_length(texts), MOST_TEXT_SIGNS)))
    values = np.array(texts.to_pylist(), dtype=object)
    values[blank] = None
    faults.append(_bad(unfit, values[unfit].tolist(), "holds a control character"))
    faults.append(_bad(long, values[long].tolist(), f"has more than {MOST_TEXT_SIGNS} characters"))
    if name == ID_COLUMN:
        where = np.flatnonzero(blank)
        faults.append(_bad(where, [""] * len(where), "not given; each heat needs its name"))
    if unguard:
        for place in np.flatnonzero(_mask(pc.starts_with(texts, "'"))):
            values[place] = unguarded(values[place])
    return values, joined(faults)


def times_of(column: Any) -> tuple[Any, Bad]:
    """A column as datetime64[us] in UTC, NaT where blank.

    A time without offset is taken as UTC. Returns (array (n,), faults).
    """
    import pandas as pd
    import pyarrow as pa
    import pyarrow.compute as pc
    import pyarrow.types as kinds

    if isinstance(column, np.ndarray):
        column = pa.array(column)
    if isinstance(column, list):
        column = pa.array([_time_text(cell) for cell in column], type=pa.string())
    if kinds.is_timestamp(column.type) or kinds.is_date(column.type):
        stamps = pd.Series(
            column.cast(pa.timestamp("us"), safe=False).to_numpy(zero_copy_only=False)
        )
        return _in_bounds(stamps, column)
    if not (kinds.is_string(column.type) or kinds.is_large_string(column.type)):
        places = np.flatnonzero(column.is_valid().to_numpy(zero_copy_only=False))
        cells = column.take(pa.array(places)).to_pylist()
        why = "must be a date and time like 2026-03-01T05:12:00Z"
        return np.full(len(column), np.datetime64("NaT", "us")), _bad(places, cells, why)
    texts = pc.utf8_trim_whitespace(column)
    given = _mask(pc.not_equal(texts, ""))
    form = _mask(pc.match_substring_regex(texts, _TIME))
    fit = pc.if_else(pa.array(form), texts, pa.scalar(None, type=texts.type))
    series = pd.Series(fit.to_pylist(), dtype=object)
    stamps = pd.to_datetime(series, format="ISO8601", utc=True, errors="coerce")
    stamps = stamps.dt.tz_localize(None).dt.as_unit("us")
    values, outside = _in_bounds(stamps, texts)
    unformed = np.flatnonzero(given & ~form)
    impossible = np.flatnonzero(form & np.asarray(stamps.isna(), dtype=bool))
    return values, joined(
        [
            _bad(
                unformed,
                texts.take(pa.array(unformed)).to_pylist(),
                "must be a date and time like 2026-03-01T05:12:00Z (ISO 8601)",
            ),
            _bad(
                impossible,
                texts.take(pa.array(impossible)).to_pylist(),
                "is no date and time of the calendar",
            ),
            outside,
        ]
    )


def _time_text(cell: Any) -> str | None:
    if is_blank(cell):
        return None
    if isinstance(cell, dt.datetime | dt.date):
        return cell.isoformat()
    return _text(cell)


def _in_bounds(stamps: Any, column: Any) -> tuple[Any, Bad]:
    values = np.array(stamps.to_numpy(), dtype="datetime64[us]")
    places = np.flatnonzero((values < EARLIEST) | (values >= LATEST))
    given = [str(column[int(place)].as_py()) for place in places]
    values[places] = np.datetime64("NaT", "us")
    return values, _bad(places, given, "must lie between the years 1950 and 2100")
