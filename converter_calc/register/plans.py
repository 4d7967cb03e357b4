"""Plans in the register."""

from __future__ import annotations

import json
from collections.abc import Mapping
from dataclasses import dataclass
from pathlib import Path
from typing import TYPE_CHECKING, Any

import numpy as np

import converter_calc
from converter_calc.basis.errors import Fault, InputError
from converter_calc.planning.outcome import Outcome
from converter_calc.planning.plan import plan as plan_heat
from converter_calc.register import opening
from converter_calc.register.database import Database, as_json
from converter_calc.register.snapshots import (
    document_of_heat,
    model_version,
    planned_values,
    whole_document,
)

if TYPE_CHECKING:
    import pandas as pd


@dataclass(frozen=True)
class StoredPlan:
    """A recorded plan.

    inputs : heat file, complete on its own. planned : planned values by names of the heat log.
    result : result document. model_version : digest of the data the plan was made with.
    """

    plan_id: int
    heat_id: str
    created_at: str
    status: str
    package_version: str
    model_version: str
    set_id: int | None
    inputs: dict[str, Any]
    planned: dict[str, float]
    result: dict[str, Any]


class Plans(Database):
    """Recorded plans."""

    def record_plan(
        self,
        heat: Outcome | str | Path | Mapping[str, Any],
        *,
        inputs: Mapping[str, Any] | None = None,
        index: int = 0,
        set_id: int | None = None,
    ) -> int:
        """Record a plan.

        Parameters
        ----------
        heat : a heat file (path or content), which is planned here, or a plan already made.
        inputs : for a plan already made, the heat file it was made from, complete on its own;
            worked out from the plan where not given.
        index : which heat of the plan. set_id : parameter set that the plan was made with.

        Returns
        -------
        Number of the plan.

        Raises
        ------
        InputError : the heat is wrong, has no solution that could be recorded, or no such
            parameter set. InfeasibleError, ConvergenceError : as `plan`.
        """
        if isinstance(heat, Outcome):
            outcome = heat
        else:
            inputs = whole_document(heat)
            outcome, index = plan_heat(inputs), 0
        heat_id, status = outcome.heats.ids[index], outcome.status[index]
        if status != "solved":
            message = f"the plan of heat {heat_id} is {status}; only a solved plan is recorded"
            raise InputError([Fault("plan", message)])
        document = document_of_heat(outcome.heats, index) if inputs is None else dict(inputs)
        if set_id is not None and not self.rows(
            "SELECT 1 FROM parameter_sets WHERE set_id = ?", (set_id,)
        ):
            raise InputError([Fault("set_id", f"no parameter set {set_id} in {self.path}")])
        row = (
            heat_id,
            opening.now(),
            status,
            converter_calc.__version__,
            as_json(document),
            as_json(planned_values(outcome, index)),
            as_json(outcome.document(index)),
            model_version(),
            set_id,
        )
        with self.writing():
            self.add_materials(outcome.heats.materials)
            cursor = self.db.execute(
                "INSERT INTO plans (heat_id, created_at, status, package_version, inputs, "
                "planned, result, model_version, set_id) VALUES (?, ?, ?, ?, ?, ?, ?, ?, ?)",
                row,
            )
        return int(cursor.lastrowid or 0)

    def plans(self, heat_id: str | None = None, *, limit: int | None = None) -> pd.DataFrame:
        """Recorded plans, the newest first, without their documents.

        Columns: plan_id, heat_id, created_at, package_version, model_version, set_id, and
        planned values by names of the heat log (hot metal, scrap, oxygen, aims, end point).
        """
        import pandas as pd

        rows = self.rows(
            "SELECT plan_id, heat_id, created_at, package_version, model_version, set_id, planned "
            "FROM plans WHERE ?1 IS NULL OR heat_id = ?1 ORDER BY plan_id DESC LIMIT ?2",
            (heat_id, -1 if limit is None else limit),
        )
        names = ["plan_id", "heat_id", "created_at", "package_version", "model_version", "set_id"]
        table = pd.DataFrame([row[:-1] for row in rows], columns=names)
        planned = [json.loads(row[-1]) for row in rows]
        for name in ("hot_metal_kg", "scrap_total_kg", "oxygen_Nm3", "aim_temp_C", "aim_C_pct",
                     "aim_P_pct", "end_temp_C", "end_C_pct", "end_P_pct", "steel_kg"):  # fmt: skip
            table[name] = np.array([one.get(name, np.nan) for one in planned], dtype=float)
        return table

    def plan(self, plan_id: int) -> StoredPlan:
        """A recorded plan with its documents; raises InputError where there is none."""
        rows = self.rows(
            "SELECT plan_id, heat_id, created_at, status, package_version, model_version, "
            "set_id, inputs, planned, result FROM plans WHERE plan_id = ?",
            (plan_id,),
        )
        if not rows:
            raise InputError([Fault("plan", f"no plan {plan_id} in {self.path}")])
        return StoredPlan(*rows[0][:-3], *map(json.loads, rows[0][-3:]))

    def latest_plan(self, heat_id: str) -> StoredPlan | None:
        """The plan of a heat that was recorded last; None where there is none."""
        rows = self.rows("SELECT max(plan_id) FROM plans WHERE heat_id = ?", (heat_id,))
        return None if rows[0][0] is None else self.plan(rows[0][0])
