"""A recorded formula as one Python function of plain floats, for a single heat.

numpy spends about a microsecond on a call whatever the length of its arrays; for one heat
that is nearly all of the time. Written out over floats the same operations, in the same
order, take a tenth of it. The text is made from the tape alone, never from anything typed.
"""

from __future__ import annotations

import math
from collections.abc import Callable, Sequence
from typing import Any

import numpy as np

from converter_calc.basis.tape import Tape, Trace, needed_by

_TWO_SIDED = {
    np.add: "{} + {}",
    np.subtract: "{} - {}",
    np.multiply: "{} * {}",
    np.divide: "{} / {}",
    np.less: "{} < {}",
    np.greater: "{} > {}",
    np.logical_and: "{} and {}",
    np.maximum: "max({}, {})",
    np.minimum: "min({}, {})",
}
_ONE_SIDED = {
    np.negative: "-{}",
    np.square: "{0} * {0}",
    np.sqrt: "sqrt({})",
    np.exp: "exp({})",
    np.log: "log({})",
}

#: Function of a list of inputs; gives the list of outputs.
Scalar = Callable[[Sequence[float]], list[float]]


def compile_scalar(tape: Tape, outputs: Sequence[Any], inputs: Sequence[str]) -> Scalar:
    """The outputs as a function of the inputs, over plain floats.

    Parameters
    ----------
    tape : what was recorded. outputs : quantities wanted, Trace or plain numbers. inputs :
    names of the quantities that will be given, in order; others must not be needed.

    Returns
    -------
    A function of a list of floats. It may raise ArithmeticError or ValueError where an array
    would hold infinity or NaN. Raises TypeError for an operation that it has no text for.
    """
    needed = needed_by(tape, outputs)
    given = {name: place for place, name in enumerate(inputs)}
    space: dict[str, Any] = {"sqrt": math.sqrt, "exp": math.exp, "log": math.log}
    lines = ["def recorded(g):"]
    for index in sorted(needed):
        function, arguments = tape.nodes[index]
        if isinstance(function, str):
            text = f"g[{given[function]}]"
        elif isinstance(function, tuple):
            text = _rows_text(function, arguments, space)
        else:
            text = _text_of(function, [_name(a) for a in arguments])
        lines.append(f" v{index} = {text}")
    found = (f"v{x.index}" if isinstance(x, Trace) else repr(float(x)) for x in outputs)
    lines.append(" return [" + ", ".join(found) + "]")
    exec(compile("\n".join(lines), "<recorded formula>", "exec"), space)  # noqa: S102
    made: Scalar = space["recorded"]
    return made


def _name(argument: int | float) -> str:
    return f"v{argument}" if isinstance(argument, int) else f"({argument!r})"


def _text_of(function: Any, names: list[str]) -> str:
    if function is np.where:
        return "{1} if {0} else {2}".format(*names)
    form = (_ONE_SIDED if len(names) == 1 else _TWO_SIDED).get(function)
    if form is None:
        raise TypeError(f"no text for {function}")
    return form.format(*names)


def _rows_text(function: tuple[Any, int], arguments: Any, space: dict[str, Any]) -> str:
    """A function that writes many quantities at once, or one of what it wrote."""
    if function[0] == "row":
        return f"v{arguments[0]}[{function[1]}]"
    name = f"rows{len(space)}"
    space[name] = _rows_of(*function)
    return f"{name}({_name(arguments[0])})"


def _rows_of(write: Callable[[Any, Any], None], count: int) -> Callable[[float], list[float]]:
    def rows(x: float) -> list[float]:
        out = np.empty((count, 1))
        write(np.array([x]), out)
        found: list[float] = out[:, 0].tolist()
        return found

    return rows
