"""The file of a register: open, read, write in transactions, back up, check."""

from __future__ import annotations

import json
import sqlite3
from collections.abc import Iterable, Iterator, Sequence
from contextlib import contextmanager
from pathlib import Path
from types import TracebackType
from typing import Any, Self

from converter_calc.balance.materials import library_fields
from converter_calc.register import opening

DEFAULT_PATH = "converter_register.sqlite"


class Database:
    """The open file of a register. Use as a context manager, from one thread."""

    def __init__(self, path: Path, connection: sqlite3.Connection) -> None:
        self.path = path
        self.db = connection

    @classmethod
    def open(cls, path: str | Path = DEFAULT_PATH, *, create: bool = True) -> Self:
        """Open the register of a file.

        Parameters
        ----------
        path : the file. create : make a new register where there is none.

        Raises
        ------
        InputError : not a register, of a newer version, cut short, damaged or busy; the file
            stays as it was.
        """
        return cls(Path(path), opening.open_database(Path(path), create=create))

    def close(self) -> None:
        """Close the file."""
        self.db.close()

    def __enter__(self) -> Self:
        return self

    def __exit__(
        self,
        kind: type[BaseException] | None,
        error: BaseException | None,
        trace: TracebackType | None,
    ) -> None:
        self.close()

    @contextmanager
    def writing(self) -> Iterator[None]:
        """One transaction: all of it or nothing."""
        with opening.told(self.path):
            self.db.execute("BEGIN IMMEDIATE")
            try:
                yield
                self.db.execute("COMMIT")
            except BaseException:
                if self.db.in_transaction:
                    self.db.execute("ROLLBACK")
                raise

    def rows(self, query: str, given: Sequence[Any] = ()) -> list[tuple[Any, ...]]:
        """Rows that a query finds."""
        with opening.told(self.path):
            return self.db.execute(query, given).fetchall()

    def materials(self) -> tuple[str, ...]:
        """Materials that an actual may name: library, recorded plans, shops of imported logs."""
        rows = self.rows("SELECT name FROM materials ORDER BY name")
        return (*library_fields(), *(name for (name,) in rows))

    def add_materials(self, names: Iterable[str]) -> None:
        """Remember materials that the library does not hold; within a transaction."""
        own = [(name,) for name in names if name not in library_fields()]
        self.db.executemany("INSERT OR IGNORE INTO materials VALUES (?)", own)

    def backup(self, path: str | Path) -> None:
        """Copy the register to a new file, checked for soundness, while others may go on writing.

        Raises InputError where the file exists, cannot be written, or the register is damaged.
        """
        opening.backup_to(self.db, self.path, Path(path))

    def check(self) -> str:
        """What is wrong with the database; empty where it is sound."""
        return opening.faults_of(self.db)


_ENCODER = json.JSONEncoder(allow_nan=False, ensure_ascii=False, separators=(",", ":"))


def as_json(content: Any) -> str:
    """Content as JSON in one line; numbers keep every digit."""
    return _ENCODER.encode(content)


def from_json(texts: Iterable[str]) -> list[Any]:
    """Contents of many texts; read in one go they share their keys, which is quicker."""
    found: list[Any] = json.loads(f"[{','.join(texts)}]")
    return found
