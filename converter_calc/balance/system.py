"""The equations of an ask over a table of heats, recorded once and replayed in blocks."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import replace
from typing import Any

import numpy as np

from converter_calc.balance.asks import Ask, evaluate_ask
from converter_calc.balance.problem import Problem
from converter_calc.basis.dual import Array, Dual, Num
from converter_calc.basis.tape import Program, Tape, Trace, steady_name
from converter_calc.basis.tolerances import BLOCK, BLOCK_WITH_SLOPES

Matrix = list[list[Any]]
PARTS = ("values", "masks", "fixed", "hot_metal_pct")


def _record(p: Problem, ask: Ask, *, slopes: bool) -> tuple[Tape, list[Any]]:
    """Tape of the residuals, with their slopes by each unknown behind them if wanted."""
    tape = Tape()

    def trace(name: str, x: Num) -> Num:
        return tape.input(name) if isinstance(x, np.ndarray) and x.ndim else x

    parts = {
        part: {name: trace(f"{part}:{name}", x) for name, x in getattr(p, part).items()}
        for part in PARTS
    }
    givens = replace(
        p,
        **parts,
        hot_metal_J_kg=trace("hot_metal_J_kg", p.hot_metal_J_kg),
        scale_kg=trace("scale_kg", p.scale_kg),
        cache={},
    )
    unknowns: dict[str, Num] = {}
    for name in ask.unknowns:
        x = tape.input("x:" + name)
        unknowns[name] = Dual(x, {name: 1.0}) if slopes else x
    state = evaluate_ask(givens, ask, unknowns)
    residuals = [state.residuals[name] for name in ask.residuals]
    if not slopes:
        return tape, residuals
    table = [
        r.d.get(name, 0.0) if isinstance(r, Dual) else 0.0
        for r in residuals
        for name in ask.unknowns
    ]
    return tape, [r.v if isinstance(r, Dual) else r for r in residuals] + [
        x if isinstance(x, Trace) else float(x) for x in table
    ]


#: Programs by ask and by what does not differ between the heats.
Recorded = dict[Any, Any]


def _fixed_parts(p: Problem) -> Any:
    """What a recording takes as it stands: names of arrays, and all plain numbers."""
    return tuple(
        (part, name, "array" if isinstance(x, np.ndarray) and x.ndim else float(x))
        for part in PARTS
        for name, x in getattr(p, part).items()
    )


class System:
    """Residuals and Jacobians of n heats for one ask.

    Raises nothing for values without sense: they come out as NaN or infinite.
    """

    def __init__(self, p: Problem, ask: Ask, recorded: Recorded | None = None) -> None:
        self.p, self.ask, self.n = p, ask, p.n
        self._recorded: Recorded = {} if recorded is None else recorded
        self._programs: dict[bool, Program] = {}
        self._arrays: dict[str, Array] = {
            f"{part}:{name}": x
            for part in PARTS
            for name, x in getattr(p, part).items()
            if isinstance(x, np.ndarray) and x.ndim
        }
        for name in ("hot_metal_J_kg", "scale_kg"):
            x = getattr(p, name)
            if isinstance(x, np.ndarray) and x.ndim:
                self._arrays[name] = x
        self._rows: Any = None
        self._taken: dict[str, Array] = {}

    def _program(self, *, slopes: bool) -> Program:
        if slopes not in self._programs:
            key = (self.ask, slopes, _fixed_parts(self.p))
            if key not in self._recorded:
                self._recorded[key] = self._record(slopes=slopes)
            program, steady, names = self._recorded[key]
            if steady is not None:
                self._arrays |= dict(zip(names, steady.run(self._arrays, self.n), strict=True))
                self._rows = None
            self._programs[slopes] = program
        return self._programs[slopes]

    def _record(self, *, slopes: bool) -> tuple[Program, Program | None, list[str]]:
        """Program to replay, program of what no unknown moves, and the names of that."""
        tape, outputs = _record(self.p, self.ask, slopes=slopes)
        block = max(1, min(BLOCK_WITH_SLOPES if slopes else BLOCK, self.n))
        if slopes or self.n == 1:
            return Program(tape, outputs, block), None, []
        rest, steady = tape.split(["x:" + name for name in self.ask.unknowns], outputs)
        names = [steady_name(quantity.index) for quantity in steady]
        return Program(rest, outputs, block), Program(tape, steady, block), names

    def _run(self, rows: Any, x: Mapping[str, Array], *, slopes: bool) -> list[Any]:
        program = self._program(slopes=slopes)
        if self._rows is not rows:
            whole = not isinstance(rows, slice) and len(rows) == self.n
            self._taken = {
                name: array if whole else array[rows] for name, array in self._arrays.items()
            }
            self._rows = rows
        inputs = self._taken | {"x:" + name: values for name, values in x.items()}
        size = len(next(iter(x.values())))
        return program.run(inputs, size)

    def residuals(self, rows: Any, x: Mapping[str, Array]) -> list[Any]:
        """Residuals of some heats (indices or slice), one array (n,) a closure."""
        return self._run(rows, x, slopes=False)

    def jacobian(self, rows: Any, x: Mapping[str, Array]) -> tuple[list[Any], Matrix]:
        """Residuals, and the derivative of each by each unknown; 0.0 where there is none."""
        found = self._run(rows, x, slopes=True)
        k = len(self.ask.unknowns)
        return found[:k], [found[k + r * k : k + (r + 1) * k] for r in range(k)]
