"""Registers on the server's machine, by name in one folder; no path of a visitor is opened.

The server's operator names one register file (`page --register FILE`); the page offers that and
the other registers of its folder. Messages of the page name files, not folders.
"""

from __future__ import annotations

import os
import re
import tempfile
from collections.abc import Iterator, Mapping
from contextlib import contextmanager
from pathlib import Path
from typing import Any

from converter_calc.basis.errors import Fault, InputError
from converter_calc.heatlog.reading import LogRead, read_log
from converter_calc.register.actuals import ImportReport
from converter_calc.register.opening import MAGIC
from converter_calc.register.register import DEFAULT_PATH, Register
from converter_calc.register.schema import APPLICATION_ID

#: Environment variable with the file of the register; the command line reads it too.
ENVIRONMENT = "CONVERTER_REGISTER"
#: Bytes of a heat log that is uploaded; the command line takes any length.
MOST_LOG_BYTES = 5_000_000
MOST_NAME_SIGNS = 80
_HEADER_BYTES = 72


def default_path() -> Path:
    """The register that the server was started with."""
    return Path(os.environ.get(ENVIRONMENT) or DEFAULT_PATH).absolute()


def register_names() -> list[str]:
    """Names of the registers at hand: the server's own first, then others of its folder."""
    own = default_path()
    try:
        beside = sorted(path.name for path in own.parent.iterdir() if _is_register(path))
    except OSError:
        beside = []
    return [own.name, *(name for name in beside if name != own.name)]


def _is_register(path: Path) -> bool:
    """Whether a file says of itself that it is a register."""
    if path.is_symlink() or not path.is_file():
        return False
    try:
        with path.open("rb") as file:
            start = file.read(_HEADER_BYTES)
    except OSError:
        return False
    return start.startswith(MAGIC) and int.from_bytes(start[68:72], "big") == APPLICATION_ID


def exists(name: str) -> bool:
    """Whether the register of a name has been made already."""
    path = _path_of(name)
    return path.exists() and path.stat().st_size > 0


def _path_of(name: str) -> Path:
    if name not in register_names():
        raise InputError([Fault("register", f"{name[:MOST_NAME_SIGNS]!r} is not at hand")])
    return default_path().parent / name


@contextmanager
def opened(name: str, *, create: bool = False) -> Iterator[Register]:
    """A register by name, for one step of the page.

    Raises InputError for a name that is not at hand, and as Register.open.
    """
    path = _path_of(name)
    with told_by_name(path.parent), Register.open(path, create=create) as book:
        yield book


@contextmanager
def told_by_name(folder: Path) -> Iterator[None]:
    """Faults raised within name files without their folder."""
    start = f"{folder}{os.sep}"
    try:
        yield
    except InputError as error:
        raise InputError(
            Fault(fault.field.replace(start, ""), fault.message.replace(start, ""))
            for fault in error.faults
        ) from error


@contextmanager
def as_file(content: bytes, name: str) -> Iterator[Path]:
    """An upload as a file in a folder of its own, which is gone afterwards."""
    if len(content) > MOST_LOG_BYTES:
        size = f"{len(content) / 1e6:.1f} MB, {MOST_LOG_BYTES / 1e6:g} MB are allowed here"
        message = f"has {size}; converter-calc log import takes any length"
        raise InputError([Fault(name[:MOST_NAME_SIGNS], message)])
    plain = re.sub(r"[^\w.\- ]", "_", name)[-MOST_NAME_SIGNS:].lstrip(". ") or "log"
    with tempfile.TemporaryDirectory(prefix="converter_calc_") as folder:
        path = Path(folder) / plain
        path.write_bytes(content)
        with told_by_name(path.parent):
            yield path


def read_upload(
    content: bytes,
    name: str,
    shop: Mapping[str, Any],
    *,
    decimal_mark: str = ".",
    skip_unknown: bool = False,
) -> LogRead:
    """An uploaded heat log; raises InputError where the file as a whole cannot be taken."""
    with as_file(content, name) as path:
        return read_log(path, shop, decimal_mark=decimal_mark, skip_unknown=skip_unknown)


def import_upload(
    register: str,
    content: bytes,
    name: str,
    shop: Mapping[str, Any],
    *,
    strict: bool = False,
    decimal_mark: str = ".",
    skip_unknown: bool = False,
) -> ImportReport:
    """Take an uploaded heat log into a register; raises InputError as Register.import_log."""
    with as_file(content, name) as path, opened(register, create=True) as book:
        return book.import_log(
            path, shop=shop, strict=strict, decimal_mark=decimal_mark, skip_unknown=skip_unknown
        )


def exported(register: str, ending: str) -> bytes:
    """The heats of a register as a heat log; ending .csv, .parquet or .xlsx."""
    with tempfile.TemporaryDirectory(prefix="converter_calc_") as folder:
        path = Path(folder) / f"heat_log{ending}"
        with opened(register) as book:
            book.export_log(path)
        return path.read_bytes()


def backed_up(register: str) -> bytes:
    """A checked copy of a register."""
    with tempfile.TemporaryDirectory(prefix="converter_calc_") as folder:
        path = Path(folder) / "backup.sqlite"
        with opened(register) as book:
            book.backup(path)
        return path.read_bytes()
