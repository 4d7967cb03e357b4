"""What a heat log has told of a shop: parameters with their errors, kept in a file and applied."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import asdict, dataclass, field
from pathlib import Path
from typing import TYPE_CHECKING, Any

import numpy as np

from converter_calc.balance.heats import HeatTable
from converter_calc.balance.schema import material_fields, parameters
from converter_calc.basis.dual import Array
from converter_calc.basis.errors import Fault, InputError
from converter_calc.learning.kept_files import load_document, save_document
from converter_calc.learning.tuning_equations import GrossError
from converter_calc.planning.solving import with_values

if TYPE_CHECKING:
    import pandas as pd

FORMAT = "converter-calc tuned parameters"
VERSION = 1
_YIELD = "_yield_factor"


@dataclass(frozen=True)
class TunedParameter:
    """One parameter.

    value, standard_error : in its own unit. prior, prior_sd : what was believed before (sd at
    the prior mean, own unit). told_by_data : share of what is known of it that comes from the
    log, 0 to 1. held : the log cannot tell it, so it stays at its prior. at_bound : it ran into
    a bound of data/tuning_parameters.csv.
    """

    name: str
    unit: str
    value: float
    standard_error: float
    prior: float
    prior_sd: float
    told_by_data: float
    held: bool
    at_bound: bool
    acts_on: str


@dataclass(frozen=True)
class Fitted:
    """How one quantity fits the log that the parameters were taken from (not out of sample).

    used : outcomes used. scatter : robust standard deviation, of a log a share.
    offset : what the samples read above the model in all heats alike, likewise. bias_before,
    error_before : mean and mean absolute error in `unit` with the prior; bias, error : tuned.
    """

    name: str
    unit: str
    log: bool
    used: int
    scatter: float
    offset: float
    bias_before: float
    error_before: float
    bias: float
    error: float


@dataclass(frozen=True)
class Tuned:
    """Parameters of a shop with their covariance.

    covariance : (k, k) in the units of the parameters, in their order. collinear : pairs that
    the log can hardly tell apart, with their correlation. heats : used; rows : in the log.
    shared_error : correlation of the errors of two heats that was reckoned with. laws,
    blowing : what the parameters hold for.
    """

    shop: str
    parameters: tuple[TunedParameter, ...]
    covariance: Array
    fitted: tuple[Fitted, ...]
    collinear: tuple[tuple[str, str, float], ...]
    rows: int
    heats: int
    unusable: int
    unsolved: int
    gross_heats: int
    gross_outcomes: int
    passes: int
    settled: bool
    shared_error: float
    laws: Mapping[str, str]
    blowing: str
    gross_errors: tuple[GrossError, ...] = field(default=(), repr=False)
    faults: tuple[dict[str, Any], ...] = field(default=(), repr=False)

    @property
    def names(self) -> tuple[str, ...]:
        """Flat names of the parameters."""
        return tuple(entry.name for entry in self.parameters)

    def practice_values(self) -> dict[str, float]:
        """Values by flat name, to put in place of those of the shop."""
        return {entry.name: entry.value for entry in self.parameters}

    def standard_errors(self) -> dict[str, float]:
        """Standard error of each by flat name."""
        return {entry.name: entry.standard_error for entry in self.parameters}

    def offsets(self) -> dict[str, float]:
        """What the samples of each quantity read above the model, transformed."""
        return {entry.name: entry.offset for entry in self.fitted}

    def scatter(self) -> dict[str, float]:
        """Robust standard deviation of each quantity, transformed as it is compared."""
        return {entry.name: entry.scatter for entry in self.fitted}

    def gross_frame(self) -> pd.DataFrame:
        """Every row or outcome that was not used: heat_id, field, given, expected, sds, reason."""
        import pandas as pd

        rows = [
            {
                "heat_id": fault["heat_id"],
                "field": fault["field"],
                "given": fault["given"],
                "reason": fault["reason"],
            }
            for fault in self.faults
        ]
        for gross in self.gross_errors:
            what = "the whole heat is" if gross.whole_heat else "it is"
            reason = f"{abs(gross.sds):.1f} standard deviations off; {what} not used"
            rows.append(
                {
                    "heat_id": gross.heat_id,
                    "field": gross.field,
                    "given": gross.given,
                    "expected": gross.expected,
                    "sds": gross.sds,
                    "reason": reason,
                }
            )
        columns = ["heat_id", "field", "given", "expected", "sds", "reason"]
        return pd.DataFrame(rows, columns=columns)

    def apply(self, heats: HeatTable) -> HeatTable:
        """The heats with the tuned parameters in place of the shop's.

        Raises
        ------
        InputError : the heats choose another law or way of blowing than the log was read with.
        """
        choices = heats.choices
        pairs = [(f"law.{topic}", law, choices.laws.get(topic)) for topic, law in self.laws.items()]
        pairs.append(("practice.blowing", self.blowing, choices.blowing))
        faults = [
            Fault(place, f"tuned with {ours}, the heat asks for {theirs}; tune again with that")
            for place, ours, theirs in pairs
            if ours != theirs
        ]
        unknown = [
            name
            for name in self.names
            if name.endswith(_YIELD)
            and name not in parameters()
            and name.removesuffix(_YIELD) not in heats.materials
        ]
        faults += [
            Fault(name, "tuned for a scrap that the heat's shop does not have") for name in unknown
        ]
        if faults:
            raise InputError(faults)
        return with_values(heats, **self.practice_values())

    def document(self) -> dict[str, Any]:
        """Everything as plain values, ready for JSON."""
        found = {"format": FORMAT, "version": VERSION}
        found |= {
            name: getattr(self, name)
            for name in (
                *("shop", "rows", "heats", "unusable", "unsolved", "gross_heats"),
                *("gross_outcomes", "passes", "settled", "shared_error", "blowing"),
            )
        }
        return found | {
            "laws": dict(self.laws),
            "parameters": [asdict(entry) for entry in self.parameters],
            "covariance": self.covariance.tolist(),
            "fitted": [asdict(entry) for entry in self.fitted],
            "collinear": [list(pair) for pair in self.collinear],
            "gross_errors": [asdict(entry) for entry in self.gross_errors],
            "faults": [dict(fault) for fault in self.faults],
        }

    def save(self, path: str | Path) -> None:
        """Write a JSON file; raises InputError where it cannot be written."""
        save_document(self.document(), path)


def load_tuned(path: str | Path) -> Tuned:
    """Tuned parameters from a file that `Tuned.save` wrote.

    Raises InputError, one clear line, for a file that is missing, broken or of another kind.
    """
    return tuned_from(load_document(path, "tuned parameters"), str(path))


def tuned_from(document: Any, place: str = "tuned") -> Tuned:
    """Tuned parameters from what `Tuned.document` gave.

    Raises InputError where it is not that, or a value is impossible.
    """

    def fail(message: str) -> InputError:
        return InputError([Fault(place, message)])

    if not isinstance(document, Mapping) or document.get("format") != FORMAT:
        raise fail(f'is no file of tuned parameters (format = "{FORMAT}")')
    if document.get("version") != VERSION:
        raise fail(f"is of version {document.get('version')}; this program reads {VERSION}")
    try:
        found = Tuned(
            **{
                name: document[name]
                for name in (
                    *("shop", "rows", "heats", "unusable", "unsolved", "gross_heats"),
                    *("gross_outcomes", "passes", "settled", "shared_error", "blowing"),
                )
            },
            laws=dict(document["laws"]),
            parameters=tuple(TunedParameter(**entry) for entry in document["parameters"]),
            covariance=np.array(document["covariance"], dtype=float),
            fitted=tuple(Fitted(**entry) for entry in document["fitted"]),
            collinear=tuple((str(a), str(b), float(r)) for a, b, r in document["collinear"]),
            gross_errors=tuple(GrossError(**entry) for entry in document["gross_errors"]),
            faults=tuple(dict(fault) for fault in document["faults"]),
        )
    except (KeyError, TypeError, ValueError) as error:
        raise fail(f"is incomplete or misshapen: {error}") from error
    faults = [*_value_faults(found), *_covariance_faults(found)]
    if faults:
        raise InputError(faults)
    return found


def _value_faults(tuned: Tuned) -> list[Fault]:
    """Parameters that are unknown, given twice or out of bounds."""
    faults = []
    seen: set[str] = set()
    for entry in tuned.parameters:
        name = entry.name
        if not isinstance(name, str) or name in seen:
            faults.append(Fault(str(name)[:60], "is given twice or has no name"))
            continue
        seen.add(name)
        is_yield = name.endswith(_YIELD) and name not in parameters()
        row = material_fields()["yield_factor"] if is_yield else parameters().get(name)
        if row is None or row.kind != "number":
            faults.append(Fault(name[:60], "is no numeric input"))
            continue
        numbers = (entry.value, entry.standard_error)
        if not all(isinstance(x, int | float) and np.isfinite(x) for x in numbers):
            faults.append(Fault(name, "has no finite value and standard error"))
        elif not row.low <= entry.value <= row.high:
            bounds = f"{row.low:g} to {row.high:g} {row.unit}".rstrip()
            faults.append(Fault(name, f"must be {bounds}, given {entry.value:g}"))
    return faults


def _covariance_faults(tuned: Tuned) -> list[Fault]:
    """A covariance that is none."""
    C, k = tuned.covariance, len(tuned.parameters)
    if C.shape != (k, k):
        return [Fault("covariance", f"must be {k} by {k}, given {'by'.join(map(str, C.shape))}")]
    if not np.isfinite(C).all() or not np.allclose(C, C.T, rtol=1e-9, atol=0.0):
        return [Fault("covariance", "must be finite and symmetric")]
    scale = np.sqrt(np.maximum(np.diag(C), 1e-300))
    if (np.diag(C) < 0.0).any() or np.linalg.eigvalsh(C / np.outer(scale, scale)).min() < -1e-8:
        return [Fault("covariance", "has a negative variance")]
    return []
