"""Replay and tuning of logs too long to hold: a part at a time, in bounded memory."""

from __future__ import annotations

import tempfile
from collections.abc import Callable, Iterator, Mapping, Sequence
from dataclasses import dataclass, field, replace
from pathlib import Path
from typing import TYPE_CHECKING, Any

import numpy as np

from converter_calc.balance.documents import read_shop
from converter_calc.balance.heats import heats_from_frame
from converter_calc.basis.errors import Fault, InputError
from converter_calc.learning.log_parts import (
    MOST_NAMED,
    ROWS,
    Refused,
    Shop,
    cut_log,
    pieces,
    read_part,
    replaced,
)
from converter_calc.learning.parameters import ParameterSet, parameter_set
from converter_calc.learning.replay import HeatLog, read_heats, replay
from converter_calc.learning.replay_quantities import quantities
from converter_calc.learning.tuned import Tuned, load_tuned
from converter_calc.learning.tuning import SHARED_ERROR, report, search, summed
from converter_calc.learning.tuning_equations import NormalEquations, Point, normal_equations

if TYPE_CHECKING:
    import pandas as pd

#: Heats that tell where the search may start, for a log so many times as long.
SAMPLE, MUCH_LONGER = 4096, 4
#: Parts that are kept in memory between passes, some 10 MB each; the others are read anew.
HELD = 16
SOLVED, INCOMPLETE, NO_ANSWER = "solved", "charge incomplete", "no answer"

#: Told how many heats are done; may raise to stop the work.
Progress = Callable[[int], None]


@dataclass
class Fit:
    """How a quantity fits: outcomes compared, sums of error and of its size, in its own unit.

    Error is observed minus predicted.
    """

    used: int = 0
    error: float = 0.0
    absolute: float = 0.0

    def __add__(self, other: Fit) -> Fit:
        """Both together."""
        return Fit(self.used + other.used, self.error + other.error, self.absolute + other.absolute)

    @property
    def bias(self) -> float:
        """Mean error; NaN where nothing was compared."""
        return self.error / self.used if self.used else float("nan")

    @property
    def mean_absolute(self) -> float:
        """Mean absolute error; NaN where nothing was compared."""
        return self.absolute / self.used if self.used else float("nan")


@dataclass
class Replayed:
    """What a replay of a log came to.

    heats : good rows. incomplete : of these, charge not complete; unsolved : no answer. fits :
    by quantity. refused : rows that were no heats. named : first heats of `incomplete`, why.
    """

    heats: int = 0
    incomplete: int = 0
    unsolved: int = 0
    fits: dict[str, Fit] = field(default_factory=lambda: {name: Fit() for name in quantities()})
    named: list[dict[str, Any]] = field(default_factory=list)
    refused: Refused = field(default_factory=Refused)

    def __add__(self, other: Replayed) -> Replayed:
        """Both parts together; the refused rows are those of the first."""
        return Replayed(
            self.heats + other.heats,
            self.incomplete + other.incomplete,
            self.unsolved + other.unsolved,
            {name: self.fits[name] + other.fits[name] for name in self.fits},
            [*self.named, *other.named][:MOST_NAMED],
            self.refused,
        )

    def document(self) -> dict[str, Any]:
        """Everything as plain values, ready for JSON."""
        fits = {
            name: {"heats": fit.used, "mean_error": fit.bias, "mean_absolute": fit.mean_absolute}
            for name, fit in self.fits.items()
            if fit.used
        }
        return {
            "heats": self.heats,
            "incomplete": self.incomplete,
            "unsolved": self.unsolved,
            "rows_refused": self.refused.rows,
            "observed_less_predicted": fits,
            "incomplete_named": self.named,
            "refused_named": self.refused.named,
        }


def tuned_values(path: str | Path, shop: Shop) -> dict[str, float]:
    """Values of a file of tuned parameters, to replay with.

    Raises InputError where the file is none, or the shop chooses other laws than it was tuned
    with.
    """
    import pandas as pd

    tuned = load_tuned(path)
    tuned.apply(heats_from_frame(pd.DataFrame({"heat_id": []}), shop=shop))
    return tuned.practice_values()


def replay_frame(
    frame: pd.DataFrame, shop: Shop, values: Mapping[str, float] | None = None
) -> tuple[pd.DataFrame, Replayed]:
    """Predict the heats of a part of a log.

    Parameters
    ----------
    frame : as `read_log` gives it. shop : shop file or its content. values : parameters by flat
    name, put in place of those of the shop.

    Returns
    -------
    A table, a row a heat: heat_id, tapped_at, status ("solved", "charge incomplete", "no
    answer"), reason, and of every quantity the outcome as logged and `predicted_<quantity>`; and
    what it came to.
    """
    import pandas as pd

    log = _all_quantities(read_heats(frame, shop))
    found = replay(log, values=values)
    status = np.full(log.n, SOLVED, dtype=object)
    status[~found.converged] = NO_ANSWER
    status[~log.usable] = INCOMPLETE
    reason = np.full(log.n, None, dtype=object)
    faults = log.faults.to_dict("records")
    for fault in reversed(faults):  # the first fault of a heat is the one told
        given = f" (given {fault['given']})" if fault["given"] else ""
        reason[fault["row"]] = f"{fault['field']}: {fault['reason']}{given}"
    table: dict[str, Any] = {"heat_id": log.ids}
    if "tapped_at" in frame:
        table["tapped_at"] = frame["tapped_at"].to_numpy()
    table |= {"status": status, "reason": reason}
    came = Replayed(
        heats=log.n,
        incomplete=int((~log.usable).sum()),
        unsolved=int((log.usable & ~found.converged).sum()),
        named=faults[:MOST_NAMED],  # type: ignore[arg-type]
    )
    for name in found.names:
        _, predicted = found.plain(name)
        blank = np.full(log.n, np.nan)
        observed = frame[name].to_numpy(dtype=float, na_value=np.nan) if name in frame else blank
        table |= {name: observed, f"predicted_{name}": predicted}
        error = observed - predicted
        error = error[np.isfinite(error)]
        came.fits[name] = Fit(error.size, float(error.sum()), float(np.abs(error).sum()))
    return pd.DataFrame(table), came


def _all_quantities(log: HeatLog) -> HeatLog:
    """The same log asked for every quantity, so that all parts give the same columns."""
    observed = np.full((log.n, len(quantities())), np.nan)
    for column, name in enumerate(quantities()):
        if name in log.names:
            observed[:, column] = log.observed[:, log.names.index(name)]
    return replace(log, names=tuple(quantities()), observed=observed)


def replay_file(
    log: str | Path,
    shop: Shop,
    out: str | Path,
    values: Mapping[str, float] | None = None,
    *,
    rows: int = ROWS,
    refused_to: str | Path | None = None,
    progress: Progress | None = None,
) -> Replayed:
    """Predict every heat of a log of any length and write a Parquet file.

    Parameters
    ----------
    log : CSV or Parquet file. shop, values : as in `replay_frame`. out : file to write, columns
    as there; it appears only once it is complete. rows : heats at a time. refused_to : CSV file
    for the rows that were no heats. progress : told how many heats are done.

    Raises
    ------
    InputError : the log or the shop is wrong, or a file cannot be written.
    """
    document = shop_document(shop)
    refused = Refused()

    def tables() -> Iterator[tuple[pd.DataFrame, Replayed]]:
        for frame in pieces(log, document, refused, rows=rows, refused_to=refused_to):
            yield replay_frame(frame, document, values)

    total = write_tables(tables(), out, progress)
    return replace(total, refused=refused)


def write_tables(
    tables: Iterator[tuple[pd.DataFrame, Replayed]],
    out: str | Path,
    progress: Progress | None = None,
) -> Replayed:
    """Write tables one below the other as one Parquet file; the sums of all of them."""
    import pyarrow as pa
    from pyarrow import parquet

    total = Replayed()
    with replaced(out) as part:
        writer = None
        try:
            for table, came in tables:
                rows = pa.Table.from_pandas(table, schema=_schema(table), preserve_index=False)
                writer = writer or parquet.ParquetWriter(part, rows.schema)
                writer.write_table(rows)
                total = total + came
                if progress is not None:
                    progress(total.heats)
        finally:
            if writer is not None:
                writer.close()
        if writer is None:
            raise InputError([Fault("log", "holds no heat that can be read")])
    return total


def _schema(table: pd.DataFrame) -> Any:
    """The same types for every part, also where a column of it is blank."""
    import pyarrow as pa

    kinds = {name: pa.string() for name in ("heat_id", "status", "reason")}
    kinds["tapped_at"] = pa.timestamp("us")
    return pa.schema([(name, kinds.get(name, pa.float64())) for name in table.columns])


def shop_document(shop: Shop) -> dict[str, Any]:
    """Content of a shop file, which may be at hand already."""
    return dict(shop) if isinstance(shop, Mapping) else read_shop(Path(shop))


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
