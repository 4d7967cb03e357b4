"""Steel and slag at the end of the blow for tests of the tap; invented."""

from __future__ import annotations

from typing import Any

import numpy as np

from converter_calc.tapping.pouring import TapCase
from converter_calc.tapping.tap_practice import tap_practice

#: Nothing but the steel: no slag, no air, no losses of temperature.
BARE: dict[str, Any] = {
    "carried_slag_kg_per_t": 0, "air_oxygen_kg_per_t": 0, "stream_K_per_min": 0,
    "standing_K_per_min": 0, "lining_effusivity": 200, "lining_temp_C": 1500,
    "Al_burnt_share": 0, "loss_to_air_share": 0,
}  # fmt: skip
STEEL = {"C": 0.05, "Mn": 0.12, "P": 0.010, "S": 0.009, "Cu": 0.02, "O": 0.055}
SLAG = {"CaO": 46.0, "SiO2": 14.0, "MgO": 8.0, "FeO": 17.0, "Fe2O3": 6.0, "MnO": 5.0,
        "P2O5": 2.2, "Al2O3": 1.5, "CaS": 0.3}  # fmt: skip


def tapped(
    killer: str = "Al",
    n: int = 1,
    temp_C: float = 1650.0,
    steel: dict[str, Any] | None = None,
    **practice: Any,
) -> TapCase:
    """A case of n like heats of 200 t."""
    pct = {**STEEL, **(steel or {})}
    pct["Fe"] = 100.0 - sum(np.asarray(x) for x in pct.values())
    return TapCase(
        np.full(n, 200e3),
        {e: np.zeros(n) + x for e, x in pct.items()},
        np.full(n, temp_C + 273.15),
        {s: np.full(n, x) for s, x in SLAG.items()},
        tap_practice(practice),
        killer,
    )
