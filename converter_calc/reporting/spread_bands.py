"""The spread of a heat as HTML: bands of the end point on their windows, chances, what helps.

Drawn with plain boxes, so that it stands beside the recipe at once. Bands: from 5 to 95 % and,
thicker, from 25 to 75 % of the heats; the frame is the window that counts as hit.
"""

from __future__ import annotations

import math
from collections.abc import Iterable

from converter_calc.learning.spread import Spread
from converter_calc.learning.spread_margin import Margin, Shift
from converter_calc.learning.spread_numbers import Chance, Distribution, Window
from converter_calc.reporting.charts import PALETTE, faded
from converter_calc.reporting.html_sheet import Markup, element, joined
from converter_calc.reporting.learning_tables import LOWERED
from converter_calc.reporting.spread_text import DIGITS

NAMES = {
    "end_temp_C": "temperature", "end_C_pct": "carbon", "end_P_pct": "phosphorus",
    "end_Mn_pct": "manganese", "end_S_pct": "sulphur",
}  # fmt: skip
UNITS = {"C": "°C", "Nm3": "Nm³", "mass %": "%"}
#: Room beside band and window, as a share of what is drawn.
BESIDE = 0.06
#: Errors that make less than this share of every scatter are not listed.
LEAST_SHARE = 0.02
#: Measurements shown, the most worth first, and the least gain shown.
MOST_WORTH, LEAST_WORTH = 6, 0.005

STYLE = f"""
.cc-bands {{ display: grid; grid-template-columns: minmax(6.5rem, auto) 1fr auto;
  gap: .1rem .8rem; align-items: center; margin: .3rem 0 .5rem 0; }}
.cc-bands .cc-name, .cc-bands .cc-name + div + .cc-chance {{ padding-bottom: 1.1rem; }}
.cc-bands .cc-chance {{ text-align: right; font-variant-numeric: tabular-nums; }}
.cc-bands .cc-chance b {{ font-size: 1.25rem; }}
.cc-track {{ position: relative; height: 2.9rem; min-width: 9rem; }}
.cc-track > div {{ position: absolute; box-sizing: border-box; }}
.cc-window {{ top: .15rem; height: 1.5rem; border: 2px solid {PALETTE["blue"]};
  background: {faded(PALETTE["blue"], 0.12)}; border-radius: .15rem; }}
.cc-window.cc-open {{ border-left-style: dashed; }}
.cc-wide-band {{ top: .68rem; height: .44rem; background: {PALETTE["orange"]}; opacity: .65; }}
.cc-half-band {{ top: .48rem; height: .84rem; background: {PALETTE["orange"]}; }}
.cc-middle {{ top: .33rem; height: 1.14rem; width: 2px; background: currentColor; }}
.cc-edge {{ top: 1.75rem; font-size: .8rem; transform: translateX(-50%); white-space: nowrap;
  font-variant-numeric: tabular-nums; }}
.cc-edge.cc-first {{ transform: none; }}
.cc-edge.cc-last {{ transform: translateX(-100%); }}
"""


def number(name: str, x: float) -> str:
    """A result with the digits it is shown with; a dash where there is none."""
    return f"{x:,.{DIGITS.get(name, 0)}f}" if math.isfinite(x) else "–"


def unit(text: str) -> str:
    """A unit as it is printed."""
    return UNITS.get(text, text)


def percent(share: float, digits: int = 0) -> str:
    """A share 0..1 as %; one that is not quite 0 or 100 is not shown as such."""
    least = 10.0**-digits
    if share > 0.0 and 100.0 * share < 0.5 * least:
        return f"< {least:g} %"
    if share < 1.0 and 100.0 * share > 100.0 - 0.5 * least:
        return f"> {100.0 - least:g} %"
    return f"{100.0 * share:.{digits}f} %"


def window_text(window: Window) -> str:
    """The window in words."""
    name, shown = window.name, unit(window.unit)
    if not math.isfinite(window.low):
        return f"up to {number(name, window.high)} {shown}"
    return f"{number(name, window.low)} to {number(name, window.high)} {shown}"


def bands_html(found: Spread) -> Markup:
    """The bands of each result that has a window, with its chance; all together below."""
    parts: list[Markup] = []
    for chance in found.chances:
        if chance.window is None:
            continue
        d = found.results[chance.name]
        parts += [
            element("div", f"{NAMES[chance.name].capitalize()}, {unit(d.unit)}", class_="cc-name"),
            _track(d, chance.window),
            _chance(chance),
        ]
    both = found.all_windows
    parts += [
        element("div", element("b", "All together")),
        element("div", f"{percent(both.low)} to {percent(both.high)}, 95 % interval"),
        _chance(both),
    ]
    return element("div", *parts, class_="cc-bands")


def _chance(chance: Chance) -> Markup:
    return element("div", element("b", percent(chance.probability)), class_="cc-chance")


def _track(d: Distribution, window: Window) -> Markup:
    """One row of the picture."""
    low_end = window.low if math.isfinite(window.low) else min(d.quantiles[0.05], window.high)
    low, high = min(d.quantiles[0.05], low_end), max(d.quantiles[0.95], window.high)
    room = BESIDE * (high - low) or 1.0
    low, high = low - room, high + room
    open_low = not math.isfinite(window.low)

    def place(x: float) -> float:
        return min(max(100.0 * (x - low) / (high - low), 0.0), 100.0)

    def bar(class_: str, first: float, last: float) -> Markup:
        left, width = place(first), max(place(last) - place(first), 0.4)
        return element("div", class_=class_, style=f"left:{left:.2f}%;width:{width:.2f}%")

    def edge(x: float) -> Markup:
        at = place(x)
        side = " cc-first" if at < 12.0 else " cc-last" if at > 88.0 else ""
        return element("div", number(d.name, x), class_="cc-edge" + side, style=f"left:{at:.2f}%")

    start = low if open_low else window.low
    frame = "cc-window cc-open" if open_low else "cc-window"
    marks = [
        bar(frame, start, window.high),
        bar("cc-wide-band", d.quantiles[0.05], d.quantiles[0.95]),
        bar("cc-half-band", d.quantiles[0.25], d.quantiles[0.75]),
        element("div", class_="cc-middle", style=f"left:{place(d.quantiles[0.5]):.2f}%"),
        *(edge(x) for x in ([] if open_low else [window.low])),
        edge(window.high),
    ]
    return element("div", *marks, class_="cc-track", role="img", aria_label=band_text(d, window))


def band_text(d: Distribution, window: Window) -> str:
    """One band in a sentence."""
    shown = unit(d.unit)
    return (
        f"{NAMES[d.name]}: 90 % of heats end between {number(d.name, d.quantiles[0.05])} and "
        f"{number(d.name, d.quantiles[0.95])} {shown}, half of them between "
        f"{number(d.name, d.quantiles[0.25])} and {number(d.name, d.quantiles[0.75])}; the window "
        f"is {window_text(window)}"
    )


def chance_rows(found: Spread) -> list[tuple[str, ...]]:
    """Each window: name, window, chance, its interval."""
    rows: list[tuple[str, ...]] = []
    for c in (*found.chances, found.all_windows):
        span = f"{percent(c.low, 1)} to {percent(c.high, 1)}"
        text = "" if c.window is None else window_text(c.window)
        rows.append((NAMES.get(c.name, c.label), text, percent(c.probability, 1), span))
    return rows


def distribution_rows(found: Iterable[Distribution]) -> list[tuple[str, ...]]:
    """Each result: name, as read, 5, 25, 50, 75, 95 %."""
    return [
        (
            ", ".join(filter(None, (_name(d), unit(d.unit)))),
            number(d.name, d.as_read),
            *(number(d.name, d.quantiles[q]) for q in (0.05, 0.25, 0.50, 0.75, 0.95)),
        )
        for d in found
    ]


def _name(d: Distribution) -> str:
    return NAMES.get(d.name, d.label.translate(LOWERED))


def scatter_rows(found: Spread) -> tuple[tuple[str, ...], list[tuple[str, ...]]]:
    """Headings and rows of what makes the scatter: share of the variance of each result."""
    results = [name for name in NAMES if name in found.explained]
    rows = [
        (share.label, *(_share(share.total.get(name, 0.0)) for name in results))
        for share in found.shares
        if max((share.total.get(name, 0.0) for name in results), default=0.0) >= LEAST_SHARE
    ]
    return ("error of", *(NAMES[name] for name in results)), rows


def _share(x: float) -> str:
    return percent(x) if x >= LEAST_SHARE else "–"


def worth_rows(found: Spread) -> list[tuple[str, ...]]:
    """What a better measurement brings: error, its size, gain if halved, if gone."""
    worth = [w for w in found.worth if max(w.halved[0], w.removed[0]) >= LEAST_WORTH]
    worth.sort(key=lambda w: -w.halved[0])
    return [
        (
            w.label,
            f"{w.sd:g} {unit(w.unit)}".strip(),
            *(f"{100 * gain:+.1f} ± {100 * half:.1f}" for gain, half in (w.halved, w.removed)),
        )
        for w in worth[:MOST_WORTH]
    ]


def margin_rows(margin: Margin) -> list[tuple[str, ...]]:
    """Each window: chance now, aim now and then, chance of the plan with the margin."""
    then = {} if margin.checked is None else {c.name: c for c in margin.checked.chances}
    return [
        (
            NAMES[s.window.name],
            number(s.window.name, s.window.aim),
            number(s.window.name, margin.aims.get(s.aim_name, math.nan)) if s.aim_name else "–",
            percent(s.now),
            percent(then[s.window.name].probability) if s.window.name in then else "–",
        )
        for s in margin.shifts
    ]


def margin_notes(margin: Margin) -> list[str]:
    """What keeps the wanted probability from being reached, a sentence a window."""
    notes = [_note(s) for s in margin.shifts if s.shift is None]
    if margin.binding:
        notes.append(f"The plan binds: {margin.binding}.")
        notes += [f"It would be freed by: {free}." for free in margin.frees]
    return notes


def _note(shift: Shift) -> str:
    name = NAMES[shift.window.name].capitalize()
    largest = ", ".join(f"{label} {percent(share)}" for label, share in shift.largest[:3])
    text = f"{name}: {percent(shift.best)} at best, wherever the aim"
    return f"{text}; most of the scatter: {largest}." if largest else f"{text}."


def joined_bands(found: Spread) -> Markup:
    """Style and bands as one piece."""
    return joined([element("style", Markup(STYLE)), bands_html(found)])
