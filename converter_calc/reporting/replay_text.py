"""The text of a replay: how many heats, and how far the model is off."""

from __future__ import annotations

from converter_calc.learning.replay_quantities import quantities
from converter_calc.learning.streaming import Replayed

#: Rows that were not taken are listed up to this many.
LISTED = 8


def replay_text(came: Replayed, out: str, *, tuned: bool) -> str:
    """What a replay came to, ready to print."""
    lines = [
        f"REPLAY   {came.heats:,} heats, {'tuned' if tuned else 'as the shop file says'}",
        "=" * 84,
        f"{'observed less predicted':<28}{'heats':>12}{'mean error':>16}{'mean size':>14}   unit",
    ]
    for name, fit in came.fits.items():
        if fit.used:
            label = f"  {name}"
            numbers = f"{_number(fit.bias, sign=True):>16}{_number(fit.mean_absolute):>14}"
            lines.append(f"{label:<28}{fit.used:>12,}{numbers}   {quantities()[name].unit}")
    lines += ["", *_left_out(came), f"written: {out}"]
    return "\n".join(lines) + "\n"


def _number(x: float, *, sign: bool = False) -> str:
    size = abs(x)
    digits = 0 if size >= 100.0 else 1 if size >= 1.0 else 3 if size >= 0.1 else 5
    return f"{x:{'+' if sign else ''}.{digits}f}"


def _left_out(came: Replayed) -> list[str]:
    """Heats without a prediction, and why."""
    lines = []
    if came.refused.rows:
        lines.append(f"{came.refused.rows:,} rows are no heats and were refused:")
        lines += [_fault(fault) for fault in came.refused.named[:LISTED]]
        lines += _more(came.refused.rows)
    if came.incomplete:
        lines.append(f"{came.incomplete:,} heats lack part of the charge:")
        lines += [_fault(fault) for fault in came.named[:LISTED]]
        lines += _more(came.incomplete)
    if came.unsolved:
        lines.append(f"{came.unsolved:,} heats have no answer; look for errors in their charge")
    return lines


def _more(n: int) -> list[str]:
    return [f"  ... {n - LISTED:,} more"] if n > LISTED else []


def _fault(fault: dict[str, object]) -> str:
    given = f" (given {fault['given']})" if fault["given"] else ""
    return f"  heat {fault['heat_id']}: {fault['field']}: {fault['reason']}{given}"
