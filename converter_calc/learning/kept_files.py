"""What was learnt, kept in a JSON file: written and read, each failure one clear line."""

from __future__ import annotations

import json
from collections.abc import Mapping
from pathlib import Path
from typing import Any

from converter_calc.basis.errors import Fault, InputError

LARGEST_FILE_BYTES = 20_000_000


def save_document(document: Mapping[str, Any], path: str | Path) -> None:
    """Write a JSON file; raises InputError where it cannot be written."""
    text = json.dumps(document, indent=1, allow_nan=False)
    try:
        Path(path).write_text(text + "\n", encoding="utf-8")
    except OSError as error:
        raise InputError([Fault(str(path), f"cannot be written: {error.strerror}")]) from error


def load_document(path: str | Path, content: str) -> Any:
    """What a JSON file holds; content : what it should be a file of, for the message.

    Raises InputError for a file that is missing, too large or no JSON.
    """
    path = Path(path)
    try:
        if path.stat().st_size > LARGEST_FILE_BYTES:
            raise InputError([Fault(str(path), f"is too large for a file of {content}")])
        return json.loads(path.read_text(encoding="utf-8"))
    except OSError as error:
        raise InputError([Fault(str(path), f"cannot be read: {error.strerror}")]) from error
    except (ValueError, RecursionError) as error:
        raise InputError([Fault(str(path), f"is not JSON: {error}")]) from error
