"""A long heat log cut into checked Parquet parts, and the sums that are kept of each part."""

from __future__ import annotations

import os
from collections.abc import Iterator, Mapping
from contextlib import contextmanager
from dataclasses import dataclass, field
from pathlib import Path
from typing import TYPE_CHECKING, Any

from converter_calc.basis.errors import Fault, InputError
from converter_calc.basis.inert_text import guarded
from converter_calc.heatlog.reading import REFUSED_COLUMNS, iter_log
from converter_calc.heatlog.writing import write_log

if TYPE_CHECKING:
    import pandas as pd

#: Heats of a part. Half as many cost a tenth more time, four times as many twice the memory.
ROWS = 16384
#: Faults that are kept by name; all are counted.
MOST_NAMED = 1000

Shop = str | Path | Mapping[str, Any]


@dataclass
class Refused:
    """Rows of a log that were not taken.

    rows : how many. named : the first MOST_NAMED faults (row, heat_id, field, given, reason).
    """

    rows: int = 0
    named: list[dict[str, Any]] = field(default_factory=list)

    def add(self, faults: pd.DataFrame) -> None:
        """Count the faults of a part."""
        self.rows += int(faults["row"].nunique())
        left = MOST_NAMED - len(self.named)
        self.named += faults.iloc[:left].to_dict("records")  # type: ignore[arg-type]


def pieces(
    log: str | Path,
    shop: Shop | None,
    refused: Refused,
    *,
    rows: int = ROWS,
    refused_to: str | Path | None = None,
) -> Iterator[pd.DataFrame]:
    """Good rows of a log of any length, a part at a time.

    Parameters
    ----------
    log : CSV or Parquet file. refused : counts what is not taken. rows : of a part.
    refused_to : CSV file for all faults, a line each.

    Raises
    ------
    InputError : the log as a whole cannot be taken; see `heatlog.reading.iter_log`.
    """
    with _faults_file(refused_to) as tell:
        for read in iter_log(log, rows, shop):
            refused.add(read.refused)
            tell(read.refused)
            if len(read.frame):
                yield read.frame.reset_index(drop=True)


@contextmanager
def _faults_file(path: str | Path | None) -> Iterator[Any]:
    """A function that writes faults to a CSV file; nothing is written where no path is given."""
    if path is None:
        yield lambda _: None
        return
    with replaced(path) as part:
        part.write_text(",".join(REFUSED_COLUMNS) + "\n", encoding="utf-8")

        def tell(faults: pd.DataFrame) -> None:
            texts = faults.map(lambda cell: guarded(cell) if isinstance(cell, str) else cell)
            texts.to_csv(part, mode="a", header=False, index=False, lineterminator="\n")

        yield tell


@contextmanager
def replaced(path: str | Path) -> Iterator[Path]:
    """A place to write a file that takes the name `path` only once it is complete.

    Raises InputError where it cannot be written.
    """
    path = Path(path)
    try:
        part = path.with_name(f".{path.name}.{os.getpid()}.part")
        try:
            yield part
            part.replace(path)
        finally:
            part.unlink(missing_ok=True)
    except (OSError, ValueError) as error:  # ValueError: a null byte in the name
        reason = getattr(error, "strerror", None) or error
        raise InputError([Fault(str(path), f"cannot be written: {reason}")]) from error


def cut_log(
    log: str | Path,
    folder: Path,
    shop: Shop | None,
    *,
    rows: int = ROWS,
    refused_to: str | Path | None = None,
) -> tuple[list[Path], Refused]:
    """Write the good rows of a log as Parquet parts in `folder`; (parts in order, refused)."""
    refused = Refused()
    parts = []
    for place, frame in enumerate(pieces(log, shop, refused, rows=rows, refused_to=refused_to)):
        path = folder / f"part-{place:05d}.parquet"
        write_log(frame, path)
        parts.append(path)
    return parts, refused


def read_part(path: Path) -> pd.DataFrame:
    """A part as `cut_log` wrote it."""
    import pandas as pd

    return pd.read_parquet(path)
