"""What is known of a heat before it ends, as plain columns for plain statistics."""

from __future__ import annotations

from typing import TYPE_CHECKING

import numpy as np

from converter_calc.basis.dual import Array

if TYPE_CHECKING:
    import pandas as pd

#: Columns that are features as they stand.
PLAIN = (
    "hot_metal_temp_C", "hm_C_pct", "hm_Si_pct", "hm_Mn_pct", "hm_P_pct", "hm_S_pct", "hm_Ti_pct",
    "hm_V_pct", "hm_Cr_pct", "wait_min", "blow_min",
)  # fmt: skip
#: A column that fewer heats than this share give says nothing of the others.
LEAST_GIVEN = 0.2


def features_of(frame: pd.DataFrame, materials: list[str]) -> tuple[list[str], Array]:
    """Names (p) and values (n, p) of the features of each heat of a log; NaN where missing.

    Temperatures [C], analyses [mass %], times [min]; charge masses in kg per tonne of hot metal
    and oxygen in Nm3 per tonne of it; the logarithm of the waiting time. Outcomes are no
    features. materials : names of the materials of the shop; one that a heat does not name
    counts as none of it.
    """
    n = len(frame)
    found: dict[str, Array] = {}
    for name in PLAIN:
        if name in frame:
            found[name] = frame[name].to_numpy(dtype=float)
    if "wait_min" in found:
        found["log_wait"] = np.log1p(np.maximum(found["wait_min"], 0.0))
    hot_metal_t = frame["hot_metal_kg"].to_numpy(dtype=float) * 1e-3
    found["hot_metal_t"] = hot_metal_t
    for name in materials:
        column = f"{name}_kg"
        if column in frame:
            kg = frame[column].to_numpy(dtype=float)
            found[f"{name}_kg_per_t"] = np.nan_to_num(kg, nan=0.0) / hot_metal_t
    if "oxygen_Nm3" in frame:
        found["oxygen_Nm3_per_t"] = frame["oxygen_Nm3"].to_numpy(dtype=float) / hot_metal_t
    kept = {name: x for name, x in found.items() if np.isfinite(x).mean() >= LEAST_GIVEN}
    values = np.column_stack(list(kept.values())) if kept else np.zeros((n, 0))
    return list(kept), values
