"""How near measured heats come to a phosphorus law: the approach factor with its error.

For every heat with an analysed slag, ln(L_P measured / L_P of the law) is formed; its robust
mean is the logarithm of the approach factor.
"""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass
from typing import Any

import numpy as np

from converter_calc.basis.dual import Array
from converter_calc.basis.errors import Fault, InputError
from converter_calc.basis.units import ZERO_C_K
from converter_calc.laws import phosphorus
from converter_calc.laws.slag_measures import share_of
from converter_calc.planning.explain import Term

#: Huber's constant: 95 % of the efficiency of the mean for normal errors (Huber and Ronchetti,
#: Robust Statistics, 2nd ed., Wiley 2009, from memory).
HUBER = 1.345
#: Median absolute deviation to standard deviation of a normal distribution.
MAD_TO_SIGMA = 1.482602218505602
#: Fewest heats that a factor is fitted to, and fewest that a fold may leave to fit on.
LEAST_HEATS = 8
MOST_ROUNDS = 200


@dataclass(frozen=True)
class ApproachFit:
    """The approach of measured heats to one law.

    approach : exp of the robust mean of ln(L_P measured / L_P of the law). ln_error : standard
    error of that mean, heats taken as independent. scatter_log10 : robust standard deviation
    of log10 L_P about it. heats : number fitted to. in_range : of these, inside the law's range.
    """

    law: str
    approach: float
    ln_error: float
    scatter_log10: float
    heats: int
    in_range: int

    @property
    def approach_low(self) -> float:
        """Approach one standard error lower."""
        return float(self.approach * np.exp(-self.ln_error))

    @property
    def approach_high(self) -> float:
        """Approach one standard error higher."""
        return float(self.approach * np.exp(self.ln_error))

    def terms(self) -> list[Term]:
        """The fit as lines of an explanation."""
        note = phosphorus.describe(self.law)
        law = f"{note.formula}; {note.source} ({note.known})"
        return [
            Term("heats fitted to", float(self.heats), "", "measured slag, metal and temperature"),
            Term("of these inside the law's range", float(self.in_range), ""),
            Term("approach, exp of Huber's mean of ln(measured/law)", self.approach, "", law),
            Term("one standard error lower", self.approach_low, ""),
            Term("one standard error higher", self.approach_high, ""),
            Term("scatter of log L_P about it (median deviation)", self.scatter_log10, ""),
        ]


def robust_mean(x: Any) -> tuple[float, float, float]:
    """Huber's mean of a sample, its standard error, and the scale used.

    x : finite numbers, (n,), n >= 1. The scale is 1.4826 times the median absolute deviation
    from the median; where that is 0 the median is returned with no error.

    Source: P.J. Huber, Ann. Math. Stat. 35 (1964) 73; standard error from the influence
    function, s sqrt(mean psi^2) / (mean psi' sqrt n) (from memory).
    """
    x = np.asarray(x, dtype=float)
    centre = float(np.median(x))
    scale = MAD_TO_SIGMA * float(np.median(np.abs(x - centre)))
    if scale <= 1e-12 * max(1.0, abs(centre)):  # what rounding leaves of equal numbers
        return centre, 0.0, 0.0
    for _ in range(MOST_ROUNDS):
        z = (x - centre) / scale
        step = scale * float(np.clip(z, -HUBER, HUBER).sum()) / float((np.abs(z) <= HUBER).sum())
        centre += step
        if abs(step) < 1e-13 * scale:
            break
    z = (x - centre) / scale
    psi = np.clip(z, -HUBER, HUBER)
    slope = float(np.mean(np.abs(z) <= HUBER))
    error = scale * float(np.sqrt(np.mean(psi**2))) / (slope * np.sqrt(x.size))
    return centre, error, scale


def ln_ratios(
    law: str,
    slag_pct: Mapping[str, Any],
    temp_C: Any,
    P_pct: Any,
    C_pct: Any = np.nan,
    O_pct: Any = np.nan,
) -> Array:
    """ln(L_P measured / L_P of the law) of measured pairs of slag and metal, (n,).

    Parameters
    ----------
    law : name. slag_pct : mass % by oxide, (n,); iron as FeO and Fe2O3, or all of it as FeO.
    temp_C : temperature [C]. P_pct : phosphorus of the metal [mass %], above 0. C_pct, O_pct :
    carbon and dissolved oxygen of the metal [mass %], for laws that carry them.

    Returns
    -------
    NaN where something that the law needs is missing: a missing oxide is missing, not zero.
    An oxide that is no key of slag_pct at all counts as missing too if the law names it.

    Raises DataError for an unknown law.
    """
    P, T_K = np.asarray(P_pct, dtype=float), np.asarray(temp_C, dtype=float) + ZERO_C_K
    slag = {oxide: np.asarray(pct, dtype=float) for oxide, pct in slag_pct.items()}
    needs_C, needs_O = needs(law)[1:]
    carbon = np.asarray(C_pct if needs_C else 0.0, dtype=float)
    oxygen = np.asarray(O_pct if needs_O else 0.0, dtype=float)
    for oxide in needs(law)[0]:
        slag.setdefault(oxide, np.asarray(np.nan))
    # oxides that the law does not look at must not spoil it where they are missing
    slag = {oxide: pct for oxide, pct in slag.items() if oxide in {*needs(law)[0], "Fe2O3"}}
    with np.errstate(all="ignore"):
        by_law = phosphorus.partition_ratio(law, slag, T_K, carbon, oxygen)
        measured = slag["P2O5"] * share_of("P", "P2O5") / P
        found = np.log(measured / by_law)
    good = np.isfinite(found) & (P > 0.0) & (slag["P2O5"] > 0.0) & (slag["CaO"] > 0.0)
    return np.where(good, found, np.nan)


def needs(law: str) -> tuple[tuple[str, ...], bool, bool]:
    """What a law looks at: oxides, whether the carbon, whether the oxygen of the metal."""
    oxides = dict.fromkeys(("CaO", "P2O5", *phosphorus.oxides_of(law)))
    if phosphorus.uses_iron(law):
        oxides["FeO"] = None
    return tuple(oxides), phosphorus.uses_carbon(law), phosphorus.uses_oxygen(law)


def fit_pairs(
    law: str,
    slag_pct: Mapping[str, Any],
    temp_C: Any,
    P_pct: Any,
    C_pct: Any = np.nan,
    O_pct: Any = np.nan,
) -> ApproachFit:
    """Approach factor from measured pairs of slag and metal alone; inputs as `ln_ratios`.

    Raises
    ------
    InputError : fewer than LEAST_HEATS pairs that the law can use. DataError : unknown law.
    """
    ratios = np.atleast_1d(ln_ratios(law, slag_pct, temp_C, P_pct, C_pct, O_pct))
    use = np.isfinite(ratios)
    if use.sum() < LEAST_HEATS:
        message = f"{int(use.sum())} heats have all that {law} needs, {LEAST_HEATS} are needed"
        raise InputError([Fault("log", message)])
    mean, error, scale = robust_mean(ratios[use])
    slag = {oxide: np.broadcast_to(np.asarray(pct, dtype=float), use.shape)[use]
            for oxide, pct in slag_pct.items()}  # fmt: skip
    T_K = np.broadcast_to(np.asarray(temp_C, dtype=float), use.shape)[use] + ZERO_C_K
    carbon = np.broadcast_to(np.asarray(C_pct, dtype=float), use.shape)[use]
    inside = np.ones(int(use.sum()), dtype=bool)
    for _, _, _, outside in phosphorus.out_of_range(law, slag, T_K, carbon):
        inside &= ~outside
    return ApproachFit(
        law, float(np.exp(mean)), error, float(scale / np.log(10.0)), int(use.sum()),
        int(inside.sum()),
    )  # fmt: skip
