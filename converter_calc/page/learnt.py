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
    if _is_yield(name):
        found = _yield_of(form, name)
        return math.nan if found is None else found
    try:
        return parse_number(form.fields.get(name, ""))
    except ValueError:
        return math.nan


def taken(
    form: Form, tuned: Tuned, source: str
) -> tuple[Form, Learnt, dict[str, str | float | None]]:
    """The fields with learnt parameters, what the spread has to know of these, and what was before.

    source : where they come from, for the note beside the spread. Parameters that the log could
    not tell stay as the fields have them.
    """
    new = form.copy()
    told = [k for k, entry in enumerate(tuned.parameters) if not entry.held]
    values: dict[str, float] = {}
    before: dict[str, str | float | None] = {}
    for k in told:
        name, text = tuned.parameters[k].name, f"{tuned.parameters[k].value:.{DIGITS}g}"
        values[name] = float(text)
        if _is_yield(name):
            before[name] = _yield_of(new, name)
            _put_yield(new, name, float(text))
        else:
            before[name] = new.fields.get(name, "")
            new.fields[name] = number_text(float(text))
    covariance = np.asarray(tuned.covariance, dtype=float)[np.ix_(told, told)]
    return new, Learnt(values, covariance, source), before


def restored(form: Form, before: Mapping[str, str | float | None]) -> Form:
    """The fields with the values that stood in them before `taken`."""
    new = form.copy()
    for name, x in before.items():
        if _is_yield(name):
            _put_yield(new, name, x)
        else:
            new.fields[name] = str(x)
    return new


def _is_yield(name: str) -> bool:
    return name.endswith(YIELD) and name not in parameters()


def _yield_of(form: Form, name: str) -> float | None:
    fields = form.rest.get("materials", {}).get(name.removesuffix(YIELD), {})
    found = fields.get("yield_factor") if isinstance(fields, Mapping) else None
    return float(found) if isinstance(found, int | float) else None


def _put_yield(form: Form, name: str, x: float | str | None) -> None:
    """Set the yield factor of a scrap, or take it out; a material left empty goes too."""
    material = name.removesuffix(YIELD)
    own = form.rest.get("materials", {})
    fields = {key: value for key, value in own.get(material, {}).items() if key != "yield_factor"}
    if x is not None:
        fields["yield_factor"] = x
    own = {key: value for key, value in own.items() if key != material}
    if fields:
        own[material] = fields
    form.rest.pop("materials", None)
    if own:
        form.rest["materials"] = own
