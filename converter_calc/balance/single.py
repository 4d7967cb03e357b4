"""One heat, solved over plain floats by formulas recorded from an earlier heat of its kind.

A page or a planner asks the same question of the same shop again and again, with another
silicon or another aim. From the third such heat on, the residuals and their Jacobian are
recorded once and replayed as one Python function; the steps are those of `newton.solve`. What
does not converge so goes the ordinary way from the start, so this decides how long it takes,
never what comes out.
"""

from __future__ import annotations

from collections import OrderedDict
from collections.abc import Mapping
from dataclasses import dataclass, fields, is_dataclass, replace
from math import inf, isfinite
from threading import Lock
from typing import Any

import numpy as np

from converter_calc.balance.asks import REACH, Ask, evaluate_ask
from converter_calc.balance.newton import Reach, Solved, Unknowns
from converter_calc.balance.problem import Problem
from converter_calc.basis import dual as ad
from converter_calc.basis.scalar import Scalar, compile_scalar
from converter_calc.basis.tape import Tape, steady_name
from converter_calc.basis.tolerances import (
    MOST_HALVINGS,
    MOST_QUICK_STEPS,
    RECORDED_FROM_HEAT,
    RECORDINGS_KEPT,
    RESIDUAL,
    RESIDUAL_STALLED,
)

#: Parts of a problem that hold the numbers of a heat by name; single numbers of a heat; what
#: is no matter of its kind. All else is part of the kind.
PARTS = ("values", "fixed", "hot_metal_pct", "returned")
NUMBERS = ("hot_metal_J_kg", "scale_kg")
BESIDE = ("n", "masks", "cache")
#: Share of the residual that a step with the last factors has to get below to be taken.
PAYS = 0.3


@dataclass(frozen=True)
class Recording:
    """One kind of heat: what its givens make of it, and then its equations.

    steady : of the givens, what no unknown moves. residuals, jacobian : of these values and the
    unknowns, the residuals; the same, and the Jacobian row by row.
    """

    steady: Scalar
    residuals: Scalar
    jacobian: Scalar


class Recordings:
    """Recordings by kind of heat, those used last; shared by all sessions of a server."""

    def __init__(self) -> None:
        self._made: OrderedDict[Any, Recording] = OrderedDict()
        self._seen: OrderedDict[Any, int] = OrderedDict()
        self._lock = Lock()

    def find(self, p: Problem, ask: Ask) -> Recording | None:
        """The recording for heats like this one; None for the first few."""
        key = (ask, _kind_of(p))
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


def _kind_of(p: Problem) -> Any:
    """What a recording takes as it stands: names, choices, contents of the materials."""
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
        compile_scalar(tape, [*given, *steady], fixed),
        compile_scalar(rest, values, inputs),
        compile_scalar(rest, both, inputs),
    )


def _givens(p: Problem) -> list[float] | None:
    """The numbers of a heat in the order of the recording; None where one is no plain number."""
    found = [x for part in PARTS for x in getattr(p, part).values()]
    found += [getattr(p, name) for name in NUMBERS]
    if not all(isinstance(x, float) or getattr(x, "size", 0) == 1 for x in found):
        return None
    return [float(x) if isinstance(x, float) else float(x.item()) for x in found]


def solve_single(p: Problem, ask: Ask, start: Unknowns) -> Solved | None:
    """The heat of a problem with n = 1, from `start`, arrays (1,) by name.

    Returns None where the heat has to go the ordinary way: the first of its kind, derivatives
    by the givens wanted, or no convergence.
    """
    if not all(mask is True for mask in p.masks.values()):
        return None
    givens = _givens(p)
    recording = None if givens is None else RECORDINGS.find(p, ask)
    if givens is None or recording is None:
        return None
    names = list(start)
    try:
        found = _newton(recording, givens, [float(start[name][0]) for name in names], names)
    except (ArithmeticError, ValueError, np.linalg.LinAlgError):
        return None
    if found is None:
        return None
    x, norm, steps = found
    return Solved(
        {name: np.array([value]) for name, value in zip(names, x, strict=True)},
        np.array([norm]),
        np.array([steps]),
        np.array([True]),
    )


def _norm(residuals: list[float]) -> float:
    """Largest residual, infinite where one is not a number."""
    return max(map(abs, residuals)) if isfinite(sum(residuals)) else inf


def _newton(
    recording: Recording, givens: list[float], x: list[float], names: list[str]
) -> tuple[list[float], float, int] | None:
    """Damped Newton with the steps of `newton.solve`; None without convergence."""
    count, last = len(x), inf
    steady = recording.steady(givens)
    for step in range(1, MOST_QUICK_STEPS + 1):
        both = recording.jacobian(steady + x)
        values = both[:count]
        norm = _norm(values)
        inverse = np.linalg.inv(np.array(both[count:]).reshape(count, count))
        move = (inverse @ values).tolist()
        share = _share(x, move, names, REACH)
        for _ in range(MOST_HALVINGS + 1):
            new = [a - share * d for a, d in zip(x, move, strict=True)]
            values = recording.residuals(steady + new)
            size = _norm(values)
            if size <= norm:
                break
            share *= 0.5
        for _ in range(2):  # the same factors again while they pay
            if size <= RESIDUAL:
                break
            move = (inverse @ values).tolist()
            trial = [a - d for a, d in zip(new, move, strict=True)]
            further = recording.residuals(steady + trial)
            reached = _norm(further)
            if not reached < PAYS * size:
                break
            new, values, size = trial, further, reached
        x = new
        if size <= RESIDUAL or (size <= RESIDUAL_STALLED and size >= last):
            return x, size, step
        last = size
    return None


def _share(
    x: list[float], move: list[float], names: list[str], reach: Mapping[str, Reach]
) -> float:
    """Largest share of the step x - move, at most one, that respects every reach."""
    share = 1.0
    for name, at, down in zip(names, x, move, strict=True):
        limit = reach.get(name)
        if limit is None:
            continue
        size = abs(down) + 1e-300
        share = min(share, limit.step / size, limit.share * abs(at) / size)
        if down > 0.0 and limit.low > -inf:
            share = min(share, 0.9 * (at - limit.low) / size)
        if down < 0.0 and limit.high < inf:
            share = min(share, 0.9 * (limit.high - at) / size)
    return share
