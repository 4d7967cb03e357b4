"""Silicon and manganese that deoxidise together: a liquid manganese silicate as the product.

With much manganese beside the silicon the product is not pure silica; its silica is less active
and the steel holds less oxygen than by silicon alone. Numbers: data/manganese_silicate.toml.
"""

from __future__ import annotations

from collections.abc import Mapping

import numpy as np

from converter_calc.basis.dual import LN10, Array, Num
from converter_calc.basis.units import R_J_MOL_K
from converter_calc.data.tables import read_toml
from converter_calc.laws import deoxidation

SILICON, MANGANESE = "silicon_jsps_1988", "manganese_turkdogan_1996"
MOST_STEPS = 40
#: Log odds of a share that is zero or one for every purpose.
MOST_ODDS = 30.0


def activities(silica_share: Num, T_K: Num) -> tuple[Array, Array]:
    """Activities of MnO and SiO2, by their pure solids, in liquid MnO-SiO2.

    Parameters
    ----------
    silica_share : mole fraction of SiO2, 0 < x < 1. T_K : temperature [K].

    Returns
    -------
    a_MnO, a_SiO2; above 1 where the solid would separate. Source: S. Ban-ya, ISIJ Int. 33
    (1993) 2 (from memory).
    """
    row = read_toml("manganese_silicate.toml")
    x, RT = np.asarray(silica_share, dtype=float), R_J_MOL_K * np.asarray(T_K, dtype=float)
    T = np.asarray(T_K, dtype=float)

    def by_solid(share: Array, other: Array, to_solid: list[float]) -> Array:
        shift = row["alpha_J_mol"] * other * other + to_solid[0] + to_solid[1] * T
        return np.asarray(share * np.exp(shift / RT))

    return by_solid(1.0 - x, x, row["MnO_to_solid"]), by_solid(x, 1.0 - x, row["SiO2_to_solid"])


def silica_activity(
    Si_pct: Num, Mn_pct: Num, T_K: Num, steel_pct: Mapping[str, Num] | None = None
) -> Array:
    """Activity of silica in the silicate that is in equilibrium with silicon and manganese.

    Parameters
    ----------
    Si_pct, Mn_pct : dissolved [mass %], above 0, numbers or (n,). T_K : temperature [K].
    steel_pct : further elements [mass %] for the interaction; oxygen does not enter, since its
    activity drops out of [Si] + 2 MnO = SiO2 + 2 [Mn].

    Returns
    -------
    (n,), at most 1 (pure silica). Where so little silicon stands beside the manganese that
    solid MnO would form, the value of the silicate of equal ratio all the same.
    """
    Si, Mn, T = np.broadcast_arrays(*(np.asarray(v, dtype=float) for v in (Si_pct, Mn_pct, T_K)))
    steel = {**(steel_pct or {}), "Si": Si, "Mn": Mn}
    steel.pop("O", None)

    def log_f(law: str, element: str) -> Array:
        return sum(
            (deoxidation.interaction(law, element, j, T) * pct for j, pct in steel.items()),
            np.zeros(Si.shape),
        )

    wanted = deoxidation.log_K(SILICON, T) + np.log10(Si) + log_f(SILICON, "Si")
    wanted = wanted - 2.0 * (
        deoxidation.log_K(MANGANESE, T) + np.log10(Mn) + log_f(MANGANESE, "Mn")
    )
    return np.minimum(activities(_silica_share(wanted * LN10, T), T)[1], 1.0)


def _silica_share(wanted: Array, T_K: Array) -> Array:
    """Mole fraction x of silica at which ln a_SiO2 - 2 ln a_MnO has the value wanted.

    It rises with x everywhere; Newton on the log odds of x, each step held to 3.
    """
    slope = read_toml("manganese_silicate.toml")["alpha_J_mol"] / (R_J_MOL_K * T_K)
    odds = np.zeros(wanted.shape)
    for _ in range(MOST_STEPS):
        x = 1.0 / (1.0 + np.exp(-odds))
        a_MnO, a_SiO2 = activities(x, T_K)
        miss = wanted - np.log(a_SiO2) + 2.0 * np.log(a_MnO)
        rises = 1.0 + x - slope * x * (1.0 - x) * (2.0 + 2.0 * x)
        step = np.clip(miss / rises, -3.0, 3.0)
        odds = np.clip(odds + step, -MOST_ODDS, MOST_ODDS)
        if np.all(np.abs(step) < 1e-12):
            break
    return np.asarray(1.0 / (1.0 + np.exp(-odds)))
