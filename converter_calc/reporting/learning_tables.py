"""Learning from a log as tables, and its pictures as sentences for those who cannot see them."""

from __future__ import annotations

import math
from typing import TYPE_CHECKING

from converter_calc.learning.drift import Drift
from converter_calc.learning.following import Followed, offsets
from converter_calc.learning.tuned import Fitted, Tuned, TunedParameter
from converter_calc.reporting.learning_charts import RUNNING, TITLES
from converter_calc.reporting.proof_report import DIGITS

if TYPE_CHECKING:
    import pandas as pd

    from converter_calc.learning.proof import Proof
    from converter_calc.learning.today import Today

UNITS = {"C": "°C", "mass %": "%", "Nm3": "Nm³", "MJ/t steel": "MJ/t", "kg/t steel": "kg/t"}
#: Figures of a formula as it is printed.
LOWERED = str.maketrans("0123456789", "₀₁₂₃₄₅₆₇₈₉")
#: Parts of names of parameters and outcomes in words.
WORDS = {
    "MJ_per_t": "a tonne", "MJ_per_min": "a minute", "pct": "", "C": "", "kg": "", "ppm": "",
    "Nm3": "", "min": "", "temp": "temperature", "hm": "hot metal",
}  # fmt: skip


def plain(x: float, *, signed: bool = False) -> str:
    """A number with four digits that count; a dash where there is none."""
    if not math.isfinite(x):
        return "–"
    sign = "+" if signed else ""
    if x == 0.0:
        text = "0"
    elif abs(x) >= 1e4:
        text = f"{x:{sign},.0f}"
    elif abs(x) < 1e-3:
        text = f"{x:{sign}.2g}" if abs(x) >= 1e-4 else f"{x:{sign}.6f}"
    else:
        text = f"{x:{sign}.4g}"
    return text.replace("-", "−")


def unit_text(unit: str) -> str:
    """A unit as it is printed."""
    return UNITS.get(unit, unit)


def words_of(name: str) -> str:
    """A flat name of a parameter or outcome in words: `heat loss a minute`, `slag MgO`."""
    for ending in ("_MJ_per_t", "_MJ_per_min"):
        if name.endswith(ending):
            return f"{words_of(name.removesuffix(ending))} {WORDS[ending[1:]]}"
    parts = [
        WORDS.get(part, part)
        for place, part in enumerate(name.split("_"))
        if place == 0 or not (part == "C" and name.endswith(("_temp_C", "_error_C")))
    ]
    if name.endswith("_C_pct"):
        parts[-2] = "C"
    text = " ".join(part for part in parts if part)
    return text.translate(LOWERED) if name.startswith("slag_") else text


def parameter_rows(tuned: Tuned) -> list[tuple[str, ...]]:
    """Each parameter: name, unit, before, its sd, tuned, standard error, told by the log, note."""
    return [
        (
            words_of(entry.name),
            unit_text(entry.unit),
            plain(entry.prior),
            plain(entry.prior_sd),
            plain(entry.value),
            plain(entry.standard_error),
            f"{100.0 * entry.told_by_data:.0f} %",
            _note(entry),
        )
        for entry in tuned.parameters
    ]


def _note(entry: TunedParameter) -> str:
    if entry.held:
        return "not told, as before"
    return "at its bound" if entry.at_bound else ""


def fit_rows(tuned: Tuned) -> list[tuple[str, ...]]:
    """Each outcome: name, unit, used, mean error and mean absolute error before and tuned."""
    return [_fit_row(row) for row in tuned.fitted]


def _fit_row(row: Fitted) -> tuple[str, ...]:
    return (
        words_of(row.name),
        unit_text(row.unit),
        f"{row.used:,}",
        plain(row.bias_before, signed=True),
        plain(row.bias, signed=True),
        plain(row.error_before),
        plain(row.error),
    )


def used_lines(tuned: Tuned) -> list[str]:
    """How many heats were used, and why others were not."""
    lines = [f"{tuned.heats:,} of {tuned.rows:,} heats used."]
    for count, text in (
        (tuned.unusable, "not used: an input is missing or impossible"),
        (tuned.unsolved, "not used: the balance has no answer for them"),
        (tuned.gross_heats, "not used: temperature, carbon or weight far off"),
        (tuned.gross_outcomes, "single outcomes far off, not used"),
    ):
        if count:
            lines.append(f"{count:,} {text if count > 1 else text.replace('outcomes', 'outcome')}.")
    return lines


def gross_rows(table: pd.DataFrame, most: int) -> list[tuple[str, ...]]:
    """The first rows or outcomes that were not used: heat, field, given, expected, why."""
    return [
        (
            str(row["heat_id"]),
            words_of(str(row["field"])),
            plain(row["given"]) if isinstance(row["given"], float) else str(row["given"] or "–"),
            plain(row["expected"]) if isinstance(row["expected"], float) else "–",
            str(row["reason"]),
        )
        for row in table.head(most).to_dict("records")
    ]


def jump_table(tuned: Tuned, drift: Drift, heats: pd.DataFrame) -> pd.DataFrame:
    """Jumps found: tapped_at and heat_id of the first heat after it, offset, text of its size.

    tuned : parameters that the offsets wander from. heats : heat_id and tapped_at in time order.
    A jump that a wander could have gone as well is called suspected.
    """
    import pandas as pd

    unit = {entry.name: unit_text(entry.unit) for entry in tuned.parameters}
    rows = []
    for jump in drift.jumps:
        size, error, shown = jump.size, jump.standard_error, unit[jump.offset]
        if offsets()[jump.offset]:
            size, error, shown = 100.0 * size, 100.0 * error, "%"
        text = f"{plain(size, signed=True)} ± {plain(error)} {shown}".rstrip()
        text += "" if jump.sure else ", suspected"
        rows.append(
            {
                "tapped_at": heats["tapped_at"].iloc[jump.row],
                "heat_id": str(heats["heat_id"].iloc[jump.row]),
                "offset": jump.offset,
                "text": text,
            }
        )
    return pd.DataFrame(rows, columns=["tapped_at", "heat_id", "offset", "text"])


def today_rows(followed: Followed) -> list[tuple[str, ...]]:
    """Each wandering parameter: name, unit, tuned over the log, today, its standard error."""
    today = followed.today()
    value, error = today.practice_values(), today.standard_errors()
    middle = followed.tuned.practice_values()
    unit = {entry.name: unit_text(entry.unit) for entry in followed.tuned.parameters}
    return [
        (words_of(name), unit[name], plain(middle[name]), plain(value[name]), plain(error[name]))
        for name in followed.drift.offsets
    ]


def left_text(today: Today) -> str:
    """What the model of what is left adds, and where; empty where none won out of sample."""
    used = [words_of(name) for name, model in today.models.items() if model.used]
    if not used:
        return ""
    return (
        f"A model of what is left won out of sample for {', '.join(used)}. It is in the offsets of "
        "the day that can be saved: converter-calc plan and predict take both with --tuned. The "
        "fields of the page hold parameters alone, so today's values for them are those that hold "
        "without it."
    )


def drift_text(drift: pd.DataFrame, jumps: pd.DataFrame, offset: str) -> str:
    """The picture of one offset in a sentence."""
    rows = drift[drift["offset"] == offset]
    first, last = rows.iloc[0], rows.iloc[-1]
    low, high = rows["value"].min(), rows["value"].max()
    own = jumps[jumps["offset"] == offset]
    told = (
        "; ".join(f"{row['tapped_at']:%Y-%m-%d} {row['text']}" for row in own.to_dict("records"))
        or "none"
    )
    return (
        f"{words_of(offset)} from {first['tapped_at']:%Y-%m-%d} to {last['tapped_at']:%Y-%m-%d}: "
        f"starts at {plain(first['value'])}, ends at {plain(last['value'])}, between "
        f"{plain(low)} and {plain(high)}; jumps: {told}."
    )


def score_rows(proof: Proof, quantity: str) -> list[tuple[str, ...]]:
    """One quantity, each method: heats, mean absolute error, bias, hits, with standard errors."""
    scores = proof.scores(without_misread=True)
    digits = DIGITS[quantity]
    return [
        (
            row["method"],
            f"{row['heats']:,}",
            f"{row['mae']:.{digits}f} ± {row['mae_error']:.{digits}f}",
            f"{round(row['bias'], digits) + 0.0:+.{digits}f}".replace("-", "−"),
            f"{row['hit_pct']:.1f} ± {row['hit_error_pct']:.1f}",
        )
        for row in scores[scores["quantity"] == quantity].to_dict("records")
    ]


def misses_text(proof: Proof, quantity: str) -> str:
    """The picture of the misses in time in a sentence."""
    rows = ", ".join(f"{row[0]} {row[3]}" for row in score_rows(proof, quantity))
    return (
        f"Running median over {RUNNING} heats of predicted less measured {TITLES[quantity]}, in "
        f"time; mean miss: {rows}."
    )


def measured_text(proof: Proof, quantity: str, method: str) -> str:
    """The picture of predicted against measured in a sentence."""
    found = next(row for row in score_rows(proof, quantity) if row[0] == method)
    return (
        f"Predicted against measured {TITLES[quantity]}, {found[1]} heats, {method}: mean "
        f"absolute error {found[2]}, bias {found[3]}."
    )


def calibration_rows(calibration: pd.DataFrame) -> tuple[tuple[str, ...], list[tuple[str, ...]]]:
    """Headings and rows: stated, and how often it held for each quantity [%]."""
    names = [str(name) for name in dict.fromkeys(calibration["quantity"])]
    held = {(row["stated"], row["quantity"]): row["held"] for row in calibration.to_dict("records")}
    rows = [
        (f"{100.0 * stated:.0f}", *(f"{100.0 * held[stated, name]:.1f}" for name in names))
        for stated in dict.fromkeys(calibration["stated"])
    ]
    return ("stated, %", *(words_of(name) for name in names)), rows


def hit_rows(chances: pd.DataFrame) -> list[tuple[str, ...]]:
    """Groups of heats of equal chance: quantity, chance stated, share that hit, heats."""
    return [
        (
            words_of(row["quantity"]),
            f"{100.0 * row['stated']:.1f}",
            f"{100.0 * row['held']:.1f}",
            f"{row['heats']:,}",
        )
        for row in chances.to_dict("records")
    ]


def calibration_text(calibration: pd.DataFrame) -> str:
    """The picture of the calibration in a sentence: the largest gap of each quantity."""
    worst: dict[str, tuple[float, float]] = {}
    for row in calibration.to_dict("records"):
        name, stated, held = words_of(row["quantity"]), 100.0 * row["stated"], 100.0 * row["held"]
        before = worst.get(name)
        if before is None or abs(held - stated) > abs(before[1] - before[0]):
            worst[name] = (stated, held)
    parts = [f"{name} worst at {a:.0f} % stated, {b:.0f} % held" for name, (a, b) in worst.items()]
    return f"Share that held against share stated: {'; '.join(parts)}."
