"""Shared by the speed tests: a table of heats drawn in the trade's normal ranges (invented)."""

from __future__ import annotations

from typing import Any

import numpy as np
import pytest

from tests.conftest import PLAIN_HEAT


def draw_heats(n: int, seed: int = 1) -> Any:
    """A DataFrame of n invented heats, complete charge, ready to predict or (less scrap) plan."""
    import pandas as pd

    rng = np.random.default_rng(seed)

    def normal(mean: float, sd: float) -> Any:
        return np.clip(rng.normal(mean, sd, n), mean - 3 * sd, mean + 3 * sd)

    hot_metal, carbon, silicon = normal(180000.0, 4000.0), normal(4.45, 0.08), normal(0.45, 0.09)
    ore = normal(1200.0, 300.0)
    # oxygen as a shop would blow it: by weight and analysis, with the spread of a static blow
    oxygen = 10050.0 + 1700.0 * (carbon - 4.45) + 1500.0 * (silicon - 0.45)
    oxygen += 0.055 * (hot_metal - 180000.0) - 0.2 * (ore - 1200.0) + normal(0.0, 60.0)
    # lime likewise follows silicon, with the spread of weighing and of rules of thumb
    lime = 6300.0 + 11000.0 * (silicon - 0.45) + normal(0.0, 250.0)
    return pd.DataFrame(
        {
            "hot_metal_kg": hot_metal,
            "hot_metal_temp_C": normal(1345.0, 18.0),
            "hm_C_pct": carbon,
            "hm_Si_pct": silicon,
            "hm_Mn_pct": normal(0.35, 0.05),
            "hm_P_pct": normal(0.085, 0.008),
            "hm_S_pct": normal(0.012, 0.003),
            "hm_Ti_pct": normal(0.05, 0.01),
            "aim_temp_C": normal(1655.0, 8.0),
            "aim_C_pct": normal(0.045, 0.005),
            "aim_P_pct": normal(0.016, 0.001),
            "heavy_scrap_kg": normal(32000.0, 3000.0),
            "light_scrap_kg": normal(13000.0, 1500.0),
            "burnt_lime_kg": lime,
            "dolomitic_lime_kg": normal(2700.0, 250.0),
            "lump_ore_kg": ore,
            "oxygen_Nm3": oxygen,
        }
    )


SHOP = {"choice": PLAIN_HEAT["choice"]}
CHARGED = ["heavy_scrap_kg", "light_scrap_kg", "burnt_lime_kg", "dolomitic_lime_kg"]
CHARGED += ["lump_ore_kg", "oxygen_Nm3"]


@pytest.fixture(scope="session")
def report() -> Any:
    """Print lines that stay visible at the end of the run."""
    lines: list[str] = []
    yield lines.append
    print("\n" + "\n".join(lines))
