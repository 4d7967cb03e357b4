"""A heat or shop document as TOML text (TOML 1.0, toml.io)."""

from __future__ import annotations

import json
import re
from collections.abc import Mapping
from typing import Any

_BARE = re.compile(r"[A-Za-z0-9_-]+")


def toml_text(document: Mapping[str, Any]) -> str:
    """The document as TOML; reads back to the same content.

    Tables, texts, numbers, truth values and lists of these; what is None is left out.
    """
    return "\n".join(_lines(document, ())).strip() + "\n"


def _lines(table: Mapping[str, Any], path: tuple[str, ...]) -> list[str]:
    single = {key: x for key, x in table.items() if not isinstance(x, Mapping) and x is not None}
    tables = {key: x for key, x in table.items() if isinstance(x, Mapping)}
    lines = []
    if path and (single or not tables):
        lines += ["", "[" + ".".join(map(_key, path)) + "]"]
    lines += [f"{_key(key)} = {_value(x)}" for key, x in single.items()]
    for key, x in tables.items():
        lines += _lines(x, (*path, key))
    return lines


def _key(key: str) -> str:
    return key if _BARE.fullmatch(key) else _text(key)


def _text(text: str) -> str:
    """JSON's escapes are TOML's, but for DEL and lone surrogates, which no file can hold."""
    clean = text.encode("utf-8", "replace").decode("utf-8")
    return json.dumps(clean, ensure_ascii=False).replace("\x7f", "\\u007F")


def _value(x: Any) -> str:
    if isinstance(x, bool):
        return "true" if x else "false"
    if isinstance(x, int | float):
        return repr(x)
    if isinstance(x, list | tuple):
        return "[" + ", ".join(map(_value, x)) + "]"
    if isinstance(x, Mapping):
        return "{ " + ", ".join(f"{_key(k)} = {_value(v)}" for k, v in x.items()) + " }"
    return _text(str(x))
