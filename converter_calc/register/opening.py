"""Opening a register: what is no register, damaged or newer is refused before it is touched."""

from __future__ import annotations

import os
import sqlite3
import time
from collections.abc import Iterator
from contextlib import contextmanager
from datetime import UTC, datetime
from pathlib import Path

from converter_calc.basis.errors import Fault, InputError
from converter_calc.register.schema import APPLICATION_ID, SCHEMA_VERSION, STEPS, TABLES

#: What to do with a damaged file; an old write-ahead log beside a backup would damage that too.
_REMEDY = "move it and its -wal and -shm files away, put a backup in its place"
#: How long a writer waits for another one, s.
BUSY_SECONDS = 30.0
#: Layout of the header: SQLite file format, section 1.3, https://www.sqlite.org/fileformat2.html
#: (from memory).
MAGIC = b"SQLite format 3\x00"
HEADER_BYTES = 100


def now() -> str:
    """The present moment in UTC, ISO 8601 with microseconds."""
    return datetime.now(UTC).isoformat(timespec="microseconds").replace("+00:00", "Z")


def refuse(path: Path, message: str) -> InputError:
    """The error about a register as a whole."""
    return InputError([Fault(str(path), message)])


@contextmanager
def told(path: Path) -> Iterator[None]:
    """Turn an error of the database into one clear sentence."""
    try:
        yield
    except sqlite3.Error as error:
        raise refuse(path, _sentence(error)) from error


def _sentence(error: sqlite3.Error) -> str:
    text = str(error)
    if "locked" in text or "busy" in text:
        return f"is busy: another program was writing for {BUSY_SECONDS:.0f} s; try again"
    if "malformed" in text or "not a database" in text or "corrupt" in text:
        return f"is damaged ({text}); {_REMEDY}"
    if "readonly" in text or "unable to open" in text:
        return f"cannot be opened for writing ({text})"
    if "full" in text:
        return "cannot be written: the disk is full; nothing of this was recorded"
    return f"cannot be used: {text}"


def open_database(path: Path, *, create: bool) -> sqlite3.Connection:
    """An open register, its tables brought up to date; a backup is made before they are.

    Parameters
    ----------
    path : file of the register. create : make a new one where there is none.

    Raises
    ------
    InputError : no such file (where `create` is False), a folder that is not there, not a
        database, of another program, cut short, damaged, of a newer version, or busy. The
        file stays as it was.
    """
    try:
        new = not path.exists() or path.stat().st_size == 0
        if new and not create:
            raise refuse(path, "no register here; record a plan or import a log first")
        if path.is_dir():
            raise refuse(path, "is a directory, not a register")
        if new and not path.resolve().parent.is_dir():
            raise refuse(path, "the folder does not exist")
        if not new:
            _check_header(path)
    except (OSError, ValueError) as error:  # ValueError: a null byte in the name
        raise refuse(path, f"cannot be opened: {getattr(error, 'strerror', None) or error}") from (
            error
        )
    with told(path):
        connection = sqlite3.connect(path, timeout=BUSY_SECONDS, isolation_level=None)
    try:
        with told(path):
            connection.execute("PRAGMA foreign_keys = ON")
            connection.execute("PRAGMA synchronous = FULL")
            _prepare(connection, path)
    except BaseException:
        connection.close()
        raise
    return connection


def _check_header(path: Path) -> None:
    """Look at the first bytes of the file without opening it as a database."""
    with path.open("rb") as file:
        header = file.read(HEADER_BYTES)
    journal = path.with_name(path.name + "-journal")
    if journal.exists() and journal.stat().st_size:
        return  # a creation that was cut off: the database puts itself right when opened
    if not header.startswith(MAGIC) or len(header) < HEADER_BYTES:
        raise refuse(path, "is not a register: not a database of SQLite")

    def number(first: int, size: int = 4) -> int:
        return int.from_bytes(header[first : first + size], "big")

    if number(68) != APPLICATION_ID:
        raise refuse(path, "is a database of another program, not a register")
    _refuse_newer(path, number(60))
    page = number(16, 2)
    page = 65536 if page == 1 else page
    log = path.with_name(path.name + "-wal")
    waiting = log.exists() and log.stat().st_size > 0
    size = path.stat().st_size
    if not waiting and (size < number(28) * page or size % max(page, 1)):
        message = f"is cut short: {size} of {number(28) * page} bytes; {_REMEDY}"
        raise refuse(path, message)


def _refuse_newer(path: Path, version: int) -> None:
    if version > SCHEMA_VERSION:
        raise refuse(
            path,
            f"was written by a newer converter-calc (tables of version {version}, this one "
            f"reads up to {SCHEMA_VERSION}); update converter-calc",
        )


def version_of(connection: sqlite3.Connection) -> int:
    """Version of the tables."""
    return int(connection.execute("PRAGMA user_version").fetchone()[0])


def _prepare(connection: sqlite3.Connection, path: Path) -> None:
    """Create or migrate the tables, then turn on the write-ahead log."""
    version = version_of(connection)
    _refuse_newer(path, version)
    ours = connection.execute("PRAGMA application_id").fetchone()[0] == APPLICATION_ID
    tables = tables_of(connection)
    if not ours and tables:
        raise refuse(path, "is a database of another program, not a register")
    if version and not TABLES[version] <= tables:
        lacks = ", ".join(sorted(TABLES[version] - tables))
        raise refuse(path, f"is damaged: it lacks the tables {lacks}; {_REMEDY}")
    if version < SCHEMA_VERSION:
        if version:
            backup_before_migration(connection, path, version)
        migrate(connection, path)
    _write_ahead(connection)


def tables_of(connection: sqlite3.Connection) -> set[str]:
    """Names of the tables."""
    rows = connection.execute("SELECT name FROM sqlite_master WHERE type = 'table'")
    return {name for (name,) in rows}


def migrate(connection: sqlite3.Connection, path: Path, to: int = SCHEMA_VERSION) -> None:
    """Bring the tables forward in one transaction; another program may have done so already."""
    connection.execute("BEGIN IMMEDIATE")
    try:
        version = version_of(connection)
        _refuse_newer(path, version)
        for step in STEPS[version:to]:
            for statement in step:
                connection.execute(statement)
        connection.execute(f"PRAGMA application_id = {APPLICATION_ID}")
        connection.execute(f"PRAGMA user_version = {max(version, to)}")
        connection.execute("COMMIT")
    except BaseException:
        connection.execute("ROLLBACK")
        raise


def _write_ahead(connection: sqlite3.Connection) -> None:
    """Turn on the write-ahead log; the switch does not wait for others by itself."""
    end = time.monotonic() + BUSY_SECONDS
    while connection.execute("PRAGMA journal_mode").fetchone()[0] != "wal":
        try:
            connection.execute("PRAGMA journal_mode = WAL")
        except sqlite3.OperationalError:
            if time.monotonic() > end:
                raise
            time.sleep(0.02)
        else:
            return


def backup_before_migration(connection: sqlite3.Connection, path: Path, version: int) -> Path:
    """A backup beside the register, named by version and time."""
    stamp = now().translate(str.maketrans("", "", "-:.")).replace("Z", "")
    target = path.with_name(f"{path.stem}.version{version}-{stamp}{path.suffix}")
    backup_to(connection, path, target)
    return target


def backup_to(connection: sqlite3.Connection, path: Path, target: Path) -> None:
    """Copy a register with SQLite's backup interface, check the copy, then name it.

    Raises
    ------
    InputError : the target exists, cannot be written, or the copy is not sound.
    """
    if target.exists():
        raise refuse(target, "exists already; a backup does not replace a file")
    if not target.resolve().parent.is_dir():
        raise refuse(target, "cannot be written: the folder does not exist")
    part = target.with_name(f".{target.name}.{os.getpid()}.part")
    try:
        with told(path):
            copy = sqlite3.connect(part, isolation_level=None)
            try:
                connection.backup(copy)
                copy.execute("PRAGMA journal_mode = DELETE")
                fault = faults_of(copy)
            finally:
                copy.close()
        if fault:
            raise refuse(path, f"is damaged, no backup was made: {fault}")
        with part.open("rb+") as file:
            os.fsync(file.fileno())
        _name(part, target)
    except OSError as error:
        raise refuse(target, f"cannot be written: {error.strerror}") from error
    finally:
        part.unlink(missing_ok=True)


def _name(part: Path, target: Path) -> None:
    """Give a finished file its name, without replacing what another program just wrote."""
    try:
        os.link(part, target)
    except FileExistsError:
        raise
    except OSError:  # a file system without links
        part.rename(target)


def faults_of(connection: sqlite3.Connection) -> str:
    """What is wrong with the database; empty where it is sound."""
    try:
        found = [row[0] for row in connection.execute("PRAGMA integrity_check(3)")]
        broken = connection.execute("PRAGMA foreign_key_check").fetchall()
    except sqlite3.DatabaseError as error:
        return str(error)
    if found != ["ok"]:
        return "; ".join(str(text) for text in found)[:300]
    return f"{len(broken)} rows refer to what is not there" if broken else ""
