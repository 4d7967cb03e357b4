"""Numbers of a spread: windows, probabilities with their intervals, quantiles.

The interval of a probability comes from the scatter of independent scramblings (Student's t),
or, where they all agree on 0 or 1, from the number of draws (E.B. Wilson, J. Am. Stat. Assoc.
22 (1927) 209; from memory).
"""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from functools import cache

import numpy as np

from converter_calc.balance.heats import HeatTable
from converter_calc.basis.dual import Array

#: Confidence of every interval.
CONFIDENCE = 0.95
QUANTILES = (0.05, 0.10, 0.25, 0.50, 0.75, 0.90, 0.95)


@dataclass(frozen=True)
class Window:
    """Where a result counts as hit: low to high, either of them without end."""

    name: str
    label: str
    unit: str
    aim: float
    low: float
    high: float

    def holds(self, values: Array) -> Array:
        """Which of the values lie inside; what is not a number does not."""
        return np.asarray((values >= self.low) & (values <= self.high))


@dataclass(frozen=True)
class Chance:
    """Probability of a window, or of all of them: 0 to 1, with its interval.

    low, high : interval of CONFIDENCE. by_count : Wilson's interval, as if all draws were
    independent; wider where quasi-random draws are the better ones.
    """

    name: str
    label: str
    probability: float
    low: float
    high: float
    by_count: tuple[float, float]
    window: Window | None = None


@dataclass(frozen=True)
class Distribution:
    """Distribution of one result: mean, standard deviation and quantiles {share: value}.

    as_read : its value where all instruments read right.
    """

    name: str
    label: str
    unit: str
    as_read: float
    mean: float
    sd: float
    quantiles: dict[float, float]


@cache
def _student(degrees: int) -> float:
    from scipy.stats import t

    return float(t.ppf(0.5 + 0.5 * CONFIDENCE, degrees))


def wilson(hits: float, n: int) -> tuple[float, float]:
    """Wilson's score interval of `hits` in n independent trials."""
    z2 = _z() ** 2
    p = hits / n
    middle = (p + z2 / (2 * n)) / (1 + z2 / n)
    half = np.sqrt(z2 * (p * (1 - p) / n + z2 / (4 * n * n))) / (1 + z2 / n)
    return float(max(0.0, middle - half)), float(min(1.0, middle + half))


def _z() -> float:
    from scipy.special import ndtri

    return float(ndtri(0.5 + 0.5 * CONFIDENCE))


def interval(parts: Array) -> tuple[float, float]:
    """Mean of independent estimates and half its interval by Student's t."""
    half = _student(len(parts) - 1) * parts.std(ddof=1) / np.sqrt(len(parts))
    return float(parts.mean()), float(half)


def chance(
    name: str, label: str, hits: Array, replicates: int, window: Window | None = None
) -> Chance:
    """Probability from hits (n,) of draws that stand scrambling by scrambling."""
    n = hits.size
    middle, half = interval(hits.reshape(replicates, -1).mean(axis=1))
    by_count = wilson(float(np.count_nonzero(hits)), n)
    low, high = max(0.0, middle - half), min(1.0, middle + half)
    if middle in (0.0, 1.0):
        low, high = by_count
    return Chance(name, label, middle, low, high, by_count, window)


def distribution(name: str, label: str, unit: str, as_read: float, values: Array) -> Distribution:
    """Distribution of the values that are numbers."""
    good = values[np.isfinite(values)]
    if not good.size:
        good = np.full(2, np.nan)
    found = np.quantile(good, QUANTILES)
    return Distribution(
        name, label, unit, as_read, float(good.mean()), float(good.std(ddof=1)),
        dict(zip(QUANTILES, found.tolist(), strict=True)),
    )  # fmt: skip


def windows_of(heats: HeatTable, row: int, as_read: Mapping[str, float]) -> tuple[Window, ...]:
    """Windows of one heat: temperature and carbon about their aims, P, Mn and S up to theirs.

    as_read : end point predicted; temperature and carbon without an aim are held against it.
    P, Mn and S without an aim have no window.
    """

    def value(name: str) -> float:
        return float(heats.values[name][row])

    found = []
    for name, label, unit, aim_name, below, above in (
        ("end_temp_C", "temperature", "C", "aim_temp_C", "temp_below_C", "temp_above_C"),
        ("end_C_pct", "carbon", "%", "aim_C_pct", "below_C_pct", "above_C_pct"),
    ):
        aim = value(aim_name)
        aim = aim if np.isfinite(aim) else as_read[name]
        low, high = aim - value("window_" + below), aim + value("window_" + above)
        found.append(Window(name, label, unit, aim, low, high))
    for element, label in (("P", "phosphorus"), ("Mn", "manganese"), ("S", "sulphur")):
        aim = value(f"aim_{element}_pct")
        if np.isfinite(aim):
            high = aim + value(f"window_above_{element}_pct")
            found.append(Window(f"end_{element}_pct", label, "%", aim, -np.inf, high))
    return tuple(found)


def all_hits(windows: Sequence[Window], values: Mapping[str, Array]) -> Array:
    """Draws that hit every window."""
    hits = windows[0].holds(values[windows[0].name])
    for window in windows[1:]:
        hits &= window.holds(values[window.name])
    return hits
