"""What is known of n heats at one set of unknowns."""

from __future__ import annotations

from dataclasses import dataclass, field
from typing import Any

import numpy as np

from converter_calc.balance.charge import Totals
from converter_calc.basis.dual import Num

GASES = ("CO", "CO2", "H2", "H2O", "N2", "Ar", "SO2", "O2")


def _quietly() -> Any:
    """A slag without silica has no CaO/SiO2: infinite or not a number, and no noise about it."""
    return np.errstate(divide="ignore", invalid="ignore")


@dataclass
class State:
    """Everything known of n heats at one set of unknowns; masses in kg, enthalpies in J."""

    charged_kg: dict[str, Num] = field(default_factory=dict)
    hot_metal_kg: Num = 0.0
    scrap_free_kg: Num = 0.0
    oxygen_Nm3: Num = 0.0
    oxygen_kg: dict[str, Num] = field(default_factory=dict)
    stirring_kg: dict[str, Num] = field(default_factory=dict)
    totals: Totals = field(default_factory=Totals)
    T_K: Num = 0.0
    C_pct: Num = 0.0
    O_pct: Num = 0.0
    slag_kg: Num = 0.0
    metal_kg: Num = 0.0
    steel_kg: Num = 0.0
    droplets_kg: Num = 0.0
    ejections_kg: Num = 0.0
    undissolved_kg: Num = 0.0
    dust_kg: dict[str, Num] = field(default_factory=dict)
    slag_species_kg: dict[str, Num] = field(default_factory=dict)
    slag_pct: dict[str, Num] = field(default_factory=dict)
    metal_species_kg: dict[str, Num] = field(default_factory=dict)
    gas_kg: dict[str, Num] = field(default_factory=dict)
    laws: dict[str, Num] = field(default_factory=dict)
    enthalpy_J: dict[str, Num] = field(default_factory=dict)
    gas_base_K: Num = 0.0
    post_combustion_J: Num = 0.0
    heat_loss_J: Num = 0.0
    residuals: dict[str, Num] = field(default_factory=dict)

    @property
    def basicity(self) -> Num:
        """CaO/SiO2 by mass of the slag as a sample shows it, undissolved lime included."""
        with _quietly():
            return self.liquid_basicity + self.undissolved_kg / self.slag_species_kg["SiO2"]

    @property
    def liquid_basicity(self) -> Num:
        """CaO/SiO2 of the liquid slag by mass, CaS counted as the lime it was."""
        with _quietly():
            return self.slag_pct["CaO"] / self.slag_pct["SiO2"]
