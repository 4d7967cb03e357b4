"""Record a formula once, replay it over blocks of heats in preallocated memory.

The formulas of the package are generic: given `Trace` objects in place of arrays they leave
behind the list of elementary operations they are made of. A `Program` is that list without
what is not needed and without repeats; replaying it costs one numpy call an operation, into
buffers that stay in the processor's cache. Nothing is rewritten by hand, so a program gives
what the formulas give.

A `Dual` of `Trace` records values and exact derivatives together.
"""

from __future__ import annotations

from collections.abc import Callable, Mapping, Sequence
from typing import Any

import numpy as np

from converter_calc.basis.dual import Array, Dual

Argument = int | float
#: More rows than one recorded function ever writes: joins matrix and row in one number.
_ROWS = 4096
#: (function, arguments, first register, number of registers)
_Node = tuple[Any, tuple[Argument, ...]]


class Trace:
    """A quantity of n heats that is being recorded."""

    __slots__ = ("index", "tape")

    def __init__(self, tape: Tape, index: int) -> None:
        self.tape = tape
        self.index = index

    def __array_ufunc__(self, ufunc: Any, method: str, *inputs: Any, **kwargs: Any) -> Any:
        """Record any numpy function of arrays element by element."""
        if method != "__call__" or kwargs:
            return NotImplemented
        return self.tape.record(ufunc, *inputs)

    def __array_function__(self, func: Any, types: Any, args: Any, kwargs: Any) -> Any:
        """Record np.where; nothing else that is not element by element."""
        if func is np.where and len(args) == 3:
            return self.tape.record(np.where, *args)
        return NotImplemented

    def __bool__(self) -> bool:
        raise TypeError("a formula must not decide by the values of its quantities")

    def __add__(self, other: Any) -> Any:
        return NotImplemented if isinstance(other, Dual) else self.tape.record(np.add, self, other)

    def __radd__(self, other: Any) -> Any:
        return self.tape.record(np.add, other, self)

    def __sub__(self, other: Any) -> Any:
        if isinstance(other, Dual):
            return NotImplemented
        return self.tape.record(np.subtract, self, other)

    def __rsub__(self, other: Any) -> Any:
        return self.tape.record(np.subtract, other, self)

    def __mul__(self, other: Any) -> Any:
        if isinstance(other, Dual):
            return NotImplemented
        return self.tape.record(np.multiply, self, other)

    def __rmul__(self, other: Any) -> Any:
        return self.tape.record(np.multiply, other, self)

    def __truediv__(self, other: Any) -> Any:
        if isinstance(other, Dual):
            return NotImplemented
        if isinstance(other, float | int):
            return self.tape.record(np.multiply, self, 1.0 / other)
        return self.tape.record(np.divide, self, other)

    def __rtruediv__(self, other: Any) -> Any:
        return self.tape.record(np.divide, other, self)

    def __neg__(self) -> Any:
        return self.tape.record(np.negative, self)

    def __lt__(self, other: Any) -> Any:
        return self.tape.record(np.less, self, other)

    def __gt__(self, other: Any) -> Any:
        return self.tape.record(np.greater, self, other)

    def __and__(self, other: Any) -> Any:
        return self.tape.record(np.logical_and, self, other)

    __rand__ = __and__


class Tape:
    """Operations in the order in which they were recorded, repeats taken once."""

    def __init__(self) -> None:
        self.nodes: list[_Node] = []
        self.names: dict[str, int] = {}
        self._seen: dict[Any, int] = {}

    def input(self, name: str) -> Trace:
        """A quantity to be given by name when the program runs."""
        if name not in self.names:
            self.names[name] = len(self.nodes)
            self.nodes.append((name, ()))
        return Trace(self, self.names[name])

    def record(self, function: Any, *inputs: Any) -> Any:
        """One operation; what needs no operation is worked out here and now."""
        if function is np.logical_and and any(x is False or x is np.False_ for x in inputs):
            return False
        arguments = tuple(self._argument(x) for x in inputs)
        plain = _fold(function, inputs)
        if plain is not None:
            return plain
        return Trace(self, self._add(function, arguments))

    def rows(self, function: Callable[[Array, Array], None], count: int, x: Trace) -> list[Trace]:
        """`count` quantities that function(x, out) writes at once into the rows of `out`."""
        block = self._add((function, count), (x.index,))
        return [Trace(self, self._add(("row", k), (block,))) for k in range(count)]

    def split(self, varying: Sequence[str], outputs: Sequence[Any]) -> tuple[Tape, list[Trace]]:
        """Set apart what does not depend on the inputs `varying`.

        Returns a tape in which such quantities, where others need them, are inputs themselves,
        named `steady_name`, and the list of these quantities on this tape.
        """
        moves: set[int] = set()
        for index, (function, arguments) in enumerate(self.nodes):
            if function in varying if isinstance(function, str) else bool(moves & set(arguments)):
                moves.add(index)
        wanted = {x.index for x in outputs if isinstance(x, Trace) and x.index not in moves}
        for index in moves:
            wanted |= {a for a in self.nodes[index][1] if isinstance(a, int) and a not in moves}
        steady = sorted(i for i in wanted if not isinstance(self.nodes[i][0], str))
        rest = Tape()
        rest.nodes, rest.names = list(self.nodes), dict(self.names)
        for index in steady:
            rest.nodes[index] = (steady_name(index), ())
            rest.names[steady_name(index)] = index
        return rest, [Trace(self, index) for index in steady]

    def _add(self, function: Any, arguments: tuple[Argument, ...]) -> int:
        key = (function, arguments)
        found = self._seen.get(key)
        if found is None:
            found = self._seen[key] = len(self.nodes)
            self.nodes.append((function, arguments))
        return found

    def _argument(self, x: Any) -> Argument:
        if isinstance(x, Trace):
            return x.index
        array = np.asarray(x)
        if array.ndim or array.dtype == object:
            raise TypeError("an array among recorded quantities: make it an input")
        return float(array)


def _fold(function: Any, inputs: tuple[Any, ...]) -> Any:
    """The result where one of the inputs is a number that makes the operation void."""
    if function is np.where and not isinstance(inputs[0], Trace):
        return inputs[1] if inputs[0] else inputs[2]
    if len(inputs) != 2:
        return None
    a, b = (None if isinstance(x, Trace) else float(x) for x in inputs)
    if function is np.multiply and 0.0 in (a, b):
        return 0.0
    if function is np.divide and a == 0.0:
        return 0.0
    void = 1.0 if function is np.multiply else 0.0
    if function in (np.multiply, np.add, np.subtract) and b == void:
        return inputs[0]
    return inputs[1] if function in (np.multiply, np.add) and a == void else None


def steady_name(index: int) -> str:
    """Input name of the quantity `index` of the tape that was split."""
    return f"steady:{index}"


def needed_by(tape: Tape, outputs: Sequence[Any]) -> set[int]:
    """Numbers of the operations and inputs of a tape that some outputs depend on."""
    needed: set[int] = set()
    stack = [x.index for x in outputs if isinstance(x, Trace)]
    while stack:
        index = stack.pop()
        if index not in needed:
            needed.add(index)
            stack += [a for a in tape.nodes[index][1] if isinstance(a, int)]
    return needed


class Program:
    """A tape boiled down to what some outputs need, ready to run.

    Parameters
    ----------
    tape : what was recorded. outputs : quantities wanted, Trace or plain numbers. block :
    heats worked on at once.
    """

    def __init__(self, tape: Tape, outputs: Sequence[Any], block: int) -> None:
        self.block = block
        self._cut_size = 0
        self._cut_registers: list[Any] = []
        self.outputs = [x.index if isinstance(x, Trace) else float(x) for x in outputs]
        self._is_trace = [isinstance(x, Trace) for x in outputs]
        needed = needed_by(tape, outputs)
        self.inputs = [name for name, index in tape.names.items() if index in needed]
        self._compile(tape, needed)

    def _compile(self, tape: Tape, needed: set[int]) -> None:
        """Give each operation a register, used again once its quantity is no longer needed."""
        kept = {int(x) for x, traced in zip(self.outputs, self._is_trace, strict=True) if traced}
        last: dict[int, int] = {}
        for index in sorted(needed):
            last |= {a: index for a in tape.nodes[index][1] if isinstance(a, int)}
        self._numbers: list[float] = []
        self._counts = {"bool": 0, "float": 0}
        self._matrices: list[int] = []
        place: dict[int, tuple[str, int]] = {}
        code: list[tuple[Any, tuple[Any, ...], Any]] = []
        free: dict[str, list[int]] = {"float": [], "bool": []}
        for index in sorted(needed):
            function, arguments = tape.nodes[index]
            if isinstance(function, str):
                place[index] = ("input", self.inputs.index(function))
                continue
            where = tuple(
                place[a] if isinstance(a, int) else ("number", self._number(a)) for a in arguments
            )
            if isinstance(function, tuple):
                place[index] = self._matrix_place(function, where)
                if place[index][0] == "block":
                    code.append((function[0], where, place[index]))
                continue
            done = [
                place[a]
                for a in dict.fromkeys(a for a in arguments if isinstance(a, int))
                if last[a] == index and a not in kept and place[a][0] in free
            ]
            # np.where reads its inputs after writing, so it may not write into one of them
            early = [] if function is np.where else done
            for kind, number in early:
                free[kind].append(number)
            kind = "bool" if function in _TRUTH else "float"
            place[index] = (kind, free[kind].pop() if free[kind] else self._new(kind))
            code.append((function, where, place[index]))
            for old, number in done if function is np.where else ():
                free[old].append(number)
        self._bind(code, place)

    def _matrix_place(self, function: tuple[Any, int], where: Any) -> tuple[str, int]:
        """Place of a function that writes rows, or of one of its rows."""
        if function[0] == "row":
            return ("matrix", where[0][1] * _ROWS + function[1])
        self._matrices.append(function[1])
        return ("block", len(self._matrices) - 1)

    def _number(self, x: float) -> int:
        self._numbers.append(x)
        return len(self._numbers) - 1

    def _new(self, kind: str) -> int:
        self._counts[kind] += 1
        return self._counts[kind] - 1

    def _bind(self, code: list[Any], place: dict[int, tuple[str, int]]) -> None:
        """Lay out the memory of one block; inputs come first and are filled in at each run."""
        floats = np.empty((self._counts["float"], self.block))
        bools = np.empty((self._counts["bool"], self.block), dtype=bool)
        matrices = [np.empty((count, self.block)) for count in self._matrices]
        self._registers: list[Any] = [None] * len(self.inputs)
        slots: dict[tuple[str, int], int] = {}

        def memory(kind: str, number: int) -> Any:
            if kind == "float":
                return floats[number]
            if kind == "bool":
                return bools[number]
            if kind == "block":
                return matrices[number]
            if kind == "matrix":
                return matrices[number // _ROWS][number % _ROWS]
            return np.array(self._numbers[number])  # numpy takes 0-d arrays quicker than floats

        def slot(where: tuple[str, int]) -> int:
            if where[0] == "input":
                return where[1]
            if where not in slots:
                slots[where] = len(self._registers)
                self._registers.append(memory(*where))
            return slots[where]

        self._code = []
        for recorded, where, target in code:
            function = _WITH_OUT.get(recorded, recorded)
            a = [*(slot(part) for part in where), -1, -1]
            self._code.append((function, len(where), a[0], a[1], a[2], slot(target)))
        self._slots = [
            slot(place[int(x)]) if traced else -1
            for x, traced in zip(self.outputs, self._is_trace, strict=True)
        ]

    def _cut(self, size: int) -> list[Any]:
        """The registers, cut to a block of `size` heats."""
        if size == self.block:
            return self._registers
        if self._cut_size != size:
            self._cut_size = size
            self._cut_registers = [
                x[..., :size] if isinstance(x, np.ndarray) and x.ndim else x
                for x in self._registers
            ]
        return self._cut_registers

    def run(self, inputs: Mapping[str, Any], n: int) -> list[Any]:
        """Values of the outputs: arrays (n,), and plain numbers where an output is one.

        inputs : arrays (n,) by name.
        """
        found: list[Any] = [
            np.empty(n) if traced else x
            for x, traced in zip(self.outputs, self._is_trace, strict=True)
        ]
        given = [inputs[name] for name in self.inputs]
        for first in range(0, n, self.block):
            rows = slice(first, min(first + self.block, n))
            registers = self._cut(rows.stop - rows.start)
            for k, x in enumerate(given):
                registers[k] = x[rows]
            _replay(self._code, registers)
            for x, register, traced in zip(found, self._slots, self._is_trace, strict=True):
                if traced:
                    x[rows] = registers[register]
        return found


def _replay(code: list[Any], registers: list[Any]) -> None:
    for function, count, a, b, c, out in code:
        if count == 2:
            function(registers[a], registers[b], registers[out])
        elif count == 1:
            function(registers[a], registers[out])
        else:
            np.copyto(registers[out], registers[c])
            np.copyto(registers[out], registers[b], where=registers[a])


def _maximum(a: Any, b: Any, out: Any) -> None:
    np.maximum(a, b, out=out)


def _minimum(a: Any, b: Any, out: Any) -> None:
    np.minimum(a, b, out=out)


#: Functions that take their output by name only.
_WITH_OUT: dict[Any, Any] = {np.maximum: _maximum, np.minimum: _minimum}
_TRUTH = {
    *(np.less, np.greater, np.less_equal, np.greater_equal, np.equal, np.not_equal),
    *(np.logical_and, np.logical_or, np.logical_not, np.isnan, np.isfinite),
}
