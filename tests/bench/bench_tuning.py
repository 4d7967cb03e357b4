"""How long tuning takes, and whether its stated errors hold. Run by hand:

python -m pytest tests/bench/bench_tuning.py -s -n 0
"""

from __future__ import annotations

import time

import numpy as np
import pytest

from converter_calc.balance.documents import read_shop
from converter_calc.learning.parameters import parameter_set
from converter_calc.learning.tuning import tune
from tests.heat_logs import SHOP, made_log

pytestmark = pytest.mark.bench

NAMES = (
    *("heat_loss_MJ_per_t", "heat_loss_MJ_per_min", "post_combustion_ratio", "iron_oxide_factor"),
    *("P_approach", "Mn_approach", "S_approach", "heavy_scrap_yield_factor"),
    *("hot_metal_temp_error_C", "hot_metal_weight_error_pct", "oxygen_meter_error_pct"),
)
SEEDS = 200


def test_5000_heats_in_a_minute() -> None:
    """All parameters; processor time, since other work may share the machine."""
    log = made_log(5000, {"P_approach": 0.5, "heat_loss_MJ_per_t": 55.0}, noise=1.0)
    begin = time.process_time()
    found = tune(log, SHOP)
    took = time.process_time() - begin
    print(f"\n5000 heats, {len(found.names)} parameters: {took:.1f} s, {found.passes} passes")
    assert took < 60.0


def test_stated_errors_cover_the_truth() -> None:
    """Truths drawn from the prior, 11 parameters: share of 68 % and 95 % intervals that hold it.

    The bounds are 4 standard deviations of the binomial distribution for 200 independent logs.
    """
    shop = read_shop(SHOP)
    off = []
    for seed in range(SEEDS):
        rng = np.random.default_rng([seed, 5])
        scraps = [name for name in made_log(2).columns if name.endswith("_kg")]
        entries = parameter_set(shop, scraps, NAMES)
        truth = entries.values(np.clip(rng.standard_normal(len(entries.names)), -2.5, 2.5))
        log = made_log(120, truth, noise=1.0, seed=1000 + seed)
        found = tune(log, SHOP, only=NAMES, shared_error=0.0, step_settled=1e-2)
        off.append([(e.value - truth[e.name]) / e.standard_error for e in found.parameters])
    z = np.abs(np.array(off))
    print()
    for name, column in zip(entries.names, z.T, strict=True):
        one, two = 100.0 * np.mean(column < 1.0), 100.0 * np.mean(column < 1.96)
        print(f"{name:<32}{one:6.1f} %{two:7.1f} %")
    for level, limit in ((0.6827, 1.0), (0.95, 1.96)):
        deviation = 4.0 * np.sqrt(level * (1.0 - level) / SEEDS)
        shares = np.mean(z < limit, axis=0)
        assert np.all(np.abs(shares - level) < deviation), shares
