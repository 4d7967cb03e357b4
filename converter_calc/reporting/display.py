"""Units at the edge: the same numbers in metric or US customary units."""

from __future__ import annotations

from dataclasses import dataclass

from converter_calc.basis.units import KG_PER_SHORT_TON, SCF_PER_NM3


@dataclass(frozen=True)
class Display:
    """Labels and factors of one system of units, from kg, C, Nm3 and MJ."""

    mass: str
    mass_factor: float
    per_mass: str
    temperature: str
    gas: str
    gas_factor: float
    heat: str
    heat_factor: float

    def mass_of(self, kg: float) -> float:
        """A mass in the unit shown."""
        return kg * self.mass_factor

    def temperature_of(self, temp_C: float) -> float:
        """A temperature in the unit shown."""
        return temp_C if self.temperature == "C" else temp_C * 1.8 + 32.0

    def gas_of(self, volume_Nm3: float) -> float:
        """A gas volume in the unit shown."""
        return volume_Nm3 * self.gas_factor

    def heat_of(self, heat_MJ: float) -> float:
        """A heat in the unit shown."""
        return heat_MJ * self.heat_factor


#: 1 MJ = 947.817 Btu (International Table), NIST SP 811 (from memory).
SYSTEMS = {
    "metric": Display("kg", 1.0, "kg/t", "C", "Nm3", 1.0, "MJ", 1.0),
    "us": Display(
        "short ton",
        1.0 / KG_PER_SHORT_TON,
        "lb/short ton",
        "F",
        "scf",
        SCF_PER_NM3,
        "MMBtu",
        947.817e-6,
    ),
}
