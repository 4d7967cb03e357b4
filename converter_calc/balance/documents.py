"""Reading of heat and shop files and laying one over the other."""

from __future__ import annotations

import tomllib
from collections.abc import Mapping
from pathlib import Path
from typing import Any

from converter_calc.balance.fields import show
from converter_calc.balance.materials import override_fields
from converter_calc.basis.errors import Fault, InputError

LARGEST_FILE_BYTES = 2_000_000
DEEPEST_TABLE = 8
#: Giving one of these takes back the others of the shop.
RIVALS = {
    "choice": ({"scrap_mix", "scrap_order"},),
    "charge": ({"scrap_kg", "scrap_share_pct"},),
    "pin": ({"heat_loss_MJ", "heat_loss_MJ_per_t", "heat_loss_MJ_per_min", "heat_loss_share_pct"},),
}


def _fail(path: Path, message: str) -> InputError:
    return InputError([Fault(str(path), message)])


def _read_text(path: Path) -> str:
    try:
        if path.is_dir():
            raise _fail(path, "is a directory, not a heat file")
        size = path.stat().st_size
        if size > LARGEST_FILE_BYTES:
            most = LARGEST_FILE_BYTES / 1e6
            raise _fail(path, f"has {size / 1e6:.1f} MB; a heat file has at most {most:g} MB")
        with path.open("rb") as file:
            raw = file.read(LARGEST_FILE_BYTES + 1)
    except FileNotFoundError as error:
        raise _fail(path, "no such file") from error
    except (OSError, ValueError) as error:  # ValueError: a null byte in the name
        reason = getattr(error, "strerror", None) or error
        raise _fail(path, f"cannot be read: {reason}") from error
    try:
        return raw.decode("utf-8-sig")
    except UnicodeDecodeError as error:
        raise _fail(path, f"is not UTF-8 text (byte {error.start + 1})") from error


def read_document(path: Path) -> dict[str, Any]:
    """Content of a TOML file.

    Raises InputError (one line: what is wrong, and where) for a missing, unreadable, empty,
    huge, too deep or malformed file.
    """
    text = _read_text(path)
    if not text.strip():
        raise _fail(path, "is empty")
    try:
        document = tomllib.loads(text)
    except RecursionError as error:
        raise _fail(path, "is nested too deeply") from error
    except ValueError as error:  # TOMLDecodeError, or a number of thousands of digits
        raise _fail(path, f"is not TOML: {error}") from error
    if not document:
        raise _fail(path, "holds no field")
    return document


def check_depth(document: Mapping[str, Any]) -> None:
    """Raise InputError for a document nested deeper than any heat file is."""
    level: list[Any] = [document]
    for _ in range(DEEPEST_TABLE):
        level = [
            part
            for item in level
            for part in (item.values() if isinstance(item, Mapping) else item)
            if isinstance(part, Mapping | list | tuple)
        ]
        if not level:
            return
    raise InputError([Fault("heat file", f"is nested deeper than {DEEPEST_TABLE} levels")])


def with_shop(document: Mapping[str, Any], base_dir: Path | None) -> dict[str, Any]:
    """The document laid over the shop file that it names, if any.

    Parameters
    ----------
    document : a heat. base_dir : directory from which the path of the shop counts; the current
        one where it is None.

    Raises InputError where the shop cannot be read or names a shop of its own.
    """
    check_depth(document)
    shop = document.get("shop")
    if shop is None:
        return dict(document)
    if not isinstance(shop, str) or not shop.strip():
        raise InputError([Fault("shop", f"must be the path of a shop file, given {show(shop)}")])
    return lay_over(read_shop((base_dir or Path()) / shop), document)


def read_shop(path: Path) -> dict[str, Any]:
    """Content of a shop file; raises InputError as `read_document`."""
    document = read_document(path)
    check_depth(document)
    if "shop" in document:
        raise InputError([Fault("shop", f"{path} is a shop file and cannot name another shop")])
    return document


def lay_over(below: Mapping[str, Any], above: Mapping[str, Any]) -> dict[str, Any]:
    """`below` with every key that `above` gives replaced, section by section.

    Tables are replaced key by key, except a scrap mix, the dust analysis, a grade, and the
    composition of a material, which go as a whole. What rules out a key of `below` drops it.
    """
    merged = dict(below)
    for section, given in above.items():
        have = below.get(section)
        if not isinstance(have, Mapping) or not isinstance(given, Mapping):
            merged[section] = given
        elif section == "materials":
            merged[section] = lay_materials(have, given)
        else:
            dropped = {
                key for rivals in RIVALS.get(section, ()) if rivals & set(given) for key in rivals
            }
            kept = {key: value for key, value in have.items() if key not in dropped}
            merged[section] = {**kept, **given}
    return merged


def lay_materials(below: Mapping[str, Any], above: Mapping[str, Any]) -> dict[str, Any]:
    """Materials of `below` with those of `above` laid over them, field by field."""
    merged = dict(below)
    for name, fields in above.items():
        have = below.get(name)
        both = isinstance(have, Mapping) and isinstance(fields, Mapping)
        merged[name] = override_fields(have, fields) if both else fields  # type: ignore[arg-type]
    return merged
