"""Heat of the compounds that the oxides of a molten slag form with each other.

Lime goes to the acid oxides in a fixed order: phosphate 3 CaO.P2O5, then silicate
2 CaO.SiO2, then ferrite 2 CaO.Fe2O3, then titanate CaO.TiO2. Silica that lime leaves over
takes MnO, FeO and MgO together, 2 to 1, at the mean of their silicate heats by moles. Each
"takes what there is" is rounded off, so that the heat has continuous derivatives and stays
proportional to the amount of slag.

Sources: heats in data/slag_compounds.csv, the rounding in data/slag_constants.csv. The order
is common practice (no source).
"""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass
from functools import cache
from typing import Any

import numpy as np

from converter_calc.basis import dual as ad
from converter_calc.basis.dual import Dual, Num
from converter_calc.basis.elements import molar_mass
from converter_calc.data.tables import read_csv_rows

#: Amount [mol] below which two oxides count as absent: keeps derivatives finite at zero.
TINY_MOL = 1e-9


@dataclass(frozen=True)
class Compound:
    """One compound of the slag: its oxides, moles of base per mole of acid, heat [J/mol acid]."""

    base: str
    acid: str
    base_per_acid: float
    heat_J_mol: float


@cache
def compounds() -> tuple[tuple[Compound, ...], tuple[Compound, ...]]:
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
def slag_constant(name: str) -> float:
    """A constant of data/slag_constants.csv by name."""
    rows = {row["name"]: float(row["value"]) for row in read_csv_rows("slag_constants.csv")}
    return rows[name]


def lesser(a: Any, b: Any) -> tuple[Any, Any, Any]:
    """Smaller of two amounts [mol], rounded off where they are equal, and its slopes by both.

    The smaller root x of x^2 - (a + b) x + (1 - c^2) a b = 0, c the corner constant: zero
    with a or b, proportional to their scale, (1 - c) a at a = b. a, b : numbers or (n,), >= 0.
    """
    k = 2.0 * slag_constant("corner") ** 2
    gap = a - b
    root = np.sqrt(gap * gap + (2.0 * k) * (a * b) + TINY_MOL * TINY_MOL)
    half = 0.5 / root
    x = 0.5 * (a + b - root)
    return x, 0.5 - (gap + k * b) * half, 0.5 + (gap - k * a) * half


def heat_and_slopes(kg: Mapping[str, Any]) -> tuple[Any, dict[str, Any]]:
    """Heat of all compounds [J] and its slope by the mass of each oxide in them [J/kg].

    kg : mass of each oxide [kg], plain numbers or arrays (n,); absent counts as zero. The
    slopes are worked out backwards through the steps, so their cost does not grow with the
    number of quantities that the masses depend on.
    """
    mol = {name: kg[name] * (1e3 / molar_mass(name)) for name in _oxides() if name in kg}
    heat: Any = 0.0
    lime, silica = mol.get("CaO", 0.0), mol.get("SiO2", 0.0)
    steps = []
    for compound in compounds()[0]:
        if "CaO" not in mol or compound.acid not in mol:
            continue
        formed, by_lime, by_acid = lesser(lime * (1.0 / compound.base_per_acid), mol[compound.acid])
        steps.append((compound, by_lime, by_acid))
        heat = heat + formed * compound.heat_J_mol
        lime = lime - formed * compound.base_per_acid
        if compound.acid == "SiO2":
            silica = silica - formed

    slopes: dict[str, Any] = {}
    to_silica: Any = 0.0
    if "SiO2" in mol:
        rest, to_silica, slopes = _rest(mol, silica)
        heat = heat + rest
        slopes["SiO2"] = to_silica
    to_lime: Any = 0.0
    for compound, by_lime, by_acid in reversed(steps):
        to_formed = compound.heat_J_mol - compound.base_per_acid * to_lime
        if compound.acid == "SiO2":
            to_formed = to_formed - to_silica
        slopes[compound.acid] = slopes.get(compound.acid, 0.0) + by_acid * to_formed
        to_lime = to_lime + by_lime * to_formed * (1.0 / compound.base_per_acid)
    if steps:
        slopes["CaO"] = to_lime
    return heat, {name: slope * (1e3 / molar_mass(name)) for name, slope in slopes.items()}


@cache
def _oxides() -> tuple[str, ...]:
    every = [*compounds()[0], *compounds()[1]]
    return tuple(dict.fromkeys(name for part in every for name in (part.base, part.acid)))


def _rest(mol: Mapping[str, Any], silica: Any) -> tuple[Any, Any, dict[str, Any]]:
    """Heat [J] of the silicates that silica left by lime [mol] forms; slopes by it and the bases.

    The bases act together: silica they could take, times their mean heat.
    """
    parts = [part for part in compounds()[1] if part.base in mol]
    if not parts:
        return 0.0, 0.0, {}
    could = [mol[part.base] * (1.0 / part.base_per_acid) for part in parts]
    total = sum(could) + TINY_MOL
    mean = sum(c * p.heat_J_mol for c, p in zip(could, parts, strict=True)) / total
    formed, by_bases, by_silica = lesser(total, silica)
    common = by_bases * mean
    share = formed / total
    slopes = {
        part.base: (common + share * (part.heat_J_mol - mean)) * (1.0 / part.base_per_acid)
        for part in parts
    }
    return formed * mean, by_silica * mean, slopes


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
    heat, slopes = heat_and_slopes({name: ad.value(mass) for name, mass in kg.items()})
    d: dict[str, Any] = {}
    for name, slope in slopes.items():
        mass = kg[name]
        if isinstance(mass, Dual):
            for key, inner in mass.d.items():
                d[key] = d[key] + inner * slope if key in d else inner * slope
    return Dual(heat, d) if d else heat
