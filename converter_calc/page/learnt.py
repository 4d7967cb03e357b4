"""Learnt parameters in the plan: values go into the fields, their covariance to the spread."""

from __future__ import annotations

import math
from collections.abc import Mapping
from dataclasses import dataclass
from typing import Any

import numpy as np

from converter_calc.balance.schema import parameters
from converter_calc.learning.tuned import Tuned
from converter_calc.page.form import Form
from converter_calc.page.numbers import number_text, parse_number

YIELD = "_yield_factor"
#: Digits that a learnt value is written with; far below its standard error.
DIGITS = 6


@dataclass(frozen=True)
class Learnt:
    """What was taken into the fields: values by flat name as written, covariance, and source."""

    values: dict[str, float]
    covariance: Any
    source: str

    def unsure(self, form: Form) -> tuple[tuple[str, ...], Any] | None:
        """Names and covariance of what still stands in the fields as it was taken.

        What was changed since is no longer the learnt value, so its uncertainty is not reckoned
        with either; None where nothing is left.
        """
        still = [k for k, (name, x) in enumerate(self.values.items()) if value_in(form, name) == x]
        if not still:
            return None
        names = tuple(self.values)
        return tuple(names[k] for k in still), self.covariance[np.ix_(still, still)]


def value_in(form: Form, name: str) -> float:
    """The number of a learnt parameter in the fields; NaN where there is none."""
    if name.endswith(YIELD) and name not in parameters():
        fields = form.rest.get("materials", {}).get(name.removesuffix(YIELD), {})
        found = fields.get("yield_factor") if isinstance(fields, Mapping) else None
        return float(found) if isinstance(found, int | float) else math.nan
    try:
        return parse_number(form.fields.get(name, ""))
    except ValueError:
        return math.nan


def taken(form: Form, tuned: Tuned, source: str) -> tuple[Form, Learnt]:
    """The fields with learnt parameters in them, and what the spread has to know of these.

    source : where they come from, for the note beside the spread. Parameters that the log could
    not tell stay as the fields have them.
    """
    new = form.copy()
    told = [k for k, entry in enumerate(tuned.parameters) if not entry.held]
    values: dict[str, float] = {}
    for k in told:
        entry = tuned.parameters[k]
        text = f"{entry.value:.{DIGITS}g}"
        values[entry.name] = float(text)
        if entry.name.endswith(YIELD) and entry.name not in parameters():
            own = new.rest.setdefault("materials", {})
            material = entry.name.removesuffix(YIELD)
            own[material] = {**own.get(material, {}), "yield_factor": float(text)}
        else:
            new.fields[entry.name] = number_text(float(text))
    covariance = np.asarray(tuned.covariance, dtype=float)[np.ix_(told, told)]
    return new, Learnt(values, covariance, source)
