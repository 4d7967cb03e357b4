"""Long tables: read in parts, solved in parts, shared out among processes, put together."""

from __future__ import annotations

import gc
import itertools
import mmap
import os
import threading
from collections.abc import Callable, Iterator
from typing import TYPE_CHECKING, Any

import numpy as np

from converter_calc.balance.frames import row_ids
from converter_calc.balance.heats import HeatTable, heats_from_frame
from converter_calc.balance.solving import Memory
from converter_calc.basis.dual import Array
from converter_calc.basis.errors import ConvergenceError
from converter_calc.planning.outcome import Outcome

if TYPE_CHECKING:
    import pandas as pd

#: Rows of a table that are solved at once, and that are read off at once: they bound the
#: memory of a long table, and the second keeps its arrays in cache.
ROWS_AT_ONCE = 65536
ROWS_READ_OFF = 16384
#: Rows from which a table is shared out among processes: starting them costs about as much
#: as solving 3000 heats.
SHARED_FROM = 30000

#: Room for result columns in the memory that processes share.
MOST_COLUMNS = 160

Columns = dict[str, Any]
Solve = Callable[[HeatTable, int, Memory], Iterator[tuple[Array, Outcome]]]


def solve_table(frame: pd.DataFrame, shop: Any, solve: Solve) -> pd.DataFrame:
    """Result table of a table of heats, in the same row order and with the same index.

    solve : solves a HeatTable and yields (row numbers, outcome) of its groups.
    Raises InputError for wrong input.
    """
    import pandas as pd

    if not len(frame):
        heats_from_frame(frame, shop=shop)
        return pd.DataFrame({"heat_id": [], "status": []})
    workers = _workers(len(frame))
    if workers > 1:
        columns = _share_out(frame, shop, solve, workers)
    else:
        columns = {"heat_id": _ids(frame), **_solve_part(frame, shop, solve)}
    # texts stay objects: to guess their type anew would cost as much as a tenth of the solve
    table = {
        name: pd.Series(x, index=frame.index, dtype=object, copy=False) if x.dtype == object else x
        for name, x in columns.items()
    }
    return pd.DataFrame(table, index=frame.index, copy=False)


def _ids(frame: pd.DataFrame) -> Any:
    return np.array(row_ids(frame), dtype=object)


def _workers(n: int) -> int:
    """Processes to share n heats out to: one where it would not pay or is not safe.

    A process is forked, which is safe only while no other thread runs.
    """
    if n < SHARED_FROM or threading.active_count() > 1 or not hasattr(os, "fork"):
        return 1
    return min(os.cpu_count() or 1, n // (SHARED_FROM // 2))


def _share_out(frame: pd.DataFrame, shop: Any, solve: Solve, workers: int) -> Columns:
    """Equal parts of the table in processes of their own, in row order.

    Numbers come back through memory that the processes share; only texts are sent.
    """
    import multiprocessing

    n = len(frame)
    shared = np.frombuffer(mmap.mmap(-1, MOST_COLUMNS * n * 8)).reshape(MOST_COLUMNS, n)
    edges = np.linspace(0, n, workers + 1).astype(int).tolist()
    context = multiprocessing.get_context("fork")

    def work(pipe: Any, first: int, last: int) -> None:
        gc.disable()  # a process that ends soon need not tidy up
        try:
            columns = _solve_part(frame.iloc[first:last], shop, solve)
            numbers = [name for name, x in columns.items() if x.dtype != object]
            for row, name in enumerate(numbers):
                shared[row, first:last] = columns[name]
            texts = {name: _packed(x) for name, x in columns.items() if x.dtype == object}
            pipe.send((numbers, texts, list(columns), None))
        except Exception as error:
            pipe.send(([], {}, [], error))

    gc.freeze()  # the children then do not copy pages only to count references
    pipes = []
    for edge in itertools.pairwise(edges):
        ours, theirs = context.Pipe(duplex=False)
        context.Process(target=work, args=(theirs, *edge), daemon=True).start()
        theirs.close()
        pipes.append(ours)
    gc.unfreeze()
    ids = _ids(frame)
    found = [_answer(pipe) for pipe in pipes]
    for *_, error in found:
        if error is not None:
            raise error
    if all(answer[0] == found[0][0] for answer in found):
        columns = {name: shared[row] for row, name in enumerate(found[0][0])}
    else:
        columns = _joined(
            [
                {name: shared[row, a:b] for row, name in enumerate(answer[0])}
                for answer, (a, b) in zip(found, itertools.pairwise(edges), strict=True)
            ]
        )
    for name in found[0][1]:
        columns[name] = np.concatenate([_unpacked(answer[1][name]) for answer in found])
    order = dict.fromkeys(name for answer in found for name in answer[2])
    return {"heat_id": ids, **{name: columns[name] for name in order}}


def _answer(pipe: Any) -> Any:
    """What a process sends; a ConvergenceError where it died without a word."""
    try:
        return pipe.recv()
    except EOFError:
        error = ConvergenceError("a process that solved a part of the table was killed")
        return [], {}, [], error


def _packed(texts: Any) -> tuple[list[str], Any]:
    """Texts as the different ones among them and a number each: few bytes to send."""
    if (texts == texts[0]).all():
        return [texts[0]], np.zeros(len(texts), dtype=np.int32)
    places: dict[str, int] = {}
    codes = [places.setdefault(text, len(places)) for text in texts.tolist()]
    return list(places), np.array(codes, dtype=np.int32)


def _unpacked(packed: tuple[list[str], Any]) -> Any:
    return np.array(packed[0], dtype=object)[packed[1]]


def _solve_part(frame: pd.DataFrame, shop: Any, solve: Solve) -> Columns:
    """Result columns of a table, solved in pieces of ROWS_AT_ONCE.

    On one thread: the products are small, and waking another costs more than it saves.
    """
    from threadpoolctl import threadpool_limits

    pieces: list[Columns] = []
    memory = Memory()
    with threadpool_limits(limits=1, user_api="blas"):
        for first in range(0, len(frame), ROWS_AT_ONCE):
            heats = heats_from_frame(frame.iloc[first : first + ROWS_AT_ONCE], shop=shop)
            merged: Columns = {}
            for rows, outcome in solve(heats, ROWS_READ_OFF, memory):
                for name, values in result_columns(outcome).items():
                    if name not in merged:
                        merged[name] = _blank(heats.n, text=values.dtype == object)
                    merged[name][rows] = values
            pieces.append(merged)
    return pieces[0] if len(pieces) == 1 else _joined(pieces)


def _blank(n: int, *, text: bool) -> Any:
    return np.full(n, "" if text else np.nan, dtype=object if text else float)


def _joined(pieces: list[Columns]) -> Columns:
    """Pieces one under the other; a column that a piece lacks is blank there."""
    sizes = [len(next(iter(piece.values()))) for piece in pieces]
    names = dict.fromkeys(name for piece in pieces for name in piece)
    joined: Columns = {}
    for name in names:
        text = any(piece[name].dtype == object for piece in pieces if name in piece)
        joined[name] = np.concatenate(
            [
                piece[name] if name in piece else _blank(size, text=text)
                for piece, size in zip(pieces, sizes, strict=True)
            ]
        )
    return joined


def result_columns(outcome: Outcome) -> dict[str, Any]:
    """Columns of the result table, with what binds and the nearest end point of a heat."""
    table = outcome.columns()
    table.pop("heat_id")
    bad = np.array([status != "solved" for status in outcome.status], dtype=bool)
    if bad.any():  # an unsolved heat shows no numbers of its own
        for name, values in table.items():
            if values.dtype != object:
                table[name] = np.where(bad, np.nan, values)
    table["binding"] = np.array(outcome.binding, dtype=object)
    for name in ("end_temp_C", "end_C_pct", "end_P_pct"):
        column = np.full(outcome.n, np.nan)
        for row in np.flatnonzero(bad).tolist():
            column[row] = outcome.nearest[row].get(name, np.nan)
        table["nearest_" + name] = column
    return table
