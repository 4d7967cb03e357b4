"""A pandas table of heats, read column by column."""

from __future__ import annotations

import re
from collections.abc import Callable, Iterable, Mapping
from dataclasses import replace
from typing import TYPE_CHECKING, Any

import numpy as np

from converter_calc.balance.checks import Columns, Givens
from converter_calc.balance.schema import (
    Parameter,
    element_parameter,
    is_element_column,
    material_parameter,
    nearest,
    number_names,
    parameters,
    yield_parameter,
)
from converter_calc.basis.dual import Array
from converter_calc.basis.elements import known_elements
from converter_calc.basis.errors import Fault

if TYPE_CHECKING:
    import pandas as pd

#: Columns of a heat log that hold what came of a heat; they are no input.
_OUTCOME_COLUMN = re.compile(
    r"tapped_at|vessel|steel_kg|end_temp_C|end_O_ppm|end_[A-Z][a-z]?_pct|slag_[A-Z]\w*_pct"
)


def inputs_of_table(
    givens: Givens, defaults: Mapping[str, float], faults: list[Fault]
) -> dict[str, Parameter]:
    """Inputs that may be a column, by name; defaults are put among the givens."""
    rows = {name: parameters()[name] for name in number_names()}
    rows |= {row.name: row for row in map(element_parameter, known_elements())}
    for name in givens.materials:
        rows.setdefault(f"{name}_kg", material_parameter(name))
    for name, material in givens.materials.items():
        if material.kind == "scrap":
            rows[f"{name}_yield_factor"] = yield_parameter(name)
    for name, number in defaults.items():
        if name not in rows:
            faults.append(Fault(name, f"unknown default{nearest(name, rows)}"))
        elif name.startswith("hm_"):
            givens.elements.setdefault(name[3:-4], float(number))
        elif name.endswith("_yield_factor") and name not in parameters():
            scrap = name.removesuffix("_yield_factor")
            factor = float(number)
            givens.materials[scrap] = replace(givens.materials[scrap], yield_factor=factor)
        elif name in parameters():
            givens.numbers.setdefault(name, float(number))
        else:
            givens.masses_kg.setdefault(name[:-3], float(number))
    return rows


def columns_of(
    frame: pd.DataFrame, rows: Mapping[str, Parameter], faults: list[Fault]
) -> dict[str, Array]:
    """Numeric columns as float arrays, NaN where blank."""
    arrays: dict[str, Array] = {}
    label = row_label(frame)
    for place, column in enumerate(frame.columns):
        name = str(column)
        if name in arrays:
            faults.append(Fault(name, "is a column twice"))
        elif name in rows:
            arrays[name] = _column(frame.iloc[:, place], name, label, faults)
        elif name not in ("heat_id", "grade") and not _OUTCOME_COLUMN.fullmatch(name):
            if name in parameters():
                message = f"is no column; give it in the shop file as {parameters()[name].place}"
            else:
                message = f"unknown column{nearest(name, [*rows, 'heat_id', 'grade'])}"
            faults.append(Fault(name[:80], message))
    return arrays


def _column(series: Any, name: str, label: Callable[[int], str], faults: list[Fault]) -> Array:
    import pandas as pd

    if series.dtype == bool:
        faults.append(Fault(name, "must hold numbers, holds true and false"))
        return np.full(len(series), np.nan)
    numbers = pd.to_numeric(series, errors="coerce")
    array: Array = np.array(numbers.to_numpy(dtype=float, na_value=np.nan), dtype=float)
    columns = Columns({}, {}, len(array), place_of=str, row_label=label)
    if not pd.api.types.is_numeric_dtype(series.dtype):
        truth = series.map(lambda cell: isinstance(cell, bool)).to_numpy(dtype=bool)
        text = np.isnan(array) & ~series.isna().to_numpy(dtype=bool) | truth
        faults.extend(
            columns.tell(
                text, name, lambda i: f"must be a number, given {str(series.iloc[i])[:40]!r}"
            )
        )
    infinite = np.isinf(array)
    faults.extend(columns.tell(infinite, name, lambda i: f"must be finite, given {array[i]}"))
    array[infinite] = np.nan
    return array


def keys_of(arrays: Iterable[str], rows: Mapping[str, Parameter], make: Any) -> list[str]:
    """Elements or materials, whichever `make` makes inputs of, that have a column."""
    if make is element_parameter:
        return [name[3:-4] for name in arrays if is_element_column(name)]
    return [name[:-3] for name in arrays if name not in parameters() and rows[name].unit == "kg"]


def _first(frame: pd.DataFrame, name: str) -> Any:
    """A column by name, the first one where there are several."""
    column: Any = frame[name]
    return column.iloc[:, 0] if column.ndim > 1 else column


def row_ids(frame: pd.DataFrame) -> list[str]:
    """Name of each heat: its heat_id, else its index."""
    named = "heat_id" in frame.columns
    labels = _first(frame, "heat_id") if named else frame.index
    return list(map(str, labels.tolist()))


def row_label(frame: pd.DataFrame) -> Callable[[int], str]:
    """The words by which a fault names a row."""
    labels = frame.index
    if "heat_id" in frame.columns:
        ids = _first(frame, "heat_id")
        return lambda i: f" (row {labels[i]}, heat {ids.iloc[i]})"
    return lambda i: f" (row {labels[i]})"


def one_grade(frame: pd.DataFrame, givens: Givens) -> tuple[str | None, list[str]]:
    """The grade of a table: that of its column where all rows agree, else that of the shop."""
    if "grade" not in frame.columns:
        return givens.texts.get("grade"), []
    names = sorted({str(name) for name in _first(frame, "grade").dropna().unique()})
    if len(names) <= 1:
        return (names[0] if names else givens.texts.get("grade")), []
    return None, [
        f"grade: {len(names)} grades in one table; aims are taken from the columns, not from grades"
    ]


def blank_elements(elements: Mapping[str, Array]) -> list[str]:
    """A warning for each element that some heats give and others leave blank."""
    found = []
    for element, pct in elements.items():
        blank = int(np.isnan(pct).sum())
        if 0 < blank < len(pct):
            found.append(f"hm_{element}_pct: blank in {blank} heats, taken as 0 there")
    return found
