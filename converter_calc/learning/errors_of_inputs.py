"""Errors of the inputs of a heat: how large they are, which go together, and how they act.

A heat file holds what the instruments read. What is true differs from it by errors, one
standard deviation of which stands in data/input_errors.csv, or in [errors] of the heat or shop
file. They act through inputs of the balance: what the scale reads above the truth, the yield of
a scrap, the factor on a law.
"""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass, replace
from functools import cache
from typing import Any

import numpy as np

from converter_calc.balance.asks import Ask
from converter_calc.balance.fields import show, take_number, take_table
from converter_calc.balance.heats import HeatTable
from converter_calc.balance.schema import Parameter, nearest
from converter_calc.basis.dual import Array
from converter_calc.basis.errors import DataError, Fault, InputError
from converter_calc.data.tables import read_csv_rows
from converter_calc.planning.sensitivities import derivatives

#: Extra uncertainty of inputs, as learnt from the log: flat names, and their covariance.
Extra = tuple[Sequence[str], Any]
LEARNT = "learnt_parameters"
CORRELATIONS = "correlations"
#: Where the heat loss can be given; the first that a heat gives is what a colder vessel changes.
HEAT_LOSSES = (
    *("pin_heat_loss_MJ", "pin_heat_loss_MJ_per_t", "pin_heat_loss_MJ_per_min"),
    *("pin_heat_loss_share_pct", "heat_loss_MJ_per_t"),
)


@dataclass(frozen=True)
class ErrorOfInput:
    """One error: `sd` is one standard deviation in `unit`, `kind` how it is laid on.

    kind : "absolute" (added), "relative" (sd % of the value, added) or "factor" (log-normal:
    one standard deviation is a factor of 1 + sd %). acts_on : flat input, or what
    data/input_errors.csv lists beside these. alike : correlation between the materials of one
    heat. given : whether the file gives the sd.
    """

    name: str
    label: str
    kind: str
    unit: str
    sd: float
    acts_on: str
    alike: float
    source: str
    given: bool = False


@dataclass(frozen=True)
class Term:
    """One number drawn for a heat: the flat input it acts on, and one standard deviation.

    error : place of its error in the model. sd : number or (n,), in the unit of the input; % of
    it for a relative error, the logarithm of one standard deviation for a factor.
    """

    error: int
    target: str
    kind: str
    sd: Any


@dataclass(frozen=True)
class ErrorModel:
    """All errors of a table of heats.

    errors : those that act. terms : the k numbers drawn. root : (k, k), root @ z of independent
    standard normal z has the correlations. groups : places of the terms that go together.
    """

    errors: tuple[ErrorOfInput, ...]
    terms: tuple[Term, ...]
    root: Array
    groups: tuple[tuple[int, ...], ...]

    @property
    def size(self) -> int:
        """Numbers drawn for a heat."""
        return len(self.terms)

    def names_of(self, group: tuple[int, ...]) -> tuple[str, ...]:
        """Names of the errors in a group."""
        return tuple(dict.fromkeys(self.errors[self.terms[k].error].name for k in group))

    def label_of(self, group: tuple[int, ...]) -> str:
        """Labels of the errors in a group, a source that they share named once."""
        labels = {error.name: error.label for error in self.errors}
        first, *others = [labels[name] for name in self.names_of(group)]
        source = first.rpartition(" ")[0] + " "
        return ", ".join([first, *(label.removeprefix(source) for label in others)])

    def scaled(self, name: str, factor: float) -> Array:
        """(k, k) that turns z into the z of the same draws with one error times `factor`."""
        size = np.array([factor if self.errors[t.error].name == name else 1.0 for t in self.terms])
        return np.asarray(np.linalg.lstsq(self.root, size[:, None] * self.root, rcond=None)[0])


@cache
def known_errors() -> dict[str, tuple[ErrorOfInput, Parameter]]:
    """Errors of data/input_errors.csv by name, each with the bounds of its sd."""
    found = {}
    for row in read_csv_rows("input_errors.csv"):
        name = row["name"]
        error = ErrorOfInput(
            name=name,
            label=row["label"],
            kind=row["kind"],
            unit=row["unit"],
            sd=float(row["sd"]),
            acts_on=row["acts_on"],
            alike=float(row["alike"] or 0.0),
            source=row["source"],
        )
        bounds = Parameter(
            name, "errors", name, "number", "" if row["unit"] == "C" else row["unit"], row["sd"],
            float(row["low"]), float(row["high"]), (), row["label"], row["source"],
        )  # fmt: skip
        found[name] = (error, bounds)
    return found


@cache
def known_correlations() -> dict[frozenset[str], float]:
    """Correlation of two errors by their names; what is not listed is zero."""
    return {
        frozenset((row["first"], row["second"])): float(row["correlation"])
        for row in read_csv_rows("input_error_correlations.csv")
    }


def errors_given(
    table: Mapping[str, Any],
) -> tuple[list[ErrorOfInput], dict[frozenset[str], float]]:
    """Errors and correlations as a shop has them: the usual ones, and in their place those given.

    Parameters
    ----------
    table : [errors] of a heat or shop file: name = one standard deviation, and `correlations`,
    a list of [name, name, correlation].

    Raises InputError with a fault for each unknown name, wrong number or wrong correlation.
    """
    faults: list[Fault] = []
    given = dict(take_table(table, "errors", faults) or {})
    pairs = _correlations_given(given.pop(CORRELATIONS, []), faults)
    sizes = {}
    for key, value in given.items():
        if key not in known_errors():
            hint = nearest(key, [*known_errors(), CORRELATIONS])
            faults.append(Fault(f"errors.{key}", f"unknown error{hint}"))
            continue
        number = take_number(value, known_errors()[key][1], f"errors.{key}", faults)
        if number is not None:
            sizes[key] = number
    if faults:
        raise InputError(faults)
    errors = [
        replace(error, sd=sizes[name], given=True) if name in sizes else error
        for name, (error, _) in known_errors().items()
    ]
    return errors, known_correlations() | pairs


def _correlations_given(given: Any, faults: list[Fault]) -> dict[frozenset[str], float]:
    place, found = f"errors.{CORRELATIONS}", {}
    text = 'must be a list of ["error", "error", correlation], given '
    if not isinstance(given, list | tuple):
        faults.append(Fault(place, text + show(given)))
        return {}
    for entry in given:
        if not isinstance(entry, list | tuple) or len(entry) != 3:
            faults.append(Fault(place, text + show(entry)))
            continue
        first, second, size = entry
        wrong = [name for name in (first, second) if name not in known_errors()]
        if wrong:
            hint = nearest(str(wrong[0]), known_errors())
            faults.append(Fault(place, f"{show(wrong[0])} is no error known here{hint}"))
        elif first == second:
            faults.append(Fault(place, f"names {show(first)} twice"))
        else:
            row = Parameter(
                place, "", "", "number", "", "", -0.99, 0.99, (), "correlation of two errors", ""
            )
            number = take_number(size, row, place, faults)
            if number is not None:
                found[frozenset((first, second))] = number
    return found


_LEARNT = ErrorOfInput(
    LEARNT,
    "parameters learnt",
    "absolute",
    "",
    1.0,
    "",
    0.0,
    "covariance of the tuning",
    given=True,
)


def error_model(
    heats: HeatTable, ask: Ask, x: Mapping[str, Array], extra: Extra | None = None
) -> ErrorModel:
    """Errors of solved heats with a complete charge.

    Parameters
    ----------
    heats, ask, x : heats of complete charge and the solution of their prediction, from which
    the heat that warms the bath by one kelvin is taken. extra : flat names of inputs and their
    covariance (k, k), beside the errors of the shop: what a tuning is unsure of.

    Raises
    ------
    InputError : [errors] or extra is wrong. DataError : the correlations contradict each other.
    """
    known, pairs = errors_given(heats.errors)
    errors: list[ErrorOfInput] = []
    terms: list[Term] = []
    for error in known:
        if error.sd <= 0.0:
            continue
        factor = error.kind == "factor"
        parts = [
            Term(len(errors), target, error.kind, np.log1p(0.01 * sd) if factor else sd)
            for target, sd in _targets(heats, ask, x, error)
        ]
        if parts:
            errors.append(error)
            terms += parts
    root = _root(errors, terms, pairs)
    if extra is not None:
        more, block = _learnt(heats, len(errors), extra)
        if more:
            errors.append(_LEARNT)
            terms += more
            root = np.block(
                [[root, np.zeros((len(root), len(block)))],
                 [np.zeros((len(block), len(root))), block]]
            )  # fmt: skip
    return ErrorModel(tuple(errors), tuple(terms), root, _groups(terms, root))


def _targets(
    heats: HeatTable, ask: Ask, x: Mapping[str, Array], error: ErrorOfInput
) -> list[tuple[str, Any]]:
    """Inputs that an error acts on in these heats, each with one standard deviation."""
    name, sd = error.acts_on, error.sd
    if name == "bath_heat":
        target = next(k for k in HEAT_LOSSES if np.isfinite(heats.values[k]).all())
        slope = derivatives(heats, ask, dict(x), [target])["end_temp_C"][target]
        moves = np.abs(slope) > 1e-9  # not where the end temperature is pinned
        return [(target, np.where(moves, sd / np.where(moves, slope, 1.0), 0.0))] * bool(
            moves.any()
        )
    if name in ("scrap_yields", "flux_masses"):
        kind = "scrap" if name == "scrap_yields" else "flux"
        charged = [
            material for material, kg in heats.masses_kg.items()
            if heats.materials[material].kind == kind and np.nan_to_num(kg).any()
        ]  # fmt: skip
        ending = "yield_factor" if kind == "scrap" else "kg"
        return [(f"{material}_{ending}", sd) for material in charged]
    if name.startswith("hm_"):
        pct = heats.hm_pct.get(name[3:-4])
        return [] if pct is None or not pct.any() else [(name, sd)]
    return [(name, sd)]


def _root(
    errors: Sequence[ErrorOfInput], terms: Sequence[Term], pairs: Mapping[frozenset[str], float]
) -> Array:
    """Cholesky factor of the correlations between the terms."""
    size = len(terms)
    table = np.eye(size)
    for i in range(size):
        for j in range(i):
            a, b = errors[terms[i].error], errors[terms[j].error]
            together = a.alike if a is b else pairs.get(frozenset((a.name, b.name)), 0.0)
            table[i, j] = table[j, i] = together
    try:
        return np.linalg.cholesky(table)
    except np.linalg.LinAlgError as error:
        names = sorted({name for pair in pairs for name in pair})
        raise DataError(
            f"errors.{CORRELATIONS}: no errors can have these correlations all at once "
            f"(not positive definite); look at {', '.join(names)}"
        ) from error


def _learnt(heats: HeatTable, place: int, extra: Extra) -> tuple[list[Term], Array]:
    """Terms of the extra inputs and a root of their correlations."""
    names, covariance = [str(name) for name in extra[0]], np.asarray(extra[1], dtype=float)
    k = len(names)
    if covariance.shape != (k, k) or not np.isfinite(covariance).all():
        raise InputError([Fault("extra", f"the covariance must be {k} x {k} finite numbers")])
    unknown = [name for name in names if not _is_input(heats, name)]
    if unknown:
        hint = nearest(unknown[0], heats.values)
        raise InputError([Fault("extra", f"{unknown[0]} is no input of this heat{hint}")])
    values, vectors = np.linalg.eigh(0.5 * (covariance + covariance.T))
    if values.size and values[0] < -1e-9 * max(values[-1], 1e-300):
        raise InputError([Fault("extra", "the covariance is not positive semidefinite")])
    sd = np.sqrt(np.maximum(np.diag(covariance), 0.0))
    keep = sd > 0.0
    factor = (vectors * np.sqrt(np.maximum(values, 0.0)))[keep] / sd[keep, None]
    terms = [Term(place, name, "absolute", sd[i]) for i, name in enumerate(names) if keep[i]]
    # a square root with as many columns as terms, whatever the rank
    return terms, np.asarray(np.linalg.qr(factor.T, mode="r")).T


def _is_input(heats: HeatTable, name: str) -> bool:
    if name.endswith("_yield_factor"):
        return name in heats.values or name.removesuffix("_yield_factor") in heats.materials
    if name.startswith("hm_"):
        return name[3:-4] in heats.hm_pct
    if name.removesuffix("_kg") in heats.masses_kg:
        return True
    return name in heats.values and bool(np.isfinite(heats.values[name]).all())


def _groups(terms: Sequence[Term], root: Array) -> tuple[tuple[int, ...], ...]:
    """Terms of one error, and of errors that are correlated, directly or through others."""
    from scipy.sparse.csgraph import connected_components

    if not len(root):
        return ()
    errors = np.array([term.error for term in terms])
    tied = (np.abs(root @ root.T) > 1e-12) | (errors[:, None] == errors)
    _, labels = connected_components(tied, directed=False)
    groups: dict[int, list[int]] = {}
    for k, label in enumerate(labels.tolist()):
        groups.setdefault(label, []).append(k)
    return tuple(tuple(group) for group in groups.values())
