"""The parameters that a heat log can tell: what is believed of them before it is seen."""

from __future__ import annotations

from collections.abc import Iterable, Mapping, Sequence
from dataclasses import dataclass, replace
from typing import Any

import numpy as np

from converter_calc.balance.checks import check_document
from converter_calc.balance.schema import nearest, parameters, yield_parameter
from converter_calc.basis.dual import Array
from converter_calc.basis.errors import Fault, InputError
from converter_calc.data.tables import read_csv_rows
from converter_calc.learning.replay_quantities import quantities

_SCRAP = "<scrap>"
_YIELD = "_yield_factor"


@dataclass(frozen=True)
class TuningParameter:
    """One parameter, its scale and its prior.

    transform : "identity" or "log". mean, low, high : in the parameter's own unit. sd : of the
    transformed value.
    """

    name: str
    transform: str
    mean: float
    sd: float
    low: float
    high: float
    unit: str
    acts_on: str
    source: str

    def inner(self, x: Any) -> Any:
        """The value transformed."""
        return np.log(x) if self.transform == "log" else x

    def outer(self, y: Any) -> Any:
        """The value in its own unit."""
        return np.exp(y) if self.transform == "log" else y

    def slope(self, y: Any) -> Any:
        """Derivative of `outer`."""
        return np.exp(y) if self.transform == "log" else np.ones_like(y)

    def whitened(self, x: float) -> float:
        """Distance from the prior mean in prior standard deviations."""
        return float((self.inner(x) - self.inner(self.mean)) / self.sd)

    def plain(self, z: float) -> float:
        """The value whose distance from the prior mean is z standard deviations."""
        return float(self.outer(self.inner(self.mean) + self.sd * z))


@dataclass(frozen=True)
class ParameterSet:
    """Parameters together, in whitened coordinates: prior standard deviations from the mean.

    offsets : quantities that may read off for all heats alike, each with the standard deviation
    of that; coordinates of their own behind those of the parameters.
    """

    entries: tuple[TuningParameter, ...]
    offsets: tuple[tuple[str, float], ...] = ()

    @property
    def names(self) -> tuple[str, ...]:
        """Flat names of the parameters."""
        return tuple(entry.name for entry in self.entries)

    @property
    def coordinates(self) -> tuple[str, ...]:
        """Names of all coordinates."""
        return (*self.names, *(f"offset of {name}" for name, _ in self.offsets))

    def values(self, z: Array) -> dict[str, float]:
        """Values in their own units."""
        return {e.name: e.plain(float(x)) for e, x in zip(self.entries, z, strict=False)}

    def offset_values(self, z: Array) -> dict[str, float]:
        """What each quantity reads off, transformed as it is compared."""
        behind = z[len(self.entries) :]
        return {name: sd * float(x) for (name, sd), x in zip(self.offsets, behind, strict=True)}

    def scale(self, z: Array) -> Array:
        """Derivative of each value by its coordinate."""
        return np.array(
            [
                float(e.slope(e.inner(e.mean) + e.sd * x)) * e.sd
                for e, x in zip(self.entries, z, strict=False)
            ]
        )

    def whitened(self, values: Mapping[str, float]) -> Array:
        """Whitened coordinates of values; the prior mean where one is not given."""
        own = [e.whitened(values.get(e.name, e.mean)) for e in self.entries]
        return np.array([*own, *(0.0 for _ in self.offsets)])

    def bounds(self) -> tuple[Array, Array]:
        """Bounds in whitened coordinates."""
        ends = [sorted((e.whitened(e.low), e.whitened(e.high))) for e in self.entries]
        ends += [[-np.inf, np.inf] for _ in self.offsets]
        return np.array(ends)[:, 0], np.array(ends)[:, 1]


def parameter_set(
    shop: Mapping[str, Any],
    columns: Iterable[str],
    only: Sequence[str] = (),
    without: Sequence[str] = (),
) -> ParameterSet:
    """Parameters that a log of a shop can be asked for, with their priors.

    Parameters
    ----------
    shop : content of the shop file; what it says is the prior mean. columns : of the log. only :
    names to tune, all where empty. without : names to leave as they are.

    Raises
    ------
    InputError : the shop is wrong, a name is unknown, or a parameter stands in the log itself.
    """
    faults: list[Fault] = []
    givens = check_document(dict(shop), faults)
    if faults:
        raise InputError(faults)
    columns = list(columns)
    scraps = [
        name
        for name, material in givens.materials.items()
        if material.kind == "scrap" and f"{name}_kg" in columns
    ]
    found = []
    for entry in _entries():
        if not entry.name.startswith(_SCRAP):
            row = parameters()[entry.name]
            mean = givens.numbers.get(entry.name, row.default_number)
            found.append(replace(entry, mean=_first(entry.mean, mean), unit=row.unit))
            continue
        for name in scraps:
            mean = _first(entry.mean, givens.materials[name].yield_factor)
            unit = yield_parameter(name).unit
            found.append(replace(entry, name=name + _YIELD, mean=mean, unit=unit))
    known = {entry.name for entry in found}
    faults += [
        Fault(name, f"is no parameter to tune{nearest(name, known)}")
        for name in (*only, *without)
        if name not in known
    ]
    chosen = [
        entry for entry in found if (not only or entry.name in only) and entry.name not in without
    ]
    faults += [
        Fault(entry.name, "stands in the log, heat by heat; it cannot be tuned as well")
        for entry in chosen
        if entry.name in columns and entry.name in only
    ]
    chosen = [entry for entry in chosen if entry.name not in columns]
    faults += [
        Fault(entry.name, f"the shop says {entry.mean:g}; to tune it, it must lie between "
              f"{entry.low:g} and {entry.high:g}")
        for entry in chosen
        if not entry.low < entry.mean < entry.high
    ]  # fmt: skip
    if not faults and not chosen:
        faults.append(Fault("tuning", "no parameter is left to tune"))
    if faults:
        raise InputError(faults)
    offsets = tuple(
        (name, quantity.offset_sd)
        for name, quantity in quantities().items()
        if quantity.offset_sd and name in columns
    )
    return ParameterSet(tuple(chosen), offsets)


def _first(stated: float, otherwise: float) -> float:
    return stated if np.isfinite(stated) else otherwise


def _entries() -> list[TuningParameter]:
    return [
        TuningParameter(
            row["name"],
            row["transform"],
            float(row["prior_mean"] or "nan"),
            float(row["prior_sd"]),
            float(row["low"]),
            float(row["high"]),
            "",
            row["acts_on"],
            row["source"],
        )
        for row in read_csv_rows("tuning_parameters.csv")
    ]
