"""Which phosphorus law describes the shop's own heats best.

A law is judged by the end phosphorus that it gives, from the measured slag and temperature, for
heats that its approach factor was not fitted to. The CaO of a slag sample holds lime that did
not dissolve too, so the factor makes up for that as well.
"""

from __future__ import annotations

from collections.abc import Iterable, Mapping
from dataclasses import dataclass, field
from typing import TYPE_CHECKING, Any

import numpy as np

from converter_calc.balance.schema import parameters
from converter_calc.basis.dual import Array
from converter_calc.basis.errors import Fault, InputError
from converter_calc.laws import phosphorus
from converter_calc.metallurgy.approach import (
    LEAST_HEATS,
    ApproachFit,
    fit_pairs,
    ln_ratios,
    needs,
    robust_mean,
)

if TYPE_CHECKING:
    import pandas as pd

OXIDES = ("CaO", "SiO2", "MgO", "FeO", "MnO", "P2O5", "Al2O3")
#: What every law needs of a heat, beside the oxides of its own.
NEEDED = ("end_temp_C", "end_P_pct", "slag_CaO_pct", "slag_FeO_pct", "slag_P2O5_pct")
SCHEMES = ("forward", "folds")


@dataclass(frozen=True)
class LawRanking:
    """Laws ranked by their error on heats that they were not fitted to.

    table : a row a law, best first: law, rank (0 where too few heats can be used), approach,
    ln_error, scatter_log10, heats, in_range, tested, error_P_pct (mean absolute error of end
    phosphorus [mass %]), rms_P_pct, bias_P_pct (calculated - measured), error_P_share_pct (mean
    absolute error as a share of the measured P), beside_best_pct (mean of the absolute errors
    less those of the best law) and beside_best_error_pct (its standard error, paired heats).
    tests : a row a law and tested heat: heat (row of the log), law, measured_P_pct,
    calculated_P_pct. notes : what was left out, in sentences.
    """

    table: pd.DataFrame
    fits: Mapping[str, ApproachFit]
    tests: pd.DataFrame
    notes: list[str] = field(default_factory=list)

    @property
    def best(self) -> str | None:
        """The law ranked first; None where no law could be tested."""
        ranked = self.table[self.table["rank"] == 1]
        return str(ranked["law"].iloc[0]) if len(ranked) else None

    @property
    def offered(self) -> str | None:
        """The best law that is inside its range for most heats, with a factor that is allowed.

        None where there is none.
        """
        row, table = parameters()["P_approach"], self.table
        good = table[(table["rank"] > 0) & (2 * table["in_range"] >= table["heats"])]
        good = good[(good["approach"] >= row.low) & (good["approach"] <= row.high)]
        return str(good["law"].iloc[0]) if len(good) else None


def rank_laws(
    log: pd.DataFrame,
    laws: Iterable[str] | None = None,
    scheme: str = "forward",
    folds: int = 5,
) -> LawRanking:
    """Fit the approach to every law and rank the laws by heats that they were not fitted to.

    Parameters
    ----------
    log : heat log, a row a heat: end_temp_C, end_P_pct, end_C_pct, end_O_ppm and
        slag_<oxide>_pct, slag_FeO_pct being all iron of the slag as FeO; in the order of
        tapped_at where that is there, else of the rows. Blank is missing, not zero.
    laws : names; None: all. scheme : "forward" (fit on the heats before, test the next part) or
        "folds" (fit on all other parts). folds : parts that are tested, 2 to 20.

    Returns
    -------
    LawRanking. All laws are tested on the same heats: those that every ranked law can use. A
    law that can use fewer than half of the usable heats (an oxide or the oxygen of the metal is
    hardly ever measured) is listed without rank, with a note.

    Raises
    ------
    InputError : no heat has slag, phosphorus and temperature; a column is no number; a wrong
    scheme. DataError : unknown law.
    """
    import pandas as pd

    if scheme not in SCHEMES or not 2 <= folds <= 20:
        allowed = f"scheme is one of {', '.join(SCHEMES)}, folds 2 to 20"
        raise InputError([Fault("rank_laws", f"given {scheme!r}, {folds}; {allowed}")])
    names = phosphorus.laws() if laws is None else list(laws)
    ordered, notes = _measured(log)
    ratios = {law: _ratios_of(law, ordered) for law in names}
    usable = np.zeros(len(ordered), dtype=bool)
    for column in ratios.values():
        usable |= np.isfinite(column)
    notes.append(f"{int(usable.sum())} of {len(log)} heats have what at least one law needs")
    ranked: list[str] = []
    alone: list[str] = []
    for law in names:
        enough = np.isfinite(ratios[law]).sum() >= max(LEAST_HEATS, 0.5 * usable.sum())
        (ranked if enough else alone).append(law)
    notes += [_left_out(law, ordered, int(np.isfinite(ratios[law]).sum())) for law in alone]
    common = usable & np.all([np.isfinite(ratios[law]) for law in ranked], axis=0)
    rows = np.flatnonzero(common) if ranked else np.zeros(0, dtype=int)
    tests = _tested(ordered, {law: ratios[law][rows] for law in ranked}, rows, scheme, folds)
    if ranked and tests.empty:
        notes.append(f"{rows.size} heats are too few to test on heats not fitted to")
    fits = {}
    for law in names:
        if np.isfinite(ratios[law]).sum() >= LEAST_HEATS:
            fits[law] = fit_pairs(law, *_pairs(ordered))
    table = pd.DataFrame(_ranked_table(names, fits, tests))
    first = table[table["rank"] == 1]
    if len(first) and 2 * first["in_range"].iloc[0] < first["heats"].iloc[0]:
        inside = table[(table["rank"] > 0) & (2 * table["in_range"] >= table["heats"])]
        other = f"; best inside its range is {inside['law'].iloc[0]}" if len(inside) else ""
        notes.append(
            f"{first['law'].iloc[0]} is outside its range for most of these heats: a fit, no "
            f"more{other}"
        )
    return LawRanking(table, fits, tests, notes)


def _measured(log: pd.DataFrame) -> tuple[pd.DataFrame, list[str]]:
    """The log in time order with its numbers as numbers; row = place in the log."""
    import pandas as pd

    lacking = [name for name in NEEDED if name not in log.columns]
    if lacking:
        raise InputError([Fault(name, "no such column in the log") for name in lacking])
    wanted = [*NEEDED, "end_C_pct", "end_O_ppm", *(f"slag_{oxide}_pct" for oxide in OXIDES)]
    columns: dict[str, Any] = {"row": np.arange(len(log))}
    for name in dict.fromkeys(wanted):
        if name in log.columns:
            numbers = pd.to_numeric(log[name], errors="coerce").to_numpy(dtype=float)
            bad = np.flatnonzero(np.isnan(numbers) & log[name].notna().to_numpy())
            if bad.size:
                given = log[name].iloc[int(bad[0])]
                raise InputError([Fault(name, f"row {int(bad[0]) + 1} is no number: {given!r}")])
            columns[name] = numbers
    found = pd.DataFrame(columns)
    notes = []
    if "tapped_at" in log.columns:
        times = pd.to_datetime(log["tapped_at"], errors="coerce", utc=True, format="ISO8601")
        if times.notna().all():
            found = found.iloc[np.argsort(times.to_numpy(), kind="stable")]
        else:
            notes.append("tapped_at is not given for every heat: taken in the order of the rows")
    for name in ("end_P_pct", "slag_P2O5_pct", "slag_FeO_pct", "slag_CaO_pct"):
        zero = int((found[name] <= 0.0).sum())
        if zero:
            notes.append(f"{zero} heats have {name} of 0 or less: left out")
            found[name] = found[name].where(found[name] > 0.0)
    return found.reset_index(drop=True), notes


def _pairs(frame: pd.DataFrame) -> tuple[dict[str, Any], Any, Any, Any, Any]:
    slag = {
        oxide: frame[f"slag_{oxide}_pct"].to_numpy()
        for oxide in OXIDES
        if f"slag_{oxide}_pct" in frame
    }
    blank = np.full(len(frame), np.nan)
    carbon = frame["end_C_pct"].to_numpy() if "end_C_pct" in frame else blank
    oxygen = frame["end_O_ppm"].to_numpy() * 1e-4 if "end_O_ppm" in frame else blank
    return slag, frame["end_temp_C"].to_numpy(), frame["end_P_pct"].to_numpy(), carbon, oxygen


def _ratios_of(law: str, frame: pd.DataFrame) -> Array:
    return np.broadcast_to(ln_ratios(law, *_pairs(frame)), (len(frame),))


def _left_out(law: str, frame: pd.DataFrame, heats: int) -> str:
    oxides, carbon, oxygen = needs(law)
    columns = [f"slag_{oxide}_pct" for oxide in oxides]
    columns += ["end_C_pct"] * carbon + ["end_O_ppm"] * oxygen
    short = [name for name in columns
             if name not in frame or 2 * frame[name].notna().sum() < len(frame)]  # fmt: skip
    why = f"; hardly measured: {', '.join(short)}" if short else ""
    return f"{law} is not ranked: {heats} heats have all that it needs{why}"


def _tested(
    frame: pd.DataFrame, ratios: Mapping[str, Array], rows: Array, scheme: str, folds: int
) -> pd.DataFrame:
    """End phosphorus of each tested heat by a factor fitted to other heats."""
    import pandas as pd

    n, parts = rows.size, folds + (scheme == "forward")
    columns = ("heat", "law", "measured_P_pct", "calculated_P_pct", "part")
    edges = np.linspace(0, n, parts + 1).astype(int)
    P = frame["end_P_pct"].to_numpy()[rows]
    heat = frame["row"].to_numpy()[rows]
    pieces = []
    for part in range(parts):
        test = np.arange(edges[part], edges[part + 1])
        fit = np.arange(edges[part]) if scheme == "forward" else np.setdiff1d(np.arange(n), test)
        if fit.size < LEAST_HEATS or not test.size:
            continue
        for law, column in ratios.items():
            mean = robust_mean(column[fit])[0]
            # [P] = (%P) / (approach x L_P of the law) = measured P x measured/law / approach
            calculated = P[test] * np.exp(column[test] - mean)
            pieces.append(pd.DataFrame(dict(zip(columns, (
                heat[test], law, P[test], calculated, part), strict=True))))  # fmt: skip
    if not pieces:
        return pd.DataFrame({name: [] for name in columns})
    whole: pd.DataFrame = pd.concat(pieces, ignore_index=True)
    return whole


def _ranked_table(
    names: list[str], fits: Mapping[str, ApproachFit], tests: pd.DataFrame
) -> list[dict[str, Any]]:
    errors = {
        str(law): (part["calculated_P_pct"] - part["measured_P_pct"]).to_numpy()
        for law, part in tests.groupby("law", sort=False)
    }
    measured = {
        str(law): part["measured_P_pct"].to_numpy()
        for law, part in tests.groupby("law", sort=False)
    }
    order = sorted(errors, key=lambda law: float(np.abs(errors[law]).mean()))
    best = np.abs(errors[order[0]]) if order else np.zeros(0)
    rows = []
    for law in [*order, *(name for name in names if name not in errors)]:
        fit, error = fits.get(law), errors.get(law, np.full(1, np.nan))
        size = np.abs(error)
        more = size - best if law in errors else error
        spread = more.std(ddof=1) / np.sqrt(more.size) if more.size > 1 else np.nan
        rows.append({
            "law": law,
            "rank": order.index(law) + 1 if law in errors else 0,
            "approach": fit.approach if fit else np.nan,
            "ln_error": fit.ln_error if fit else np.nan,
            "scatter_log10": fit.scatter_log10 if fit else np.nan,
            "heats": fit.heats if fit else 0,
            "in_range": fit.in_range if fit else 0,
            "tested": error.size if law in errors else 0,
            "error_P_pct": float(size.mean()),
            "rms_P_pct": float(np.sqrt(np.mean(error**2))),
            "bias_P_pct": float(error.mean()),
            "error_P_share_pct": float(100.0 * (size / measured.get(law, np.nan)).mean()),
            "beside_best_pct": float(more.mean()),
            "beside_best_error_pct": float(spread),
        })  # fmt: skip
    return rows
