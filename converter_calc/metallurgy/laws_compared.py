"""One plan under every published phosphorus law: what each asks for, side by side.

Each row is a plan of its own, made by the one balance; nothing is read off another law's.
"""

from __future__ import annotations

from collections.abc import Iterable, Mapping
from dataclasses import dataclass, replace
from typing import TYPE_CHECKING, Any

import numpy as np

from converter_calc.balance.heats import HeatTable
from converter_calc.balance.schema import parameters
from converter_calc.basis.dual import Array
from converter_calc.basis.elements import mass_fractions
from converter_calc.laws import phosphorus
from converter_calc.planning.explain import Explanation, Term, explain
from converter_calc.planning.lime_sweeps import lime_free, phosphorus_free, with_law
from converter_calc.planning.outcome import Outcome, spread
from converter_calc.planning.plan import plan_heats
from converter_calc.planning.solving import plan_groups, solve_heats, with_values
from converter_calc.planning.sweeps import merged
from converter_calc.planning.verdicts import AT_AIM

if TYPE_CHECKING:
    import pandas as pd

#: Columns of numbers that a plan without answer leaves blank.
NUMBERS = (
    *("lime_kg", "flux_kg", "slag_kg", "iron_to_slag_kg", "iron_to_slag_pct", "oxygen_Nm3"),
    *("scrap_kg", "coolant_kg", "fuel_kg", "steel_kg", "undissolved_lime_kg", "basicity"),
    *("slag_T_Fe_pct", "L_P", "end_P_pct", "cost_per_t"),
)


@dataclass(frozen=True)
class LawsCompared:
    """Plans of n heats under each law.

    table : a row a law and heat, in the order of the laws given: heat_id, law, chosen, status
    ("solved", "infeasible", "not converged"), binding, sets_lime ("phosphorus aim", "least
    basicity" or "given CaO"), approach, scatter_log10 (NaN where none is published or
    measured), lime_kg, lime_low_kg and lime_high_kg (lime if the law is off by its scatter;
    high NaN where no lime reaches the aim then), lime_for_P_kg (for the phosphorus aim alone,
    without the least basicity), the NUMBERS of the plan (masses [kg], oxygen [Nm3], mass %),
    nearest_end_P_pct (where infeasible), in_range, outside (quantities out of the law's
    range), on_plateau (beyond where measured partition still rises), source, known.
    outcomes : law -> the groups of heats solved, to explain from.
    """

    table: pd.DataFrame
    outcomes: Mapping[str, list[tuple[Array, Outcome]]]

    def explanation(self, law: str, heat: int = 0) -> Explanation:
        """Why the lime of one law in one heat (row number) is what it is, or why there is none."""
        found = None
        for rows, outcome in self.outcomes[law]:  # rows are the first ones of the outcome
            for index in np.flatnonzero(rows == heat).tolist():
                if outcome.status[index] == "solved":
                    found = explain(outcome, "lime", index)
        if found is None:
            row = self.table[self.table["law"] == law].iloc[heat]
            reason = f"no plan under this law; what binds is {row['binding']}"
            near = Term(
                "least end phosphorus that lime reaches", float(row["nearest_end_P_pct"]), "%"
            )
            found = Explanation("lime", np.nan, "kg", reason, [near])
        found.terms += self._law_terms(law, heat)
        return found

    def _law_terms(self, law: str, heat: int) -> list[Term]:
        note = phosphorus.describe(law)
        part = self.table[self.table["law"] == law].iloc[heat]
        source = f"{note.formula}; {note.source} ({note.known})"
        terms = [Term("approach times the law", float(part["approach"]), "", source)]
        if np.isfinite(part["scatter_log10"]):
            source = "scatter of the law (published, or measured where fitted)"
            terms += [
                Term("scatter of log L_P", float(part["scatter_log10"]), "", source),
                Term("lime if L_P is higher by it", float(part["lime_low_kg"]), "kg"),
                Term("lime if L_P is lower by it", float(part["lime_high_kg"]), "kg"),
            ]
        return terms


def compare_laws(
    heats: HeatTable,
    laws: Iterable[str] | None = None,
    approach: Mapping[str, float] | None = None,
    scatter_log10: Mapping[str, float] | None = None,
) -> LawsCompared:
    """Plan heats under each phosphorus law.

    Lime is set free; a pinned phosphorus, partition ratio, basicity or CaO is let go, so that
    each law answers the same question: the charge for aim P, carbon, temperature and MgO.

    Parameters
    ----------
    heats : n heats. laws : names in the order wanted; None: the chosen law, then the others.
    approach : law -> approach to equilibrium, 0.01 to 3; else practice.P_approach of the heat.
    scatter_log10 : law -> one standard deviation of log10 L_P; else the published one.

    Returns
    -------
    LawsCompared, a row a law and heat. Masses in kg a heat.

    Raises
    ------
    InputError : a heat lacks what a plan needs. DataError : unknown law.
    """
    import pandas as pd

    base = lime_free(phosphorus_free(heats))
    chosen = base.choices.laws["phosphorus"]
    names = list(dict.fromkeys([chosen, *phosphorus.laws()] if laws is None else laws))
    parts, outcomes = [], {}
    for law in names:
        note = phosphorus.describe(law)
        by_law = with_law(base, law)
        if approach is not None and law in approach:
            by_law = with_values(by_law, P_approach=approach[law])
        scatter = (scatter_log10 or {}).get(law, note.scatter_log10)
        columns, outcomes[law] = _planned(by_law, scatter)
        columns = {
            "heat_id": np.array(base.ids, dtype=object),
            "law": np.full(base.n, law, dtype=object),
            "chosen": np.full(base.n, law == chosen),
            "approach": spread(by_law.values["P_approach"], base.n),
            "scatter_log10": np.full(base.n, np.nan if scatter is None else float(scatter)),
            **columns,
            "source": np.full(base.n, note.source, dtype=object),
            "known": np.full(base.n, note.known, dtype=object),
        }
        parts.append(pd.DataFrame(columns))
    table: pd.DataFrame = pd.concat(parts, ignore_index=True)
    return LawsCompared(table, outcomes)


Groups = list[tuple[Array, Outcome]]
#: The plan itself; the law off by its scatter to either side; the phosphorus aim alone.
CASES = ("lime_kg", "lime_low_kg", "lime_high_kg", "lime_for_P_kg")


def _planned(heats: HeatTable, scatter: float | None) -> tuple[dict[str, Any], Groups]:
    """Columns of one law, all cases planned together, and the groups of the plans themselves."""
    n, factor = heats.n, 10.0 ** (scatter or 0.0)
    case = np.repeat(np.arange(len(CASES)), n)
    off = np.array([1.0, factor, 1.0 / factor, 1.0])[case]
    table = heats.take(np.tile(np.arange(n), len(CASES)))
    aim, least = table.values["aim_P_pct"], parameters()["aim_basicity"].low
    table = with_values(
        table,
        P_approach=table.values["P_approach"] * off,
        aim_basicity=np.where(case == 3, least, table.values["aim_basicity"]),
    )
    wanted = (case == 0) | ((case < 3) & (scatter is not None)) | ((case == 3) & np.isfinite(aim))
    most_P = np.full(table.n, np.nan)
    _at_most_lime(table, wanted, most_P)
    hopeless = wanted & (most_P > aim)
    rows = np.flatnonzero(wanted & ~hopeless)
    groups = [(rows[some], outcome) for some, outcome in plan_heats(table.take(rows))]
    columns = {**_texts(table.n, groups), **merged(table.n, groups, _numbers)}
    lime = columns.get("lime_kg", np.full(table.n, np.nan))
    missing = {name: np.full(table.n, np.nan) for name in (*NUMBERS, "nearest_end_P_pct")}
    flags = {name: np.zeros(table.n, dtype=bool) for name in ("in_range", "on_plateau")}
    columns = {name: column[:n] for name, column in {**missing, **flags, **columns}.items()}
    for row in np.flatnonzero(hopeless[:n]).tolist():
        columns["status"][row] = "infeasible"
        columns["sets_lime"][row] = "phosphorus aim"
        columns["nearest_end_P_pct"][row] = most_P[row]
        columns["binding"][row] = (
            f"phosphorus (aim.P_pct): at the most lime that dissolves the steel ends at "
            f"{most_P[row]:.4g} % P, the aim is {aim[row]:.4g} % P"
        )
    columns |= {name: lime[k * n : (k + 1) * n] for k, name in enumerate(CASES)}
    kept = [(some[some < n], outcome) for some, outcome in groups]
    return columns, [(some, outcome) for some, outcome in kept if some.size]


def _at_most_lime(table: HeatTable, wanted: Array, P_pct: Array) -> None:
    """Fill in the end phosphorus [mass %] at the most lime that dissolves; NaN: no answer."""
    rows = np.flatnonzero(wanted & np.isfinite(table.values["aim_P_pct"]))
    if not rows.size:
        return
    for some, group, ask in plan_groups(table.take(rows)):
        solved = solve_heats(group, replace(ask, lime_rule="lime_limit"))
        P = spread(solved.steel_pct().get("P", 0.0), solved.n)
        P_pct[rows[some]] = np.where(solved.converged, P, np.nan)


def _texts(n: int, groups: list[tuple[Array, Outcome]]) -> dict[str, Any]:
    """Columns of words: status, what binds, what sets the lime, what is out of range."""
    found = {name: np.full(n, "", dtype=object)
             for name in ("status", "binding", "sets_lime", "outside")}  # fmt: skip
    for rows, outcome in groups:
        found["status"][rows] = np.array(outcome.status, dtype=object)
        found["binding"][rows] = np.array(outcome.binding, dtype=object)
        found["sets_lime"][rows] = _sets_lime(outcome)
        found["outside"][rows] = _outside(outcome)
    return found


def _sets_lime(outcome: Outcome) -> Any:
    n = outcome.n
    aim = outcome.heats.values["aim_P_pct"]
    P = spread(outcome.steel_pct().get("P", 0.0), n)
    by_P = np.isfinite(aim) & (np.abs(P - aim) <= AT_AIM * np.where(np.isfinite(aim), aim, 1.0))
    return np.where(by_P, "phosphorus aim", "least basicity").astype(object)


def _outside(outcome: Outcome) -> Any:
    s, n = outcome.state, outcome.n
    words = [[] for _ in range(n)]  # type: list[list[str]]
    law = outcome.p.laws["phosphorus"]
    slag = {oxide: np.asarray(pct) for oxide, pct in s.slag_pct.items()}
    for quantity, low, high, mask in phosphorus.out_of_range(law, slag, s.T_K, s.C_pct):
        for row in np.flatnonzero(np.broadcast_to(mask, (n,))).tolist():
            words[row].append(f"{quantity} not in {low:g} to {high:g}")
    return np.array(["; ".join(row) for row in words], dtype=object)


def iron_to_slag_kg(outcome: Outcome) -> Any:
    """Iron that the slag holds as oxide [kg], metal droplets not counted."""
    return sum(
        outcome.state.slag_species_kg[oxide] * mass_fractions(oxide)["Fe"]
        for oxide in ("FeO", "Fe2O3")
    )


def _numbers(outcome: Outcome) -> dict[str, Any]:
    s, n, choices = outcome.state, outcome.n, outcome.heats.choices
    kg, iron = outcome.charged_kg, iron_to_slag_kg(outcome)
    values: dict[str, Any] = {
        "lime_kg": kg.get(choices.lime, 0.0),
        "flux_kg": kg.get(choices.magnesia_flux, 0.0),
        "slag_kg": s.slag_kg,
        "iron_to_slag_kg": iron,
        "iron_to_slag_pct": iron * 100.0 / s.totals.of("Fe"),
        "oxygen_Nm3": s.oxygen_Nm3,
        "scrap_kg": outcome.kind_kg("scrap"),
        "coolant_kg": kg.get(choices.coolant, 0.0),
        "fuel_kg": kg.get(choices.fuel, 0.0),
        "steel_kg": s.steel_kg,
        "undissolved_lime_kg": s.undissolved_kg,
        "basicity": s.basicity,
        "slag_T_Fe_pct": s.laws["T_Fe_pct"],
        "L_P": s.laws["L_P"],
        "end_P_pct": outcome.steel_pct().get("P", 0.0),
        "cost_per_t": outcome.cost(),
    }
    good = np.array([status == "solved" for status in outcome.status], dtype=bool)
    found = {name: np.where(good, spread(values[name], n), np.nan) for name in NUMBERS}
    nearest = [point.get("end_P_pct", np.nan) for point in outcome.nearest]
    found["nearest_end_P_pct"] = np.where(good, np.nan, np.array(nearest, dtype=float))
    found["in_range"] = np.array([not text for text in _outside(outcome)], dtype=bool) & good
    slag = {oxide: np.asarray(pct) for oxide, pct in s.slag_pct.items()}
    found["on_plateau"] = np.broadcast_to(phosphorus.on_plateau(slag), (n,)) & good
    return found
