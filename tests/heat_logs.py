"""Logs made by the model itself, so that the true parameters are known. All numbers invented."""

from __future__ import annotations

from collections.abc import Mapping
from typing import Any

import numpy as np
import pandas as pd

from converter_calc.learning.replay import read_heats, replay
from tests.conftest import DEMO

SHOP = DEMO / "shop.toml"
#: Column: mean and standard deviation over the heats.
CHARGE = {
    "hot_metal_kg": (184000.0, 4000.0),
    "hot_metal_temp_C": (1345.0, 18.0),
    "hm_C_pct": (4.5, 0.1),
    "hm_Si_pct": (0.45, 0.12),
    "hm_Mn_pct": (0.35, 0.06),
    "hm_P_pct": (0.085, 0.01),
    "hm_S_pct": (0.012, 0.004),
    "hm_Ti_pct": (0.05, 0.015),
    "heavy_scrap_kg": (24000.0, 1500.0),
    "shop_scrap_kg": (14000.0, 3000.0),
    "galvanised_bundles_kg": (9500.0, 2500.0),
    "burnt_lime_kg": (6700.0, 600.0),
    "dolomitic_lime_kg": (3200.0, 400.0),
    "lump_ore_kg": (800.0, 300.0),
    "wait_min": (20.0, 12.0),
    "blow_min": (17.0, 0.7),
}
#: Scatter of what is measured, transformed as it is compared.
NOISE = {
    "end_temp_C": 8.0,
    "end_C_pct": 0.15,
    "end_Mn_pct": 0.10,
    "end_P_pct": 0.12,
    "end_S_pct": 0.10,
    "end_O_ppm": 0.12,
    "slag_CaO_pct": 1.5,
    "slag_SiO2_pct": 1.0,
    "slag_MgO_pct": 0.6,
    "slag_FeO_pct": 1.5,
    "slag_MnO_pct": 0.4,
    "slag_P2O5_pct": 0.2,
    "slag_Al2O3_pct": 0.2,
    "steel_kg": 0.01,
}


def charges(n: int, seed: int = 1) -> pd.DataFrame:
    """Complete charges of n heats, near those of an ordinary one."""
    rng = np.random.default_rng(seed)
    frame = pd.DataFrame({"heat_id": [f"H{i:05d}" for i in range(n)]})
    for name, (mean, sd) in CHARGE.items():
        z = np.clip(rng.standard_normal(n), -2.5, 2.5)
        frame[name] = np.maximum(mean + sd * z, 0.1 * mean)
    warmer = 115.0 * (frame["hot_metal_temp_C"] - 1345.0) + 23000.0 * (frame["hm_Si_pct"] - 0.45)
    others = frame["shop_scrap_kg"] + frame["galvanised_bundles_kg"] - 23500.0
    frame["heavy_scrap_kg"] = np.maximum(frame["heavy_scrap_kg"] + warmer - 0.9 * others, 2000.0)
    carbon = frame["hot_metal_kg"] * frame["hm_C_pct"] / 100.0
    silicon = frame["hot_metal_kg"] * frame["hm_Si_pct"] / 100.0
    frame["oxygen_Nm3"] = 1.03 * carbon + 0.85 * silicon + 1600.0 + rng.normal(0.0, 60.0, n)
    frame["oxygen_Nm3"] -= 0.2 * frame["lump_ore_kg"]
    return frame


def made_log(
    n: int,
    truth: Mapping[str, Any] | None = None,
    *,
    noise: float = 0.0,
    seed: int = 1,
    shop: Any = SHOP,
) -> pd.DataFrame:
    """A heat log of n heats whose outcome the model gives with the parameters `truth`.

    noise : scatter of every measurement, as a multiple of NOISE.
    """
    frame = charges(n, seed)
    blank = frame.assign(**dict.fromkeys(NOISE, 1.0))
    found = replay(read_heats(blank, shop), values=dict(truth or {}))
    rng = np.random.default_rng([seed, 7])
    for column, name in enumerate(found.names):
        y = found.predicted[:, column] + noise * NOISE[name] * rng.standard_normal(n)
        frame[name] = np.exp(y) if name in LOGS else y
    return frame


LOGS = {"end_C_pct", "end_Mn_pct", "end_P_pct", "end_S_pct", "end_O_ppm", "steel_kg"}
