"""Enthalpy of elements dissolved in liquid iron."""

from __future__ import annotations

from collections.abc import Sequence
from functools import cache

from converter_calc.basis.dual import Num
from converter_calc.basis.elements import atomic_weight
from converter_calc.basis.units import T_REF_K
from converter_calc.data.tables import read_csv_rows
from converter_calc.thermo.enthalpy import (
    STEELMAKING_K,
    EnthalpySet,
    Phase,
    known_species,
    segments_of,
)

#: Dulong and Petit: 3 R per mole of atoms [J/(mol K)], for elements without any data.
DULONG_PETIT_J_MOL_K = 3.0 * 8.314462618


@cache
def _heats() -> dict[str, tuple[str, Phase, float]]:
    """Element -> reference species, its phase, heat of solution [J/mol]."""
    table: dict[str, tuple[str, Phase, float]] = {}
    for row in read_csv_rows("solution_heats.csv"):
        phase: Phase = "s" if row["phase"] == "s" else "l" if row["phase"] == "l" else "g"
        table[row["element"]] = row["reference"], phase, float(row["heat_kJ_mol"]) * 1e3
    return table


def _liquid_or_last(element: str) -> Phase:
    return "l" if any(part.phase == "l" for part in segments_of(element)) else "stable"


class MetalEnthalpy:
    """Elements in liquid iron at any temperature.

    H of an element [J/kg] = H of its reference form at T + heat of solution, which is taken
    as constant (1 mass % state). Iron is its own liquid, also below its melting point. An
    element without a heat of solution is taken as its pure liquid with zero heat; one without
    enthalpy data as 3 R per mole of atoms from 298.15 K. `approximate` names both kinds.

    Parameters
    ----------
    elements : symbols. Raises DataError for a symbol without an atomic weight.

    Source: data/solution_heats.csv (Sigworth & Elliott, Metal Science 8 (1974) 298).
    """

    def __init__(self, elements: Sequence[str]) -> None:
        self.elements = tuple(elements)
        self.approximate = tuple(name for name in self.elements if name not in _heats())
        members: list[tuple[str, Phase]] = []
        offsets: list[float] = []
        for name in self.elements:
            kg_mol = atomic_weight(name) * 1e-3
            if name in _heats():
                reference, phase, heat = _heats()[name]
                members.append((reference, phase))
                offsets.append(heat / kg_mol)
            elif name in known_species():
                members.append((name, _liquid_or_last(name)))
                offsets.append(0.0)
        self._with_data = tuple(
            name for name in self.elements if name in _heats() or name in known_species()
        )
        #: What an EnthalpySet has to hold for these elements: members, and offsets [J/kg].
        self.members, self.offsets_J_kg = tuple(members), tuple(offsets)
        self._set = EnthalpySet(members, offsets, STEELMAKING_K)

    def evaluate_dual(self, T_K: Num) -> dict[str, Num]:
        """Enthalpy of each dissolved element [J/kg of the element] at T [K].

        T_K : a number, array (n,) or Dual. The values have the shape of T.
        """
        h: dict[str, Num] = dict(zip(self._with_data, self._set.evaluate_dual(T_K), strict=True))
        for name in self.elements:
            if name not in h:
                cp = DULONG_PETIT_J_MOL_K / (atomic_weight(name) * 1e-3)
                h[name] = (T_K - T_REF_K) * cp
        return h
