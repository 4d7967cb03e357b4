"""XLSX workbooks from outside, read with care: what is too large or broken is refused."""

from __future__ import annotations

import zipfile
import zlib
from collections.abc import Iterator
from typing import IO, Any, NamedTuple
from xml.etree.ElementTree import ParseError

from converter_calc.basis.errors import Fault, InputError

PIECE_BYTES = 1 << 20
#: What openpyxl and the zip and XML readers under it raise on a broken file.
BROKEN = (
    zipfile.BadZipFile, zlib.error, ParseError, KeyError, ValueError, TypeError, IndexError,
    AttributeError, EOFError, OSError, NotImplementedError, RuntimeError, OverflowError,
)  # fmt: skip
_UNREADABLE = "is no workbook that can be read (XLSX)"


class Limits(NamedTuple):
    """What a workbook may hold: bytes when unpacked, parts, rows below the heading, columns."""

    unpacked_bytes: int
    parts: int
    rows: int
    columns: int


def refused(place: str, message: str) -> InputError:
    """The error about a whole workbook."""
    return InputError([Fault(place, message)])


def workbook_rows(file: IO[bytes], place: str, limits: Limits) -> Iterator[list[Any]]:
    """Rows of the first sheet, blank cells None; at most two more than `limits.rows`.

    Parameters
    ----------
    file : an open XLSX file. place : its name, for the messages.

    Raises
    ------
    InputError : too large when unpacked, XML entities, too many columns, broken.
    """
    check_parts(file, place, limits)
    file.seek(0)
    from openpyxl import load_workbook

    try:
        book = load_workbook(file, read_only=True, data_only=True, keep_links=False)
        sheet = book.worksheets[0]
        sheet.reset_dimensions()  # the stated size may lie
        for number, row in enumerate(sheet.iter_rows(values_only=True)):
            if number > limits.rows + 1:
                break
            wide = row[limits.columns :]
            if wide and any(cell is not None for cell in wide):
                raise refused(place, f"more than {limits.columns} columns")
            yield list(row[: limits.columns])
    except BROKEN as error:
        raise refused(place, _UNREADABLE) from error


def check_parts(file: IO[bytes], place: str, limits: Limits) -> None:
    """Refuse what unpacks to too much, and XML that defines entities."""
    try:
        with zipfile.ZipFile(file) as parts:
            listed = parts.infolist()
            size = sum(part.file_size for part in listed)
            if len(listed) > limits.parts or size > limits.unpacked_bytes:
                message = (
                    f"unpacks to {len(listed)} parts of {size / 1e6:.0f} MB; {limits.parts} parts "
                    f"of {limits.unpacked_bytes / 1e6:.0f} MB are allowed"
                )
                raise refused(place, message)
            for part in listed:
                with parts.open(part) as content:
                    if _defines_entities(content):
                        raise refused(place, "defines XML entities; such a workbook is not read")
    except BROKEN as error:
        raise refused(place, _UNREADABLE) from error


def _defines_entities(content: IO[bytes]) -> bool:
    """Whether an XML part has a document type or an entity; read piece by piece."""
    tail = b""
    while piece := content.read(PIECE_BYTES):
        text = tail + piece.replace(b"\x00", b"")  # zero bytes go, so that UTF-16 hides nothing
        if b"<!DOCTYPE" in text or b"<!ENTITY" in text:
            return True
        tail = text[-16:]
    return False
