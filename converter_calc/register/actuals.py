"""What became of the heats, in the register: record, correct, import, export."""

from __future__ import annotations

import json
from collections.abc import Iterable, Mapping, Sequence
from dataclasses import dataclass, field
from pathlib import Path
from typing import TYPE_CHECKING, Any

from converter_calc.basis.errors import Fault, InputError
from converter_calc.heatlog.columns import in_order, material_names
from converter_calc.heatlog.reading import ROWS_AT_ONCE, LogRead, fault_text, iter_log, read_log
from converter_calc.heatlog.writing import write_log
from converter_calc.register import opening
from converter_calc.register.contents import contents_of, frame_of, with_plan_aims
from converter_calc.register.database import Database, as_json, from_json

if TYPE_CHECKING:
    import pandas as pd

_AT_ONCE = 500


@dataclass
class ImportReport:
    """What came of a log that was read into the register.

    new, updated, unchanged : heats. refused : a row a fault, as in LogRead. taken : False
    where nothing was recorded, because a row was refused and all or none was asked for.
    """

    new: int = 0
    updated: int = 0
    unchanged: int = 0
    taken: bool = True
    refused: Any = None
    skipped: tuple[str, ...] = field(default=())

    @property
    def rows_refused(self) -> int:
        """Number of rows that were refused."""
        return int(self.refused["row"].nunique())


class Actuals(Database):
    """Recorded actuals."""

    def record_actual(
        self,
        heat_id: str,
        values: Mapping[str, Any],
        *,
        clear: Iterable[str] = (),
        origin: str = "typed",
        shop: str | Path | Mapping[str, Any] | None = None,
    ) -> int:
        """Record what became of a heat.

        Parameters
        ----------
        heat_id : the heat.
        values : by names of the heat log. They are laid over what is recorded of the heat
            already; the older record is kept as superseded.
        clear : names whose recorded value was wrong and has no other.
        origin : where the values come from. shop : shop file with further materials.

        Returns
        -------
        Number of the record, that of the present one where nothing is new.

        Raises
        ------
        InputError : a name or a value is wrong, one fault a field; nothing is recorded.
        """
        import pandas as pd

        row = {"heat_id": heat_id, **values}
        materials = material_names(shop)
        frame = pd.DataFrame({name: pd.Series([cell], dtype=object) for name, cell in row.items()})
        read = read_log(frame, materials=(*self.materials(), *materials))
        if len(read.refused):
            lines = read.refused[["field", "reason", "given"]].astype(str).to_numpy().tolist()
            raise InputError(Fault(name, fault_text(why, given)) for name, why, given in lines)
        (name, content), *_ = contents_of(read.frame)
        with self.writing():
            self.add_materials(materials)
            before = self._current([name]).get(name)
            merged = {**(before[1] if before else {}), **content}
            for key in clear:
                if key not in merged:
                    raise InputError([Fault(key[:80], f"heat {name} has no such value to clear")])
                del merged[key]
            if before and before[1] == merged:
                return before[0]
            return self._put([(name, merged)], origin, [name] if before else [])

    def current_actual(self, heat_id: str) -> dict[str, Any] | None:
        """Present values of a heat by names of the heat log; None where nothing is recorded."""
        with opening.told(self.path):
            found = self._current([heat_id]).get(heat_id)
        return found[1] if found else None

    def _current(self, names: Sequence[str]) -> dict[str, tuple[int, dict[str, Any]]]:
        """Number and content of the present record of each heat that has one."""
        rows: list[tuple[str, int, str]] = []
        for first in range(0, len(names), _AT_ONCE):
            some = names[first : first + _AT_ONCE]
            marks = ",".join("?" * len(some))
            query = (
                "SELECT heat_id, actual_id, content FROM actuals "  # noqa: S608
                f"WHERE superseded_at IS NULL AND heat_id IN ({marks})"
            )
            rows += self.db.execute(query, some).fetchall()
        contents = from_json(row[2] for row in rows)
        return {
            name: (number, content)
            for (name, number, _), content in zip(rows, contents, strict=True)
        }

    def _put(
        self, records: Iterable[tuple[str, dict[str, Any]]], origin: str, old: Iterable[str]
    ) -> int:
        """Add records within a transaction; those of `old` become superseded. Last number."""
        moment = opening.now()
        self.db.executemany(
            "UPDATE actuals SET superseded_at = ? WHERE heat_id = ? AND superseded_at IS NULL",
            [(moment, name) for name in old],
        )
        self.db.executemany(
            "INSERT INTO actuals (heat_id, recorded_at, origin, content) VALUES (?, ?, ?, ?)",
            ((name, moment, origin, as_json(content)) for name, content in records),
        )
        return int(self.db.execute("SELECT max(actual_id) FROM actuals").fetchone()[0])

    def actuals(self, heat_id: str | None = None, *, history: bool = False) -> pd.DataFrame:
        """Actuals as a heat log with recorded_at (and superseded_at and origin with `history`).

        heat_id : only of this heat. history : also what was corrected since, oldest first.
        """
        where = "(?1 IS NULL OR heat_id = ?1)" + ("" if history else " AND superseded_at IS NULL")
        more = ["recorded_at", "superseded_at", "origin"] if history else ["recorded_at"]
        return self._frame(
            f"SELECT heat_id, content, {', '.join(more)} "  # noqa: S608
            f"FROM actuals WHERE {where} ORDER BY actual_id",
            (heat_id,),
            more,
        )

    def _frame(self, query: str, given: Sequence[Any], more: Sequence[str] = ()) -> pd.DataFrame:
        """Rows of (heat, content, more ...) as a heat log, made in pieces to bound the memory."""
        import pandas as pd

        pieces: list[pd.DataFrame] = []
        with opening.told(self.path):
            cursor = self.db.execute(query, given)
            while rows := cursor.fetchmany(ROWS_AT_ONCE):
                piece = frame_of([row[0] for row in rows], from_json(row[1] for row in rows))
                for place, name in enumerate(more, start=2):
                    piece[name] = pd.Series([row[place] for row in rows], dtype=object)
                pieces.append(piece)
        if not pieces:
            empty = frame_of([], [])
            return empty.assign(**{name: pd.Series([], dtype=object) for name in more})
        if len(pieces) == 1:
            return pieces[0]
        frame = pd.concat(pieces, ignore_index=True)
        return frame[[*in_order(set(frame.columns) - set(more)), *more]]

    def log_frame(self) -> pd.DataFrame:
        """All actuals as a heat log in the order of tapping; aims not logged are the plan's."""
        frame = self._frame(
            "SELECT heat_id, content FROM actuals WHERE superseded_at IS NULL ORDER BY actual_id",
            (),
        )
        planned = self.rows(
            "SELECT heat_id, planned FROM plans WHERE plan_id IN "
            "(SELECT max(plan_id) FROM plans GROUP BY heat_id)"
        )
        aims = {
            name: {aim: x for aim, x in json.loads(text).items() if aim.startswith("aim_")}
            for name, text in planned
        }
        frame = with_plan_aims(frame, aims)
        return frame.sort_values("tapped_at", kind="stable", ignore_index=True)

    def import_log(
        self,
        path: str | Path,
        *,
        shop: str | Path | Mapping[str, Any] | None = None,
        strict: bool = False,
        decimal_mark: str = ".",
        skip_unknown: bool = False,
    ) -> ImportReport:
        """Record the heats of a log in one transaction.

        Parameters
        ----------
        path : CSV, Parquet or XLSX file. shop : shop file with further materials.
        strict : record nothing where any row is refused.
        decimal_mark, skip_unknown : as in `read_log`.

        Returns
        -------
        ImportReport. A heat that is recorded already gets the new values laid over the old
        ones; a heat that says nothing new is left alone.

        Raises
        ------
        InputError : the file as a whole cannot be read; nothing is recorded.
        """
        import pandas as pd

        own = material_names(shop)
        reads = iter_log(path, ROWS_AT_ONCE, materials=(*self.materials(), *own),
                         decimal_mark=decimal_mark, skip_unknown=skip_unknown)  # fmt: skip
        report = ImportReport()
        refused = [read_log(pd.DataFrame({"heat_id": []})).refused]
        try:
            with self.writing():
                self.add_materials(own)
                for read in reads:
                    refused.append(read.refused)
                    report.skipped = read.skipped
                    if not strict or not len(read.refused):
                        self._import(read, Path(path).name, report)
                _stop(strict=strict, faults=sum(len(part) for part in refused))
        except _NothingTaken:
            report = ImportReport(taken=False, skipped=report.skipped)
        faulty = [part for part in refused if len(part)] or refused[:1]
        report.refused = pd.concat(faulty, ignore_index=True)
        return report

    def _import(self, read: LogRead, origin: str, report: ImportReport) -> None:
        records = contents_of(read.frame)
        current = self._current([name for name, _ in records])
        new, updated = [], []
        for name, content in records:
            if name not in current:
                new.append((name, content))
                continue
            before = current[name][1]
            merged = {**before, **content}
            if merged != before:
                updated.append((name, merged))
        self._put([*new, *updated], origin, [name for name, _ in updated])
        report.new += len(new)
        report.updated += len(updated)
        report.unchanged += len(records) - len(new) - len(updated)

    def export_log(self, path: str | Path) -> int:
        """Write `log_frame` as CSV, Parquet or XLSX; the number of heats."""
        frame = self.log_frame()
        write_log(frame, path)
        return len(frame)


def _stop(*, strict: bool, faults: int) -> None:
    if strict and faults:
        raise _NothingTaken


class _NothingTaken(Exception):  # noqa: N818
    """Rolls an import back."""
