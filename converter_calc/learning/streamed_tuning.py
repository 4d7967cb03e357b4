"""Tuning on logs too long to hold: a part at a time, in bounded memory."""

from __future__ import annotations

import tempfile
from collections.abc import Callable, Mapping, Sequence
from pathlib import Path
from typing import Any

from converter_calc.basis.errors import Fault, InputError
from converter_calc.learning.log_parts import (
    MOST_NAMED,
    ROWS,
    Refused,
    Shop,
    cut_log,
    read_part,
)
from converter_calc.learning.parameters import ParameterSet, parameter_set
from converter_calc.learning.replay import HeatLog, read_heats
from converter_calc.learning.streaming import Progress, shop_document
from converter_calc.learning.tuned import Tuned
from converter_calc.learning.tuning import SHARED_ERROR, report, search, summed
from converter_calc.learning.tuning_equations import NormalEquations, Point, normal_equations

#: Heats that tell where the search may start, for a log so many times as long.
SAMPLE, MUCH_LONGER = 4096, 4
#: Parts that are kept in memory between passes, some 10 MB each; the others are read anew.
HELD = 16


def tune_file(
    log: str | Path,
    shop: Shop,
    *,
    only: Sequence[str] = (),
    without: Sequence[str] = (),
    shared_error: float = SHARED_ERROR,
    rows: int = ROWS,
    refused_to: str | Path | None = None,
    progress: Progress | None = None,
) -> tuple[Tuned, Refused]:
    """Parameters of a shop from a heat log of any length, as `tune`.

    The log is checked once and cut into parts on disk; each pass of the search reads them one
    at a time and adds up their normal equations. For a long log a sample tells where to start;
    the scatter then settles a little elsewhere, which moves parameters by less than a fifth of
    their standard errors.

    Parameters
    ----------
    log : CSV or Parquet file. shop : shop file or its content. only, without, shared_error : as
    in `tune`.
    rows : heats at a time. refused_to : CSV file for the rows that were no heats. progress :
    told how many heats were gone through, over all passes.

    Raises
    ------
    InputError, ConvergenceError : as `tune`.
    """
    document = shop_document(shop)
    with tempfile.TemporaryDirectory(prefix="converter-log-") as folder:
        parts, refused = cut_log(log, Path(folder), document, rows=rows, refused_to=refused_to)
        found = tune_parts(
            parts, document, only, without, shared_error=shared_error, progress=progress
        )
    return found, refused


def tune_parts(
    parts: Sequence[Path],
    shop: Shop,
    only: Sequence[str] = (),
    without: Sequence[str] = (),
    *,
    shared_error: float = SHARED_ERROR,
    accumulate: Callable[[Point], NormalEquations] | None = None,
    progress: Progress | None = None,
) -> Tuned:
    """Parameters of a shop from the parts of a log.

    Parameters
    ----------
    parts : Parquet files of `cut_log`. accumulate : sums of all parts at a point, where somebody
    else adds them up. Others as in `tune_file`.
    """
    if not parts:
        raise InputError([Fault("log", "holds no heat that can be read")])
    document = shop_document(shop)
    first = read_part(parts[0])
    entries = parameter_set(document, map(str, first.columns), only, without)
    start = _start(parts, entries, document)
    sums = PartSums(parts, document, progress)
    found = search(entries, accumulate or sums, start, shared_error=shared_error)
    faults, heats = sums.faults()
    return report(found, document, rows=heats, faults=faults)


class PartSums:
    """Sums over parts of a log, of which all but the first HELD stay on disk.

    Where each heat stood at the last pass is kept (some 60 bytes a heat), so that the next pass
    starts there.
    """

    def __init__(
        self, parts: Sequence[Path], shop: Mapping[str, Any], progress: Progress | None = None
    ) -> None:
        self._parts, self._shop, self._progress = parts, dict(shop), progress
        self._stood: dict[Path, list[Any]] = {}
        self._held: dict[Path, HeatLog] = {}
        self._done = 0

    def __call__(self, point: Point) -> NormalEquations:
        """Sums of all parts at a point, added up in their order."""
        total = None
        for path in self._parts:
            sums = self.of(path, point)
            total = sums if total is None else total + sums
            if self._progress is not None:
                self._progress(self._done)
        if total is None:
            raise InputError([Fault("log", "holds no heat that can be read")])
        return total

    def of(self, path: Path, point: Point) -> NormalEquations:
        """Sums of one part."""
        log = self._held.get(path)
        if log is None:
            log = read_heats(read_part(path), self._shop)
            if path in self._stood:
                log.resume(self._stood[path])
            if len(self._held) < HELD:
                self._held[path] = log
        sums = normal_equations(log, point)
        if path not in self._held:
            self._stood[path] = log.stood()
        self._done += log.n
        return sums

    def faults(self) -> tuple[list[dict[str, Any]], int]:
        """(first faults of heats that cannot be used, with rows of the whole log; all heats)."""
        named: list[dict[str, Any]] = []
        heats = 0
        for path in self._parts:
            log = self._held.get(path) or read_heats(read_part(path), self._shop)
            found = log.faults.iloc[: MOST_NAMED - len(named)]
            rows = found.assign(row=found["row"].astype(int) + heats)
            named += rows.to_dict("records")  # type: ignore[arg-type]
            heats += log.n
        return named, heats


def _start(
    parts: Sequence[Path], entries: ParameterSet, shop: Mapping[str, Any]
) -> dict[str, float] | None:
    """Values that a sample tells, spread evenly over the parts; None for a log not long."""
    import pandas as pd
    from pyarrow import parquet

    heats = sum(parquet.read_metadata(path).num_rows for path in parts)
    if heats < MUCH_LONGER * SAMPLE:
        return None
    each = -(-SAMPLE // len(parts))
    picked = []
    for path in parts:
        frame = read_part(path)
        picked.append(frame.iloc[:: max(len(frame) // each, 1)])
    sample = pd.concat(picked, ignore_index=True)
    try:
        found = search(entries, summed([read_heats(sample, shop)]))
    except InputError:  # no heat of the sample can be used; the whole log may hold some
        return None
    return entries.values(found.point.z)
