"""Arrays that are used again and again within one thread, for results that do not leave.

Fresh large arrays cost page faults that take longer than the arithmetic done in them.
"""

from __future__ import annotations

import threading

import numpy as np

from converter_calc.basis.dual import Array

#: Larger requests than this many numbers get an array of their own.
MOST_KEPT = 1_000_000


class Scratch(threading.local):
    """A store of one array per thread."""

    def __init__(self) -> None:
        self._kept: Array = np.empty(0)

    def array(self, rows: int, n: int) -> Array:
        """An array (rows, n) of arbitrary content, valid until the next call in this thread."""
        size = rows * n
        if size > MOST_KEPT:
            return np.empty((rows, n))
        if self._kept.size < size:
            self._kept = np.empty(size)
        return self._kept[:size].reshape(rows, n)
