"""Parameter sets of shops in the register, a version each time."""

from __future__ import annotations

import json
from collections.abc import Mapping
from dataclasses import dataclass
from typing import Any

import numpy as np

import converter_calc
from converter_calc.basis.dual import Array
from converter_calc.register import opening
from converter_calc.register.contents import checked_parameters
from converter_calc.register.database import Database, as_json


@dataclass(frozen=True)
class ParameterSet:
    """One version of a shop's parameters; covariance (k, k) in the order of `values`, or None."""

    set_id: int
    shop: str
    version: int
    created_at: str
    note: str
    values: dict[str, float]
    covariance: Array | None


class ParameterSets(Database):
    """Recorded parameter sets."""

    def save_parameters(
        self,
        shop: str,
        values: Mapping[str, float],
        covariance: Any = None,
        note: str = "",
    ) -> int:
        """Record a version of a shop's parameters.

        Parameters
        ----------
        shop : name of the shop. values : parameter by name, finite.
        covariance : (k, k) in the order of `values`, symmetric, no negative variance.
        note : one line on where they come from.

        Returns
        -------
        Version, counted from 1 for each shop.

        Raises InputError where a value or the covariance is wrong.
        """
        numbers, matrix = checked_parameters(shop, values, covariance)
        with self.writing():
            query = "SELECT coalesce(max(version), 0) + 1 FROM parameter_sets WHERE shop = ?"
            version = int(self.db.execute(query, (shop,)).fetchone()[0])
            text = None if matrix is None else as_json(matrix.tolist())
            made = (opening.now(), converter_calc.__version__, note)
            row = (shop, version, *made, as_json(numbers), text)
            self.db.execute(
                "INSERT INTO parameter_sets (shop, version, created_at, package_version, note, "
                "parameter_values, covariance) VALUES (?, ?, ?, ?, ?, ?, ?)",
                row,
            )
        return version

    def parameter_sets(self, shop: str | None = None) -> list[ParameterSet]:
        """All recorded parameter sets (of a shop), the newest first."""
        rows = self.rows(
            "SELECT set_id, shop, version, created_at, note, parameter_values, covariance "
            "FROM parameter_sets WHERE ?1 IS NULL OR shop = ?1 ORDER BY set_id DESC",
            (shop,),
        )
        found = []
        for set_id, name, version, moment, note, values, matrix in rows:
            covariance = None if matrix is None else np.array(json.loads(matrix), dtype=float)
            numbers = json.loads(values)
            found.append(ParameterSet(set_id, name, version, moment, note, numbers, covariance))
        return found

    def current_parameters(self, shop: str) -> ParameterSet | None:
        """The newest parameter set of a shop; None where there is none."""
        return next(iter(self.parameter_sets(shop)), None)
