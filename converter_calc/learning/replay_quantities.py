"""What is observed of a heat and compared with the model: transforms, and the model's value."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass
from functools import cache

import numpy as np

from converter_calc.balance.problem import Problem
from converter_calc.balance.state import State
from converter_calc.basis import dual as ad
from converter_calc.basis.dual import Array, Num
from converter_calc.basis.elements import molar_mass
from converter_calc.basis.units import ZERO_C_K
from converter_calc.data.tables import read_csv_rows
from converter_calc.laws.slag_measures import FetO_pct


@dataclass(frozen=True)
class Quantity:
    """One outcome of a heat.

    name : column of the heat log. log : compared by its natural logarithm. first_sd, least_sd :
    scatter to start from and its floor, transformed. offset_sd : what samples or model may be off
    by in all heats alike. whole_heat : a gross error here puts the
    whole heat in doubt.
    """

    name: str
    log: bool
    first_sd: float
    least_sd: float
    offset_sd: float
    whole_heat: bool
    unit: str
    description: str

    def transformed(self, x: Array) -> Array:
        """The value as it is compared; NaN where it has no logarithm."""
        if not self.log:
            return x
        with np.errstate(all="ignore"):
            return np.where(x > 0.0, np.log(np.where(x > 0.0, x, 1.0)), np.nan)

    def plain(self, y: Array) -> Array:
        """The value in its own unit."""
        return np.exp(y) if self.log else y


@cache
def quantities() -> dict[str, Quantity]:
    """All quantities by name, in the order of data/observed_quantities.csv."""
    return {
        row["name"]: Quantity(
            row["name"],
            row["transform"] == "log",
            float(row["first_sd"]),
            float(row["least_sd"]),
            float(row["offset_sd"] or 0.0),
            row["whole_heat"] == "yes",
            row["unit"],
            row["description"],
        )
        for row in read_csv_rows("observed_quantities.csv")
    }


def predicted(_: Problem, s: State, x: Mapping[str, Num]) -> dict[str, Num]:
    """Every quantity of a solved state, transformed as it is compared.

    The slag is that of a sample: undissolved lime and lime bound as sulphide count as CaO, all
    iron as FeO. What the charge holds nothing of is left out.
    """
    found = {"end_temp_C": s.T_K - ZERO_C_K, "end_O_ppm": s.O_pct * 1e4, "steel_kg": s.steel_kg}
    if "root_C" in x:
        found["end_C_pct"] = s.C_pct
    for element in ("Mn", "P", "S"):
        if element in s.metal_species_kg and np.any(ad.value(s.totals.of(element)) > 0.0):
            found[f"end_{element}_pct"] = s.metal_species_kg[element] * (100.0 / s.metal_kg)
    sample = 100.0 / (s.slag_kg + s.undissolved_kg)
    kg = s.slag_species_kg
    lime = kg["CaO"] + s.undissolved_kg + kg["CaS"] * (molar_mass("CaO") / molar_mass("CaS"))
    found["slag_CaO_pct"] = lime * sample
    found["slag_FeO_pct"] = FetO_pct({"FeO": kg["FeO"] * sample, "Fe2O3": kg["Fe2O3"] * sample})
    for oxide in ("SiO2", "MgO", "MnO", "P2O5", "Al2O3"):
        if oxide in kg:
            found[f"slag_{oxide}_pct"] = kg[oxide] * sample
    return {
        name: ad.log(found[name]) if quantity.log else found[name]
        for name, quantity in quantities().items()
        if name in found
    }
