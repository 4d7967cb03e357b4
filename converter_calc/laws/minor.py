"""Si, Al, Ti, V and Cr between slag and metal; numbers in data/minor.toml."""

from __future__ import annotations

from collections.abc import Mapping
from typing import Any

from converter_calc.basis import dual as ad
from converter_calc.basis.dual import LN10, Num
from converter_calc.basis.elements import molar_mass
from converter_calc.data.tables import read_toml
from converter_calc.laws.catalogue import pick
from converter_calc.laws.slag_measures import TINY

CHROMIUM_LAWS = ("iron_oxide", "equilibrium")
VANADIUM_LAWS = ("constant", "equilibrium")


def constant_ratio(element: str) -> float:
    """L_X = (%X)/[%X] of Si, Al, Ti or V as one number, dimensionless.

    Raises DataError: no row for the element. Source: common practice, no source.
    """
    rows: Mapping[str, Any] = read_toml("minor.toml")["constant"]
    return float(pick(rows, element, "constant partition ratio of")["ratio"])


def equilibrium_ratio(element: str, O_pct: Num, T_K: Num) -> Num:
    """L_X of Cr or V from 2[X] + 3[O] = X2O3, dimensionless.

    Parameters
    ----------
    element : "Cr" or "V". O_pct : dissolved oxygen [mass %], at or above 0. T_K : [K].

    Returns
    -------
    Num: L = M n sqrt(K) [%O]^1.5, M the atomic weight, n the moles of oxide per 100 g slag
    (1.69, per cation).

    Notes
    -----
    Assumed: a(X2O3) = (mole fraction of XO1.5)^2, activity coefficient 1, and [X], [O] ideal.
    So it is an upper bound for basic slags, where both coefficients are above 1: it gives
    several times the ratios of practice (Cr about 5, V 80 to 200).

    Raises
    ------
    DataError : no row for the element.

    Source: log K textbook values (from memory), in the data row.
    """
    data = read_toml("minor.toml")
    row = pick(data["equilibrium"], element, "oxidation equilibrium of")
    scale = data["equilibrium_slag"]["cation_mol_per_100g"] * molar_mass(element)
    half_K = ad.exp((row["per_T"] / T_K + row["constant"]) * (0.5 * LN10))
    return half_K * (O_pct * ad.sqrt(O_pct + TINY)) * scale


def chromium_ratio(law: str, T_Fe_pct: Num, O_pct: Num, T_K: Num) -> Num:
    """L_Cr = (%Cr)/[%Cr], dimensionless.

    law : "iron_oxide" (0.3 (%T.Fe), common practice, no source) or "equilibrium" (see
    `equilibrium_ratio`). T_Fe_pct : total iron of the slag [mass %]. O_pct : dissolved
    oxygen [mass %]. T_K : temperature [K]. Raises DataError: unknown law.
    """
    pick(dict.fromkeys(CHROMIUM_LAWS), law, "chromium law")
    if law == "equilibrium":
        return equilibrium_ratio("Cr", O_pct, T_K)
    return T_Fe_pct * read_toml("minor.toml")["iron_oxide"]["Cr"]["per_T_Fe"]


def vanadium_ratio(law: str, O_pct: Num, T_K: Num) -> Num:
    """L_V = (%V)/[%V], dimensionless.

    law : "constant" (common practice, no source) or "equilibrium" (see
    `equilibrium_ratio`). O_pct : dissolved oxygen [mass %]. T_K : temperature [K].
    Raises DataError: unknown law.
    """
    pick(dict.fromkeys(VANADIUM_LAWS), law, "vanadium law")
    return equilibrium_ratio("V", O_pct, T_K) if law == "equilibrium" else constant_ratio("V")
