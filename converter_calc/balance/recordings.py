"""Recorded equations of heats of one kind, made once and used by all heats like it.

A page or a planner asks the same question of the same shop again and again, with another
silicon or another aim. From the third time on, the residuals and their Jacobian are recorded
and written out as functions of plain floats or arrays, which takes a tenth of the time. They
are the formulas themselves, so this decides how long a solve takes, never what comes out.
"""

from __future__ import annotations

from collections import OrderedDict
from collections.abc import Mapping
from dataclasses import dataclass, fields, is_dataclass, replace
from threading import Lock
from typing import Any

import numpy as np

from converter_calc.balance.asks import Ask, evaluate_ask
from converter_calc.balance.problem import Problem
from converter_calc.basis import dual as ad
from converter_calc.basis.tape import Tape, steady_name
from converter_calc.basis.tolerances import RECORDED_FROM_HEAT, RECORDINGS_KEPT
from converter_calc.basis.written import Written, write_out

#: Parts of a problem that hold the numbers of a heat by name; single numbers of a heat; what
#: is no matter of its kind. All else is part of the kind.
PARTS = ("values", "fixed", "hot_metal_pct", "returned")
NUMBERS = ("hot_metal_J_kg", "scale_kg")
BESIDE = ("n", "masks", "cache")


@dataclass(frozen=True)
class Recording:
    """One kind of heat: what its givens make of it, and then its equations.

    steady : of the givens, what no unknown moves. residuals, jacobian : of these values and the
    unknowns, the residuals; the same, and the Jacobian row by row.
    """

    steady: Written
    residuals: Written
    jacobian: Written


class Recordings:
    """Recordings by kind of heat, those used last; shared by all sessions of a server."""

    def __init__(self) -> None:
        self._made: OrderedDict[Any, Recording] = OrderedDict()
        self._seen: OrderedDict[Any, int] = OrderedDict()
        self._lock = Lock()

    def find(self, p: Problem, ask: Ask) -> Recording | None:
        """The recording for heats like this one; None for the first few."""
        key = (ask, kind_of(p))
        with self._lock:
            if key in self._made:
                self._made.move_to_end(key)
                return self._made[key]
            times = self._seen.pop(key, 0) + 1
            if times < RECORDED_FROM_HEAT:
                self._seen[key] = times
                _cut(self._seen)
                return None
        made = _record(p, ask)
        with self._lock:
            self._made[key] = made
            _cut(self._made)
        return made


def _cut(store: OrderedDict[Any, Any]) -> None:
    while len(store) > RECORDINGS_KEPT:
        store.popitem(last=False)


RECORDINGS = Recordings()


def kind_of(p: Problem) -> Any:
    """What a recording takes as it stands: names, choices, contents of the materials; hashable."""
    return tuple(
        tuple(getattr(p, part.name)) if part.name in PARTS else _frozen(getattr(p, part.name))
        for part in fields(p)
        if part.name not in NUMBERS and part.name not in BESIDE
    )


def _frozen(x: Any) -> Any:
    """The content of x as something that can be looked up."""
    if x is None or isinstance(x, str | float | int):
        return x
    if isinstance(x, Mapping):
        return tuple((key, _frozen(part)) for key, part in x.items())
    if isinstance(x, list | tuple):
        return tuple(_frozen(part) for part in x)
    if is_dataclass(x):
        return tuple(_frozen(getattr(x, part.name)) for part in fields(x))
    array = np.asarray(x, dtype=float)
    return array.shape, array.tobytes()


def _record(p: Problem, ask: Ask) -> Recording:
    tape = Tape()
    parts = {
        part: {name: tape.input(f"{part}:{name}") for name in getattr(p, part)} for part in PARTS
    }
    singles = {name: tape.input(name) for name in NUMBERS}
    # of any type, as every formula is generic
    givens: Any = replace(p, **parts, **singles, cache={})  # type: ignore[arg-type]
    unknowns: dict[str, Any] = {
        name: ad.Dual(tape.input("x:" + name), {name: 1.0}) for name in ask.unknowns
    }
    names = list(tape.names)
    state = evaluate_ask(givens, ask, unknowns)
    found = [state.residuals[name] for name in ask.residuals]
    values = [ad.value(part) for part in found]
    both = [*values, *(ad.slope(part, name) for part in found for name in ask.unknowns)]
    moving = ["x:" + name for name in ask.unknowns]
    rest, steady = tape.split(moving, both)
    fixed = [name for name in names if name not in moving]
    inputs = [*fixed, *(steady_name(part.index) for part in steady), *moving]
    given = [tape.input(name) for name in fixed]
    return Recording(
        write_out(tape, [*given, *steady], fixed),
        write_out(rest, values, inputs),
        write_out(rest, both, inputs),
    )


def givens_of(p: Problem) -> list[Any] | None:
    """The numbers of heats in the order of a recording, floats or arrays (n,).

    None where a recording cannot serve: gaps among the heats, or derivatives by the givens.
    """
    if not all(mask is True for mask in p.masks.values()):
        return None
    found = [x for part in PARTS for x in getattr(p, part).values()]
    found += [getattr(p, name) for name in NUMBERS]
    return found if all(isinstance(x, float | np.ndarray) for x in found) else None
