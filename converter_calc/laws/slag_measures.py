"""Measures of a slag: iron, basicities, optical basicity.

A slag is a mapping of mass % of the liquid slag by oxide: CaO SiO2 MgO Al2O3 FeO Fe2O3 MnO
P2O5 TiO2 V2O3 V2O5 Cr2O3 CaF2 CaS Na2O K2O. An absent oxide counts as zero.
"""

from __future__ import annotations

from collections.abc import Iterable, Mapping
from functools import cache
from types import MappingProxyType

from converter_calc.basis import dual as ad
from converter_calc.basis.dual import Num
from converter_calc.basis.elements import mass_fractions, molar_mass
from converter_calc.basis.units import ZERO_C_K
from converter_calc.data.tables import read_csv_rows
from converter_calc.laws.catalogue import pick

#: Added under square roots that may meet zero, (mass %)^2 or mass %: keeps derivatives finite.
TINY = 1e-12
#: Smallest argument of a logarithm of oxides, mass %: see `positive`.
LEAST_PCT = 1e-3


@cache
def iron_factors() -> tuple[float, float]:
    """Iron in kg per kg of FeO and of Fe2O3 (0.7773 and 0.6994), from atomic weights."""
    return mass_fractions("FeO")["Fe"], mass_fractions("Fe2O3")["Fe"]


@cache
def share_of(element: str, oxide: str) -> float:
    """Mass of the element in kg per kg of the oxide, from atomic weights."""
    return mass_fractions(oxide)[element]


def total_iron_pct(slag_pct: Mapping[str, Num]) -> Num:
    """Total iron (%T.Fe) [mass %] in FeO and Fe2O3 of the slag. Source: stoichiometry."""
    ferrous, ferric = iron_factors()
    return weighted_sum((("FeO", ferrous), ("Fe2O3", ferric)), slag_pct)


def FetO_pct(slag_pct: Mapping[str, Num]) -> Num:
    """All iron of the slag reckoned as FeO (%FetO) [mass %]. Source: stoichiometry."""
    ferrous, ferric = iron_factors()
    return weighted_sum((("FeO", 1.0), ("Fe2O3", ferric / ferrous)), slag_pct)


def weighted_sum(terms: Iterable[tuple[str, float]], slag_pct: Mapping[str, Num]) -> Num:
    """Sum of coefficient x (%oxide) over the oxides present; "FetO" is worked out if absent.

    Parameters
    ----------
    terms : pairs (oxide, coefficient). slag_pct : mass % by oxide, numbers, (n,) or Dual.

    Returns
    -------
    Num; 0.0 if none of the oxides is present.
    """
    total: Num = None
    for oxide, coefficient in terms:
        pct = slag_pct.get(oxide)
        if pct is None and oxide == "FetO":
            pct = FetO_pct(slag_pct)
        if pct is not None:
            term = pct * coefficient
            total = term if total is None else total + term
    return 0.0 if total is None else total


def positive(x: Num) -> Num:
    """Return x for x >> 0.001, falling smoothly to zero where x turns negative [mass %].

    (x + sqrt(x^2 + 0.001^2)) / 2: exact to 1e-9 for x > 16 % and never below zero, so that
    logarithms of oxides stay finite for slags that no law is meant for.
    """
    return (x + ad.sqrt(ad.square(x) + LEAST_PCT * LEAST_PCT)) * 0.5


def basicity(slag_pct: Mapping[str, Num]) -> Num:
    """B = (%CaO)/(%SiO2), by mass; SiO2 must be above zero."""
    return slag_pct["CaO"] / slag_pct["SiO2"]


def basicity_with_magnesia(slag_pct: Mapping[str, Num]) -> Num:
    """((%CaO)+(%MgO))/(%SiO2), by mass; SiO2 must be above zero."""
    return weighted_sum((("CaO", 1.0), ("MgO", 1.0)), slag_pct) / slag_pct["SiO2"]


def basicity_with_phosphate(slag_pct: Mapping[str, Num]) -> Num:
    """(%CaO)/((%SiO2)+(%P2O5)), by mass; the sum must be above zero."""
    return slag_pct["CaO"] / weighted_sum((("SiO2", 1.0), ("P2O5", 1.0)), slag_pct)


@cache
def _optical_terms(
    scale: str,
) -> tuple[tuple[tuple[str, float], ...], tuple[tuple[str, float], ...]]:
    rows = read_csv_rows("optical_basicity.csv")
    pick(MappingProxyType({"pauling": 1, "density": 1}), scale, "optical basicity scale")
    oxygen = tuple(
        (row["component"], float(row["oxygen"]) / molar_mass(row["component"])) for row in rows
    )
    values = {row["component"]: float(row[scale]) for row in rows}
    return oxygen, tuple((name, weight * values[name]) for name, weight in oxygen)


def optical_basicity(slag_pct: Mapping[str, Num], scale: str = "pauling") -> Num:
    """Optical basicity of the slag, dimensionless: oxygen-weighted mean over its oxides.

    Parameters
    ----------
    slag_pct : mass % by oxide (need not sum to 100). scale : "pauling" (FeO 0.51, Fe2O3
    0.48, CaF2 0.43) or "density" (FeO 1.00, Fe2O3 0.75, CaF2 1.20).

    Raises
    ------
    DataError : unknown scale.

    Source: J.A. Duffy, M.D. Ingram, I.D. Sommerville, J. Chem. Soc. Faraday Trans. 1 74
    (1978) 1410 (from memory); values and their sources in data/optical_basicity.csv.
    """
    oxygen, basic = _optical_terms(scale)
    return weighted_sum(basic, slag_pct) / weighted_sum(oxygen, slag_pct)


def measure(
    quantity: str,
    slag_pct: Mapping[str, Num],
    T_K: Num,
    C_pct: Num | None = None,
    scale: str = "pauling",
) -> Num | None:
    """Value of a quantity that a range of validity names; None if it is not known.

    quantity : temperature_C, T_Fe_pct, FetO_pct, C_pct, basicity, optical_basicity or
    <oxide>_pct.
    """
    if quantity == "temperature_C":
        return T_K - ZERO_C_K
    if quantity == "C_pct":
        return C_pct
    if quantity == "T_Fe_pct":
        return total_iron_pct(slag_pct)
    if quantity == "FetO_pct":
        return FetO_pct(slag_pct)
    if quantity == "basicity":
        return basicity(slag_pct) if "CaO" in slag_pct and "SiO2" in slag_pct else None
    if quantity == "optical_basicity":
        return optical_basicity(slag_pct, scale)
    return slag_pct.get(quantity.removesuffix("_pct"), 0.0)
