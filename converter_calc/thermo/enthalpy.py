"""Enthalpy of every species as a function of temperature.

Zero: pure elements in their stable form at 298.15 K and 1 bar; the enthalpy of a compound
holds its heat of formation, so reaction heats come out as differences. Coefficients and
sources: data/species.csv. Outside the temperatures of the data the heat capacity is taken
as constant at its value at the end of the range.
"""

from __future__ import annotations

import difflib
from collections.abc import Sequence
from dataclasses import dataclass
from functools import cache
from typing import Any, Literal, TypeAlias

import numpy as np

from converter_calc.basis.dual import Array, Dual, Num
from converter_calc.basis.elements import molar_mass
from converter_calc.basis.errors import DataError
from converter_calc.basis.tape import Trace
from converter_calc.basis.units import T_REF_K
from converter_calc.data.tables import read_csv_rows

Phase: TypeAlias = Literal["stable", "s", "l", "g", "top solid"]
#: Where liquid metal and slag are followed in one piece [K]: hot metal to the hottest tap.
STEELMAKING_K = (1700.0, 2200.0)
PHASES = ("stable", "s", "l", "g", "top solid")
#: Columns of data/species.csv, as powers of T (None: logarithm).
_TERMS: tuple[tuple[str, float | None], ...] = (
    *(("h_inv", -1.0), ("h_ln", None), ("h_0", 0.0), ("h_1", 1.0), ("h_2", 2.0)),
    *(("h_3", 3.0), ("h_4", 4.0), ("h_5", 5.0), ("h_half", 0.5)),
)
#: Functions of t = T / 1000 K in which both H and its derivative are written.
_BASIS: tuple[float | None, ...] = (0.0, 1.0, 2.0, 3.0, 4.0, 5.0, None, -1.0, -2.0, 0.5, -0.5)
_HIGHEST_POWER = 5
_KILO = 1000.0


@dataclass(frozen=True)
class Segment:
    """Enthalpy of one phase between two temperatures.

    h : coefficients of H [J/mol] over the basis functions of t = T / 1000 K; cp : those of
    the heat capacity [J/(mol K)].
    """

    species: str
    phase: str
    T_low_K: float
    T_high_K: float
    h: Array
    cp: Array

    def straight_from(self, T_K: float) -> Segment:
        """Continuation with the enthalpy and heat capacity that this segment has at T_K."""
        basis = _basis_values(np.array([T_K]), range(len(_BASIS)))[:, 0]
        H, cp = float(self.h @ basis), float(self.cp @ basis)
        h, slope = np.zeros(len(_BASIS)), np.zeros(len(_BASIS))
        h[0], h[1], slope[0] = H - cp * T_K, cp * _KILO, cp
        return Segment(self.species, self.phase, -np.inf, np.inf, h, slope)


#: The other functions of t; numpy raises to a power ten times slower than it divides.
_OTHER: dict[float | None, Any] = {
    None: np.log,
    -1.0: np.reciprocal,
    -2.0: lambda t: 1.0 / (t * t),
    0.5: np.sqrt,
    -0.5: lambda t: 1.0 / np.sqrt(t),
}


def _basis_values(T_K: Array, columns: Sequence[int]) -> Array:
    """Basis functions at T (n,), one row for each of `columns` (in rising order)."""
    t = T_K * (1.0 / _KILO)
    out = np.empty((len(columns), t.size))
    for row, column in enumerate(columns):
        if column == 0:
            out[row] = 1.0
        elif column <= _HIGHEST_POWER:
            if row and columns[row - 1] == column - 1:
                np.multiply(out[row - 1], t, out=out[row])
            else:
                out[row] = t**column
        else:
            # no table with these terms starts below 100 K; colder, their coefficient is zero
            out[row] = _OTHER[_BASIS[column]](np.maximum(t, 1e-3))
    return out


def _compile(row: dict[str, str]) -> Segment:
    h, cp = np.zeros(len(_BASIS)), np.zeros(len(_BASIS))
    place = {power: index for index, power in enumerate(_BASIS)}
    for name, power in _TERMS:
        b = float(row[name])
        if b == 0.0:
            continue
        if power is None:  # b ln T = b ln t + b ln 1000; its derivative is b / T
            h[place[None]] += b
            h[0] += b * np.log(_KILO)
            cp[place[-1.0]] += b / _KILO
        else:
            h[place[power]] += b * _KILO**power
            if power != 0.0:
                cp[place[power - 1.0]] += b * power * _KILO ** (power - 1.0)
    low, high = float(row["T_low_K"]), float(row["T_high_K"])
    return Segment(row["species"], row["phase"], low, high, h, cp)


@cache
def _all_segments() -> dict[str, tuple[Segment, ...]]:
    segments: dict[str, list[Segment]] = {}
    for row in read_csv_rows("species.csv"):
        segments.setdefault(row["species"], []).append(_compile(row))
    return {name: tuple(parts) for name, parts in segments.items()}


@cache
def _formulas() -> dict[str, str]:
    return {row["species"]: row["formula"] for row in read_csv_rows("species.csv")}


def known_species() -> tuple[str, ...]:
    """Keys of all species that have enthalpy data, in the order of the table."""
    return tuple(_formulas())


def _check_known(species: str) -> None:
    if species not in _formulas():
        near = difflib.get_close_matches(species, _formulas(), n=1, cutoff=0.4)
        hint = f"; did you mean {near[0]}?" if near else ""
        raise DataError(f"no enthalpy data for species '{species}'{hint}")


def species_formula(species: str) -> str:
    """Chemical formula of a species ("H2O" for "H2O_liquid"); DataError if it is not known."""
    _check_known(species)
    return _formulas()[species]


def segments_of(species: str, phase: Phase = "stable") -> tuple[Segment, ...]:
    """Segments of a species in order of temperature.

    Parameters
    ----------
    species : a key of data/species.csv. phase : "stable" for all phases, each in its range;
        "s", "l" or "g" for one phase only; "top solid" for the last solid form alone, which
        has no jump of enthalpy at any temperature.

    Raises DataError for an unknown species (with the nearest one) or a phase without data.
    """
    _check_known(species)
    if phase not in PHASES:
        raise DataError(f"phase '{phase}' of {species} is not one of {', '.join(PHASES)}")
    parts = _all_segments()[species]
    if phase == "stable":
        return parts
    wanted = "s" if phase == "top solid" else phase
    chosen = tuple(part for part in parts if part.phase == wanted)
    if not chosen:
        have = ", ".join(sorted({part.phase for part in parts}))
        raise DataError(f"no enthalpy data for {species} in phase '{phase}' (there is: {have})")
    if phase == "top solid":
        return chosen[-1:]
    return chosen


class _Interval:
    """Coefficients of all species of a set between two neighbouring breakpoints."""

    def __init__(self, h: Array, cp: Array) -> None:
        self.h = _Product(h)
        self.both = _Product(np.vstack([h, cp]))

    def write(self, T_K: Array, out: Array, *, slopes: bool) -> None:
        """Write H, or H and below it cp, of all species at T (n,) into `out`."""
        (self.both if slopes else self.h).write(T_K, out)


class _Product:
    """Coefficients (rows, basis) times basis functions: powers for all, the rest where needed.

    Not by `@`: for so thin a product the linear algebra library wakes a second thread, which
    may cost a hundred times the work, or takes a slow path on one.
    """

    def __init__(self, table: Array) -> None:
        used = np.flatnonzero(np.any(table != 0.0, axis=0)).tolist()
        self.powers = [column for column in used if column <= _HIGHEST_POWER] or [0]
        self.table = np.ascontiguousarray(table[:, self.powers])
        self.others = [column for column in used if column > _HIGHEST_POWER]
        self.extra = [
            (row, place, float(table[row, column]))
            for place, column in enumerate(self.others)
            for row in np.flatnonzero(table[:, column]).tolist()
        ]

    def write(self, T_K: Array, out: Array) -> None:
        """Write the products at T (n,) into `out` (rows, n)."""
        np.einsum("ij,jk->ik", self.table, _basis_values(T_K, self.powers), out=out)
        if self.extra:
            basis = _basis_values(T_K, self.others)
            for row, place, coefficient in self.extra:
                out[row] += coefficient * basis[place]


class EnthalpySet:
    """Enthalpies of several species at once.

    Parameters
    ----------
    members : pairs (species key, phase). "stable": the segment whose range holds T. "s",
        "l", "g" or "top solid": this phase at every T. Beyond the first or last segment so
        chosen the heat capacity is constant at its value there (a supercooled liquid, a
        superheated solid, a compound hotter than its table).
    offsets_J_kg : added to the enthalpy of each member, [J/kg]; none if not given.
    whole : temperatures [K] between which each member follows one segment, that of the middle,
        past its end if it ends between them. A set that is only used for one fixed phase each
        then has no kinks there, and one product serves all heats.

    Raises DataError for an unknown species or a phase without data.
    """

    def __init__(
        self,
        members: Sequence[tuple[str, Phase]],
        offsets_J_kg: Sequence[float] | None = None,
        whole: tuple[float, float] | None = None,
    ) -> None:
        self.species = tuple(name for name, _ in members)
        self._parts = [segments_of(name, phase) for name, phase in members]
        self._kg_mol = [molar_mass(species_formula(name)) * 1e-3 for name in self.species]
        self._offsets = np.zeros(len(members)) if offsets_J_kg is None else np.array(offsets_J_kg)
        edges = {
            T for parts in self._parts for part in parts for T in (part.T_low_K, part.T_high_K)
        }
        self._middle = None if whole is None else 0.5 * (whole[0] + whole[1])
        if whole is not None:
            edges = {T for T in edges if not whole[0] < T < whole[1]} | set(whole)
        self._edges = np.array(sorted(edges))
        self._intervals: dict[int, _Interval] = {}

    def evaluate(self, T_K: Any, out: Array | None = None) -> tuple[Any, Any]:
        """Enthalpy [J/kg of formula] and heat capacity [J/(kg K)] of each species.

        Parameters
        ----------
        T_K : temperature [K], a number or array-like (n,); any real value, NaN gives NaN.
        out : contiguous array (2 species, n) to hold the results, else a new one is made.

        Returns
        -------
        h, cp : arrays (species, n); (species,) for a number. cp is the exact derivative of
        h by T (at a transition, that of the phase above).
        """
        count = len(self.species)
        if isinstance(T_K, Trace):
            rows = T_K.tape.rows(self._with_slopes, 2 * count, T_K)
            return rows[:count], rows[count:]
        T = np.asarray(T_K, dtype=float)
        both = np.empty((2 * count, *T.shape)) if out is None else out
        self._calculate(T.reshape(-1), both.reshape(2 * count, T.size), slopes=True)
        return both[:count], both[count:]

    def evaluate_dual(self, T_K: Num) -> list[Num]:
        """Enthalpy [J/kg of formula] of each species at T [K], with derivatives if T is a Dual.

        Returns a list in the order of the members, shaped like T. Range as for `evaluate`.
        """
        if isinstance(T_K, Dual):
            h, cp = self.evaluate(T_K.v)
            return [T_K.chain(h[i], cp[i]) for i in range(len(self.species))]
        if isinstance(T_K, Trace):
            return T_K.tape.rows(self._without_slopes, len(self.species), T_K)
        T = np.asarray(T_K, dtype=float)
        h = np.empty((len(self.species), *T.shape))
        self._calculate(T.reshape(-1), h.reshape(len(self.species), T.size), slopes=False)
        return [h[i] for i in range(len(self.species))]

    def _with_slopes(self, T: Array, out: Array) -> None:
        self._calculate(T, out, slopes=True)

    def _without_slopes(self, T: Array, out: Array) -> None:
        self._calculate(T, out, slopes=False)

    def _calculate(self, T: Array, out: Array, *, slopes: bool) -> None:
        if out.size == 0:
            return
        coldest, hottest = T.min(), T.max()  # both NaN if one is
        ends = np.searchsorted(self._edges, (coldest, hottest), side="right")
        if ends[0] == ends[1] and coldest <= hottest:
            self._interval(int(ends[0])).write(T, out, slopes=slopes)
            return
        where = np.searchsorted(self._edges, T, side="right")
        for index in np.unique(where):
            chosen = where == index
            part = np.empty((out.shape[0], int(chosen.sum())))
            self._interval(int(index)).write(T[chosen], part, slopes=slopes)
            out[:, chosen] = part

    def _interval(self, index: int) -> _Interval:
        if index not in self._intervals:
            self._intervals[index] = self._build(index)
        return self._intervals[index]

    def _build(self, index: int) -> _Interval:
        low = self._edges[index - 1] if index > 0 else -np.inf
        high = self._edges[index] if index < self._edges.size else np.inf
        if self._middle is not None and low <= self._middle < high:
            low = self._middle
        h, cp = [], []
        for parts, kg_mol in zip(self._parts, self._kg_mol, strict=True):
            if low < parts[0].T_low_K:
                part = parts[0].straight_from(parts[0].T_low_K)
            elif low >= parts[-1].T_high_K:
                part = parts[-1].straight_from(parts[-1].T_high_K)
            else:
                part = next(part for part in parts if low < part.T_high_K)
            h.append(part.h / kg_mol)
            cp.append(part.cp / kg_mol)
        table = np.array(h)
        table[:, 0] += self._offsets
        return _Interval(table, np.array(cp))

    def at(self, T_K: Num) -> tuple[Any, Any]:
        """Enthalpies, and heat capacities if T is a Dual (else None), one row a member.

        For `heat_of`; [J/kg], [J/(kg K)].
        """
        if isinstance(T_K, Dual):
            return self.evaluate(T_K.v)
        return self.evaluate_dual(T_K), None


def heat_of(kg: Sequence[Num], T_K: Num, h: Any, cp: Any) -> Num:
    """Enthalpy [J] of the masses `kg` [kg] whose enthalpies at T are `h` [J/kg].

    h, cp : rows of `EnthalpySet.at`. The slopes by T are gathered over all masses before the
    chain rule, which costs a fraction of a product of Duals each.
    """
    total: Num = 0.0
    d: dict[str, Any] = {}
    by_T: Any = 0.0
    for mass, heat, capacity in zip(kg, h, cp if cp is not None else h, strict=True):
        plain = mass.v if isinstance(mass, Dual) else mass
        total = total + plain * heat
        if isinstance(mass, Dual):
            for key, inner in mass.d.items():
                part = inner * heat
                d[key] = d[key] + part if key in d else part
        if cp is not None:
            by_T = by_T + plain * capacity
    if isinstance(T_K, Dual):
        for key, inner in T_K.d.items():
            part = inner * by_T
            d[key] = d[key] + part if key in d else part
    return Dual(total, d) if d else total


@cache
def _single(species: str, phase: Phase) -> tuple[EnthalpySet, float]:
    return EnthalpySet([(species, phase)]), molar_mass(species_formula(species)) * 1e-3


def enthalpy_J_kg(species: str, T_K: Num, phase: Phase = "stable") -> Num:
    """Enthalpy of one species [J/kg of formula].

    Parameters
    ----------
    species : a key of data/species.csv. T_K : temperature [K], a number, array-like (n,) or
        Dual; outside the data the heat capacity is constant. phase : see `segments_of`.

    Returns a float for a number, else an array (n,) or a Dual. Raises DataError for an
    unknown species or phase. Source: data/species.csv.
    """
    (h,) = _single(species, phase)[0].evaluate_dual(T_K)
    return float(h) if isinstance(h, np.ndarray | np.generic) and h.ndim == 0 else h


def enthalpy_J_mol(species: str, T_K: Num, phase: Phase = "stable") -> Num:
    """Enthalpy of one species [J/mol of formula]; all else as for `enthalpy_J_kg`."""
    return enthalpy_J_kg(species, T_K, phase) * _single(species, phase)[1]


def formation_enthalpy_J_mol(species: str) -> float:
    """Heat of formation at 298.15 K [J/mol] of the form that is stable there.

    Zero for the elements. Raises DataError for an unknown species. Source: data/species.csv.
    """
    return float(enthalpy_J_mol(species, T_REF_K))
