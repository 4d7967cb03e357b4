"""The heat register: plans, actuals and parameter sets in one file that survives a crash.

An embedded SQLite database with a write-ahead log. What is recorded is never changed: a
corrected actual keeps the older one. Each recording is one transaction, on the disk when the
call returns. Keep the file on a local disk; SQLite's locks do not hold on network drives.
"""

from __future__ import annotations

import json
from typing import TYPE_CHECKING

import numpy as np

from converter_calc.basis.errors import Fault, InputError
from converter_calc.register.actuals import Actuals
from converter_calc.register.comparison import Comparison, compare_heat
from converter_calc.register.database import DEFAULT_PATH
from converter_calc.register.parameter_sets import ParameterSets
from converter_calc.register.plans import Plans

if TYPE_CHECKING:
    import pandas as pd

#: Columns of the overview that are numbers.
AIMS_AND_ENDS = (
    *("aim_temp_C", "end_temp_C", "aim_C_pct", "end_C_pct", "aim_P_pct", "end_P_pct"),
    "steel_kg",
)

__all__ = ["DEFAULT_PATH", "Register"]


class Register(Plans, Actuals, ParameterSets):
    """A heat register, open. Use as a context manager, from one thread.

    Register.open(path) opens or creates one.
    """

    def compare(self, heat_id: str, plan_id: int | None = None) -> Comparison:
        """Plan and actual of a heat side by side.

        Parameters
        ----------
        heat_id : the heat. plan_id : which of its plans; the latest where not given.

        Raises
        ------
        InputError : no such plan, or no actual of the heat.
        """
        plan = self.latest_plan(heat_id) if plan_id is None else self.plan(plan_id)
        if plan is None:
            raise InputError([Fault("heat_id", f"no plan of heat {heat_id} in {self.path}")])
        if plan.heat_id != heat_id:
            message = f"plan {plan_id} is of heat {plan.heat_id}, not of {heat_id}"
            raise InputError([Fault("plan", message)])
        actual = self.current_actual(heat_id)
        if actual is None:
            raise InputError([Fault("heat_id", f"no actual of heat {heat_id} in {self.path}")])
        return compare_heat(plan, actual)

    def overview(self, limit: int | None = None) -> pd.DataFrame:
        """Heats planned or made, a row each, the one recorded last at the end.

        Columns: heat_id, planned_at (ISO 8601 text or None), tapped_at, aims (the log's own,
        else the plan's) and end point. limit : only the last so many.
        """
        import pandas as pd

        rows = self.rows(
            "SELECT h.heat_id, p.created_at, p.planned, a.content FROM "
            "(SELECT heat_id, max(moment) AS moment, max(number) AS number FROM "
            "(SELECT heat_id, created_at AS moment, plan_id AS number FROM plans UNION ALL "
            "SELECT heat_id, recorded_at, actual_id FROM actuals WHERE superseded_at IS NULL) "
            "GROUP BY heat_id ORDER BY 2 DESC, 3 DESC LIMIT ?) AS h "
            "LEFT JOIN plans AS p ON p.plan_id = "
            "(SELECT max(plan_id) FROM plans WHERE heat_id = h.heat_id) "
            "LEFT JOIN actuals AS a ON a.heat_id = h.heat_id AND a.superseded_at IS NULL "
            "ORDER BY h.moment, h.number",
            (-1 if limit is None else limit,),
        )
        planned = [json.loads(row[2]) if row[2] else {} for row in rows]
        made = [json.loads(row[3]) if row[3] else {} for row in rows]
        times = [one.get("tapped_at", "NaTZ")[:-1] for one in made]
        table = {
            "heat_id": pd.Series([row[0] for row in rows], dtype=object),
            "planned_at": pd.Series([row[1] for row in rows], dtype=object),
            "tapped_at": np.array(times, dtype="datetime64[us]"),
        }
        for name in AIMS_AND_ENDS:
            from_plan = planned if name.startswith("aim_") else [{}] * len(rows)
            pairs = zip(made, from_plan, strict=True)
            cells = [one.get(name, plan.get(name, np.nan)) for one, plan in pairs]
            table[name] = np.array(cells, dtype=float)
        return pd.DataFrame(table)
