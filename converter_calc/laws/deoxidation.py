"""Equilibria of deoxidation in liquid iron; numbers in data/deoxidation.toml.

x [M] + y [O] = oxide. Activities are by mass %, dilute in iron, with Wagner's first-order
interaction: log f_i = sum over j of e_i^j [%j].
"""

from __future__ import annotations

from collections.abc import Mapping
from functools import cache
from typing import Any

import numpy as np

from converter_calc.basis.dual import LN10, Array, Num
from converter_calc.basis.elements import atomic_weight, parse_formula
from converter_calc.data.tables import read_toml
from converter_calc.laws.catalogue import LawNote, Outside, find_outside, pick, read_note

#: Newton steps for the oxygen of the implicit law; it starts close, five leave rounding only.
MOST_STEPS = 60
#: Oxygen above which first-order coefficients say nothing any more [mass %].
MOST_OXYGEN_PCT = 0.5


@cache
def _rows() -> dict[str, dict[str, Any]]:
    return {row["name"]: row for row in read_toml("deoxidation.toml")["law"]}


def laws(element: str | None = None) -> list[str]:
    """Names of the laws, of one deoxidant if `element` is given."""
    return [name for name, row in _rows().items() if element in (None, row["element"])]


def describe(law: str) -> LawNote:
    """Formula text, source and range of a law. Raises DataError: unknown law."""
    row = pick(_rows(), law, "deoxidation law")
    return read_note(row, row["formula"].format_map(row))


def interaction_source(law: str) -> str:
    """Source of the interaction coefficients that go with a law."""
    row = pick(_rows(), law, "deoxidation law")
    return str(read_toml("deoxidation.toml")["interaction"][row["interaction"]]["source"])


@cache
def _stoichiometry(law: str) -> tuple[str, float, float]:
    row = pick(_rows(), law, "deoxidation law")
    atoms = parse_formula(row["oxide"])
    return row["element"], atoms[row["element"]], atoms["O"]


@cache
def oxygen_per_kg(element: str, oxide: str) -> float:
    """Oxygen bound per kg of an element that goes to `oxide` [kg/kg].

    0.889 for Al to Al2O3 (so 1.124 kg Al a kg of oxygen). Source: standard atomic weights.
    """
    atoms = parse_formula(oxide)
    return atoms["O"] * atomic_weight("O") / (atoms[element] * atomic_weight(element))


def log_K(law: str, T_K: Num) -> Any:
    """log10 of the formation constant a_oxide / (a_M^x a_O^y) at T [K], number or (n,).

    Raises DataError: unknown law. Source and range: `describe`.
    """
    row = pick(_rows(), law, "deoxidation law")
    return row["per_T"] / np.asarray(T_K, dtype=float) + row["constant"]


def interaction(law: str, on: str, by: str, T_K: Num) -> Any:
    """Interaction coefficient e_on^by of a law's set at T [K]; 0.0 for a pair not listed."""
    row = pick(_rows(), law, "deoxidation law")
    a, b = read_toml("deoxidation.toml")["interaction"][row["interaction"]].get(
        f"{on}_{by}", (0.0, 0.0)
    )
    return a + b / np.asarray(T_K, dtype=float)


def dissolved_oxygen_pct(
    law: str,
    M_pct: Num,
    T_K: Num,
    steel_pct: Mapping[str, Num] | None = None,
    activity: Num = 1.0,
) -> Any:
    """Oxygen in equilibrium with the deoxidant and its oxide, [%O] in mass %.

    Parameters
    ----------
    law : name, see `laws`.
    M_pct : dissolved deoxidant [mass %], above 0, a number or (n,).
    T_K : temperature [K], about 1823 to 2023.
    steel_pct : further elements dissolved [mass %]; oxygen and the deoxidant itself are left
        out of it.
    activity : of the oxide, 1 = pure solid (of CO: its pressure in atm).

    Returns
    -------
    Number or (n,); solves [%O]^y f_O^y [%M]^x f_M^x = a/K with f that depend on [%O] itself,
    on the branch that belongs to low oxygen. Where there is no root below 0.5 % O (hardly any
    deoxidant), 0.5.

    Raises DataError: unknown law. Source: Wagner's formalism; numbers in data/deoxidation.toml.
    """
    element, x, y = _stoichiometry(law)
    M, T, a = np.broadcast_arrays(
        *(np.asarray(part, dtype=float) for part in (M_pct, T_K, activity))
    )
    known = {**(steel_pct or {}), element: M}
    known.pop("O", None)
    log_f = sum(
        (
            (x * interaction(law, element, j, T) + y * interaction(law, "O", j, T)) * pct
            for j, pct in known.items()
        ),
        np.zeros(M.shape),
    )
    by_oxygen = x * interaction(law, element, "O", T) + y * interaction(law, "O", "O", T)
    with np.errstate(divide="ignore"):
        constant = (np.log10(a) - log_K(law, T) - x * np.log10(M) - log_f) * (LN10 / y)
    oxygen = _smaller_root(constant, -by_oxygen * LN10 / y)
    return float(oxygen) if oxygen.ndim == 0 else oxygen


def _smaller_root(c: Array, b: Array) -> Array:
    """The smaller root of ln O = c + b O up to MOST_OXYGEN_PCT, by bisection and Newton.

    Below the maximum of ln O - b O (at O = 1/b where b > 0) the left side less the right one
    rises, so there is one root; where there is none the largest oxygen is given back.
    """
    c, b = np.broadcast_arrays(np.asarray(c, dtype=float), np.asarray(b, dtype=float))
    with np.errstate(divide="ignore", invalid="ignore"):
        top = np.where(b > 1.0 / MOST_OXYGEN_PCT, 1.0 / b, MOST_OXYGEN_PCT)
    high = np.log(top)
    none = high - c - b * top < 0.0
    z = np.minimum(c, high - 1e-3)  # for b > 0 left of the root: Newton climbs to it
    for _ in range(MOST_STEPS):
        oxygen = np.exp(z)
        slope = np.maximum(1.0 - b * oxygen, 1e-6)
        step = np.where(none, 0.0, (c + b * oxygen - z) / slope)
        z = np.minimum(z + step, high)
        if not np.any(np.abs(step) > 1e-14):
            break
    return np.where(none, MOST_OXYGEN_PCT, np.exp(z))


def lowest_oxygen_at_pct(law: str, T_K: Num) -> Any:
    """Deoxidant content at which the dissolved oxygen is least [mass %]; inf where it has none.

    x / (ln 10 (-(x e_M^M + y e_O^M))): where d[%O]/d[%M] = 0, so that e_M^O and e_O^O do not
    enter. Source: derived from the law and Wagner's first-order formalism.
    """
    element, x, y = _stoichiometry(law)
    slope = x * interaction(law, element, element, T_K) + y * interaction(law, "O", element, T_K)
    with np.errstate(divide="ignore"):
        return np.where(slope < 0.0, -x / (LN10 * np.minimum(slope, -1e-300)), np.inf)


def out_of_range(law: str, M_pct: Num, T_K: Num) -> list[Outside]:
    """Limits of the law that at least one heat leaves: (quantity, low, high, outside)."""
    given = {"T_K": T_K, "M_pct": M_pct}
    return find_outside(describe(law).ranges, given.get)
