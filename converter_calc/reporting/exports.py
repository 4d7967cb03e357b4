"""Results as XLSX, CSV and JSON. Text that a spreadsheet would run as a formula is made inert."""

from __future__ import annotations

import io
import json
import math
import re
from collections.abc import Mapping
from typing import TYPE_CHECKING, Any

import numpy as np

from converter_calc.basis.inert_text import CONTROL, neutralised
from converter_calc.planning.outcome import Outcome
from converter_calc.reporting import tables

if TYPE_CHECKING:
    import pandas as pd

#: Limits of the XLSX format: ECMA-376 and the makers' published limits (from memory).
MOST_CELL_SIGNS, MOST_SHEET_SIGNS = 32767, 31
_NOT_IN_SHEET = re.compile(r"[\[\]:*?/\\']")


def plain(cell: Any) -> Any:
    """A cell as a plain number, truth value or inert text; None for what is not a number."""
    if isinstance(cell, bool | np.bool_):
        return bool(cell)
    if isinstance(cell, int | np.integer):
        return int(cell)
    if isinstance(cell, float | np.floating):
        return float(cell) if math.isfinite(cell) else None
    if cell is None:
        return None
    return neutralised(str(cell))


def csv_text(frame: pd.DataFrame) -> str:
    """A table as CSV: comma between cells, point as decimal mark, lines end in CR LF (RFC 4180).

    Numbers keep every digit, so that they read back the same; NaN is an empty cell.
    """
    import csv

    text = io.StringIO()
    writer = csv.writer(text, lineterminator="\r\n")
    writer.writerow([plain(str(name)) for name in frame.columns])
    for row in frame.itertuples(index=False, name=None):
        writer.writerow(["" if cell is None else cell for cell in map(plain, row)])
    return text.getvalue()


def json_text(content: Mapping[str, Any] | pd.DataFrame) -> str:
    """A result document, or a table as a list of rows, as JSON; what is no number is null."""
    rows: Any = content
    if not isinstance(content, Mapping):
        names = [str(name) for name in content.columns]
        rows = [
            dict(zip(names, row, strict=True)) for row in content.itertuples(index=False, name=None)
        ]
    return json.dumps(_jsonable(rows), indent=1, allow_nan=False, ensure_ascii=False) + "\n"


def _jsonable(x: Any) -> Any:
    """JSON is no spreadsheet: texts stay as they are."""
    if isinstance(x, Mapping):
        return {str(key): _jsonable(part) for key, part in x.items()}
    if isinstance(x, list | tuple):
        return [_jsonable(part) for part in x]
    return x if isinstance(x, str) else plain(x)


def xlsx_bytes(sheets: Mapping[str, pd.DataFrame]) -> bytes:
    """Tables as one XLSX workbook, a sheet each, first row the headings.

    Texts are written as texts, never as formulas; NaN is an empty cell.
    """
    from openpyxl import Workbook
    from openpyxl.styles import Font

    book = Workbook()
    book.remove(book.worksheets[0])
    taken: set[str] = set()
    for title, frame in sheets.items():
        sheet = book.create_sheet(_sheet_name(title, taken))
        for column, name in enumerate(frame.columns, start=1):
            _put(sheet, 1, column, plain(str(name)))
            sheet.cell(1, column).font = Font(bold=True)
        for row, cells in enumerate(frame.itertuples(index=False, name=None), start=2):
            for column, cell in enumerate(cells, start=1):
                _put(sheet, row, column, plain(cell))
        sheet.freeze_panes = "A2"
        for column, name in enumerate(frame.columns, start=1):
            letter = sheet.cell(1, column).column_letter
            sheet.column_dimensions[letter].width = min(max(12, len(str(name)) + 2), 60)
    if not taken:
        book.create_sheet("empty")
    file = io.BytesIO()
    book.save(file)
    return file.getvalue()


def _put(sheet: Any, row: int, column: int, cell: Any) -> None:
    if cell is None:
        return
    if isinstance(cell, str):
        place = sheet.cell(row, column, cell[:MOST_CELL_SIGNS])
        place.data_type = "s"  # openpyxl would guess a formula or an error value
    else:
        sheet.cell(row, column, cell)


def _sheet_name(title: str, taken: set[str]) -> str:
    """A name that the format takes, told apart from those before it."""
    name = _NOT_IN_SHEET.sub(" ", CONTROL.sub("", title)).strip()[:MOST_SHEET_SIGNS] or "table"
    base, count = name, 1
    while name.casefold() in taken:
        count += 1
        name = f"{base[: MOST_SHEET_SIGNS - 4]} {count}"
    taken.add(name.casefold())
    return name


def heat_sheets(outcome: Outcome, index: int = 0) -> dict[str, pd.DataFrame]:
    """Everything about one heat as tables by sheet name, the inputs used included."""
    return {
        "recipe": tables.recipe_table(outcome, index),
        "end point": tables.end_point_table(outcome, index),
        "slag": tables.slag_table(outcome, index),
        "heat balance": tables.heat_balance_table(outcome, index),
        "element balance": tables.element_balance_table(outcome, index),
        "streams": tables.streams_table(outcome, index),
        "warnings": tables.warnings_table(outcome, index),
        "inputs used": tables.inputs_table(outcome.heats, index),
    }


def heat_xlsx(outcome: Outcome, index: int = 0) -> bytes:
    """One heat as an XLSX workbook: results and inputs used."""
    return xlsx_bytes(heat_sheets(outcome, index))


def heat_json(outcome: Outcome, index: int = 0) -> str:
    """One heat as JSON: the result document with the inputs used under "inputs"."""
    used = tables.inputs_table(outcome.heats, index)
    rows = zip(used["field"], used["value"], used["unit"], strict=True)
    inputs = {field: {"value": value, "unit": unit} for field, value, unit in rows}
    return json_text({**outcome.document(index), "inputs": inputs})
