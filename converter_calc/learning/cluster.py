"""Replay, spread and tuning of a long log by many processes, on one machine or on several.

The log is checked and cut into Parquet parts; a Dask cluster works on the parts, each of which
gives the same numbers wherever it is worked on. A part whose worker dies is worked on again, so
nothing is lost. Workers on other machines need the same version of this package, and a folder
that they all see under one path.

Needs the optional extra `cluster`; nothing else of the package does.
"""

from __future__ import annotations

import tempfile
from collections.abc import Callable, Iterator, Mapping, Sequence
from contextlib import contextmanager
from functools import partial
from pathlib import Path
from typing import TYPE_CHECKING, Any

from converter_calc.basis.errors import Fault, InputError
from converter_calc.learning.log_parts import ROWS, Refused, Shop, cut_log, read_part, replaced
from converter_calc.learning.replay import read_heats
from converter_calc.learning.spread_table import spread_table
from converter_calc.learning.streamed_tuning import PartSums, tune_parts
from converter_calc.learning.streaming import (
    Progress,
    Replayed,
    replay_frame,
    shop_document,
    write_tables,
)
from converter_calc.learning.tuned import Tuned
from converter_calc.learning.tuning import SHARED_ERROR
from converter_calc.learning.tuning_equations import NormalEquations, Point

if TYPE_CHECKING:
    import pandas as pd

#: Heats of a part whose spread is worked out: each is solved some hundred times.
SPREAD_ROWS = 512
MOST_WORKERS = 64


@contextmanager
def local_cluster(workers: int = 2) -> Iterator[Any]:
    """A Dask client of a cluster on this machine, a process a worker; closed at the end.

    It listens on 127.0.0.1 only and shows no dashboard.

    Raises
    ------
    InputError : the optional extra is not installed, or `workers` is not 1 to MOST_WORKERS.
    """
    distributed = _distributed()
    if not 1 <= workers <= MOST_WORKERS:
        raise InputError([Fault("workers", f"must be 1 to {MOST_WORKERS}, given {workers}")])
    with (
        tempfile.TemporaryDirectory(prefix="converter-dask-") as scratch,
        distributed.LocalCluster(
            n_workers=workers,
            processes=True,
            threads_per_worker=1,
            host="127.0.0.1",
            dashboard_address=None,
            local_directory=scratch,
        ) as cluster,
        distributed.Client(cluster) as client,
    ):
        yield client


def _distributed() -> Any:
    try:
        import distributed
    except ImportError as error:
        message = (
            "more than one process needs the optional extra: pip install 'converter-calc[cluster]'"
        )
        raise InputError([Fault("workers", message)]) from error
    return distributed


def replay_on_cluster(
    client: Any,
    log: str | Path,
    shop: Shop,
    out: str | Path,
    values: Mapping[str, float] | None = None,
    *,
    rows: int = ROWS,
    folder: Path | None = None,
    refused_to: str | Path | None = None,
    progress: Progress | None = None,
) -> Replayed:
    """As `streaming.replay_file`, worked on by a cluster; the file is the same.

    Parameters
    ----------
    client : Dask client. folder : empty folder for the parts that all workers see; a temporary
    one of this machine where not given. Others as in `replay_file`.

    Raises
    ------
    InputError : as `replay_file`.
    """
    document = shop_document(shop)
    with _folder(folder) as place:
        parts, refused = cut_log(log, place, document, rows=rows, refused_to=refused_to)
        work = partial(_replay_part, shop=document, values=dict(values or {}))
        came = _worked(client, work, parts, progress, lambda done: done.heats)
        made = ((read_part(_result(path)), done) for path, done in zip(parts, came, strict=True))
        total = write_tables(made, out)
    total.refused = refused
    return total


def spread_on_cluster(
    client: Any,
    log: str | Path,
    shop: Shop,
    out: str | Path,
    draws: int = 512,
    seed: int = 1,
    *,
    charged: bool = True,
    rows: int = SPREAD_ROWS,
    folder: Path | None = None,
    progress: Progress | None = None,
) -> tuple[int, Refused]:
    """Chances of every heat of a log, worked on by a cluster and written as a Parquet file.

    Parameters
    ----------
    client, log, shop, folder, progress : as in `replay_on_cluster`. out : file to write, columns
    as of `spread_frame`. draws, seed, charged : as in `spread_table`.

    Returns
    -------
    Number of heats, and the rows that were no heats.
    """
    document = shop_document(shop)
    with _folder(folder) as place:
        parts, refused = cut_log(log, place, document, rows=rows)
        run = {"draws": draws, "seed": seed, "charged": charged}
        work = partial(_spread_part, shop=document, run=run)
        came = _worked(client, work, parts, progress, int)
        made = (
            (read_part(_result(path)), Replayed(heats=n))
            for path, n in zip(parts, came, strict=True)
        )
        total = write_tables(made, out)
    return total.heats, refused


def tune_on_cluster(
    client: Any,
    log: str | Path,
    shop: Shop,
    *,
    only: Sequence[str] = (),
    without: Sequence[str] = (),
    shared_error: float = SHARED_ERROR,
    rows: int = ROWS,
    folder: Path | None = None,
    progress: Progress | None = None,
) -> tuple[Tuned, Refused]:
    """As `streaming.tune_file`, the sums of each pass worked out by a cluster.

    Parameters
    ----------
    client, folder : as in `replay_on_cluster`. Others as in `tune_file`.
    """
    document = shop_document(shop)
    with _folder(folder) as place:
        parts, refused = cut_log(log, place, document, rows=rows)

        def accumulate(point: Point) -> NormalEquations:
            work = partial(_sums_of_part, shop=document, point=point)
            first, *others = _worked(client, work, parts, progress, lambda sums: sums.heats)
            total: NormalEquations = sum(others, start=first)
            return total

        tuned = tune_parts(
            parts, document, only, without, shared_error=shared_error, accumulate=accumulate
        )
    return tuned, refused


def _worked(
    client: Any,
    work: Callable[[Path], Any],
    parts: Sequence[Path],
    progress: Progress | None,
    heats: Callable[[Any], int],
) -> list[Any]:
    """What `work` returns for each part, in their order."""
    distributed = _distributed()
    if not parts:
        raise InputError([Fault("log", "holds no heat that can be read")])
    futures = client.map(work, parts, pure=False)
    try:
        done = 0
        for _, result in distributed.as_completed(futures, with_results=True):
            done += heats(result)
            if progress is not None:
                progress(done)
        return list(client.gather(futures))
    except distributed.KilledWorker as error:
        message = "a part of the log killed several workers, one after the other; is memory short?"
        raise InputError([Fault("workers", message)]) from error
    finally:
        client.cancel(futures)


def _result(path: Path) -> Path:
    return path.with_name("result-" + path.name)


def _replay_part(path: Path, shop: Mapping[str, Any], values: Mapping[str, float]) -> Replayed:
    """Replay a part and write the result beside it."""
    table, came = replay_frame(read_part(path), shop, values)
    _write(table, _result(path))
    return came


def _spread_part(path: Path, shop: Mapping[str, Any], run: Mapping[str, Any]) -> int:
    """Spread of a part, written beside it; number of heats."""
    table = spread_frame(read_part(path), shop, **run)
    _write(table, _result(path))
    return len(table)


def spread_frame(
    frame: pd.DataFrame, shop: Shop, draws: int = 512, seed: int = 1, *, charged: bool = True
) -> pd.DataFrame:
    """Chances of the heats of a part of a log, as `spread_table`; a row a heat.

    A heat whose charge is not complete is "charge incomplete" and has no numbers, where the
    charge is to be complete (`charged`).
    """
    import numpy as np

    frame = frame.reset_index(drop=True)
    usable = read_heats(frame, shop).usable if charged else np.ones(len(frame), dtype=bool)
    table = spread_table(frame[usable], shop, draws, seed, charged=charged)
    table = table.reindex(frame.index)
    table["heat_id"] = frame["heat_id"].astype(object)
    table["status"] = table["status"].where(usable, "charge incomplete")
    return table


def _write(table: pd.DataFrame, path: Path) -> None:
    with replaced(path) as part:
        table.to_parquet(part, index=False)


def _sums_of_part(path: Path, shop: Mapping[str, Any], point: Point) -> NormalEquations:
    return PartSums([path], shop)(point)


@contextmanager
def _folder(folder: Path | None) -> Iterator[Path]:
    if folder is not None:
        yield Path(folder)
        return
    with tempfile.TemporaryDirectory(prefix="converter-log-") as place:
        yield Path(place)
