"""The report on tuned parameters as text."""

from __future__ import annotations

import math
import textwrap

from converter_calc.learning.tuned import Fitted, Tuned, TunedParameter

#: Gross errors shown; all of them stand in the JSON.
MOST_SHOWN = 20
WIDTH = 96
#: Published results on other shops' heats, for comparison.
ANCHORS = (
    "Published predictions on other shops' heats, out of sample: mean absolute error 8.0 °C, "
    "0.0069 % C and 0.0023 % P on 13,528 heats (Xie et al., High Temp. Mater. Process. 43 (2024), "
    "10.1515/htmp-2024-0016); hit rates 88 % for temperature, 92 % for C and 89 % for P (Bae et "
    "al., Metall. Mater. Trans. B 51 (2020) 1632)."
)
IN_SAMPLE = (
    "These are errors on the heats that the parameters were taken from. How well they predict "
    "heats not yet seen is another question, and only that one counts."
)


def tuning_text(tuned: Tuned) -> str:
    """Parameters with errors, fit before and after, what cannot be told, and gross errors."""
    lines = [f"TUNED PARAMETERS   {tuned.shop}".rstrip(), "=" * WIDTH, *_heats(tuned), ""]
    lines += [*_parameters(tuned), *_cannot_tell(tuned), ""]
    lines += [*_fit(tuned), "", *_wrapped(IN_SAMPLE), *_wrapped(ANCHORS), ""]
    return "\n".join([*lines, *_not_used(tuned)]) + "\n"


def _wrapped(text: str) -> list[str]:
    return textwrap.wrap(text, WIDTH)


def _heats(tuned: Tuned) -> list[str]:
    lines = [f"{tuned.heats} of {tuned.rows} heats used."]
    for count, text in (
        (tuned.unusable, "not used: an input is missing or impossible"),
        (tuned.unsolved, "not used: the balance has no answer for them"),
        (tuned.gross_heats, "not used: temperature, carbon or weight far off"),
    ):
        if count:
            lines.append(f"{count:>6}  {text}")
    if tuned.gross_outcomes:
        lines.append(f"{tuned.gross_outcomes:>6}  single outcomes far off, not used")
    if not tuned.settled:
        lines.append("The search did not settle; take the numbers below with care.")
    return lines


def _number(x: float) -> str:
    return f"{x:.4g}"


def _parameters(tuned: Tuned) -> list[str]:
    head = f"{'parameter':<36}{'before':>9}{'±':>9}{'tuned':>10}{'±':>9}{'told by log':>12}"
    lines = [head + "  unit", "-" * WIDTH]
    lines += [
        f"{entry.name:<36}{_number(entry.prior):>9}{_number(entry.prior_sd):>9}"
        f"{_number(entry.value):>10}{_number(entry.standard_error):>9}"
        f"{100.0 * entry.told_by_data:>10.0f} %  {_note(entry)}".rstrip()
        for entry in tuned.parameters
    ]
    common = 1.0 / tuned.shared_error if tuned.shared_error else float("inf")
    if tuned.heats > common:
        lines += _wrapped(
            "± is one standard error. It reckons that the errors of any two heats have a "
            f"correlation of {tuned.shared_error:g}, so that no log tells more than {common:.0f} "
            "heats would that had nothing in common."
        )
    else:
        lines.append("± is one standard error.")
    return lines


def _note(entry: TunedParameter) -> str:
    note = "stays at its prior" if entry.held else "at its bound" if entry.at_bound else ""
    return f"{entry.unit}  {note}".strip() if note else entry.unit


def _cannot_tell(tuned: Tuned) -> list[str]:
    lines = []
    held = [entry.name for entry in tuned.parameters if entry.held]
    if held:
        lines += _wrapped(f"The log cannot tell {', '.join(held)}: left as before.")
    for first, second, correlation in tuned.collinear[:MOST_SHOWN]:
        lines += _wrapped(
            f"The log can hardly tell {first} from {second} (correlation {correlation:+.2f}); "
            "only what was believed before keeps them apart."
        )
    return ["", *lines] if lines else []


def _fit(tuned: Tuned) -> list[str]:
    head = f"{'outcome':<18}{'used':>7}{'mean error':>22}{'mean absolute error':>24}{'scatter':>12}"
    under = f"{'':<25}{'before':>11}{'tuned':>11}{'before':>13}{'tuned':>11}"
    lines = [head, under, "-" * WIDTH, *(_fit_line(row) for row in tuned.fitted)]
    off = [
        f"{row.name} {100.0 * row.offset:+.1f} %" if row.log
        else f"{row.name} {_signed(row.offset)} {row.unit}"
        for row in tuned.fitted
        if abs(row.offset) > 0.5 * row.scatter
    ]  # fmt: skip
    if off:
        lines += _wrapped(f"Of this, taken as read off in all heats alike: {', '.join(off)}.")
    return lines


def _fit_line(row: Fitted) -> str:
    scatter = f"{100.0 * row.scatter:.1f} %" if row.log else _number(row.scatter)
    return (
        f"{row.name:<18}{row.used:>7}{_signed(row.bias_before):>11}{_signed(row.bias):>11}"
        f"{_number(row.error_before):>13}{_number(row.error):>11}{scatter:>12}  {row.unit}"
    )


def _signed(x: float) -> str:
    return f"{x:+.3g}"


def _not_used(tuned: Tuned) -> list[str]:
    table = tuned.gross_frame()
    if table.empty:
        return []
    lines = ["Not used:"]
    for row in table.head(MOST_SHOWN).to_dict("records"):
        sure = isinstance(row["expected"], float) and math.isfinite(row["expected"])
        expected = f", expected {row['expected']:.4g}" if sure else ""
        value = row["given"]
        shown = f"{value:.6g}" if isinstance(value, float) else value
        given = f" = {shown}" if value not in ("", None) else ""
        lines.append(f"  heat {row['heat_id']}: {row['field']}{given}{expected}: {row['reason']}")
    if len(table) > MOST_SHOWN:
        lines.append(f"  and {len(table) - MOST_SHOWN} more; --json lists them all")
    return lines
