"""Shared by all tests: the demo heats, and one plain heat that tests change to their need."""

from __future__ import annotations

import copy
from pathlib import Path
from typing import Any

import pytest

DEMO = Path(__file__).resolve().parents[1] / "demo_heats"

#: A plain heat, invented: ordinary hot metal, no shop file, library materials only.
PLAIN_HEAT: dict[str, Any] = {
    "heat_id": "plain",
    "hot_metal": {
        "mass_kg": 180000.0,
        "temp_C": 1340.0,
        "C_pct": 4.45,
        "Si_pct": 0.45,
        "Mn_pct": 0.35,
        "P_pct": 0.085,
        "S_pct": 0.012,
        "Ti_pct": 0.05,
        "V_pct": 0.02,
    },
    "aim": {"temp_C": 1655.0, "C_pct": 0.045, "P_pct": 0.015},
    "choice": {
        "scrap_mix": {"heavy_scrap": 70.0, "light_scrap": 30.0},
        "lime": "burnt_lime",
        "magnesia_flux": "dolomitic_lime",
        "coolant": "lump_ore",
        "fuel": "ferrosilicon_75",
    },
}


@pytest.fixture
def plain_heat() -> dict[str, Any]:
    """A fresh copy of the plain heat; free to change."""
    return copy.deepcopy(PLAIN_HEAT)


def demo_files() -> list[Path]:
    """Heat files of the demo, the shop file left out."""
    return sorted(path for path in DEMO.glob("*.toml") if path.name != "shop.toml")
