"""Which error makes how much of the scatter: shares of variance by polynomial chaos.

A result is written as a sum of orthonormal polynomials of independent random numbers, fitted
to draws by least squares; the squares of its coefficients add up to the variance, and each
belongs to the numbers that its polynomial holds (B. Sudret, Reliab. Eng. Syst. Saf. 93 (2008)
964; from memory). The shares are those of I.M. Sobol: `first` by the group alone, `total` with
all it has a part in. What the polynomials leave unexplained is measured on draws not fitted.
"""

from __future__ import annotations

import itertools
from collections.abc import Sequence
from dataclasses import dataclass
from functools import cache, cached_property

import numpy as np

from converter_calc.basis.dual import Array

#: Least draws for each polynomial fitted; fewer would fit chance.
DRAWS_A_TERM = 3
#: Share of the draws that are not fitted but tell how much is explained.
KEPT_BACK = 0.25
#: Entries of a matrix of order one that count as zero.
ROUNDING = 1e-9


@cache
def multi_indices(dimensions: int, degree: int) -> Array:
    """Degrees of each variable in all polynomials up to a total degree, (m, dimensions)."""
    rows = []
    for total in range(degree + 1):
        for picks in itertools.combinations_with_replacement(range(dimensions), total):
            row = [0] * dimensions
            for pick in picks:
                row[pick] += 1
            rows.append(row)
    return np.array(rows)


def hermite(z: Array, degree: int) -> list[Array]:
    """Polynomials orthonormal over the standard normal distribution, degree 0 and up."""
    found = [np.ones_like(z), z]
    for k in range(1, degree):
        found.append((z * found[k] - np.sqrt(k) * found[k - 1]) / np.sqrt(k + 1))
    return found[: degree + 1]


def legendre(u: Array, degree: int) -> list[Array]:
    """Polynomials orthonormal over the uniform distribution on -1 to 1, degree 0 and up."""
    plain = [np.ones_like(u), u]
    for k in range(1, degree):
        plain.append(((2 * k + 1) * u * plain[k] - k * plain[k - 1]) / (k + 1))
    return [np.sqrt(2 * k + 1) * x for k, x in enumerate(plain[: degree + 1])]


BASES = {"hermite": hermite, "legendre": legendre}


@dataclass(frozen=True)
class Chaos:
    """Results as polynomials of independent random numbers.

    indices : (m, d) degrees. coefficients : (m, q), a column a result. explained : share of the
    variance of each result that draws not fitted confirm, (q,).
    """

    indices: Array
    coefficients: Array
    basis: str
    explained: Array

    def at(self, z: Array) -> Array:
        """Results at some draws (n, d): (n, q)."""
        return design(z, self.indices, self.basis) @ self.coefficients

    @property
    def variance(self) -> Array:
        """Variance of each result, (q,)."""
        return np.asarray((self.coefficients[1:] ** 2).sum(axis=0))

    def shares(self, groups: Sequence[Sequence[int]]) -> tuple[Array, Array]:
        """First-order and total share of the variance of each group of variables, (g, q) each."""
        squares = self.coefficients[1:] ** 2
        held = self.indices[1:] > 0
        whole = np.where(self.variance > 0.0, self.variance, 1.0)
        first, total = [], []
        for group in groups:
            inside = held[:, list(group)].any(axis=1)
            others = np.setdiff1d(np.arange(held.shape[1]), list(group))
            alone = inside & ~held[:, others].any(axis=1)
            first.append(squares[alone].sum(axis=0) / whole)
            total.append(squares[inside].sum(axis=0) / whole)
        return np.array(first), np.array(total)

    @cached_property
    def quadratic(self) -> tuple[Array, Array, Array]:
        """The same as c + b z + z' A z: (q,), (q, d), (q, d, d).

        Only for Hermite polynomials to degree two.

        Raises ValueError for any other basis or degree.
        """
        if self.basis != "hermite" or self.indices.sum(axis=1).max() > 2:
            raise ValueError("only Hermite polynomials to degree two are quadratic")
        q, d = self.coefficients.shape[1], self.indices.shape[1]
        c, b, A = np.zeros(q), np.zeros((q, d)), np.zeros((q, d, d))
        for row, coefficient in zip(self.indices, self.coefficients, strict=True):
            held = np.flatnonzero(row)
            if not held.size:
                c += coefficient
            elif row.sum() == 1:
                b[:, held[0]] += coefficient
            elif held.size == 1:  # (z^2 - 1) / sqrt 2
                A[:, held[0], held[0]] += coefficient / np.sqrt(2.0)
                c -= coefficient / np.sqrt(2.0)
            else:
                i, j = held
                A[:, i, j] += 0.5 * coefficient
                A[:, j, i] += 0.5 * coefficient
        return c, b, A

    def moved(self, z: Array) -> Moved:
        """The quadratic at the draws z (d, n), ready to be asked what if some of z were other."""
        c, b, A = self.quadratic
        slopes = [part @ z for part in A]
        plain = [c[k] + b[k] @ z + np.einsum("dn,dn->n", part, z) for k, part in enumerate(slopes)]
        return Moved(z, plain, slopes, b, A)


@dataclass(frozen=True)
class Moved:
    """q quadratics at some draws z (d, n): plain (n,), slopes A z (d, n), and their b and A."""

    z: Array
    plain: list[Array]
    slopes: list[Array]
    b: Array
    A: Array

    def scaled(self, matrix: Array) -> list[Array]:
        """Results (n,) each where z is matrix @ z instead; quick where that moves few numbers."""
        away = np.eye(len(matrix)) - matrix
        size = np.abs(away) > ROUNDING
        rows, columns = np.flatnonzero(size.any(axis=1)), np.flatnonzero(size.any(axis=0))
        d = away[np.ix_(rows, columns)] @ self.z[columns]
        found = []
        for k, plain in enumerate(self.plain):
            bent = self.A[k][np.ix_(rows, rows)] @ d - 2.0 * self.slopes[k][rows]
            bent -= self.b[k][rows, None]
            found.append(plain + np.einsum("dn,dn->n", bent, d))
        return found


def design(z: Array, indices: Array, basis: str = "hermite") -> Array:
    """Values of the polynomials at some draws (n, d): (n, m)."""
    degree = int(indices.max(initial=0))
    powers = BASES[basis](np.ascontiguousarray(z.T), max(degree, 1))
    table = np.ones((len(indices), len(z)))
    for place, row in enumerate(indices.tolist()):
        for variable, power in enumerate(row):
            if power:
                table[place] *= powers[power][variable]
    return table.T


def fit_chaos(
    z: Array,
    results: Array,
    degree: int = 2,
    basis: str = "hermite",
    *,
    minor: Sequence[float] = (),
) -> Chaos:
    """Polynomials of the draws by least squares.

    Parameters
    ----------
    z : draws (n, d), standard normal for "hermite", uniform on -1 to 1 for "legendre".
    results : (n, q). degree : total degree; lowered where the draws are too few for it. The
    last KEPT_BACK of the draws are not fitted but tell how much is explained. minor : for
    degree two, three and so on: a variable that makes less than this share of every variance on
    its own is given no polynomial of that degree with others.

    Raises
    ------
    ValueError : too few draws for a straight line.
    """
    n, d = z.shape
    fitted = n - int(n * KEPT_BACK)
    mean, size = results.mean(axis=0), results.std(axis=0)
    size = np.where(size > 0.0, size, 1.0)
    y = (results - mean) / size
    indices = multi_indices(d, degree)
    if minor:
        alone = indices[np.count_nonzero(indices, axis=1) <= 1]
        squares = _solved(design(z[:fitted], alone, basis), y[:fitted]) ** 2
        share = np.stack([squares[alone[:, k] > 0].sum(axis=0).max() for k in range(d)])
        crossed, total = np.count_nonzero(indices, axis=1) > 1, indices.sum(axis=1)
        dropped = np.zeros(len(indices), dtype=bool)
        for place, least in enumerate(minor, start=2):
            small = (indices[:, share < least] > 0).any(axis=1)
            dropped |= crossed & (total == place) & small
        indices = indices[~dropped]
    while degree > 1 and fitted < DRAWS_A_TERM * len(indices):
        degree -= 1
        indices = indices[indices.sum(axis=1) <= degree]
    if fitted <= len(indices):
        raise ValueError(f"{n} draws are too few for {d} variables")
    table = design(z, indices, basis)
    coefficients = _solved(table[:fitted], y[:fitted])
    miss = y[fitted:] - table[fitted:] @ coefficients
    scatter = y[fitted:].var(axis=0)
    explained = 1.0 - (miss**2).mean(axis=0) / np.where(scatter > 0.0, scatter, 1.0)
    coefficients *= size
    coefficients[0] += mean
    return Chaos(indices, coefficients, basis, explained)


def _solved(table: Array, y: Array) -> Array:
    """Least squares by the normal equations: the polynomials are orthonormal, so well set."""
    return np.linalg.solve(table.T @ table, table.T @ y)
