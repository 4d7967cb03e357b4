"""Enthalpy of a molten converter slag.

Slag = solid oxides at its temperature + heat of formation of the compounds that exist in it
(see `slag_compounds`) + heat of fusion of the whole slag. The oxides are followed as solids,
in their high-temperature form, with constant heat capacity above their melting points.

Sources: data/species.csv, data/slag_compounds.csv, data/slag_constants.csv.
"""

from __future__ import annotations

from collections.abc import Iterable, Mapping, Sequence
from typing import Any

import numpy as np

from converter_calc.basis import dual as ad
from converter_calc.basis.dual import Dual, Num
from converter_calc.basis.elements import molar_mass
from converter_calc.basis.errors import DataError
from converter_calc.basis.tape import Trace
from converter_calc.basis.units import T_REF_K
from converter_calc.thermo.enthalpy import STEELMAKING_K, EnthalpySet, Phase
from converter_calc.thermo.scratch import Scratch
from converter_calc.thermo.slag_compounds import compound_heat_J, heat_and_slopes, slag_constant

#: Enthalpy data that stand for an oxide of the slag (the same mass: P2O5 is half P4O10).
STANDS_FOR = {"P2O5": "P4O10"}
_SCRATCH = Scratch()


def _check_set_up(kg: Mapping[str, Num], known: Iterable[str]) -> None:
    for oxide in kg:
        if oxide not in known:
            raise DataError(f"slag oxide {oxide} is not among those set up: {', '.join(known)}")


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
    fusion = slag_constant("fusion") * 1e3
    heat = compound_heat_J(kg)
    for oxide, mass in kg.items():
        heat = heat + mass * (h_oxide[oxide] + fusion)
    return heat


class _Sum:
    """Running sum of products of arrays or numbers, without new arrays for each term."""

    __slots__ = ("_scratch", "total")

    def __init__(self, start: Any = 0.0) -> None:
        self.total = start
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
    oxides : formulas. Raises DataError for one without data as a solid.
    """

    def __init__(self, oxides: Sequence[str]) -> None:
        self.oxides = tuple(oxides)
        names = [STANDS_FOR.get(name, name) for name in oxides]
        solid, _ = EnthalpySet([(name, "s") for name in names]).evaluate(T_REF_K)
        self._formation_J_kg = dict(zip(self.oxides, (float(h) for h in solid), strict=True))
        self._row = {name: row for row, name in enumerate(self.oxides)}
        fusion = slag_constant("fusion") * 1e3
        hot: list[tuple[str, Phase]] = [(name, "top solid") for name in names]
        #: What an EnthalpySet has to hold for these oxides: members, and offsets [J/kg].
        self.members, self.offsets_J_kg = tuple(hot), (fusion,) * len(hot)
        self._molten = EnthalpySet(hot, [fusion] * len(hot), STEELMAKING_K)

    def enthalpy_J(self, kg: Mapping[str, Num], T_K: Num) -> Num:
        """Enthalpy of the slag [J], equal to `slag_enthalpy_J` with the oxides at T_K.

        kg : mass of each oxide [kg]; T_K : temperature [K]. Numbers, arrays (n,) or Dual.
        Raises DataError for an oxide that was not set up.
        """
        _check_set_up(kg, self._row)
        plain = {name: ad.value(mass) for name, mass in kg.items()}
        heat, slopes = heat_and_slopes(plain)
        h, cp = self._at(ad.value(T_K))
        total, by_T, d = _Sum(heat), _Sum(), dict[str, _Sum]()
        for name, mass in kg.items():
            row = self._row[name]
            total.add(plain[name], h[row])
            if isinstance(T_K, Dual):
                by_T.add(plain[name], cp[row])
            if isinstance(mass, Dual):
                by_mass = h[row] + slopes[name] if name in slopes else h[row]
                for key, inner in mass.d.items():
                    d.setdefault(key, _Sum()).add(inner, by_mass)
        if isinstance(T_K, Dual):
            for key, inner in T_K.d.items():
                d.setdefault(key, _Sum()).add(inner, by_T.total)
        return Dual(total.total, {key: part.total for key, part in d.items()}) if d else total.total

    def _at(self, T_K: Any) -> tuple[Any, Any]:
        """Enthalpy and heat capacity of the molten oxides, in memory that is used again."""
        if isinstance(T_K, Trace):
            return self._molten.evaluate(T_K)
        T = np.asarray(T_K, dtype=float)
        rows = 2 * len(self.oxides)
        store = _SCRATCH.array(rows, T.size).reshape(rows, *T.shape)
        return self._molten.evaluate(T, out=store)

    def formation_J(self, kg: Mapping[str, Num]) -> Num:
        """Heat of formation of the slag at 25 °C [J]: oxides and compounds, without fusion.

        kg : mass of each oxide [kg], numbers, arrays (n,) or Dual. Raises DataError for an
        oxide that was not set up.
        """
        _check_set_up(kg, self._row)
        heat = compound_heat_J(kg)
        for oxide, mass in kg.items():
            heat = heat + mass * self._formation_J_kg[oxide]
        return heat


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
