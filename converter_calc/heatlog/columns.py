"""Columns of a heat log: names, order, units and bounds.

The fixed columns stand in data/log_columns.csv. Beside them a log may hold a column for each
material (`<material>_kg`), for further elements (`hm_<El>_pct`, `end_<El>_pct`), for further
oxides of the slag (`slag_<oxide>_pct`) and for any other number of the hot metal, aim, charge
or practice by its flat name (data/parameters.csv).
"""

from __future__ import annotations

from collections.abc import Iterable, Mapping
from dataclasses import dataclass
from functools import cache
from pathlib import Path
from typing import Any

from converter_calc.balance.checks import check_document
from converter_calc.balance.documents import check_depth, read_shop
from converter_calc.balance.materials import known_species, library_fields
from converter_calc.balance.schema import (
    element_of_key,
    element_parameter,
    is_element_column,
    nearest,
    parameters,
)
from converter_calc.basis.errors import Fault, InputError
from converter_calc.data.tables import read_csv_rows

ID_COLUMN, TIME_COLUMN = "heat_id", "tapped_at"
#: Sections whose numbers may be columns, but for what the material columns say already.
_LOGGED_SECTIONS = ("hot_metal", "aim", "charge", "practice")
_NOT_LOGGED = ("scrap_kg", "scrap_share_pct")
_MATERIAL_ROW = "material"


@dataclass(frozen=True)
class Column:
    """One column of a heat log.

    kind : "text", "time" or "number". group : "key", "input", "aim" or "outcome". low and
    high bound a number.
    """

    name: str
    kind: str
    group: str
    unit: str
    low: float
    high: float
    description: str
    source: str


@cache
def _table() -> tuple[Column, ...]:
    found = []
    for row in read_csv_rows("log_columns.csv"):
        same = parameters().get(row["name"])
        low = float(row["min"] or (same.low if same else "-inf"))
        high = float(row["max"] or (same.high if same else "inf"))
        found.append(
            Column(
                row["name"], row["kind"], row["group"], row["unit"], low, high,
                row["description"], row["source"],
            )
        )  # fmt: skip
    return tuple(found)


@cache
def fixed_columns() -> dict[str, Column]:
    """The columns of every heat log by name, in their order, materials left out."""
    return {column.name: column for column in _table() if column.name != _MATERIAL_ROW}


def names_of_group(group: str) -> tuple[str, ...]:
    """Names of the fixed columns of a group: "key", "input", "aim" or "outcome"."""
    return tuple(name for name, column in fixed_columns().items() if column.group == group)


def text_columns() -> tuple[str, ...]:
    """Columns that hold text."""
    return tuple(name for name, column in fixed_columns().items() if column.kind == "text")


def material_column(material: str) -> Column:
    """The column of a material's mass [kg]."""
    row = next(column for column in _table() if column.name == _MATERIAL_ROW)
    return Column(
        f"{material}_kg", row.kind, row.group, row.unit, row.low, row.high,
        f"{material} charged", row.source,
    )  # fmt: skip


def material_names(shop: str | Path | Mapping[str, Any] | None = None) -> tuple[str, ...]:
    """Materials that may have a column: those of the library and of the shop.

    Parameters
    ----------
    shop : shop file (path) or its content; None for the library alone.

    Raises
    ------
    InputError : the shop file is wrong, one fault a field.
    """
    if shop is None:
        return tuple(library_fields())
    if isinstance(shop, Mapping):
        check_depth(shop)
        document: Mapping[str, Any] = shop
    else:
        document = read_shop(Path(shop))
    faults: list[Fault] = []
    found = check_document(dict(document), faults)
    if faults:
        raise InputError(faults)
    return tuple(found.materials)


def find_column(name: str, materials: Iterable[str]) -> Column | None:
    """The column of a name; None where a heat log has no such column.

    materials : names of those that may have one.
    """
    if name in fixed_columns():
        return fixed_columns()[name]
    if name.endswith("_kg") and name[:-3] in materials:
        return material_column(name[:-3])
    row = parameters().get(name)
    if row is not None:
        logged = row.kind == "number" and row.section in _LOGGED_SECTIONS
        if not logged or name in _NOT_LOGGED:
            return None
        group = "aim" if row.section == "aim" else "input"
        return Column(
            name, "number", group, row.unit, row.low, row.high, row.description, row.source
        )
    return _further_analysis(name)


def _further_analysis(name: str) -> Column | None:
    """A column of an element or oxide that has no row of its own."""
    source = "bounds: sanity limits of this package"
    if is_element_column(name):
        row = element_parameter(name[3:-4])
        return Column(name, "number", "input", row.unit, row.low, row.high, row.description, source)
    element = element_of_key(name[4:]) if name.startswith("end_") else None
    if element is not None:
        text = f"{element} in the steel at the end of the blow"
        return Column(name, "number", "outcome", "mass %", 0.0, 100.0, text, source)
    oxide = name[5:-4] if name.startswith("slag_") and name.endswith("_pct") else ""
    if oxide in known_species() or oxide == "T_Fe":
        text = f"{oxide} of the slag sample" if oxide != "T_Fe" else "All iron of the slag sample"
        return Column(name, "number", "outcome", "mass %", 0.0, 100.0, text, source)
    return None


def unknown_column(name: str, materials: Iterable[str]) -> str:
    """The sentence about a column that a heat log does not have."""
    row = parameters().get(name)
    if row is not None:
        return f"is no column of a heat log; give it in the shop file as {row.place}"
    known = [*fixed_columns(), *(f"{material}_kg" for material in materials)]
    hint = nearest(name, known)
    if name.endswith("_kg"):
        return f"unknown column: no material of that name in the library or shop file{hint}"
    return f"unknown column{hint}"


def in_order(names: Iterable[str]) -> list[str]:
    """Column names in the order of the log: fixed columns, materials after the analysis of the
    hot metal; further columns stand after their kind, in alphabetical order.
    """
    order = {column.name: place for place, column in enumerate(_table())}
    behind = {
        "hm_": order["hm_Cr_pct"],
        "end_": order["end_S_pct"],
        "slag_": order["slag_Al2O3_pct"],
        "aim_": order["aim_P_pct"],
    }

    def place(name: str) -> tuple[float, str]:
        if name in order:
            return order[name], ""
        start = name.split("_", maxsplit=1)[0] + "_"
        if start in behind and not name.endswith("_kg"):
            return behind[start] + 0.5, name
        if name.endswith("_kg") and name not in parameters():
            return order[_MATERIAL_ROW], name
        return order["blow_min"] + 0.5, name

    return sorted(dict.fromkeys(names), key=place)
