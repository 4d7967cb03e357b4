"""A recorded formula written out as one Python function, for one heat or a few hundred.

Worked out through `Dual`, the formulas of a heat cost some microseconds an operation, whatever
the length of the arrays. Written out, the same operations in the same order cost a tenth of it
over floats, and one numpy call each over arrays. The text is made from the tape alone, never
from anything typed.
"""

from __future__ import annotations

import math
from collections.abc import Callable, Sequence
from dataclasses import dataclass
from typing import Any

import numpy as np

from converter_calc.basis.tape import Tape, Trace, needed_by

#: Text of each operation; what floats and arrays write differently is a function by name.
_TEXTS: dict[Any, str] = {
    np.add: "{} + {}",
    np.subtract: "{} - {}",
    np.multiply: "{} * {}",
    np.divide: "{} / {}",
    np.less: "{} < {}",
    np.greater: "{} > {}",
    np.logical_and: "both({}, {})",
    np.maximum: "larger({}, {})",
    np.minimum: "smaller({}, {})",
    np.where: "where({}, {}, {})",
    np.negative: "-{}",
    np.square: "{0} * {0}",
    np.sqrt: "sqrt({})",
    np.exp: "exp({})",
    np.log: "log({})",
}
_OVER_FLOATS: dict[str, Any] = {
    "sqrt": math.sqrt,
    "exp": math.exp,
    "log": math.log,
    "larger": max,
    "smaller": min,
    "where": lambda condition, a, b: a if condition else b,
    "both": lambda a, b: bool(a) and bool(b),  # a mask that is given is the number 0 or 1
}
_OVER_ARRAYS: dict[str, Any] = {
    "sqrt": np.sqrt,
    "exp": np.exp,
    "log": np.log,
    "larger": np.maximum,
    "smaller": np.minimum,
    "where": np.where,
    "both": np.logical_and,
}


@dataclass(frozen=True)
class Written:
    """A formula of a list of inputs that gives the list of outputs.

    floats : for plain floats; may raise ArithmeticError or ValueError where an array would
    hold infinity or NaN. arrays : for arrays (n,) and numbers that hold for all n.
    """

    floats: Callable[[Sequence[float]], list[float]]
    arrays: Callable[[Sequence[Any]], list[Any]]


def write_out(tape: Tape, outputs: Sequence[Any], inputs: Sequence[str]) -> Written:
    """The outputs as functions of the inputs.

    Parameters
    ----------
    tape : what was recorded. outputs : quantities wanted, Trace or plain numbers. inputs :
    names of the quantities that will be given, in order; others must not be needed.

    Raises TypeError for an operation that it has no text for.
    """
    needed = needed_by(tape, outputs)
    given = {name: place for place, name in enumerate(inputs)}
    at_once: dict[str, tuple[Any, int]] = {}
    lines = ["def recorded(g):"]
    for index in sorted(needed):
        function, arguments = tape.nodes[index]
        if isinstance(function, str):
            text = f"g[{given[function]}]"
        elif isinstance(function, tuple) and function[0] == "row":
            text = f"v{arguments[0]}[{function[1]}]"
        elif isinstance(function, tuple):
            name = f"rows{len(at_once)}"
            at_once[name] = function
            text = f"{name}({_name(arguments[0])})"
        elif function in _TEXTS:
            text = _TEXTS[function].format(*map(_name, arguments))
        else:
            raise TypeError(f"no text for {function}")
        lines.append(f" v{index} = {text}")
    found = (f"v{x.index}" if isinstance(x, Trace) else repr(float(x)) for x in outputs)
    lines.append(" return [" + ", ".join(found) + "]")
    code = compile("\n".join(lines), "<recorded formula>", "exec")
    floats = _OVER_FLOATS | {name: _rows_of_float(*part) for name, part in at_once.items()}
    arrays = _OVER_ARRAYS | {name: _rows_of_array(*part) for name, part in at_once.items()}
    for space in (floats, arrays):
        exec(code, space)  # noqa: S102
    return Written(floats["recorded"], arrays["recorded"])


def _name(argument: int | float) -> str:
    return f"v{argument}" if isinstance(argument, int) else f"({argument!r})"


def _rows_of_float(write: Callable[[Any, Any], None], count: int) -> Callable[[float], Any]:
    """A function that writes many quantities at once, of one float."""

    def rows(x: float) -> list[float]:
        out = np.empty((count, 1))
        write(np.array([x]), out)
        found: list[float] = out[:, 0].tolist()
        return found

    return rows


def _rows_of_array(write: Callable[[Any, Any], None], count: int) -> Callable[[Any], Any]:
    """The same of an array (n,), or of a number that holds for all."""

    def rows(x: Any) -> Any:
        T = np.asarray(x, dtype=float)
        out = np.empty((count, T.size))
        write(T.reshape(-1), out)
        return out if T.ndim else out[:, 0].tolist()

    return rows
