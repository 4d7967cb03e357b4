"""Rows of a heat log as the register keeps them, and back; checks of parameter sets."""

from __future__ import annotations

import math
from collections.abc import Iterable, Mapping, Sequence
from typing import TYPE_CHECKING, Any

import numpy as np

from converter_calc.basis.dual import Array
from converter_calc.basis.errors import Fault, InputError
from converter_calc.heatlog.columns import (
    ID_COLUMN,
    TIME_COLUMN,
    in_order,
    names_of_group,
    text_columns,
)

if TYPE_CHECKING:
    import pandas as pd

#: Least eigenvalue of a correlation matrix that is rounding.
ROUNDING = 1e-9


def contents_of(frame: pd.DataFrame) -> list[tuple[str, dict[str, Any]]]:
    """Heat and its values by name, missing ones left out; times as ISO 8601 in UTC."""
    names, columns = [], []
    for name in frame.columns:
        if name == ID_COLUMN:
            continue
        series = frame[name]
        missing = series.isna().to_numpy(dtype=bool)
        if missing.all():
            continue
        if name == TIME_COLUMN:
            times = series.to_numpy().astype("datetime64[us]")
            cells: Any = [f"{text}Z" for text in np.datetime_as_string(times, unit="us").tolist()]
        else:
            cells = series.tolist()
        names.append(str(name))
        columns.append([None if lack else x for lack, x in zip(missing.tolist(), cells,
                                                               strict=True)])  # fmt: skip
    rows = zip(*columns, strict=True) if columns else ([()] * len(frame))
    return [
        (heat, {name: x for name, x in zip(names, row, strict=True) if x is not None})
        for heat, row in zip(frame[ID_COLUMN].tolist(), rows, strict=True)
    ]


def frame_of(heats: list[str], contents: Sequence[Mapping[str, Any]]) -> pd.DataFrame:
    """A heat log, as `read_log` gives it, of heats and their values by name."""
    import pandas as pd

    found = dict.fromkeys(name for content in contents for name in content)
    columns: dict[str, Any] = {}
    for name in in_order((*names_of_group("key"), *found)):
        if name == ID_COLUMN:
            cells: list[Any] = heats
        else:
            cells = [content.get(name) for content in contents]
        if name == TIME_COLUMN:
            texts = [cell[:-1] if cell else "NaT" for cell in cells]
            columns[name] = np.array(texts, dtype="datetime64[us]")
        elif name in text_columns():
            columns[name] = pd.Series(cells, dtype=object)
        else:
            columns[name] = np.array(cells, dtype=float)
    return pd.DataFrame(columns)


def with_plan_aims(frame: pd.DataFrame, planned: Mapping[str, Mapping[str, float]]) -> pd.DataFrame:
    """A log whose missing aims are those of the plans, by heat."""
    heats = frame[ID_COLUMN].tolist()
    for name in names_of_group("aim"):
        aims = np.array([planned.get(heat, {}).get(name, np.nan) for heat in heats], dtype=float)
        if np.isnan(aims).all():
            continue
        logged = frame[name].to_numpy() if name in frame.columns else np.full(len(aims), np.nan)
        frame[name] = np.where(np.isnan(logged), aims, logged)
    return frame[in_order(frame.columns)]


def checked_parameters(
    shop: str, values: Mapping[str, float], covariance: Any
) -> tuple[dict[str, float], Array | None]:
    """Parameters as plain numbers and their covariance as a sound matrix.

    Raises InputError: no shop, no finite number, a matrix of another size, not symmetric or
    with a negative variance.
    """
    faults = list(_parameter_faults(shop, values))
    if faults:
        raise InputError(faults)
    numbers = {name: float(x) for name, x in values.items()}
    if covariance is None:
        return numbers, None
    try:
        matrix: Array = np.array(covariance, dtype=float)
    except (TypeError, ValueError) as error:
        raise InputError([Fault("covariance", "must be a matrix of numbers")]) from error
    k = len(numbers)
    message = ""
    if matrix.shape != (k, k):
        message = f"must be {k} x {k}, as many as parameters, given {matrix.shape}"
    elif not np.isfinite(matrix).all():
        message = "must hold finite numbers"
    elif not np.allclose(matrix, matrix.T, rtol=1e-9, atol=0.0):
        message = "must be symmetric"
    elif not _is_covariance(matrix):
        message = "is no covariance: some combination of parameters has a negative variance"
    if message:
        raise InputError([Fault("covariance", message)])
    return numbers, matrix


def _parameter_faults(shop: str, values: Mapping[str, float]) -> Iterable[Fault]:
    if not isinstance(shop, str) or not shop.strip():
        yield Fault("shop", "must be the name of the shop")
    for name, x in values.items():
        if isinstance(x, bool) or not isinstance(x, int | float | np.number):
            yield Fault(str(name)[:80], f"must be a number, given {x!r:.40}")
        elif not math.isfinite(x):
            yield Fault(str(name)[:80], f"must be a finite number, given {x}")


def _is_covariance(matrix: Array) -> bool:
    variances = np.diag(matrix)
    if (variances < 0.0).any():
        return False
    scale = np.sqrt(np.where(variances > 0.0, variances, 1.0))
    correlation = matrix / np.outer(scale, scale)
    return bool(np.linalg.eigvalsh(correlation).min(initial=0.0) >= -ROUNDING * len(matrix))
