"""Plan and actual of a heat side by side, and what the model says of the charge really made."""

from __future__ import annotations

import math
from collections.abc import Mapping
from dataclasses import dataclass, field
from typing import TYPE_CHECKING, Any

from converter_calc.balance.materials import library_fields
from converter_calc.basis.errors import ConverterError
from converter_calc.heatlog.columns import find_column, in_order
from converter_calc.planning.plan import predict
from converter_calc.register.plans import StoredPlan
from converter_calc.register.snapshots import FEO_PER_FE2O3

if TYPE_CHECKING:
    import pandas as pd

#: What is aimed at by name of the result.
AIM_OF = {
    "end_temp_C": "aim_temp_C",
    "end_C_pct": "aim_C_pct",
    "end_P_pct": "aim_P_pct",
    "end_S_pct": "aim_S_pct",
    "end_Mn_pct": "aim_Mn_pct",
    "steel_kg": "aim_steel_kg",
}
_CHARGE = ("hot_metal", "charge")


@dataclass
class Comparison:
    """A planned heat beside what became of it.

    rows : quantity, unit, aim, planned, actual, difference (actual less planned), and
        expected: what the model predicts for the charge that was really made, so that
        `planned` to `expected` is the work of the charge and `expected` to `actual` (column
        `unexplained`) what the model does not explain. NaN where not known.
    notes : what was taken from the plan because it was not logged, or why nothing is expected.
    """

    heat_id: str
    plan_id: int
    planned_at: str
    rows: pd.DataFrame
    notes: list[str] = field(default_factory=list)


def compare_heat(plan: StoredPlan, actual: Mapping[str, Any]) -> Comparison:
    """Compare a recorded plan with the values of an actual by names of the heat log."""
    import pandas as pd

    materials = _materials(plan)
    made = {name: x for name, x in actual.items() if isinstance(x, int | float)}
    scraps = [f"{name}_kg" for name, kind in materials.items() if kind == "scrap"]
    if any(name in made for name in scraps):
        made["scrap_total_kg"] = math.fsum(made.get(name, 0.0) for name in scraps)
    expected, notes = _expected(plan, made)
    rows = []
    for name in _in_order({**plan.planned, **made}):
        planned, got = plan.planned.get(name, math.nan), made.get(name, math.nan)
        if name.startswith("aim_") or name not in made or (planned == 0.0 and got == 0.0):
            continue
        column = find_column(name, materials)
        aim = plan.planned.get(AIM_OF.get(name, ""), math.nan)
        model = expected.get(name, math.nan) if column and column.group == "outcome" else math.nan
        rows.append(
            (name, column.unit if column else "kg", aim, planned, got, got - planned, model,
             got - model)
        )  # fmt: skip
    names = ["quantity", "unit", "aim", "planned", "actual", "difference", "expected",
             "unexplained"]  # fmt: skip
    table = pd.DataFrame(rows, columns=names)
    return Comparison(plan.heat_id, plan.plan_id, plan.created_at, table, notes)


def _in_order(names: Mapping[str, Any]) -> list[str]:
    """Scrap in all stands behind the hot metal."""
    ordered = in_order(name for name in names if name != "scrap_total_kg")
    if "scrap_total_kg" in names:
        place = ordered.index("hot_metal_kg") + 1 if "hot_metal_kg" in ordered else 0
        ordered.insert(place, "scrap_total_kg")
    return ordered


def _materials(plan: StoredPlan) -> dict[str, str]:
    """Kind of each material by name: library, and what the plan's own inputs say."""
    kinds = {name: fields.get("kind", "other") for name, fields in library_fields().items()}
    for name, fields in plan.inputs.get("materials", {}).items():
        kinds[name] = fields.get("kind", kinds.get(name, "other"))
    return kinds


def _expected(plan: StoredPlan, made: Mapping[str, float]) -> tuple[dict[str, float], list[str]]:
    """What the model predicts for the charge that was made, by names of the heat log."""
    import pandas as pd

    if "oxygen_Nm3" not in made or "hot_metal_kg" not in made:
        lacks = [name for name in ("hot_metal_kg", "oxygen_Nm3") if name not in made]
        return {}, [f"no expected values: {' and '.join(lacks)} not logged"]
    inputs: dict[str, float] = {}
    borrowed: list[str] = []
    names = _materials(plan)
    for name in in_order({**plan.planned, **made}):
        column = find_column(name, names)
        if column is None or column.group != "input":
            continue
        if name in made:
            inputs[name] = made[name]
        elif name in plan.planned:
            inputs[name] = plan.planned[name]
            if plan.planned[name] != 0.0:
                borrowed.append(name)
    shop = {key: part for key, part in plan.inputs.items() if key not in _CHARGE}
    shop = {key: part for key, part in shop.items() if key not in ("heat_id", "why")}
    frame = pd.DataFrame([{"heat_id": plan.heat_id, **inputs}])
    notes = [f"not logged, taken from the plan: {', '.join(borrowed)}"] if borrowed else []
    try:
        result = predict(frame, shop).iloc[0].to_dict()
    except ConverterError as error:
        return {}, [f"no expected values: {str(error).splitlines()[0]}"]
    if result["status"] != "solved":
        return {}, ["no expected values: the model finds no end point for the charge as logged"]
    iron = result.get("slag_Fe2O3_pct", 0.0) * FEO_PER_FE2O3
    result["slag_FeO_pct"] = result.get("slag_FeO_pct", 0.0) + iron
    return {name: float(x) for name, x in result.items() if isinstance(x, int | float)}, notes
