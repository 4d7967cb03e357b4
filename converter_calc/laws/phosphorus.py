"""Phosphorus partition between slag and metal: published laws, chosen by name.

All laws share one evaluator; their numbers stand in data/phosphorus.toml.
"""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass
from functools import cache
from typing import Any

from converter_calc.basis import dual as ad
from converter_calc.basis.dual import LN10, Num
from converter_calc.basis.elements import molar_mass
from converter_calc.data.tables import read_toml
from converter_calc.laws.catalogue import LawNote, Outside, find_outside, pick, read_note
from converter_calc.laws.slag_measures import (
    TINY,
    FetO_pct,
    basicity,
    measure,
    positive,
    share_of,
    total_iron_pct,
    weighted_sum,
)

Terms = tuple[tuple[str, float], ...]
PLAIN, IRON, OXYGEN = "L_P", "L_P/T_Fe^2.5", "L_P/O^2.5"
QUINTIC = "P2O5/(P^2 FetO^5)"
ACTIVITY = "a_P2O5/(P^2 O^5)"
#: Added to (%P2O5)(%FetO) under the root of the quintic laws, (mass %)^2. It keeps the
#: derivative finite for a slag without phosphorus and moves L_P by less than 1e-9 of itself
#: once the slag holds 0.01 % P2O5.
TINY_PHOSPHATE = 1e-10


@dataclass(frozen=True)
class _Law:
    """Coefficients times ln 10 (and times 1/2 for the quintic laws): L_P = exp(...) x ..."""

    left_side: str
    linear: Terms
    per_T: float
    constant: float
    log_factor: float
    inside_log: Terms
    carbon_per_T: float
    carbon_constant: float
    moles: Terms
    note: LawNote


@cache
def _table() -> dict[str, _Law]:
    return {row["name"]: _compile(row) for row in read_toml("phosphorus.toml")["law"]}


def _compile(row: Mapping[str, Any]) -> _Law:
    half = 0.5 if row["left_side"] in (QUINTIC, ACTIVITY) else 1.0
    factor = LN10 * half
    activity = row.get("activity", {})  # log gamma = sum(moles) + per_T / T + constant
    return _Law(
        left_side=row["left_side"],
        linear=tuple((oxide, c * factor) for oxide, c in row.get("linear", {}).items()),
        per_T=(row["per_T"] - activity.get("per_T", 0.0)) * factor,
        constant=(row["constant"] - activity.get("constant", 0.0)) * factor,
        log_factor=row.get("log_factor", 0.0) * half,
        inside_log=tuple(row.get("inside_log", {}).items()),
        carbon_per_T=row.get("carbon_per_T", 0.0) * factor,
        carbon_constant=row.get("carbon_constant", 0.0) * factor,
        moles=tuple((oxide, c * factor) for oxide, c in activity.get("moles", {}).items()),
        note=read_note(row, _formula(row)),
    )


def _formula(row: Mapping[str, Any]) -> str:
    """The law as text, from its data row."""
    parts = [f"{c:+g}(%{oxide})" for oxide, c in row.get("linear", {}).items()]
    if "log_factor" in row:
        inside = " ".join(f"{c:+g}(%{oxide})" for oxide, c in row["inside_log"].items())
        parts.append(f"{row['log_factor']:+g} log[{inside}]")
    parts += [f"{row['per_T']:+g}/T", f"{row['constant']:+g}"]
    if "carbon_per_T" in row:
        parts.append(f"+({row['carbon_per_T']:g}/T {row['carbon_constant']:+g})[%C]")
    text = f"log{{{row['left_side']}}} = {' '.join(parts)}"
    if "activity" in row:
        activity = row["activity"]
        terms = [f"{c:+g} N_{oxide}" for oxide, c in activity["moles"].items()]
        terms += [f"{activity['per_T']:+g}/T", f"{activity['constant']:+g}"]
        text += f", log gamma_P2O5 = {' '.join(terms)}"
    return text


def laws() -> list[str]:
    """Names of the phosphorus laws, in the order of their data file."""
    return list(_table())


def describe(law: str) -> LawNote:
    """Formula text, source, range and scatter of a law.

    Raises
    ------
    DataError : unknown law.
    """
    return pick(_table(), law, "phosphorus law").note


def _power_two_and_a_half(x: Num) -> Num:
    return ad.square(x) * ad.sqrt(x + TINY)


def partition_ratio(law: str, slag_pct: Mapping[str, Num], T_K: Num, C_pct: Num, O_pct: Num) -> Num:
    """L_P = (%P)/[%P] at equilibrium by the named law, dimensionless.

    Parameters
    ----------
    law : a name of `laws()`.
    slag_pct : mass % of the liquid slag by oxide, numbers, (n,) or Dual; absent = 0.
    T_K : temperature [K]. C_pct : carbon of the metal [mass %], used by ogawa_2001.
    O_pct : dissolved oxygen of the metal [mass %], used by turkdogan_2000 and
    turkdogan_pearson_1953.

    Returns
    -------
    Num of the same shape. A "quintic" law gives the phosphorus constant
    (%P2O5)/([%P]^2 (%FetO)^5); then L_P = 0.4364 sqrt((%P2O5)(%FetO)^5 10^f), which grows
    with the square root of the P2O5 in the slag. An "activity" law gives the equilibrium
    constant and log gamma of P2O5 by mole fractions N = (%oxide/M)/n, n = sum(%oxide/M), all
    iron as FeO; then L_P = 0.4364 sqrt((%P2O5) M n K/gamma) [%O]^2.5.

    Raises
    ------
    DataError : unknown law.

    Source: of each law in its data row, see `describe`; ranges in `out_of_range`.
    """
    row = pick(_table(), law, "phosphorus law")
    if row.left_side == QUINTIC:
        slag_pct = {**slag_pct, "FetO": FetO_pct(slag_pct)}
    exponent = row.per_T / T_K + row.constant
    if row.linear:
        exponent = exponent + weighted_sum(row.linear, slag_pct)
    if row.inside_log:
        inside = positive(weighted_sum(row.inside_log, slag_pct))
        exponent = exponent + ad.log(inside) * row.log_factor
    if row.carbon_constant:
        exponent = exponent + (row.carbon_per_T / T_K + row.carbon_constant) * C_pct
    base = ad.exp(exponent)
    if row.left_side == IRON:
        return base * _power_two_and_a_half(total_iron_pct(slag_pct))
    if row.left_side == OXYGEN:
        return base * _power_two_and_a_half(O_pct)
    if row.left_side == QUINTIC:
        FetO = slag_pct["FetO"]
        root = ad.sqrt(FetO * slag_pct.get("P2O5", 0.0) + TINY_PHOSPHATE)
        return base * (ad.square(FetO) * root * share_of("P", "P2O5"))
    if row.left_side == ACTIVITY:
        return base * _by_moles(row, slag_pct) * _power_two_and_a_half(O_pct)
    return base


def _by_moles(row: _Law, slag_pct: Mapping[str, Num]) -> Num:
    """0.4364 sqrt((%P2O5) M n / gamma), the part of gamma that depends on the slag alone."""
    mol = {
        oxide: pct * (1.0 / molar_mass(oxide))
        for oxide, pct in slag_pct.items()
        if oxide not in ("FeO", "Fe2O3", "FetO")
    }
    mol["FeO"] = FetO_pct(slag_pct) * (1.0 / molar_mass("FeO"))
    n = sum(mol.values())
    slope = weighted_sum(row.moles, mol) / n
    root = ad.sqrt(slag_pct.get("P2O5", 0.0) * n * molar_mass("P2O5") + TINY_PHOSPHATE)
    return ad.exp(-slope) * root * share_of("P", "P2O5")


def out_of_range(
    law: str, slag_pct: Mapping[str, Num], T_K: Num, C_pct: Num | None = None
) -> list[Outside]:
    """Limits of the law that at least one heat leaves.

    Returns a list of (quantity, low, high, boolean array: True where outside). quantity is
    `<oxide>_pct`, `T_Fe_pct`, `C_pct`, `basicity` or `temperature_C`.
    """
    ranges = describe(law).ranges
    return find_outside(ranges, lambda quantity: measure(quantity, slag_pct, T_K, C_pct))


def on_plateau(slag_pct: Mapping[str, Num]) -> Any:
    """True where measured L_P no longer rises with basicity and iron oxide, though laws do.

    slag_pct : mass % by oxide, with CaO and SiO2. Returns a boolean or an array (n,): B above
    2.5 and (%FeO) above 20. Source: S. Basu, A.K. Lahiri, S. Seetharaman, Metall. Mater.
    Trans. B 38 (2007) 357.
    """
    limit = read_toml("phosphorus.toml")["plateau"]
    rich = ad.value(slag_pct.get("FeO", 0.0)) > limit["FeO_pct"]
    return (ad.value(basicity(slag_pct)) > limit["basicity"]) & rich


def oxides_of(law: str) -> tuple[str, ...]:
    """Oxides that the formula of a law names, iron oxide by name only where it is in a term.

    Raises DataError for an unknown law.
    """
    row = pick(_table(), law, "phosphorus law")
    if row.moles:  # every oxide counts in the sum of moles; these are the ones analysed
        return ("CaO", "SiO2", "MgO", "FeO", "MnO", "P2O5")
    names = dict.fromkeys(oxide for oxide, _ in (*row.linear, *row.inside_log))
    return tuple("FeO" if oxide == "FetO" else oxide for oxide in names)


def uses_iron(law: str) -> bool:
    """Whether a law looks at the iron of the slag. Raises DataError for an unknown law."""
    row = pick(_table(), law, "phosphorus law")
    return row.left_side in (IRON, QUINTIC) or bool(row.moles)


def uses_oxygen(law: str) -> bool:
    """Whether a law looks at the oxygen of the metal. Raises DataError for an unknown law."""
    return pick(_table(), law, "phosphorus law").left_side in (OXYGEN, ACTIVITY)


def uses_carbon(law: str) -> bool:
    """Whether a law looks at the carbon of the metal. Raises DataError for an unknown law."""
    return pick(_table(), law, "phosphorus law").carbon_constant != 0.0
