"""Texts that a spreadsheet would run as a formula, made inert."""

from __future__ import annotations

import re
from typing import Any

#: First signs at which spreadsheets start a formula: OWASP, CSV Injection (from memory).
FORMULA_SIGNS = ("=", "+", "-", "@", "\t", "\r", "\n", "＝", "＋", "－", "＠")
CONTROL = re.compile(r"[\x00-\x08\x0b\x0c\x0e-\x1f\ufffe\uffff]|[\ud800-\udfff]")
_GUARD = re.compile(r"'*[=+\-@\t\r\n＝＋－＠]")


def neutralised(cell: Any) -> Any:
    """A text that starts like a formula gets an apostrophe before it; numbers stay numbers.

    Control characters, which neither XML nor CSV readers take well, are left out of texts.
    """
    if not isinstance(cell, str):
        return cell
    text = CONTROL.sub("", cell)
    return "'" + text if text.startswith(FORMULA_SIGNS) else text


def guarded(text: str) -> str:
    """A text with an apostrophe before it where it starts like a formula, or like a guarded one.

    `unguarded` gives back the text exactly.
    """
    return "'" + text if _GUARD.match(text) else text


def unguarded(text: str) -> str:
    """The text that `guarded` was given."""
    return text[1:] if text.startswith("'") and _GUARD.match(text) else text
