"""A table of heats that somebody uploads: CSV or XLSX bytes in, DataFrame or a clear error out.

How a CSV file is read: UTF-8 (or UTF-16 with its mark); the heading tells the separator, `;`,
tab or `,`. Between commas the decimal mark is the point. With `;` or tab it is the point or
the comma, but one of the two in the whole file, and no mark for thousands: "1.350,5" is
refused rather than guessed. What is not a number stays text, so that the planner can name
its row and column. `frame.attrs["read_as"]` says how the file was taken.
"""

from __future__ import annotations

import csv
import io
import re
from collections.abc import Iterable, Iterator, Sequence
from typing import TYPE_CHECKING, Any

from converter_calc.basis.errors import Fault, InputError
from converter_calc.basis.workbooks import Limits, workbook_rows

if TYPE_CHECKING:
    import pandas as pd

MOST_BYTES = 5_000_000
MOST_UNPACKED_BYTES = 60_000_000
MOST_PARTS = 200
MOST_ROWS = 20_000
MOST_COLUMNS = 300
MOST_CELL_SIGNS = 1_000
#: Columns that stay text even where they look like numbers.
TEXT_COLUMNS = ("heat_id", "tapped_at", "vessel", "grade")
ZIP_MARK, OLD_OFFICE_MARK = b"PK\x03\x04", b"\xd0\xcf\x11\xe0"
_NUMBER = re.compile(r"[+-]?(\d+\.?\d*|\.\d+)([eE][+-]?\d{1,3})?")
_COMMA_NUMBER = re.compile(r"[+-]?(\d+,?\d*|,\d+)([eE][+-]?\d{1,3})?")
_BOTH_MARKS = re.compile(r"[+-]?\d[\d.,]*([.]\d*,|,\d*[.])\d+")


def parse_table(content: bytes, name: str = "table") -> pd.DataFrame:
    """An uploaded table of heats.

    Parameters
    ----------
    content : bytes of a CSV or XLSX file; what it is, is told by the bytes, not by the name.
    name : file name, for the messages.

    Returns
    -------
    DataFrame with the file's row numbers as index (2 is the first below the heading), so that
    a fault of a heat names the row that the user sees. Blank cells are NaN.

    Raises
    ------
    InputError : empty, too large, not a table, broken, or with an unclear decimal mark.
    """
    place = "".join(sign if sign.isprintable() else "?" for sign in name)[:80]
    if not content.strip():
        raise _refused(place, "the file is empty")
    if len(content) > MOST_BYTES:
        size = f"{len(content) / 1e6:.1f} MB, {MOST_BYTES / 1e6:.0f} MB are allowed"
        raise _refused(place, f"the file has {size}")
    if content.startswith(OLD_OFFICE_MARK):
        raise _refused(place, "an old or a locked workbook; save it as XLSX without password")
    if content.startswith(ZIP_MARK):
        return _frame(_xlsx_rows(content, place), "XLSX, first sheet", "", place)
    text = _decoded(content, place)
    first = text.lstrip("\r\n").split("\n", 1)[0]
    separator = ";" if ";" in first else "\t" if "\t" in first else ","
    shown = {";": "semicolon", "\t": "tab", ",": "comma"}[separator]
    return _frame(_csv_rows(text, separator, place), f"CSV, {shown}", separator, place)


def _refused(place: str, message: str) -> InputError:
    return InputError([Fault(place, message)])


def _decoded(content: bytes, place: str) -> str:
    wide = content[:2] in (b"\xff\xfe", b"\xfe\xff")
    try:
        text = content.decode("utf-16" if wide else "utf-8-sig")
    except UnicodeDecodeError as error:
        message = f"byte {error.start} is no UTF-8; save the file as CSV UTF-8, or as XLSX"
        raise _refused(place, message) from error
    if "\x00" in text:
        raise _refused(place, "holds zero bytes; this is no CSV or XLSX file")
    return text


def _csv_rows(text: str, separator: str, place: str) -> Iterator[list[Any]]:
    rows = csv.reader(io.StringIO(text, newline=""), delimiter=separator, strict=True)
    while True:
        try:
            yield list(next(rows))
        except StopIteration:
            return
        except csv.Error as error:
            message = f"line {rows.line_num} cannot be read: {error}"
            raise _refused(place, message) from error


def _xlsx_rows(content: bytes, place: str) -> list[list[Any]]:
    limits = Limits(MOST_UNPACKED_BYTES, MOST_PARTS, MOST_ROWS, MOST_COLUMNS)
    return list(workbook_rows(io.BytesIO(content), place, limits))


def _frame(
    given: Iterable[Sequence[Any]], read_as: str, separator: str, place: str
) -> pd.DataFrame:
    import pandas as pd

    names: list[str] = []
    numbers: list[int] = []
    rows: list[list[Any]] = []
    for number, cells in enumerate(given, start=1):
        row = [_tidy(cell, number, place) for cell in cells]
        while row and row[-1] == "":
            row.pop()
        if not row:
            continue
        if not names:
            names = _headings(row, place)
            continue
        if len(row) > len(names):
            hint = "; a decimal comma needs ; between the cells" if separator == "," else ""
            message = f"row {number} has {len(row)} cells, the heading has {len(names)}{hint}"
            raise _refused(place, message)
        if len(rows) >= MOST_ROWS:
            raise _refused(place, f"more than {MOST_ROWS} rows; split the table")
        numbers.append(number)
        rows.append([*row, *[""] * (len(names) - len(row))])
    if not rows:
        raise _refused(place, "holds no heats: a heading and at least one row are needed")
    comma = separator in (";", "\t") and _decimal_comma(names, rows, numbers, place)
    columns = {
        name: [_value(row[k], name, comma=comma) for row in rows] for k, name in enumerate(names)
    }
    frame = pd.DataFrame({name: _series(cells) for name, cells in columns.items()})
    frame.index = pd.Index(numbers)
    mark = "comma" if comma else "point"
    frame.attrs["read_as"] = (
        f"{read_as}, decimal {mark}, {len(rows)} rows"
        if separator
        else (f"{read_as}, {len(rows)} rows")
    )
    return frame


def _tidy(cell: Any, number: int, place: str) -> Any:
    """Texts stripped, blanks as "", numbers as they are."""
    if cell is None:
        return ""
    if isinstance(cell, bool | int | float):
        return cell
    text = str(cell).strip()
    if len(text) > MOST_CELL_SIGNS:
        raise _refused(place, f"row {number} holds a cell of {len(text)} signs")
    return text


def _headings(row: Sequence[Any], place: str) -> list[str]:
    names = [str(cell) for cell in row]
    if len(names) > MOST_COLUMNS:
        raise _refused(place, f"more than {MOST_COLUMNS} columns")
    faults = [Fault(place, f"column {k} has no heading")
              for k, name in enumerate(names, start=1) if not name]  # fmt: skip
    twice = sorted({name for name in names if name and names.count(name) > 1})
    faults += [Fault(name[:80], "is a column twice") for name in twice]
    if faults:
        raise InputError(faults)
    return names


def _decimal_comma(
    names: Sequence[str], rows: Sequence[Sequence[Any]], numbers: Sequence[int], place: str
) -> bool:
    """Whether numbers are written with a comma; refuse a file in which both marks occur."""
    seen: dict[str, str] = {}
    for number, row in zip(numbers, rows, strict=True):
        for name, cell in zip(names, row, strict=True):
            if name in TEXT_COLUMNS or not isinstance(cell, str):
                continue
            where = f"row {number}, {name[:80]}: {cell[:40]!r}"
            if _BOTH_MARKS.fullmatch(cell):
                raise _refused(place, f"{where} has two marks; write no mark for thousands")
            for mark, pattern in ((",", _COMMA_NUMBER), (".", _NUMBER)):
                if mark in cell and pattern.fullmatch(cell):
                    seen.setdefault(mark, where)
    if len(seen) == 2:
        both = " and ".join(seen.values())
        raise _refused(place, f"decimal comma and decimal point in one file: {both}")
    return "," in seen


def _value(cell: Any, name: str, *, comma: bool) -> Any:
    if name in TEXT_COLUMNS:
        return None if cell == "" else str(cell)
    if not isinstance(cell, str):
        return cell
    if cell == "":
        return None
    if (_COMMA_NUMBER if comma else _NUMBER).fullmatch(cell):
        return float(cell.replace(",", "."))
    return cell


def _series(cells: list[Any]) -> Any:
    """A column of numbers where all are numbers, else of what they are."""
    import pandas as pd

    number = all(cell is None or type(cell) in (int, float) for cell in cells)
    return pd.Series(cells, dtype=float if number else object)
