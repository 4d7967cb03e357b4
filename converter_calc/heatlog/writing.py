"""Writing a heat log as CSV, Parquet or XLSX, so that it reads back to the last digit."""

from __future__ import annotations

import os
import zipfile
from collections.abc import Callable, Iterator
from pathlib import Path
from typing import TYPE_CHECKING, Any, BinaryIO
from xml.sax.saxutils import escape

import numpy as np

from converter_calc.basis.errors import Fault, InputError
from converter_calc.basis.inert_text import guarded
from converter_calc.heatlog.columns import ID_COLUMN, TIME_COLUMN, in_order, text_columns
from converter_calc.heatlog.sources import MOST_WORKBOOK_ROWS

if TYPE_CHECKING:
    import pandas as pd


def write_log(frame: pd.DataFrame, path: str | Path) -> None:
    """Write a heat log; what `read_log` reads from the file equals the frame.

    Parameters
    ----------
    frame : a heat log as `read_log` gives it; columns go out in the order of the log.
    path : file to write, .csv, .parquet or .xlsx; one that exists is replaced, and only once
        the new one is complete.

    Notes
    -----
    CSV is UTF-8 with a comma between cells and a point as decimal mark (RFC 4180). In CSV and
    XLSX a text that a spreadsheet would run as a formula starts with an apostrophe, which
    `read_log` takes off.

    Raises
    ------
    InputError : another ending, a column that is neither text nor number, too many rows for a
        workbook, or a place that cannot be written.
    """
    path = Path(path)
    writers: dict[str, Callable[[dict[str, Any], BinaryIO], None]] = {
        ".csv": _write_csv,
        ".parquet": _write_parquet,
        ".xlsx": _write_workbook,
    }
    writer = writers.get(path.suffix.lower())
    if writer is None:
        message = f"must end in .csv, .parquet or .xlsx, given {path.suffix or 'no ending'}"
        raise InputError([Fault(str(path), message)])
    if path.suffix.lower() == ".xlsx" and len(frame) > MOST_WORKBOOK_ROWS:
        message = f"{len(frame)} heats are too many for a workbook; use .csv or .parquet"
        raise InputError([Fault(str(path), message)])
    columns = _columns(frame)
    part = path.with_name(f".{path.name}.{os.getpid()}.part")
    try:
        try:
            with part.open("wb") as file:
                writer(columns, file)
                file.flush()
                os.fsync(file.fileno())
            part.replace(path)
        finally:
            part.unlink(missing_ok=True)
    except (OSError, ValueError) as error:  # ValueError: a null byte in the name
        reason = getattr(error, "strerror", None) or error
        raise InputError([Fault(str(path), f"cannot be written: {reason}")]) from error


def _columns(frame: pd.DataFrame) -> dict[str, Any]:
    """Columns in order: texts as lists, times as datetime64[us], numbers as float arrays."""
    import pandas as pd

    if ID_COLUMN not in frame.columns:
        raise InputError([Fault(ID_COLUMN, "the log has no such column")])
    columns: dict[str, Any] = {}
    for name in in_order(map(str, frame.columns)):
        series = frame[name]
        if series.ndim > 1:
            raise InputError([Fault(name[:80], "is a column twice")])
        if name in text_columns():
            columns[name] = [None if pd.isna(cell) else str(cell) for cell in series.tolist()]
        elif name == TIME_COLUMN:
            times = pd.to_datetime(series, utc=True).dt.tz_localize(None)
            columns[name] = times.to_numpy().astype("datetime64[us]")
        elif series.dtype.kind in "fiu":
            columns[name] = series.to_numpy(dtype=float, na_value=np.nan)
        else:
            raise InputError([Fault(name[:80], f"must hold numbers, holds {series.dtype}")])
    return columns


def _time_texts(times: Any) -> list[str | None]:
    """Times in ISO 8601, UTC; None where missing."""
    missing = np.isnat(times)
    whole = (times[~missing].astype("int64") % 1_000_000 == 0).all()
    texts = np.datetime_as_string(times, unit="s" if whole else "us")
    pairs = zip(texts.tolist(), missing.tolist(), strict=True)
    return [None if lacks else f"{text}Z" for text, lacks in pairs]


def _arrow_table(columns: dict[str, Any], *, as_text: bool) -> Any:
    import pyarrow as pa

    arrays = {}
    for name, cells in columns.items():
        if isinstance(cells, list):
            texts = [guarded(cell) if cell else cell for cell in cells] if as_text else cells
            arrays[name] = pa.array(texts, type=pa.string())
        elif cells.dtype.kind == "M":
            arrays[name] = (
                pa.array(_time_texts(cells), type=pa.string())
                if as_text
                else pa.array(cells).cast(pa.timestamp("us", tz="UTC"))
            )
        else:
            arrays[name] = pa.array(cells, from_pandas=True)
    return pa.table(arrays)


def _write_csv(columns: dict[str, Any], file: BinaryIO) -> None:
    import pyarrow.csv as writer

    file.write((",".join(columns) + "\n").encode())
    options = writer.WriteOptions(include_header=False)
    writer.write_csv(_arrow_table(columns, as_text=True), file, options)


def _write_parquet(columns: dict[str, Any], file: BinaryIO) -> None:
    import pyarrow.parquet as writer

    writer.write_table(_arrow_table(columns, as_text=False), file)


_TYPES = (
    '<?xml version="1.0" encoding="UTF-8" standalone="yes"?>\n'
    '<Types xmlns="http://schemas.openxmlformats.org/package/2006/content-types">'
    '<Default Extension="rels" '
    'ContentType="application/vnd.openxmlformats-package.relationships+xml"/>'
    '<Default Extension="xml" ContentType="application/xml"/>'
    '<Override PartName="/xl/workbook.xml" ContentType="application/'
    'vnd.openxmlformats-officedocument.spreadsheetml.sheet.main+xml"/>'
    '<Override PartName="/xl/worksheets/sheet1.xml" ContentType="application/'
    'vnd.openxmlformats-officedocument.spreadsheetml.worksheet+xml"/></Types>'
)
_RELATIONS = (
    '<?xml version="1.0" encoding="UTF-8" standalone="yes"?>\n'
    '<Relationships xmlns="http://schemas.openxmlformats.org/package/2006/relationships">'
    '<Relationship Id="rId1" Type="http://schemas.openxmlformats.org/officeDocument/2006/'
    'relationships/{kind}" Target="{target}"/></Relationships>'
)
_MAIN = "http://schemas.openxmlformats.org/spreadsheetml/2006/main"
_WORKBOOK = (
    '<?xml version="1.0" encoding="UTF-8" standalone="yes"?>\n'
    f'<workbook xmlns="{_MAIN}" '
    'xmlns:r="http://schemas.openxmlformats.org/officeDocument/2006/relationships">'
    '<sheets><sheet name="heat log" sheetId="1" r:id="rId1"/></sheets></workbook>'
)


def _write_workbook(columns: dict[str, Any], file: BinaryIO) -> None:
    """A workbook of one sheet (ECMA-376); numbers with 17 digits, texts never as formulas.

    Written here, because openpyxl writes numbers with 16 digits.
    """
    with zipfile.ZipFile(file, "w", zipfile.ZIP_DEFLATED) as parts:
        parts.writestr("[Content_Types].xml", _TYPES)
        relation = _RELATIONS.format(kind="officeDocument", target="xl/workbook.xml")
        parts.writestr("_rels/.rels", relation)
        relation = _RELATIONS.format(kind="worksheet", target="worksheets/sheet1.xml")
        parts.writestr("xl/_rels/workbook.xml.rels", relation)
        parts.writestr("xl/workbook.xml", _WORKBOOK)
        with parts.open("xl/worksheets/sheet1.xml", "w", force_zip64=True) as sheet:
            for text in _sheet(columns):
                sheet.write(text.encode())


def _sheet(columns: dict[str, Any]) -> Iterator[str]:
    yield f'<?xml version="1.0" encoding="UTF-8" standalone="yes"?>\n<worksheet xmlns="{_MAIN}">'
    yield (
        '<sheetViews><sheetView workbookViewId="0"><pane ySplit="1" topLeftCell="A2" '
        'activePane="bottomLeft" state="frozen"/></sheetView></sheetViews><sheetData>'
    )
    yield "<row>" + "".join(map(_text_cell, columns)) + "</row>"
    cells: list[list[str]] = []
    for values in columns.values():
        if isinstance(values, list):
            cells.append([_text_cell(guarded(text) if text else text) for text in values])
        elif values.dtype.kind == "M":
            cells.append([_text_cell(text) for text in _time_texts(values)])
        else:
            cells.append([f"<c><v>{x!r}</v></c>" if x == x else "<c/>"  # noqa: PLR0124
                          for x in values.tolist()])  # fmt: skip
    for row in zip(*cells, strict=True):
        yield "<row>" + "".join(row) + "</row>"
    yield "</sheetData></worksheet>"


def _text_cell(text: str | None) -> str:
    if not text:
        return "<c/>"
    return f'<c t="inlineStr"><is><t xml:space="preserve">{escape(text)}</t></is></c>'
