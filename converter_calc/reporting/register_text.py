"""The register on the command line: lists, an import report, plan beside actual."""

from __future__ import annotations

import math
from typing import TYPE_CHECKING, Any

from converter_calc.heatlog.reading import fault_text
from converter_calc.register.actuals import ImportReport
from converter_calc.register.comparison import Comparison
from converter_calc.register.parameter_sets import ParameterSet
from converter_calc.register.plans import StoredPlan

if TYPE_CHECKING:
    import pandas as pd

#: Refused rows that are shown; all of them go to the file that is asked for.
ROWS_SHOWN = 20
DECIMALS = {"kg": 0, "C": 1, "Nm3": 0, "mass %": 4, "mass ppm": 0, "min": 1, "": 2}


def plain_text(text: Any) -> str:
    """A text of the user on one line, without signs that a terminal would act on."""
    shown = "" if text is None else str(text)
    return "".join(sign if sign.isprintable() else "?" for sign in shown)


def number_text(x: float, unit: str, *, signed: bool = False) -> str:
    """A number with the decimals of its unit; a dash where it is missing."""
    if not math.isfinite(x):
        return "-"
    decimals = DECIMALS.get(unit, 2)
    return f"{x:+,.{decimals}f}" if signed else f"{x:,.{decimals}f}"


def refused_text(refused: pd.DataFrame) -> list[str]:
    """A line a refused row's fault, the first ones."""
    lines = []
    for row, heat, name, given, reason in refused.head(ROWS_SHOWN).itertuples(index=False):
        named = f", heat {plain_text(heat)}" if heat else ""
        text = plain_text(fault_text(reason, given if given != heat else ""))
        lines.append(f"  row {row}{named}: {plain_text(name)} {text}")
    more = len(refused) - len(lines)
    if more > 0:
        lines.append(f"  ... and {more} more; --refused FILE writes them all")
    return lines


def import_text(report: ImportReport, path: Any, *, strict: bool) -> str:
    """What came of a log that was read into the register."""
    lines = [f"{plain_text(path)}:"]
    if report.taken:
        lines.append(
            f"  {report.new} heats new, {report.updated} updated, "
            f"{report.unchanged} said nothing new"
        )
    else:
        lines.append("  nothing recorded, because rows were refused and --strict was given")
    if report.skipped:
        lines.append(f"  columns left out: {plain_text(', '.join(report.skipped))}")
    refused = report.rows_refused
    if refused:
        note = "" if strict else " (the other rows are recorded)"
        lines.append(f"  {refused} rows refused{note}:")
        lines += refused_text(report.refused)
    return "\n".join(lines) + "\n"


def heats_text(overview: pd.DataFrame) -> str:
    """Heats of the register, a line each: planned, tapped, aims and end point."""
    if not len(overview):
        return "the register holds no heat yet\n"
    lines = [
        f"{'heat':<22}{'planned, UTC':<18}{'tapped, UTC':<18}"
        + "".join(
            f"{title:>9}" for title in ("aim T", "end T", "aim C", "end C", "aim P", "end P")
        ),
        " " * 58 + f"{'C':>9}" * 2 + f"{'%':>9}" * 4,
    ]
    names = [str(name) for name in overview.columns if str(name)[:4] in ("aim_", "end_")]
    for row in overview.to_dict("records"):
        cells = [
            f"{number_text(row[name], 'C' if name.endswith('temp_C') else 'mass %'):>9}"
            for name in names
        ]
        lines.append(
            f"{plain_text(row['heat_id'])[:20]:<22}{_moment(row['planned_at']):<18}"
            f"{_moment(row['tapped_at']):<18}{''.join(cells)}"
        )
    return "\n".join(lines) + "\n"


def _moment(moment: Any) -> str:
    text = "" if moment is None else str(moment)
    return "-" if text in ("", "NaT") else text[:16].replace("T", " ")


def heat_text(
    heat_id: str, plans: pd.DataFrame, latest: StoredPlan | None, actuals: pd.DataFrame
) -> str:
    """All that the register holds of one heat."""
    lines = [f"heat {plain_text(heat_id)}"]
    lines += [
        f"  plan {number} of {_moment(moment)} UTC, version {plain_text(version)}, data {data}"
        for number, moment, version, data in plans[
            ["plan_id", "created_at", "package_version", "model_version"]
        ].itertuples(index=False)
    ]
    if latest is not None:
        lines.append(f"  plan {latest.plan_id} in values:")
        lines += _values(latest.planned)
    for actual in actuals.to_dict("records"):
        state = "present" if actual["superseded_at"] is None else (
            f"superseded {_moment(actual['superseded_at'])}"
        )  # fmt: skip
        lines.append(
            f"  actual of {_moment(actual['recorded_at'])} UTC, {state}, "
            f"from {plain_text(actual['origin'])}:"
        )
        aside = ("heat_id", "recorded_at", "superseded_at", "origin")
        lines += _values({str(name): x for name, x in actual.items() if name not in aside})
    return "\n".join(lines) + "\n"


def _values(values: dict[str, Any]) -> list[str]:
    lines = []
    for name, x in values.items():
        if x is None or x != x or str(x) == "NaT":  # noqa: PLR0124
            continue
        shown = f"{x:,.6g}" if isinstance(x, float) and abs(x) < 1e5 else (
            f"{x:,.0f}" if isinstance(x, float) else plain_text(x)
        )  # fmt: skip
        lines.append(f"    {plain_text(name):<26}{shown:>20}")
    return lines


def comparison_text(found: Comparison) -> str:
    """Plan beside actual, a line a quantity."""
    at = _moment(found.planned_at)
    titles = ("planned", "actual", "actual -", "expected", "actual -")
    lines = [
        f"heat {plain_text(found.heat_id)}: plan {found.plan_id} of {at} UTC and what was made",
        f"{'':<36}{'aim':>11}" + "".join(f"{title:>12}" for title in titles),
        " " * 71 + f"{'planned':>12}{'':>12}{'expected':>12}",
    ]
    for name, unit, aim, *numbers in found.rows.itertuples(index=False):
        planned, actual, difference, expected, left = numbers
        lines.append(
            f"{plain_text(name):<26}{unit:<10}{number_text(aim, unit):>11}"
            f"{number_text(planned, unit):>12}{number_text(actual, unit):>12}"
            f"{number_text(difference, unit, signed=True):>12}{number_text(expected, unit):>12}"
            f"{number_text(left, unit, signed=True):>12}"
        )
    lines.append("expected: what the model says of the charge that was really made")
    lines += [plain_text(note) for note in found.notes]
    return "\n".join(lines) + "\n"


def parameters_text(sets: list[ParameterSet]) -> str:
    """Parameter sets, the newest first."""
    lines = []
    for one in sets:
        note = f": {plain_text(one.note)}" if one.note else ""
        lines.append(
            f"{plain_text(one.shop)}, version {one.version} of {_moment(one.created_at)} UTC{note}"
        )
        lines += _values(dict(one.values))
    return "\n".join(lines or ["the register holds no parameter set yet"]) + "\n"
