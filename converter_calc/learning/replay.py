"""A heat log played back through the balance: what the model says each heat should have been.

The log is read once into parts of heats that are ready to solve; each replay then solves them
for one set of parameters, from where they stood at the last one.
"""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass, field
from pathlib import Path
from typing import TYPE_CHECKING, Any

import numpy as np

from converter_calc.balance.asks import REACH, Ask
from converter_calc.balance.documents import read_shop
from converter_calc.balance.heats import HeatTable, heats_from_frame
from converter_calc.balance.newton import Unknowns, solve
from converter_calc.balance.problem import Problem, build_problem
from converter_calc.balance.schema import nearest, parameters
from converter_calc.balance.solving import Fits, Memory, solve_ask
from converter_calc.balance.system import System
from converter_calc.basis.dual import Array
from converter_calc.basis.errors import Fault, InputError
from converter_calc.basis.tolerances import RESIDUAL_STALLED
from converter_calc.heatlog.columns import find_column, material_names
from converter_calc.learning.replay_quantities import predicted, quantities
from converter_calc.planning.sensitivities import response
from converter_calc.planning.solving import predict_groups, with_values

if TYPE_CHECKING:
    import pandas as pd

#: Heats solved together the first time, and heats whose derivatives are worked out together:
#: the second bounds the memory (about 60 kB a heat with 15 parameters) and stays in cache.
ROWS_SOLVED = 16384
ROWS_DERIVED = 1024
#: Without these a heat cannot be replayed; the others only where the log has the column.
NEEDED = ("hot_metal_kg", "hot_metal_temp_C", "hm_C_pct", "hm_Si_pct", "oxygen_Nm3")
NEEDED_IF_LOGGED = ("hm_Mn_pct", "hm_P_pct")
#: An end analysis says nothing where the charge of the element is not known.
CHARGED = {
    "hm_Mn_pct": ("end_Mn_pct", "slag_MnO_pct"),
    "hm_P_pct": ("end_P_pct", "slag_P2O5_pct"),
    "hm_S_pct": ("end_S_pct",),
}
#: Newton steps from the last answer before a heat starts afresh.
WARM_STEPS = 6


@dataclass
class _Part:
    """Heats of one question: row numbers in the log, givens, and where they stood last."""

    rows: Array
    heats: HeatTable
    ask: Ask
    x: Unknowns | None = None
    failures: Array | None = None
    fits: Fits = field(default_factory=dict)


@dataclass
class HeatLog:
    """A log ready to replay.

    ids : heat_id of all n rows. names : quantities observed at least once. observed : (n, m),
    transformed (see replay_quantities), NaN where missing. usable : rows whose charge is
    complete. faults : what is wrong with the others (row, heat_id, field, given, reason).
    materials : those that have a column.
    """

    ids: list[str]
    names: tuple[str, ...]
    observed: Array
    usable: Array
    faults: pd.DataFrame
    materials: tuple[str, ...]
    parts: list[_Part] = field(default_factory=list, repr=False)

    @property
    def n(self) -> int:
        """Rows of the log."""
        return len(self.ids)

    def stood(self) -> list[tuple[Unknowns | None, Array | None]]:
        """Where the heats stood at the last replay, to `resume` from when they are read anew."""
        return [(part.x, part.failures) for part in self.parts]

    def resume(self, stood: Sequence[tuple[Unknowns | None, Array | None]]) -> None:
        """Let the next replay start where the same heats stood before."""
        for part, (x, failures) in zip(self.parts, stood, strict=True):
            part.x, part.failures = x, failures


@dataclass(frozen=True)
class Replay:
    """What the model says of each heat of a log, beside what was observed.

    names : the m quantities. predicted, observed : (n, m), transformed, NaN where there is
    none. parameters : the k parameters of `jacobian` (n, m, k), d predicted / d parameter.
    usable : heats whose charge is complete. converged : heats that have an answer.
    """

    ids: list[str]
    names: tuple[str, ...]
    observed: Array
    predicted: Array
    parameters: tuple[str, ...]
    jacobian: Array
    usable: Array
    converged: Array

    @property
    def residuals(self) -> Array:
        """Observed minus predicted, transformed, (n, m); NaN where either is missing."""
        return self.observed - self.predicted

    def plain(self, name: str) -> tuple[Array, Array]:
        """(observed, predicted) of one quantity in its own unit, (n,) each."""
        column, quantity = self.names.index(name), quantities()[name]
        return (
            quantity.plain(self.observed[:, column]),
            quantity.plain(self.predicted[:, column]),
        )


def replay(
    log: pd.DataFrame | HeatLog,
    shop: str | Path | Mapping[str, Any] | None = None,
    values: Mapping[str, Any] | None = None,
    jacobian_of: Sequence[str] = (),
    *,
    tries: int | None = None,
) -> Replay:
    """Predict every heat of a log from its charge and oxygen.

    Parameters
    ----------
    log : heat log (columns as `heatlog.columns`), or one that `read_heats` has made ready. Blank
    times of waiting and blowing are those of the shop; a blank mass makes a heat unusable.
    shop : shop file or its content. values : parameters by flat name, put in place of those of
    the shop: a number, or one for each row (n,). jacobian_of : parameters to take derivatives
    by. tries : heats that had no answer in so many replays of the same HeatLog are not tried
    again; always where None.

    Returns
    -------
    Replay, in the row order of the log. Nothing is raised for a heat without an answer.

    Raises
    ------
    InputError : the shop is wrong, the log lacks a column, a parameter is unknown.
    """
    ready = log if isinstance(log, HeatLog) else read_heats(log, shop)
    values = {} if values is None else values
    known = set(ready.parts[0].heats.values) if ready.parts else set(parameters())
    yields = {f"{name}_yield_factor" for name in ready.materials}
    for name in (*values, *jacobian_of):
        if name not in known | yields:
            raise InputError([Fault(name, f"is no numeric input{nearest(name, known)}")])
    n, m, k = ready.n, len(ready.names), len(jacobian_of)
    found = Replay(
        ready.ids,
        ready.names,
        ready.observed,
        np.full((n, m), np.nan),
        tuple(jacobian_of),
        np.full((n, m, k), np.nan),
        ready.usable,
        np.zeros(n, dtype=bool),
    )
    for part in ready.parts:
        _replay_part(part, values, found, tries)
    return found


def read_heats(frame: pd.DataFrame, shop: str | Path | Mapping[str, Any] | None = None) -> HeatLog:
    """Make a log ready to replay; see `replay` for parameters and errors."""
    document = _document_of(shop)
    frame = frame.reset_index(drop=True)
    materials = material_names(document)
    inputs = _input_columns(frame, materials, document)
    ids = [str(x) for x in frame["heat_id"]] if "heat_id" in frame else list(map(str, frame.index))
    faults = _faults_of(frame, ids, inputs, materials)
    usable = np.ones(len(frame), dtype=bool)
    usable[faults["row"].to_numpy(dtype=int)] = False
    names, observed = _observations(frame)
    charged = tuple(name for name in materials if f"{name}_kg" in frame)
    log = HeatLog(ids, names, observed, usable, faults, charged)
    good = np.flatnonzero(usable)
    for begin in range(0, good.size, ROWS_SOLVED):
        rows = good[begin : begin + ROWS_SOLVED]
        table = frame.loc[rows, [*inputs]].copy()
        table.insert(0, "heat_id", [ids[row] for row in rows])
        heats = heats_from_frame(table, shop=document)
        log.parts += [_Part(rows[some], part, ask) for some, part, ask in predict_groups(heats)]
    return log


def _document_of(shop: str | Path | Mapping[str, Any] | None) -> dict[str, Any]:
    if shop is None:
        return {}
    return dict(shop) if isinstance(shop, Mapping) else read_shop(Path(shop))


def _input_columns(
    frame: pd.DataFrame, materials: Sequence[str], document: Mapping[str, Any]
) -> list[str]:
    """Columns that a prediction takes; raises InputError where one is missing altogether."""
    inputs = []
    for name in map(str, frame.columns):
        column = find_column(name, materials)
        if (column is not None and column.group == "input") or name.endswith("_yield_factor"):
            inputs.append(name)
    given = document.get("hot_metal", {})
    lacking = [
        name
        for name in NEEDED
        if name not in inputs
        and parameters()[name].key not in (*given, *document.get("charge", {}))
    ]
    if lacking:
        raise InputError([Fault(name, "the log has no such column") for name in lacking])
    return inputs


def _faults_of(
    frame: pd.DataFrame, ids: list[str], inputs: Sequence[str], materials: Sequence[str]
) -> pd.DataFrame:
    """Why a heat cannot be replayed: an input that is missing or impossible, a line each."""
    import pandas as pd

    masses = {f"{name}_kg" for name in materials}
    told: list[dict[str, Any]] = []
    for name in inputs:
        column = find_column(name, materials)
        x = frame[name].to_numpy(dtype=float, na_value=np.nan)
        missing = np.isnan(x)
        if name in (*NEEDED, *NEEDED_IF_LOGGED):
            told += [_fault(row, ids, name, "", "not given") for row in np.flatnonzero(missing)]
        elif name in masses:
            told += [
                _fault(row, ids, name, "", "not given; 0 where none was charged")
                for row in np.flatnonzero(missing)
            ]
        if column is None:
            continue
        with np.errstate(invalid="ignore"):
            outside = (x < column.low) | (x > column.high) | np.isinf(x)
        reason = f"must be {column.low:g} to {column.high:g} {column.unit}".rstrip()
        told += [_fault(row, ids, name, f"{x[row]:g}", reason) for row in np.flatnonzero(outside)]
    table = pd.DataFrame(told, columns=["row", "heat_id", "field", "given", "reason"])
    return table.sort_values("row", kind="stable").reset_index(drop=True)


def _fault(row: Any, ids: list[str], name: str, given: str, reason: str) -> dict[str, Any]:
    return {"row": int(row), "heat_id": ids[row], "field": name, "given": given, "reason": reason}


def _observations(frame: pd.DataFrame) -> tuple[tuple[str, ...], Array]:
    """Quantities that the log holds, and their values transformed, (n, m)."""
    names, columns = [], []
    unknown: dict[str, Any] = {}
    for charge, outcomes in CHARGED.items():
        if charge in frame:
            blank = frame[charge].isna().to_numpy(dtype=bool)
        else:
            blank = np.ones(len(frame), dtype=bool)
        unknown |= dict.fromkeys(outcomes, blank)
    for name, quantity in quantities().items():
        if name in frame:
            x = frame[name].to_numpy(dtype=float, na_value=np.nan)
            y = quantity.transformed(x)
            if name in unknown:
                y = np.where(unknown[name], np.nan, y)
            if np.isfinite(y).any():
                names.append(name)
                columns.append(y)
    stacked = np.stack(columns, axis=1) if columns else np.zeros((len(frame), 0))
    return tuple(names), stacked


def _replay_part(part: _Part, values: Mapping[str, Any], found: Replay, tries: int | None) -> None:
    """Solve the heats of a part and put what the model says into `found`."""
    heats = part.heats
    numbers = {
        name: np.asarray(x, dtype=float)[part.rows] if np.ndim(x) else float(x)
        for name, x in values.items()
    }
    for name in found.parameters:
        if name.endswith("_yield_factor"):
            numbers.setdefault(name, heats.values.get(name, 1.0))
    if numbers:
        heats = with_values(heats, **numbers)
    solved = _solve(part, build_problem(heats), tries)
    for begin in range(0, heats.n, ROWS_DERIVED):
        some = slice(begin, min(begin + ROWS_DERIVED, heats.n))
        x = {name: values[some] for name, values in solved.items()}
        piece = heats if some == slice(0, heats.n) else heats.take(some)
        p = build_problem(piece, seeds=found.parameters)
        with np.errstate(all="ignore"):
            answer = response(p, part.ask, x, found.parameters, predicted)
        rows = part.rows[some]
        good = answer.residual <= RESIDUAL_STALLED
        found.converged[rows] = good
        for column, name in enumerate(found.names):
            if name in answer.values:
                y = answer.values[name]
                found.predicted[rows, column] = np.where(good & np.isfinite(y), y, np.nan)
                slopes = answer.slopes[name]
                slopes[~good] = np.nan
                found.jacobian[rows, column] = slopes


def _solve(part: _Part, p: Problem, tries: int | None) -> Unknowns:
    """Unknowns of the heats of a part, from where they stood or, failing that, afresh."""
    if part.x is None or part.failures is None:
        found = solve_ask(p, part.ask, Memory(fits=part.fits))
        part.x, part.failures = found.unknowns, (~found.converged).astype(int)
        return part.x
    good = np.ones(p.n, dtype=bool)
    for begin in range(0, p.n, ROWS_DERIVED):
        rows = np.arange(begin, min(begin + ROWS_DERIVED, p.n))
        start = {name: x[rows] for name, x in part.x.items()}
        system = System(p.take(slice(rows[0], rows[-1] + 1)), part.ask)
        hopeful = np.flatnonzero(part.failures[rows] == 0)
        start = {name: x[hopeful] for name, x in start.items()}
        solved = solve(system, start, REACH, hopeful, WARM_STEPS)
        good[rows] = part.failures[rows] == 0
        good[rows[hopeful]] = solved.converged
        for name, x in solved.unknowns.items():
            part.x[name][rows[hopeful]] = x
    left = np.flatnonzero(~good & (part.failures < (np.inf if tries is None else tries)))
    if left.size:
        again = solve_ask(p.take(left), part.ask)
        for name, x in again.unknowns.items():
            part.x[name][left] = x
        part.failures[left] = np.where(again.converged, 0, part.failures[left] + 1)
    return part.x
