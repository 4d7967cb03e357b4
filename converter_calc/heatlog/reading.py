"""Reading a heat log: every row is taken whole or refused with a reason, nothing guessed."""

from __future__ import annotations

from collections.abc import Iterable, Iterator, Mapping
from dataclasses import dataclass
from pathlib import Path
from typing import TYPE_CHECKING, Any

import numpy as np

from converter_calc.balance.checks import LEAST_IRON_PCT
from converter_calc.balance.fields import outside
from converter_calc.balance.schema import Parameter
from converter_calc.basis.errors import Fault, InputError
from converter_calc.heatlog.cells import (
    Bad,
    numbers_of,
    texts_of,
    times_of,
)
from converter_calc.heatlog.columns import (
    ID_COLUMN,
    Column,
    find_column,
    in_order,
    material_names,
    names_of_group,
    unknown_column,
)
from converter_calc.heatlog.sources import (
    Part,
    csv_parts,
    frame_part,
    kind_of,
    parquet_parts,
    workbook_parts,
)

if TYPE_CHECKING:
    import pandas as pd

ROWS_AT_ONCE = 65536
#: Faults listed one by one; beyond, each further row is listed with its first fault only.
MOST_FAULTS = 100_000
MOST_HOT_METAL_PCT, MOST_SLAG_PCT = 100.5, 105.0
REFUSED_COLUMNS = ["row", "heat_id", "field", "given", "reason"]


@dataclass
class LogRead:
    """A heat log as read.

    frame : one row a heat, in the order of the file. heat_id, vessel, grade are text (None
        where missing), tapped_at is datetime64[us] in UTC (NaT where missing), all others are
        float (NaN where missing); the index is the row number in the file.
    refused : one row a fault: row, heat_id, field, given, reason. A row with a fault is not
        in `frame`.
    skipped : columns of the file that were left out, only where that was asked for.
    """

    frame: pd.DataFrame
    refused: pd.DataFrame
    skipped: tuple[str, ...] = ()

    @property
    def rows_refused(self) -> int:
        """Number of rows that were refused."""
        return int(self.refused["row"].nunique())


def read_log(
    source: Any,
    shop: str | Path | Mapping[str, Any] | None = None,
    *,
    materials: Iterable[str] = (),
    decimal_mark: str = ".",
    skip_unknown: bool = False,
) -> LogRead:
    """A heat log from a file or a table.

    Parameters
    ----------
    source : path of a CSV (UTF-8 or UTF-16; comma, `;` or tab), Parquet or XLSX file, told
        apart by content; or a DataFrame.
    shop : shop file (path) or its content, which names the materials that may have a column
        beside those of the library.
    materials : names of further materials that may have a column.
    decimal_mark : "." or ",", of numbers that are written as text.
    skip_unknown : leave out columns that a heat log does not have, instead of refusing the file.

    Returns
    -------
    LogRead. Of rows with the same heat_id the first good one stays.

    Raises
    ------
    InputError : the file as a whole cannot be taken: missing, empty, of another kind, broken,
        without heat_id, with unknown or double columns.
    """
    reads = list(
        _checked(source, ROWS_AT_ONCE, _Reading(shop, materials, decimal_mark, skip_unknown))
    )
    return _together(reads)


def iter_log(
    path: str | Path,
    rows: int = ROWS_AT_ONCE,
    shop: str | Path | Mapping[str, Any] | None = None,
    *,
    materials: Iterable[str] = (),
    decimal_mark: str = ".",
    skip_unknown: bool = False,
) -> Iterator[LogRead]:
    """A heat log of any length in pieces, for CSV and Parquet in bounded memory.

    Parameters
    ----------
    path : CSV or Parquet file (XLSX is read whole first).
    rows : heats of a piece; all but the last have this many good rows.
    shop, materials, decimal_mark, skip_unknown : as in `read_log`.

    Yields
    ------
    LogRead of each piece; together they are what `read_log` gives. What stays in memory
    beside a piece is the name of each heat, to find those that come twice.

    Raises
    ------
    InputError : as `read_log`; also where `rows` is not positive.
    """
    if rows < 1:
        raise InputError([Fault("rows", f"must be 1 or more, given {rows}")])
    reading = _Reading(shop, materials, decimal_mark, skip_unknown)
    waiting: list[LogRead] = []
    for read in _checked(Path(path), rows, reading):
        waiting.append(read)
        while sum(len(part.frame) for part in waiting) >= rows:
            whole = _together(waiting)
            yield LogRead(whole.frame.iloc[:rows], whole.refused, whole.skipped)
            waiting = [LogRead(whole.frame.iloc[rows:], whole.refused.iloc[:0], whole.skipped)]
    last = _together(waiting)
    if len(last.frame) or len(last.refused):
        yield last


def fault_text(reason: str, given: str) -> str:
    """Why a value is refused and what was given, in one sentence."""
    return reason if not given or ", given " in reason else f"{reason}, given {given}"


class _Reading:
    """What holds for a whole log while it is read in parts."""

    def __init__(
        self,
        shop: Any,
        materials: Iterable[str],
        decimal_mark: str,
        skip_unknown: bool,  # noqa: FBT001
    ) -> None:
        if decimal_mark not in (".", ","):
            message = f"must be a point or a comma, given {decimal_mark!r}"
            raise InputError([Fault("decimal_mark", message)])
        self.materials = frozenset((*material_names(shop), *materials))
        self.decimal_mark = decimal_mark
        self.skip_unknown = skip_unknown
        self.first_row: dict[str, Any] = {}
        self.faults = 0

    def columns(self, names: Iterable[str]) -> tuple[dict[str, Column], tuple[str, ...]]:
        """Columns of the log by name, in order, and names of those left out."""
        known: dict[str, Column] = {}
        unknown: list[str] = []
        for name in in_order(names):
            column = find_column(name, self.materials)
            if column is None:
                unknown.append(name)
            else:
                known[name] = column
        if unknown and not self.skip_unknown:
            raise InputError(
                [Fault(name[:80], unknown_column(name, self.materials)) for name in unknown]
            )
        if ID_COLUMN not in known:
            raise InputError([Fault(ID_COLUMN, "the log has no such column")])
        return known, tuple(unknown)


def _checked(source: Any, rows: int, reading: _Reading) -> Iterator[LogRead]:
    if hasattr(source, "columns") and hasattr(source, "iloc"):
        parts, from_text = frame_part(source), False
    else:
        path = Path(source)
        kind = kind_of(path)
        from_text = kind != "parquet"
        if kind == "workbook":
            parts = workbook_parts(path)
        else:
            parts = csv_parts(path) if kind == "csv" else parquet_parts(path, rows)
    for part in parts:
        yield _check_part(part, reading, from_text=from_text)


def _check_part(part: Part, reading: _Reading, *, from_text: bool) -> LogRead:
    """Rows of a part that are right, and the faults of those that are not."""
    columns, skipped = reading.columns(part.columns)
    n = len(part.rows)
    faults = _Faults(n, reading)
    table: dict[str, Any] = {}
    for name, column in columns.items():
        cells = part.columns[name]
        if column.kind == "text":
            values, bad = texts_of(cells, name, unguard=from_text)
        elif column.kind == "time":
            values, bad = times_of(cells)
        else:
            values, bad = numbers_of(cells, reading.decimal_mark)
        table[name] = values
        if name == ID_COLUMN:
            blank_rows = _blank_rows(part, columns, values)
            bad = _without(bad, blank_rows)
        faults.add(name, bad)
        if column.kind == "number":
            faults.add(name, _out_of_bounds(values, column))
    _analyses(table, n, faults)
    _twice(table[ID_COLUMN], part.rows, reading, faults, blank_rows)
    good = ~faults.mask & ~blank_rows
    frame = _frame(table, columns, good, part)
    return LogRead(frame, _refused(part, faults, table[ID_COLUMN]), skipped)


def _refused(part: Part, faults: _Faults, ids: Any) -> Any:
    """Faults of a part in the order of its rows."""
    import pandas as pd

    numbered = part.rows.dtype != object
    listed = [
        (shape.row, (shape.row, None, "row", shape.given, shape.reason)) for shape in part.misshapen
    ]
    for name, bad in faults.listed:
        for place, given, reason in zip(bad.places.tolist(), bad.given, bad.reasons, strict=True):
            row = part.rows[place]
            listed.append((row if numbered else place, (row, ids[place], name, given, reason)))
    listed.sort(key=lambda pair: pair[0])
    return pd.DataFrame([fault for _, fault in listed], columns=REFUSED_COLUMNS, dtype=object)


class _Faults:
    """Faults of a part, column by column."""

    def __init__(self, n: int, reading: _Reading) -> None:
        self.mask = np.zeros(n, dtype=bool)
        self.listed: list[tuple[str, Bad]] = []
        self._reading = reading

    def add(self, name: str, bad: Bad) -> None:
        """Add the faults of a column."""
        if not len(bad.places):
            return
        if self._reading.faults + len(bad.places) > MOST_FAULTS:
            bad = _without(bad, self.mask)
        self.mask[bad.places] = True
        self._reading.faults += len(bad.places)
        self.listed.append((name, bad))


def _without(bad: Bad, mask: Any) -> Bad:
    """Faults of the rows that are not in `mask`."""
    keep = np.flatnonzero(~mask[bad.places]).tolist()
    return Bad(bad.places[keep], [bad.given[k] for k in keep], [bad.reasons[k] for k in keep])


def _blank_rows(part: Part, columns: Mapping[str, Column], ids: Any) -> Any:
    """Rows in which nothing stands at all; they are no heats and no fault."""
    import pandas as pd

    blank = np.asarray(pd.isna(ids), dtype=bool)
    places = np.flatnonzero(blank)
    for name in columns:
        if not len(places):
            break
        cells = part.columns[name]
        texts, _ = texts_of([_cell(cells, place) for place in places], name, unguard=False)
        places = places[np.asarray(pd.isna(texts), dtype=bool)]
    mask = np.zeros(len(blank), dtype=bool)
    mask[places] = True
    return mask


def _cell(cells: Any, place: Any) -> Any:
    cell = cells[int(place)]
    return cell.as_py() if hasattr(cell, "as_py") else cell


def _out_of_bounds(values: Any, column: Column) -> Bad:
    with np.errstate(invalid="ignore"):
        places = np.flatnonzero((values < column.low) | (values > column.high))
    row = Parameter(
        column.name, "", column.name, "number", column.unit, "", column.low, column.high, (), "", ""
    )
    given = values[places].tolist()
    reasons = [outside(value, row) for value in given]
    if column.low > 0.0:
        reasons = [
            text if value != 0.0 else f"{text}; leave a cell blank where the value is missing"
            for text, value in zip(reasons, given, strict=True)
        ]
    return Bad(places, [f"{value:.10g}" for value in given], reasons)


def _analyses(table: Mapping[str, Any], n: int, faults: _Faults) -> None:
    """Analyses whose parts contradict each other."""
    hot = {name: np.nan_to_num(x) for name, x in table.items()
           if name.startswith("hm_") and name.endswith("_pct")}  # fmt: skip
    iron = hot.pop("hm_Fe_pct", np.zeros(n))
    rest = sum(hot.values(), np.zeros(n))
    total = rest + iron
    text = "the analysis of the hot metal adds up to {:.4g} %, above 100"
    faults.add("hm_C_pct", _summed(total, total > MOST_HOT_METAL_PCT, text))
    little = (100.0 - rest < LEAST_IRON_PCT) & (total <= MOST_HOT_METAL_PCT)
    text = f"the analysis leaves {{:.4g}} % iron; hot metal has {LEAST_IRON_PCT:g} or more"
    faults.add("hm_C_pct", _summed(100.0 - rest, little, text))
    text = "given, but the analysis of the hot metal adds up to {:.4g} % only"
    faults.add("hm_Fe_pct", _summed(total, (iron > 0.0) & (total < 99.5), text))
    slag = [np.nan_to_num(x) for name, x in table.items()
            if name.startswith("slag_") and name != "slag_T_Fe_pct"]  # fmt: skip
    both = sum(slag, np.zeros(n))
    text = f"the analysis of the slag adds up to {{:.4g}} %, above {MOST_SLAG_PCT:g}"
    faults.add("slag_CaO_pct", _summed(both, both > MOST_SLAG_PCT, text))


def _summed(total: Any, wrong: Any, text: str) -> Bad:
    places = np.flatnonzero(wrong)
    numbers = total[places].tolist()
    return Bad(places, [f"{x:.6g}" for x in numbers], [text.format(x) for x in numbers])


def _twice(ids: Any, rows: Any, reading: _Reading, faults: _Faults, blank: Any) -> None:
    """Heats that came before; the first good row of a heat stays."""
    places, given, reasons = [], [], []
    first = reading.first_row
    for place in np.flatnonzero(~faults.mask & ~blank).tolist():
        name = ids[place]
        if name in first:
            places.append(place)
            given.append(name)
            reasons.append(f"stands in row {first[name]} already")
        else:
            first[name] = rows[place]
    faults.add(ID_COLUMN, Bad(np.array(places, dtype=np.int64), given, reasons))


def _frame(table: Mapping[str, Any], columns: Mapping[str, Column], good: Any, part: Part) -> Any:
    """Good rows; the key columns are always there."""
    import pandas as pd

    index = pd.Index(part.rows[good]) if part.index is None else part.index[good]
    blank = {
        "text": np.full(len(good), None, dtype=object),
        "time": np.full(len(good), np.datetime64("NaT", "us")),
    }
    made: dict[str, Any] = {}
    for name in in_order((*names_of_group("key"), *table)):
        column = columns.get(name) or find_column(name, ())
        values = table[name] if name in table else blank[column.kind if column else "text"]
        dtype = object if values.dtype == object else None
        made[name] = pd.Series(values[good], index=index, dtype=dtype)
    return pd.DataFrame(made, index=index)


def _together(reads: list[LogRead]) -> LogRead:
    """Parts as one; their columns are the same."""
    import pandas as pd

    if len(reads) == 1:
        return reads[0]
    faulty = [read.refused for read in reads if len(read.refused)]
    refused = pd.concat(faulty, ignore_index=True) if faulty else reads[0].refused
    filled = [read.frame for read in reads if len(read.frame)] or [reads[0].frame]
    frame = filled[0] if len(filled) == 1 else pd.concat(filled)
    return LogRead(frame, refused, reads[0].skipped)
