"""The few errors of the package. Each says which field, what was given, what is allowed."""

from __future__ import annotations

from collections.abc import Iterable, Mapping
from typing import Any, NamedTuple


class Fault(NamedTuple):
    """One thing wrong with the input: the field and one sentence about it."""

    field: str
    message: str

    def line(self) -> str:
        """`field: message` on one line, whatever characters the user's names hold."""
        text = f"{self.field[:200]}: {self.message}"
        return text if text.isprintable() else "".join(map(_printable, text))


def _printable(sign: str) -> str:
    return sign if sign.isprintable() else ascii(sign)[1:-1]


class ConverterError(Exception):
    """Any error that the package raises on purpose."""


class InputError(ConverterError):
    """The input is wrong; one line a fault."""

    def __init__(self, faults: Iterable[Fault]) -> None:
        self.faults = list(faults)
        super().__init__("\n".join(fault.line() for fault in self.faults))

    def __reduce__(self) -> tuple[Any, ...]:
        """Errors cross from process to process."""
        return type(self), (self.faults,)


class DataError(ConverterError):
    """A name that the data tables do not hold, or a table that is broken."""


class InfeasibleError(ConverterError):
    """The input is valid, but no charge reaches the aim.

    binding : the limit that binds. frees : what would help. nearest : the nearest reachable
    end point, by flat name.
    """

    def __init__(
        self,
        message: str,
        binding: str = "",
        frees: Iterable[str] = (),
        nearest: Mapping[str, float] | None = None,
    ) -> None:
        super().__init__(message)
        self.binding = binding
        self.frees = list(frees)
        self.nearest = dict(nearest or {})

    def __reduce__(self) -> tuple[Any, ...]:
        """Errors cross from process to process."""
        return type(self), (str(self), self.binding, self.frees, self.nearest)


class ConvergenceError(ConverterError):
    """The equations of a heat were not solved."""
