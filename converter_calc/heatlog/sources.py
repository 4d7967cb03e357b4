"""Where a heat log comes from: CSV, Parquet, XLSX or a DataFrame, told apart by its content.

Each source yields parts: raw columns, the number of each row in the file, and rows that are
refused for their shape alone. Row numbers are those that a person sees: in CSV and XLSX the
heading is row 1; in Parquet the first record is row 1; of a DataFrame the index labels.
"""

from __future__ import annotations

import csv
import io
import re
from collections.abc import Iterator
from dataclasses import dataclass, field
from pathlib import Path
from typing import TYPE_CHECKING, Any, NamedTuple

import numpy as np

from converter_calc.basis.errors import Fault, InputError
from converter_calc.heatlog.cells import is_blank, shown

if TYPE_CHECKING:
    import pandas as pd

MOST_COLUMNS = 400
#: Longest heading, and longest row of a CSV file.
MOST_HEADING_BYTES = 1 << 20
BLOCK_BYTES = 1 << 24
#: A workbook is read whole and is slow; longer logs go as CSV or Parquet.
MOST_WORKBOOK_ROWS = 200_000
MOST_WORKBOOK_BYTES = 100_000_000
MOST_UNPACKED_BYTES = 600_000_000
_MARKS = (
    (b"PK\x03\x04", "workbook"),
    (b"PAR1", "parquet"),
    (b"\xd0\xcf\x11\xe0", "an old or a locked workbook; save it as XLSX without password"),
    (b"\x1f\x8b", "is packed (gzip); unpack it first"),
    (b"%PDF", "is a PDF, not a table"),
    (b"SQLite format 3", "is a database, not a table; export the log from it first"),
)
#: What the CSV reader says of a file that ends with its heading.
_NO_ROWS = ("Could not skip initial", "Empty CSV")


class Shape(NamedTuple):
    """A row refused for its shape: its number and why."""

    row: Any
    given: str
    reason: str


@dataclass
class Part:
    """Some rows of a log as they stand: columns by name, number of each row.

    index : the index of a DataFrame, whose labels are the numbers.
    """

    columns: dict[str, Any]
    rows: Any
    misshapen: list[Shape] = field(default_factory=list)
    index: Any = None


def refuse(path: Any, message: str) -> InputError:
    """The error about a whole file."""
    return InputError([Fault(str(path), message)])


def kind_of(path: Path) -> str:
    """What a file is, "csv", "parquet" or "workbook", by its first bytes.

    Raises InputError for a file that is missing, empty, unreadable or something else.
    """
    try:
        if path.is_dir():
            raise refuse(path, "is a directory, not a heat log")
        with path.open("rb") as file:
            start = file.read(4096)
    except FileNotFoundError as error:
        raise refuse(path, "no such file") from error
    except (OSError, ValueError) as error:  # ValueError: a null byte in the name
        reason = getattr(error, "strerror", None) or error
        raise refuse(path, f"cannot be read: {reason}") from error
    for mark, kind in _MARKS:
        if start.startswith(mark):
            if " " in kind:
                raise refuse(path, kind)
            return kind
    if not start.removeprefix(b"\xef\xbb\xbf").strip():
        raise refuse(path, "is empty")
    return "csv"


def check_headings(names: list[str], place: Any) -> None:
    """Raise InputError for headings that are blank, double or too many."""
    if len(names) > MOST_COLUMNS:
        raise refuse(place, f"has {len(names)} columns; {MOST_COLUMNS} are allowed")
    faults = [
        Fault(str(place), f"column {k} has no heading")
        for k, name in enumerate(names, start=1)
        if not name
    ]
    twice = sorted({name for name in names if name and names.count(name) > 1})
    faults += [Fault(name[:80], "is a column twice") for name in twice]
    if faults:
        raise InputError(faults)


def frame_part(frame: pd.DataFrame) -> Iterator[Part]:
    """A DataFrame as one part; numbers and times stay arrays."""
    import pyarrow as pa

    names = [str(name).strip() for name in frame.columns]
    check_headings(names, "table")
    columns: dict[str, Any] = {}
    for place, name in enumerate(names):
        series = frame.iloc[:, place]
        if series.dtype != object and series.dtype.kind in "fiu":
            columns[name] = series.to_numpy(dtype=float, na_value=np.nan)
        elif series.dtype.kind == "M":
            columns[name] = pa.Array.from_pandas(series)
        else:
            columns[name] = series.tolist()
    yield Part(columns, np.array(frame.index, dtype=object), index=frame.index)


def csv_heading(path: Path) -> tuple[list[str], str, str, int]:
    """Headings of a CSV file, its separator, its encoding, and the lines that they take.

    The separator is `;`, tab or `,`, whichever comes first in that order in the heading.
    """
    with path.open("rb") as file:
        raw = file.read(MOST_HEADING_BYTES)
    wide = raw[:2] in (b"\xff\xfe", b"\xfe\xff")
    encoding = "utf-16" if wide else "utf-8-sig"  # decoded before rows are told apart
    text = raw.decode("utf-16" if wide else "utf-8-sig", errors="replace")
    lines = re.split("\r\n|\r|\n", text)
    above = next((k for k, line in enumerate(lines) if line.strip()), None)
    if above is None:
        raise refuse(path, "is empty")
    heading = lines[above]
    if "\ufffd" in heading or "\x00" in heading:
        raise refuse(path, "is no CSV, Parquet or XLSX file; save CSV as UTF-8")
    if len(lines) == above + 1 and len(raw) == MOST_HEADING_BYTES:
        raise refuse(path, "has no end of line in its first megabyte; this is no CSV file")
    separator = next((sign for sign in ";\t" if sign in heading), ",")
    try:
        names = next(csv.reader([heading], delimiter=separator, strict=True))
    except csv.Error as error:
        raise refuse(path, f"the heading cannot be read: {error}") from error
    names = [name.strip() for name in names]
    check_headings(names, path)
    return names, separator, encoding, above + 1


def csv_parts(path: Path) -> Iterator[Part]:
    """A CSV file block by block; rows with a wrong number of cells are told, not taken."""
    import pyarrow as pa
    import pyarrow.csv as reader

    names, separator, encoding, above = csv_heading(path)
    odd: dict[int, Shape] = {}
    row = above + 1

    def misshapen(row: Any) -> str:
        text = row.text or ""
        reason = f"has {row.actual_columns} cells, the heading has {row.expected_columns}"
        if text.count('"') % 2:
            reason += "; a quotation mark may not be closed"
        elif separator == "," and row.actual_columns > row.expected_columns:
            reason += "; a number may hold a comma: write the decimal mark as a point"
        odd[row.number] = Shape(row.number, shown(text), reason)
        return "skip"

    try:
        stream = reader.open_csv(
            path,
            read_options=reader.ReadOptions(
                column_names=names,
                skip_rows=above,
                use_threads=False,
                block_size=BLOCK_BYTES,
                encoding=encoding,
            ),
            parse_options=reader.ParseOptions(
                delimiter=separator,
                newlines_in_values=True,
                ignore_empty_lines=False,
                invalid_row_handler=misshapen,
            ),
            convert_options=reader.ConvertOptions(
                column_types={name: pa.string() for name in names}, strings_can_be_null=False
            ),
        )
        for batch in stream:
            numbers = _numbers(row, batch.num_rows, odd)
            row = int(numbers[-1]) + 1 if len(numbers) else row
            shapes = [odd.pop(number) for number in sorted(odd) if number < row]
            columns = dict(zip(names, batch.columns, strict=True))
            yield Part(columns, numbers, shapes)
    except (pa.ArrowInvalid, UnicodeError) as error:
        if not any(words in str(error) for words in _NO_ROWS):
            raise refuse(path, _csv_trouble(error)) from error
    if odd or row == above + 1:
        empty = {name: pa.array([], type=pa.string()) for name in names}
        yield Part(empty, np.zeros(0, dtype=np.int64), [odd[number] for number in sorted(odd)])


def _numbers(first: int, n: int, odd: dict[int, Shape]) -> Any:
    """Numbers of n rows from `first` on, those of misshapen rows left out."""
    numbers = np.arange(first, first + n + len(odd), dtype=np.int64)
    return numbers[~np.isin(numbers, list(odd))][:n] if odd else numbers


def _csv_trouble(error: Exception) -> str:
    text = str(error)
    if "UTF8" in text or "UTF-8" in text or isinstance(error, UnicodeError):
        return "is not UTF-8 text; save the file as CSV UTF-8"
    if "straddl" in text:
        return f"holds a row longer than {BLOCK_BYTES / 1e6:.0f} MB; a quotation mark may be open"
    return f"cannot be read as CSV: {text.splitlines()[0][:120]}"


def parquet_parts(path: Path, rows: int) -> Iterator[Part]:
    """A Parquet file in batches of rows."""
    import pyarrow as pa
    import pyarrow.parquet as reader
    import pyarrow.types as kinds

    try:
        with reader.ParquetFile(path) as file:
            schema = file.schema_arrow
            names = [name.strip() for name in schema.names]
            keep = [k for k, name in enumerate(names) if not name.startswith("__index_level_")]
            check_headings([names[k] for k in keep], path)
            for k in keep:
                if kinds.is_nested(schema.types[k]) or kinds.is_binary(schema.types[k]):
                    message = f"holds {str(schema.types[k])[:60]}, not numbers or texts"
                    raise InputError([Fault(names[k][:80], message)])
            row = 1
            if not file.metadata.num_rows:
                columns = {names[k]: schema.empty_table().column(k).combine_chunks() for k in keep}
                yield Part(columns, np.zeros(0, dtype=np.int64))
            for batch in file.iter_batches(batch_size=rows, use_threads=False):
                columns = {names[k]: _decoded(batch.column(k)) for k in keep}
                yield Part(columns, np.arange(row, row + batch.num_rows, dtype=np.int64))
                row += batch.num_rows
    except (pa.ArrowException, OSError) as error:
        message = f"is no Parquet file that can be read: {str(error).splitlines()[0][:120]}"
        raise refuse(path, message) from error


def _decoded(column: Any) -> Any:
    import pyarrow.types as kinds

    if kinds.is_dictionary(column.type):
        return column.dictionary_decode()
    if kinds.is_string_view(column.type):
        import pyarrow as pa

        return column.cast(pa.string())
    return column


def workbook_parts(path: Path) -> Iterator[Part]:
    """The first sheet of an XLSX workbook, whole."""
    from converter_calc.basis.workbooks import Limits, workbook_rows

    if path.stat().st_size > MOST_WORKBOOK_BYTES:
        size = f"{path.stat().st_size / 1e6:.0f} MB, {MOST_WORKBOOK_BYTES / 1e6:.0f} MB are allowed"
        raise refuse(path, f"the workbook has {size}; use CSV or Parquet")
    limits = Limits(MOST_UNPACKED_BYTES, 200, MOST_WORKBOOK_ROWS, MOST_COLUMNS)
    content = io.BytesIO(path.read_bytes())
    names: list[str] = []
    cells: list[list[Any]] = []
    numbers: list[int] = []
    odd: list[Shape] = []
    for number, row in enumerate(workbook_rows(content, str(path), limits), start=1):
        while row and is_blank(row[-1]):
            row.pop()
        if not row:
            continue
        if not names:
            names = ["" if cell is None else str(cell).strip() for cell in row]
            check_headings(names, path)
        elif len(row) > len(names):
            reason = f"has {len(row)} cells, the heading has {len(names)}"
            odd.append(Shape(number, shown(str(row[-1])), reason))
        elif len(cells) >= MOST_WORKBOOK_ROWS:
            message = f"has more than {MOST_WORKBOOK_ROWS} rows; use CSV or Parquet"
            raise refuse(path, message)
        else:
            numbers.append(number)
            cells.append([*row, *[None] * (len(names) - len(row))])
    if not names:
        raise refuse(path, "is empty")
    columns = {name: [row[k] for row in cells] for k, name in enumerate(names)}
    yield Part(columns, np.array(numbers, dtype=np.int64), odd)
