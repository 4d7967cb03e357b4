"""Arrays that carry exact first derivatives (forward mode, sparse, vectorised).

Every formula of the package is written once, on plain numpy arrays or on `Dual`. A `Dual`
holds the values of n heats and, for each independent quantity they depend on, the
derivative of all n values. Nothing is truncated: derivatives are exact to rounding.

Source of the method: Griewank & Walther, Evaluating Derivatives, 2nd ed., SIAM 2008, ch. 3
(from memory).
"""

from __future__ import annotations

from collections.abc import Callable
from typing import Any, TypeAlias

import numpy as np
import numpy.typing as npt

#: Floats unless a docstring says otherwise (masks, row numbers).
Array: TypeAlias = npt.NDArray[Any]
LN10 = float(np.log(10.0))


class Dual:
    """Values of n heats with their partial derivatives.

    Parameters
    ----------
    v : values, shape (n,).
    d : derivative of each value by the named independent quantity; each entry has
        shape (n,) or is one number that holds for all heats.
    """

    __slots__ = ("d", "v")
    __array_ufunc__ = None  # numpy then leaves array * Dual to the methods below

    def __init__(self, v: Any, d: dict[str, Any]) -> None:
        self.v = v
        self.d = d

    def __add__(self, other: Any) -> Dual:
        if isinstance(other, Dual):
            d = dict(self.d)
            for key, slope in other.d.items():
                d[key] = d[key] + slope if key in d else slope
            return Dual(self.v + other.v, d)
        return Dual(self.v + other, self.d)

    __radd__ = __add__

    def __neg__(self) -> Dual:
        return Dual(-self.v, {key: -slope for key, slope in self.d.items()})

    def __sub__(self, other: Any) -> Dual:
        if isinstance(other, Dual):
            d = dict(self.d)
            for key, slope in other.d.items():
                d[key] = d[key] - slope if key in d else -slope
            return Dual(self.v - other.v, d)
        return Dual(self.v - other, self.d)

    def __rsub__(self, other: Any) -> Dual:
        return Dual(other - self.v, {key: -slope for key, slope in self.d.items()})

    def __mul__(self, other: Any) -> Dual:
        if isinstance(other, Dual):
            a, b = self.v, other.v
            d = {key: slope * b for key, slope in self.d.items()}
            for key, slope in other.d.items():
                term = slope * a
                d[key] = d[key] + term if key in d else term
            return Dual(a * b, d)
        return Dual(self.v * other, {key: slope * other for key, slope in self.d.items()})

    __rmul__ = __mul__

    def __truediv__(self, other: Any) -> Dual:
        if isinstance(other, Dual):
            inverse = 1.0 / other.v
            value = self.v * inverse
            d = {key: slope * inverse for key, slope in self.d.items()}
            factor = value * inverse
            for key, slope in other.d.items():
                term = slope * factor
                d[key] = d[key] - term if key in d else -term
            return Dual(value, d)
        inverse = 1.0 / other
        return Dual(self.v * inverse, {key: slope * inverse for key, slope in self.d.items()})

    def __rtruediv__(self, other: Any) -> Dual:
        value = other / self.v
        return self.chain(value, -value / self.v)

    def chain(self, value: Any, slope: Any) -> Dual:
        """f(self), given f's values and its derivative at self's values."""
        return Dual(value, {key: inner * slope for key, inner in self.d.items()})


Num: TypeAlias = Any
"""A plain number, an array of shape (n,), or a Dual of n heats."""


def seed(v: Array | float, key: str) -> Dual:
    """Independent quantity `key` with values v: its own derivative is one."""
    return Dual(v, {key: 1.0})


def value(x: Num) -> Any:
    """The plain values of x, derivatives dropped."""
    return x.v if isinstance(x, Dual) else x


def slope(x: Num, key: str) -> Any:
    """Derivative of x by the independent quantity `key`; 0.0 where x does not depend on it."""
    return x.d.get(key, 0.0) if isinstance(x, Dual) else 0.0


def _unary(x: Num, f: Callable[[Any], Any], slope_of: Callable[[Any, Any], Any]) -> Num:
    """f(x), with slope_of(value of x, value of f) as its derivative."""
    if isinstance(x, Dual):
        y = f(x.v)
        return x.chain(y, slope_of(x.v, y))
    return f(x)


def exp(x: Num) -> Num:
    """Exponential of x."""
    return _unary(x, np.exp, lambda _, y: y)


def log(x: Num) -> Num:
    """Natural logarithm of x, x > 0."""
    return _unary(x, np.log, lambda v, _: 1.0 / v)


def log10(x: Num) -> Num:
    """Decimal logarithm of x, x > 0 (through the natural one, which numpy does twice as fast)."""
    return log(x) * (1.0 / LN10)


def pow10(x: Num) -> Num:
    """Ten to the x."""
    return exp(x * LN10)


def sqrt(x: Num) -> Num:
    """Square root of x, x > 0 (at 0 the derivative is infinite)."""
    return _unary(x, np.sqrt, lambda _, y: 0.5 / y)


def square(x: Num) -> Num:
    """Square of x."""
    return _unary(x, np.square, lambda v, _: 2.0 * v)


def where(condition: Any, a: Num, b: Num) -> Num:
    """A where the condition holds, else b; derivatives likewise."""
    if isinstance(a, Dual) or isinstance(b, Dual):
        da = a.d if isinstance(a, Dual) else {}
        db = b.d if isinstance(b, Dual) else {}
        keys = dict.fromkeys((*da, *db))
        return Dual(
            np.where(condition, value(a), value(b)),
            {key: np.where(condition, da.get(key, 0.0), db.get(key, 0.0)) for key in keys},
        )
    return np.where(condition, a, b)


def smooth_min(a: Num, b: Num, width: Num) -> Num:
    """Smaller of a and b, rounded off over `width` (same unit) where they meet.

    (a + b - sqrt((a - b)^2 + width^2)) / 2: below the exact minimum by at most width / 2,
    and with continuous derivatives for width > 0.
    """
    gap = a - b
    return (a + b - sqrt(square(gap) + square(width))) * 0.5


def fischer_burmeister(a: Num, b: Num, width: float) -> Num:
    """Zero exactly where a >= 0, b >= 0 and one of them is (nearly) zero.

    a + b - sqrt(a^2 + b^2 + 2 width^2): its root has a b = width^2 (Fischer, Optimization
    24 (1992) 269; smoothing by Kanzow, SIAM J. Matrix Anal. 17 (1996) 851; from memory).
    """
    return a + b - sqrt(square(a) + square(b) + 2.0 * width * width)
