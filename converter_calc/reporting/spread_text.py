"""The spread of a heat as text: chances, end point, charge needed, what makes the scatter."""

from __future__ import annotations

import math
from collections.abc import Iterable

from converter_calc.learning.spread import Spread
from converter_calc.learning.spread_margin import Margin, Shift
from converter_calc.learning.spread_numbers import Chance, Distribution, Window
from converter_calc.learning.spread_worth import Share
from converter_calc.planning.outcome import Outcome, at

WIDTH = 84
#: Decimals of each quantity.
DIGITS = {
    "end_temp_C": 1, "end_C_pct": 4, "end_P_pct": 5, "end_Mn_pct": 3, "end_S_pct": 4,
    "slag_P2O5_pct": 2, "slag_T_Fe_pct": 1, "basicity": 2,
}  # fmt: skip
SHORT = {
    "end_temp_C": "temp", "end_C_pct": "carbon", "end_P_pct": "phosph.", "end_Mn_pct": "mangan.",
    "end_S_pct": "sulphur",
}  # fmt: skip
#: Shares of variance below this are told as one line.
LEAST_SHARE = 0.01
#: Below this share explained by the polynomials a result counts as not nearly quadratic.
WELL_EXPLAINED = 0.95
CAUTION = (
    "The chances hold for the errors listed; give the shop's own under [errors]. A gross error",
    "(a wrong sample, a scale out of order) is not among them. Local codes, the shop's own",
    "practice and its licensed engineers decide.",
)


def spread_text(found: Spread, margin: Margin | None = None) -> str:
    """All of it as text; the margin where one was asked for."""
    lines = [f"SPREAD   heat {found.heat_id}", "=" * WIDTH]
    n = f"{found.draws.solved.size:,}"
    seed = f"(seed {found.seed})"
    lines += [f"The recipe stands; {n} draws of what is true beside what is read {seed}.", ""]
    lines += _chances(found)
    lines += _distributions("End point", found.results.values())
    if found.needs:
        lines += _distributions(
            "Charge that would have been right, were the truth known", found.needs.values()
        )
    lines += _shares(found)
    lines += _worth(found)
    if margin is not None:
        lines += _margin(found, margin)
    lines += _errors(found)
    lines += ["", *CAUTION]
    return "\n".join(lines) + "\n"


def _number(name: str, x: float) -> str:
    return f"{x:,.{DIGITS.get(name, 0)}f}"


def _window(window: Window) -> str:
    name, unit = window.name, window.unit
    if window.low == float("-inf"):
        return f"up to {_number(name, window.high)} {unit}"
    return f"{_number(name, window.low)} to {_number(name, window.high)} {unit}"


def _chances(found: Spread) -> list[str]:
    lines = [f"{'Chance to hit':<20}{'window':<26}{'chance':>9}    95 % interval"]
    rows: list[tuple[Chance, str]] = [
        (c, "" if c.window is None else _window(c.window)) for c in found.chances
    ]
    for c, text in [*rows, (found.all_windows, "")]:
        span = f"{100 * c.low:.1f} to {100 * c.high:.1f} %"
        lines.append(f"  {c.label:<18}{text:<26}{100 * c.probability:>7.1f} %    {span}")
    if found.unsolved:
        lines.append(f"  {found.unsolved} draws have no end point and count as missed")
    if found.below_zero:
        lines.append(
            f"  {found.below_zero} analyses came out below zero and stand at zero; look at the "
            "errors of small contents"
        )
    return [*lines, ""]


def _distributions(title: str, rows: Iterable[Distribution]) -> list[str]:
    heads = ("as read", "mean", "sd", "5 %", "50 %", "95 %")
    lines = [title, " " * 26 + "".join(f"{head:>10}" for head in heads)]
    for d in rows:
        numbers = (d.as_read, d.mean, d.sd, d.quantiles[0.05], d.quantiles[0.5], d.quantiles[0.95])
        label = f"{d.label}, {d.unit}" if d.unit else d.label
        lines.append(f"  {label:<24}" + "".join(f"{_number(d.name, x):>10}" for x in numbers))
    return [*lines, ""]


def _pct(share: float) -> str:
    return f"{100 * share:.0f} %" if share >= LEAST_SHARE else "-"


def _shares(found: Spread) -> list[str]:
    if not found.shares:
        return []
    names = [name for name in SHORT if name in found.explained]
    lines = [
        "What makes the scatter: share of the variance (in brackets: by itself alone)",
        " " * 40 + "".join(f"{SHORT[name]:>14}" for name in names),
    ]
    small: list[Share] = []
    for share in found.shares:
        if max(share.total[name] for name in names) < LEAST_SHARE:
            small.append(share)
            continue
        cells = "".join(
            f"{f'{_pct(share.total[name])} ({_pct(share.first[name])})':>14}"
            if share.total[name] >= LEAST_SHARE
            else f"{'-':>14}"
            for name in names
        )
        lines += _labelled(share.label, cells)
    if small:
        lines.append("  under 1 % each: " + "; ".join(share.label for share in small))
    weak = [SHORT[name] for name in names if found.explained[name] < WELL_EXPLAINED]
    if weak:
        lines.append(
            f"  {', '.join(weak)}: the response bends sharply; these shares explain only part of it"
        )
    return [*lines, ""]


def _labelled(label: str, cells: str) -> list[str]:
    """A row whose label may be longer than its column."""
    if len(label) <= 37:
        return [f"  {label:<38}{cells}"]
    return [f"  {label}", " " * 40 + cells]


def _worth(found: Spread) -> list[str]:
    if not found.worth:
        return []
    now = 100 * found.all_windows.probability
    lines = [
        f"What a better measurement is worth: chance of all together, now {now:.1f} %, gained",
        f"{'':<44}{'error halved':>18}{'no error':>18}",
    ]
    for w in found.worth:
        if max(w.halved[0], w.removed[0]) < 0.005:
            continue
        cells = "".join(
            f"{f'{100 * gain:+.1f} ± {100 * half:.1f} %':>18}"
            for gain, half in (w.halved, w.removed)
        )
        lines.append(f"  {w.label:<30}{f'{w.sd:g} {w.unit}':<12}{cells}")
    return [*lines, ""]


def _margin(found: Spread, margin: Margin) -> list[str]:
    lines = [f"Margin to plan with for {100 * margin.wanted:g} % in each window"]
    for shift in margin.shifts:
        lines += _shift(shift, margin)
    if margin.binding:
        lines.append(f"  the plan binds: {margin.binding}")
        lines += [f"  it would be freed by: {free}" for free in margin.frees]
    if margin.checked is None or margin.planned is None:
        return [*lines, ""]
    if margin.planned is found.planned:
        return [*lines, "  the plan stays as it is", ""]
    chances = [*margin.checked.chances, margin.checked.all_windows]
    lines.append(
        "  planned so and drawn anew: "
        + ", ".join(f"{c.label} {100 * c.probability:.1f} %" for c in chances)
    )
    lines.append("  against the plan without margin: " + _changes(found, margin.planned))
    return [*lines, ""]


def _shift(shift: Shift, margin: Margin) -> list[str]:
    window, name = shift.window, shift.window.name
    head = f"  {window.label:<14}"
    if shift.shift == 0.0:
        return [f"{head}{100 * shift.now:.1f} % as it is: no margin needed"]
    if not shift.aim_name:
        return [f"{head}{100 * shift.now:.1f} %; no aim of the plan moves it"]
    moved = margin.aims[shift.aim_name]
    aim = f"aim {_number(name, window.aim)} -> {_number(name, moved)} {window.unit}"
    if shift.shift is not None:
        return [f"{head}{aim}"]
    part = "; ".join(f"{label} {100 * share:.0f} %" for label, share in shift.largest[:3])
    kept = aim if moved != window.aim else "aim kept"
    best = f"{100 * shift.best:.1f} % at best, wherever the aim"
    lines = [f"{head}not to be had: {best} ({kept})"]
    return [*lines, f"{'':<16}scatter: {part}"] if part else lines


def _changes(found: Spread, planned: Outcome) -> str:
    before, after = found.planned.recipe(), planned.recipe()
    parts = []
    for name, label, unit in (
        ("scrap_total_kg", "scrap", "kg"),
        (f"{found.planned.heats.choices.lime}_kg", "lime", "kg"),
        (f"{found.planned.heats.choices.magnesia_flux}_kg", "magnesia flux", "kg"),
        ("oxygen_Nm3", "oxygen", "Nm3"),
    ):
        if name in before and name in after:
            change = float(at(after[name], 0)) - float(at(before[name], 0))
            parts.append(f"{label} {change:+,.0f} {unit}")
    cost = float(at(planned.cost(), 0)) - float(at(found.planned.cost(), 0))
    if math.isfinite(cost):  # not without prices
        parts.append(f"priced items {cost:+.2f} per t of steel")
    return ", ".join(parts)


def _errors(found: Spread) -> list[str]:
    lines = ["Errors reckoned with, one standard deviation (* given by the shop or heat)"]
    cells = []
    for error in found.model.errors:
        mark = "*" if error.given else " "
        size = "" if not error.unit else f"{error.sd:g} {error.unit}"
        cells.append(f"{mark} {error.label:<32}{size:<12}")
    pairs = ("".join(cells[k : k + 2]).rstrip() for k in range(0, len(cells), 2))
    return [*lines, *pairs]
