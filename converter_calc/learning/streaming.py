"""Replay of logs too long to hold: a part at a time, in bounded memory."""

from __future__ import annotations

from collections.abc import Callable, Iterator, Mapping
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
    pieces,
    replaced,
)
from converter_calc.learning.replay import HeatLog, read_heats, replay
from converter_calc.learning.replay_quantities import quantities
from converter_calc.learning.tuned import load_tuned

if TYPE_CHECKING:
    import pandas as pd

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
