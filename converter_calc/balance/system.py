"""The equations of an ask over a table of heats.

Jacobians come from the residuals on `Dual`. Residuals alone, which the solver wants far more
often, are recorded once and replayed in blocks where the table is long enough to pay for it.
"""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import replace
from typing import Any

import numpy as np

from converter_calc.balance import recordings
from converter_calc.balance.asks import Ask, evaluate_ask
from converter_calc.balance.problem import Problem
from converter_calc.balance.recordings import Recording, givens_of
from converter_calc.basis import dual as ad
from converter_calc.basis.dual import Array, Num
from converter_calc.basis.tape import Program, Tape, steady_name
from converter_calc.basis.tolerances import BLOCK, RECORDED_FROM

Matrix = list[list[Any]]
PARTS = ("values", "masks", "fixed", "hot_metal_pct", "returned")
#: Programs by ask and by what does not differ between the heats.
Recorded = dict[Any, Any]


def _is_array(x: Any) -> bool:
    return isinstance(x, np.ndarray) and x.ndim > 0


def _record(p: Problem, ask: Ask) -> tuple[Tape, list[Any]]:
    """Tape of the residuals; every array of the givens becomes an input."""
    tape = Tape()

    def trace(name: str, x: Num) -> Num:
        return tape.input(name) if _is_array(x) else x

    parts = {
        part: {name: trace(f"{part}:{name}", x) for name, x in getattr(p, part).items()}
        for part in PARTS
    }
    givens = replace(
        p,
        values=parts["values"],
        masks=parts["masks"],
        fixed=parts["fixed"],
        hot_metal_pct=parts["hot_metal_pct"],
        returned=parts["returned"],
        hot_metal_J_kg=trace("hot_metal_J_kg", p.hot_metal_J_kg),
        scale_kg=trace("scale_kg", p.scale_kg),
        cache={},
    )
    state = evaluate_ask(givens, ask, {name: tape.input("x:" + name) for name in ask.unknowns})
    return tape, [state.residuals[name] for name in ask.residuals]


def _fixed_parts(p: Problem) -> Any:
    """What a recording takes as it stands: names of arrays, and all plain numbers."""
    return tuple(
        (part, name, "array" if _is_array(x) else float(x))
        for part in PARTS
        for name, x in getattr(p, part).items()
    )


class System:
    """Residuals and Jacobians of n heats for one ask.

    recorded : programs of earlier systems that share the materials of `p`; added to.
    Raises nothing for values without sense: they come out as NaN or infinite.
    """

    def __init__(self, p: Problem, ask: Ask, recorded: Recorded | None = None) -> None:
        self.p, self.ask, self.n = p, ask, p.n
        self._recorded: Recorded = {} if recorded is None else recorded
        self._program: Program | None = None
        self._arrays: dict[str, Array] = {}
        self._rows: Any = None
        self._taken: Any = None
        self._recording: Recording | None = None
        self._steady_rows: Any = None
        givens = givens_of(p) if 1 < self.n < RECORDED_FROM else None
        if givens is not None:
            self._recording = recordings.RECORDINGS.find(p, ask)
        if self._recording is not None and givens is not None:
            # numpy's floats divide by zero without an error
            plain = [np.float64(x) if isinstance(x, float) else x for x in givens]
            with np.errstate(all="ignore"):
                self._steady = self._recording.steady.arrays(plain)

    def jacobian(self, rows: Array, x: Mapping[str, Array]) -> tuple[list[Any], Matrix]:
        """Residuals, and the derivative of each by each unknown; 0.0 where there is none."""
        if self._recording is not None:
            both, k = self._recording.jacobian.arrays(self._inputs(rows, x)), len(x)
            return both[:k], [both[k * r : k * (r + 1)] for r in range(1, k + 1)]
        seeded = {name: ad.seed(values, name) for name, values in x.items()}
        state = evaluate_ask(self._problem(rows), self.ask, seeded)
        found = [state.residuals[name] for name in self.ask.residuals]
        slopes = [[ad.slope(r, name) for name in self.ask.unknowns] for r in found]
        return [ad.value(r) for r in found], slopes

    def residuals(self, rows: Array, x: Mapping[str, Array]) -> list[Any]:
        """Residuals of the heats `rows`, one array (n,) a closure."""
        if self._recording is not None and self._program is None:
            return self._recording.residuals.arrays(self._inputs(rows, x))
        if self._program is None and self.n < RECORDED_FROM:
            state = evaluate_ask(self._problem(rows), self.ask, dict(x))
            return [state.residuals[name] for name in self.ask.residuals]
        if self._program is None:
            self._program = self._prepare()
        if self._rows is not rows or not isinstance(self._taken, dict):
            whole = len(rows) == self.n
            self._taken = {k: a if whole else a[rows] for k, a in self._arrays.items()}
            self._rows = rows
        inputs = self._taken | {"x:" + name: values for name, values in x.items()}
        return self._program.run(inputs, len(rows))

    def _inputs(self, rows: Array, x: Mapping[str, Array]) -> list[Any]:
        """Inputs of a recording: what no unknown moves, worked out once, cut to the rows."""
        if self._steady_rows is not rows:
            whole = len(rows) == self.n
            self._cut = self._steady if whole else [
                a[rows] if _is_array(a) else a for a in self._steady
            ]  # fmt: skip
            self._steady_rows = rows
        return self._cut + [x[name] for name in self.ask.unknowns]

    def _problem(self, rows: Array) -> Problem:
        """The givens of some heats; those last asked for are kept at hand."""
        if self._rows is not rows or not isinstance(self._taken, Problem):
            self._taken = self.p if len(rows) == self.n else self.p.take(rows)
            self._rows = rows
        return self._taken

    def _prepare(self) -> Program:
        """The program to replay, with what no unknown moves worked out for all heats."""
        key = (self.ask, _fixed_parts(self.p))
        if key not in self._recorded:
            tape, outputs = _record(self.p, self.ask)
            rest, steady = tape.split(["x:" + name for name in self.ask.unknowns], outputs)
            names = [steady_name(quantity.index) for quantity in steady]
            block = min(BLOCK, self.n)
            self._recorded[key] = Program(rest, outputs, block), Program(tape, steady, block), names
        program: Program
        program, steady_program, names = self._recorded[key]
        for part in PARTS:
            for name, x in getattr(self.p, part).items():
                if _is_array(x):
                    self._arrays[f"{part}:{name}"] = x
        for name in ("hot_metal_J_kg", "scale_kg"):
            if _is_array(getattr(self.p, name)):
                self._arrays[name] = getattr(self.p, name)
        self._arrays |= dict(zip(names, steady_program.run(self._arrays, self.n), strict=True))
        wanted = set(program.inputs)
        self._arrays = {name: x for name, x in self._arrays.items() if name in wanted}
        return program
