"""Heats as they are in truth, where the errors of what is read are drawn."""

from __future__ import annotations

from dataclasses import replace
from typing import Any

import numpy as np

from converter_calc.balance.heats import HeatTable
from converter_calc.basis.dual import Array
from converter_calc.learning.errors_of_inputs import ErrorModel
from converter_calc.planning.solving import with_masses, with_values


def true_heats(heats: HeatTable, model: ErrorModel, z: Array) -> tuple[HeatTable, int]:
    """The heats as they are in truth where the errors are drawn.

    Parameters
    ----------
    heats : n heats as read. z : independent standard normal numbers (k, n). The sd of a term
    is a number or (n,).

    Returns
    -------
    (heats, number of analyses that would have come out below zero and stand at zero).
    """
    e = model.root @ z
    values: dict[str, Any] = {}
    masses: dict[str, Any] = {}
    analysis = dict(heats.hm_pct)
    for place, term in enumerate(model.terms):
        name, size = term.target, term.sd * e[place]
        material = name.removesuffix("_kg")
        if name.startswith("hm_"):
            analysis[name[3:-4]] = _laid_on(analysis[name[3:-4]], size, term.kind)
        elif material != name and material in heats.masses_kg:
            masses[material] = _laid_on(
                masses.get(material, heats.masses_kg[material]), size, term.kind
            )
        elif material == name or name in heats.values:
            have = values[name] if name in values else _value(heats, name)
            values[name] = _laid_on(have, size, term.kind)
    below = 0
    for element, pct in analysis.items():
        if element != "Fe" and np.any(pct < 0.0):
            below += int(np.count_nonzero(pct < 0.0))
            analysis[element] = np.maximum(pct, 0.0)
    found = with_masses(with_values(heats, **values), masses)
    rest = [pct for element, pct in analysis.items() if element != "Fe"]
    found.hm_pct = analysis | {"Fe": 100.0 - sum(rest, np.zeros(heats.n))}
    return found, below


def _value(heats: HeatTable, name: str) -> Any:
    if name in heats.values:
        return heats.values[name]
    return heats.materials[name.removesuffix("_yield_factor")].yield_factor


def _laid_on(value: Any, size: Array, kind: str) -> Any:
    if kind == "absolute":
        return value + size
    if kind == "relative":
        return value * (1.0 + 0.01 * size)
    return value * np.exp(size)


def of_heats(model: ErrorModel, rows: Array) -> ErrorModel:
    """The model with its standard deviations those of some heats, in that order."""
    terms = [
        replace(term, sd=term.sd[rows]) if np.ndim(term.sd) and np.size(term.sd) > 1 else term
        for term in model.terms
    ]
    return replace(model, terms=tuple(terms))
