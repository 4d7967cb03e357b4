"""Speed as ratios in one run. Peers: a plain loop of scipy root-finding, heat by heat, on the
same equations; the start-up of numpy, scipy.optimize and pandas.

Run with `pytest tests/bench/bench_tables.py -s -n 0`; not part of the test command, since a
busy machine must not fail a correct program.
"""

from __future__ import annotations

import os
import resource
import subprocess
import sys
import time
from collections.abc import Callable
from pathlib import Path
from typing import Any

import numpy as np
from scipy import optimize

import converter_calc
from converter_calc.balance.asks import evaluate_ask, first_guess
from converter_calc.balance.heats import heats_from_frame
from converter_calc.balance.problem import build_problem
from converter_calc.planning.solving import plan_groups, predict_groups
from tests.bench.conftest import CHARGED, SHOP, draw_heats

LOOPED = 30
DEMO = Path(__file__).resolve().parents[2] / "demo_heats" / "ordinary_low_carbon.toml"


def seconds(action: Callable[[], Any]) -> float:
    start = time.perf_counter()
    action()
    return time.perf_counter() - start


def loop_seconds_per_heat(frame: Any, grouping: Callable[[Any], Any]) -> float:
    """scipy.optimize.root, heat by heat, on the package's own residuals without derivatives."""
    heats = heats_from_frame(frame.iloc[:LOOPED], shop=SHOP)
    _, group, ask = grouping(heats)[0]
    spent = 0.0
    for row in range(LOOPED):
        p = build_problem(group.take(np.array([row])))
        start = {name: float(x[0]) for name, x in first_guess(p, ask).items()}
        size = np.array([max(abs(x), 1e-3) for x in start.values()])

        def residual(scaled: Any, p: Any = p, size: Any = size) -> Any:
            x = {name: np.array([v]) for name, v in zip(ask.unknowns, scaled * size, strict=True)}
            with np.errstate(all="ignore"):
                state = evaluate_ask(p, ask, x)
            return np.array([np.ravel(state.residuals[name])[0] for name in ask.residuals])

        begin = np.array(list(start.values())) / size
        spent += seconds(lambda r=residual, b=begin: optimize.root(r, b, method="hybr", tol=1e-10))
    return spent / LOOPED


def test_predict_and_plan_per_second(report: Callable[[str], None]) -> None:
    """Floors: 100,000 predictions a second, 300 times the loop; plan a fifth of that."""
    frame = draw_heats(100_000)
    converter_calc.predict(frame.iloc[:5000], shop=SHOP)  # first call pays for the tables
    found: dict[str, float] = {}
    for name, call, table, grouping in (
        ("predict", converter_calc.predict, frame, predict_groups),
        ("plan", converter_calc.plan, frame.drop(columns=CHARGED), plan_groups),
    ):
        spent = min(seconds(lambda c=call, t=table: c(t, shop=SHOP)) for _ in range(3))
        per_heat = loop_seconds_per_heat(table, grouping)
        found[name] = len(frame) / spent
        report(
            f"{name}: {len(frame) / spent:,.0f} heats/s, "
            f"{per_heat * len(frame) / spent:,.0f} times the loop ({per_heat * 1e3:.2f} ms a heat)"
        )
        assert per_heat * len(frame) / spent >= (300.0 if name == "predict" else 60.0)
    assert found["predict"] >= 100_000.0
    assert found["plan"] >= 20_000.0


def test_a_million_heats_grow_in_proportion_and_stay_small(report: Callable[[str], None]) -> None:
    """Floors: at most 11 times the time of 100,000 heats, memory under 2 GB."""
    small, large = draw_heats(100_000), draw_heats(1_000_000)
    converter_calc.predict(small, shop=SHOP)
    t_small = min(seconds(lambda: converter_calc.predict(small, shop=SHOP)) for _ in range(3))
    t_large = seconds(lambda: converter_calc.predict(large, shop=SHOP))
    # the largest this process ever was, and each worker at its largest (memory that they
    # share counts more than once, so this is an upper bound)
    own = resource.getrusage(resource.RUSAGE_SELF).ru_maxrss
    workers = resource.getrusage(resource.RUSAGE_CHILDREN).ru_maxrss * (os.cpu_count() or 1)
    peak = (own + workers) * 1024 / 1e9
    report(
        f"1,000,000 heats: {t_large:.1f} s, {t_large / t_small:.1f} times 100,000; {peak:.2f} GB"
    )
    assert t_large / t_small <= 11.0
    assert peak < 2.0


def test_command_line_start(report: Callable[[str], None]) -> None:
    """Floor: one plan in at most 1.5 times `import numpy, scipy.optimize, pandas`."""

    def run(*args: str) -> float:
        return min(
            seconds(
                lambda: subprocess.run([sys.executable, *args], check=True, capture_output=True)
            )
            for _ in range(5)
        )

    imports = run("-c", "import numpy, scipy.optimize, pandas")
    plan = run("-m", "converter_calc", "plan", str(DEMO))
    report(
        f"command line: {plan:.2f} s, imports of the peers {imports:.2f} s: {plan / imports:.2f}"
    )
    assert plan / imports <= 1.5
