"""Spread of a heat: how quick, and whether its intervals hold. By hand:
`python -m pytest tests/bench/bench_spread.py -s -n 0`.

A busy machine shows larger times; the limit is that of an idle one with two cores.
"""

from __future__ import annotations

import time
from collections.abc import Callable
from typing import Any

import numpy as np
import scipy.stats

import converter_calc
from converter_calc.learning.spread import spread
from converter_calc.learning.spread_table import spread_table
from tests.bench.conftest import CHARGED, SHOP, draw_heats
from tests.demo import ordinary

SEEDS = 200


def seconds(action: Callable[[], Any], times: int = 5) -> float:
    spent = []
    for _ in range(times):
        start = time.perf_counter()
        action()
        spent.append(time.perf_counter() - start)
    return min(spent)


def test_twenty_thousand_draws(report: Callable[[str], None]) -> None:
    """Limit: 0.3 s for the end point of 20,000 draws of a heat on two cores."""
    outcome = converter_calc.plan(ordinary())
    spread(outcome)  # the first call pays for the tables
    ends = seconds(lambda: spread(outcome, needs=False, shares=False))
    whole = seconds(lambda: spread(outcome))
    table = draw_heats(50).drop(columns=CHARGED)
    many = seconds(lambda: spread_table(table, shop=SHOP), 1)
    report(f"20,000 draws: end point {ends:.2f} s; with needs, shares and worth {whole:.2f} s")
    report(f"50 heats of 512 draws: {many:.2f} s")
    assert ends <= 0.3


def test_intervals_of_a_heat_cover(report: Callable[[str], None]) -> None:
    """95 % intervals of 200 seeds against a run of 260,000 draws: 180 to 198 (binomial, 1e-3)."""
    outcome = converter_calc.plan(ordinary())
    true = spread(outcome, 262144, seed=999, needs=False, shares=False)
    inside = np.zeros(4, dtype=int)
    widths = []
    for seed in range(SEEDS):
        found = spread(outcome, 512, seed=seed, needs=False, shares=False)
        pairs = zip(
            (*found.chances, found.all_windows), (*true.chances, true.all_windows), strict=True
        )
        inside += [c.low <= t.probability <= c.high for c, t in pairs]
        widths.append(found.all_windows.high - found.all_windows.low)
    by_count = np.diff(scipy.stats.binomtest(245, 512).proportion_ci(0.95, method="wilson"))[0]
    report(f"intervals of {SEEDS} seeds that hold: T, C, P, all: {inside.tolist()}")
    report(f"their width {np.mean(widths):.3f}, as many independent draws {by_count:.3f}")
    assert ((inside >= 180) & (inside <= 198)).all()


def test_brute_force(report: Callable[[str], None]) -> None:
    """400,000 pseudo-random draws against 20,000 quasi-random ones."""
    from tests.test_spread import brute

    found = spread(ordinary(), needs=False, shares=False)
    n = 400_000
    table = brute(n, 11)
    hits = np.ones(n, dtype=bool)
    for c in found.chances:
        assert c.window is not None
        hits &= c.window.holds(table[c.name].to_numpy())
    gap = hits.mean() - found.all_windows.probability
    report(
        f"all windows: brute force {hits.mean():.4f}, spread {found.all_windows.probability:.4f}"
    )
    half = (found.all_windows.high - found.all_windows.low) / 2
    assert abs(gap) < 4 * np.sqrt(0.25 / n) + 2 * half
