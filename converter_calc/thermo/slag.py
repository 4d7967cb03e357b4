"""Enthalpy of a molten converter slag.

Slag = solid oxides at its temperature + heat of formation of the compounds that exist in it
+ heat of fusion of the whole slag. Lime goes to the acid oxides in a fixed order: phosphate
3 CaO.P2O5, then silicate 2 CaO.SiO2, then ferrite 2 CaO.Fe2O3, then titanate CaO.TiO2.
Silica that lime leaves over takes MnO, FeO and MgO together, 2 to 1, at the mean of their
silicate heats by moles. Each "takes what there is" is rounded off, so that the enthalpy has
continuous derivatives and stays proportional to the amount of slag.

Sources: heats in data/slag_compounds.csv, constants in data/slag_constants.csv. The order is
that of falling formation heat per mole of lime (common practice, no source).
"""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from functools import cache
from typing import Any

import numpy as np

from converter_calc.basis import dual as ad
from converter_calc.basis.dual import Dual, Num
from converter_calc.basis.elements import molar_mass
from converter_calc.basis.errors import DataError
from converter_calc.data.tables import read_csv_rows
from converter_calc.thermo.enthalpy import T_REFERENCE_K, EnthalpySet, Phase

#: Amount [mol] below which two oxides count as absent: keeps derivatives finite at zero.
TINY_MOL = 1e-9
#: Enthalpy data that stand for an oxide of the slag (the same mass: P2O5 is half P4O10).
STANDS_FOR = {"P2O5": "P4O10"}


@dataclass(frozen=True)
class Compound:
    """One compound of the slag: its oxides, moles of base per mole of acid, heat [J/mol]."""

    base: str
    acid: str
    base_per_acid: float
    heat_J_mol: float


@cache
def _compounds() -> tuple[tuple[Compound, ...], tuple[Compound, ...]]:
    """Compounds of lime in their order, and those that share the silica left over."""
    rows = read_csv_rows("slag_compounds.csv")
    made = {
        (row["order"], row["compound"]): Compound(
            row["base"],
            row["acid"],
            float(row["base_moles"]) / float(row["acid_moles"]),
            float(row["heat_kJ_mol"]) / float(row["acid_moles"]) * 1e3,
        )
        for row in rows
    }
    ordered = tuple(made[key] for key in sorted(made) if key[0] != "rest")
    return ordered, tuple(made[key] for key in made if key[0] == "rest")


@cache
def _constants() -> dict[str, float]:
    return {row["name"]: float(row["value"]) for row in read_csv_rows("slag_constants.csv")}


def _lesser(a: Num, b: Num) -> Num:
    """Smaller of two amounts [mol], rounded off where they are equal.

    The smaller root x of x^2 - (a + b) x + (1 - corner^2) a b = 0: zero with a or b,
    proportional to their scale, (1 - corner) a at a = b.
    """
    corner = _constants()["corner"]
    va, vb = ad.value(a), ad.value(b)
    k = 2.0 * corner * corner
    gap = va - vb
    root = np.sqrt(gap * gap + (2.0 * k) * (va * vb) + TINY_MOL * TINY_MOL)
    x = 0.5 * (va + vb - root)
    if not isinstance(a, Dual) and not isinstance(b, Dual):
        return x
    half = 0.5 / root
    return _chain((a, 0.5 - (gap + k * vb) * half), (b, 0.5 + (gap - k * va) * half), value=x)


def _chain(*parts: tuple[Num, Any], value: Any) -> Num:
    """A function with the given value and its slope by each argument (chain rule)."""
    d: dict[str, Any] = {}
    for argument, by in parts:
        if isinstance(argument, Dual):
            for key, inner in argument.d.items():
                d[key] = d[key] + inner * by if key in d else inner * by
    return Dual(value, d) if d else value


def _moles(kg: Mapping[str, Num], oxide: str) -> Num:
    """Moles of an oxide; None if the slag has none."""
    mass = kg.get(oxide)
    return None if mass is None else mass * (1e3 / molar_mass(oxide))


def compound_heat_J(kg: Mapping[str, Num]) -> Num:
    """Heat of formation of the compounds of a slag from its oxides [J]; negative.

    Parameters
    ----------
    kg : mass of each oxide [kg], numbers, arrays (n,) or Dual; an absent oxide counts as zero.

    Returns
    -------
    Num, 0.0 if no compound can form. Continuous derivatives; proportional to the masses.
    Sources: data/slag_compounds.csv.
    """
    heat: Num = 0.0
    lime = _moles(kg, "CaO")
    silica = _moles(kg, "SiO2")
    for compound in _compounds()[0]:
        acid = silica if compound.acid == "SiO2" else _moles(kg, compound.acid)
        if lime is None or acid is None:
            continue
        formed = _lesser(lime * (1.0 / compound.base_per_acid), acid)
        heat = heat + formed * compound.heat_J_mol
        lime = lime - formed * compound.base_per_acid
        if compound.acid == "SiO2":
            silica = silica - formed
    return heat if silica is None else heat + _rest_heat_J(kg, silica)


def _rest_heat_J(kg: Mapping[str, Num], silica: Num) -> Num:
    """Heat of the silicates of MnO, FeO and MgO [J] with the silica [mol] that lime leaves."""
    bases: Num = None  # silica that they could take
    weighted: Num = 0.0
    for compound in _compounds()[1]:
        moles = _moles(kg, compound.base)
        if moles is not None:
            could = moles * (1.0 / compound.base_per_acid)
            bases = could if bases is None else bases + could
            weighted = weighted + could * compound.heat_J_mol
    if bases is None:
        return 0.0
    return _lesser(bases, silica) * weighted / (bases + TINY_MOL)


def slag_enthalpy_J(kg: Mapping[str, Num], h_oxide: Mapping[str, Num]) -> Num:
    """Enthalpy of a molten slag [J].

    Parameters
    ----------
    kg : mass of each oxide [kg] by formula, numbers, arrays (n,) or Dual, zero allowed.
    h_oxide : enthalpy of each solid oxide at the slag's temperature [J/kg].

    Returns
    -------
    Num: oxides + compounds + fusion of the whole. Proportional to the masses. Raises
    DataError if an oxide has no enthalpy in `h_oxide`. Sources: see the module.
    """
    _check_set_up(kg, h_oxide)
    fusion = _constants()["fusion"] * 1e3
    molten = {oxide: h_oxide[oxide] + fusion for oxide in kg}
    return compound_heat_J(kg) + _sum_of_products(kg, molten)


def _check_set_up(kg: Mapping[str, Num], known: Mapping[str, Num]) -> None:
    for oxide in kg:
        if oxide not in known:
            raise DataError(f"slag oxide {oxide} is not among those set up: {', '.join(known)}")


def _sum_of_products(kg: Mapping[str, Num], h: Mapping[str, Num]) -> Num:
    """Sum of kg x h over the oxides, gathered in place: this is the hot path."""
    total = _Sum()
    d: dict[str, _Sum] = {}
    for oxide, mass in kg.items():
        v, factor = ad.value(mass), ad.value(h[oxide])
        total.add(v, factor)
        for argument, by in ((mass, factor), (h[oxide], v)):
            if isinstance(argument, Dual):
                for key, inner in argument.d.items():
                    d.setdefault(key, _Sum()).add(inner, by)
    if not d:
        return total.total
    return Dual(total.total, {key: part.total for key, part in d.items()})


class _Sum:
    """Running sum of products of arrays or numbers, without new arrays for each term."""

    __slots__ = ("_scratch", "total")

    def __init__(self) -> None:
        self.total: Any = 0.0
        self._scratch: Any = None

    def add(self, a: Any, b: Any) -> None:
        if self._scratch is not None:
            try:
                np.multiply(a, b, out=self._scratch)
            except ValueError:  # a longer array meets a shorter sum
                self._scratch = None
            else:
                self.total += self._scratch
                return
        self.total = self.total + a * b
        if isinstance(self.total, np.ndarray) and self.total.ndim:
            self._scratch = np.empty_like(self.total)


class SlagEnthalpy:
    """Molten slag over a fixed choice of oxides.

    Parameters
    ----------
    oxides : formulas. Each is followed as the solid, its high-temperature form, with constant
        heat capacity above its melting point. Raises DataError for one without data.
    """

    def __init__(self, oxides: Sequence[str]) -> None:
        self.oxides = tuple(oxides)
        members: list[tuple[str, Phase]] = [(STANDS_FOR.get(name, name), "s") for name in oxides]
        solid, _ = EnthalpySet(members).evaluate(T_REFERENCE_K)
        self._formation_J_kg = dict(zip(self.oxides, (float(h) for h in solid), strict=True))
        fusion = _constants()["fusion"] * 1e3
        self._molten = EnthalpySet(members, [fusion] * len(members))

    def enthalpy_J(self, kg: Mapping[str, Num], T_K: Num) -> Num:
        """Enthalpy of the slag [J], as `slag_enthalpy_J`.

        kg : mass of each oxide [kg]; T_K : temperature [K]. Numbers, arrays (n,) or Dual.
        Raises DataError for an oxide that was not set up.
        """
        _check_set_up(kg, self._formation_J_kg)
        h = dict(zip(self.oxides, self._molten.evaluate_dual(T_K), strict=True))
        return compound_heat_J(kg) + _sum_of_products(kg, h)

    def formation_J(self, kg: Mapping[str, Num]) -> Num:
        """Heat of formation of the slag at 25 °C [J]: oxides and compounds, without fusion.

        kg : mass of each oxide [kg], numbers, arrays (n,) or Dual. Raises DataError for an
        oxide that was not set up.
        """
        _check_set_up(kg, self._formation_J_kg)
        return compound_heat_J(kg) + _sum_of_products(kg, self._formation_J_kg)


def partial_enthalpies_kJ_mol(slag_pct: Mapping[str, float]) -> dict[str, float]:
    """Heat taken up when one mole of a solid oxide dissolves in the slag at its temperature.

    Parameters
    ----------
    slag_pct : composition, mass % (or kg) by oxide, numbers; a zero entry asks for the value
        at infinite dilution.

    Returns
    -------
    kJ/mol of oxide, relative to the solid oxide at the same temperature (this model gives the
    same at all temperatures); exact derivative of `slag_enthalpy_J` by the mass of the oxide.
    """
    seeded = {name: ad.seed(np.array([float(kg)]), name) for name, kg in slag_pct.items()}
    solid = dict.fromkeys(slag_pct, 0.0)
    dissolved = slag_enthalpy_J(seeded, solid)
    return {
        name: float(np.ravel(ad.slope(dissolved, name))[0]) * molar_mass(name) * 1e-6
        for name in slag_pct
    }
