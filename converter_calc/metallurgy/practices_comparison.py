"""Practices side by side: a table of numbers, and one heat as plain numbers."""

from __future__ import annotations

from dataclasses import dataclass
from typing import TYPE_CHECKING, Any

import numpy as np

from converter_calc.balance.heats import HeatTable
from converter_calc.balance.streams import Stream
from converter_calc.basis.dual import Array
from converter_calc.basis.units import MJ
from converter_calc.metallurgy.practices_chain import Chain, practice_columns, stage_rows
from converter_calc.planning.explain import Term
from converter_calc.planning.outcome import at

if TYPE_CHECKING:
    import pandas as pd

TITLES = {
    "one_slag": "one slag",
    "two_slags": "two slags",
    "kept_slag": "kept slag",
    "pretreated": "pre-treated",
}


@dataclass
class Comparison:
    """Practices on the hot metal of n heats.

    chains : by practice, (row numbers, chain) for heats that pose the same question.
    """

    heats: HeatTable
    chains: dict[str, list[tuple[Array, Chain]]]

    def chain(self, practice: str, index: int = 0) -> tuple[Chain, int]:
        """The chain that holds a heat, and the place of the heat in it."""
        for rows, chain in self.chains[practice]:
            place = np.flatnonzero(rows == index)
            if place.size:
                return chain, int(place[0])
        raise IndexError(f"no heat {index}")

    def table(self) -> pd.DataFrame:
        """A row for each heat and practice; columns as in `practice_columns`."""
        import pandas as pd

        parts = []
        for practice, chains in self.chains.items():
            for rows, chain in chains:
                columns: dict[str, Any] = {
                    "row": rows,
                    "heat_id": [self.heats.ids[row] for row in rows.tolist()],
                    "practice": practice,
                    "status": chain.status,
                    "binding": chain.binding,
                }
                parts.append(pd.DataFrame(columns | chain.numbers()))
        order = list(self.chains)
        whole = pd.concat(parts, ignore_index=True)
        whole["place"] = whole["practice"].map({name: k for k, name in enumerate(order)})
        whole = whole.sort_values(["row", "place"], ignore_index=True)
        return whole.drop(columns=["row", "place"])

    def terms(self, practice: str, index: int = 0) -> list[Term]:
        """The numbers of a practice for one heat as lines of an explanation."""
        chain, place = self.chain(practice, index)
        numbers = chain.numbers()
        return [
            Term(column.label, value, column.unit, column.note)
            for name, column in practice_columns().items()
            if np.isfinite(value := float(at(numbers[name], place)))
        ]

    def document(self, index: int = 0) -> dict[str, Any]:
        """One heat as plain numbers, ready for JSON."""
        found: dict[str, Any] = {}
        for practice in self.chains:
            chain, i = self.chain(practice, index)
            numbers = {name: _plain(x, i) for name, x in chain.numbers().items()}
            found[practice] = {
                "title": TITLES[practice],
                "status": chain.status[i],
                "binding": chain.binding[i],
                "freed_by": chain.frees[i],
                "numbers": numbers,
                "stages": [
                    {k: _plain(x, 0) for k, x in row.items()} for row in stage_rows(chain, i)
                ],
                "streams": [_stream(stream, i) for stream in chain.streams],
                "closure": {
                    name: _plain(closure.relative, i) for name, closure in chain.closures().items()
                },
                "handovers": [
                    {"name": h.name, "worst": _plain(h.worst(), i)} for h in chain.handovers
                ],
                "warnings": chain.warnings(i),
            }
        columns = {
            name: {"label": c.label, "unit": c.unit, "meaning": c.note}
            for name, c in practice_columns().items()
        }
        return {"heat_id": self.heats.ids[index], "columns": columns, "practices": found}


def _plain(x: Any, index: int) -> Any:
    if isinstance(x, str):
        return x
    number = float(at(x, index))
    return number if np.isfinite(number) else None


def _stream(stream: Stream, index: int) -> dict[str, Any]:
    return {
        "name": stream.name,
        "side": stream.side,
        "kind": stream.kind,
        "temperature_C": _plain(stream.temperature_C, index),
        "mass_kg": _plain(stream.mass_kg, index),
        "species_kg": {k: _plain(kg, index) for k, kg in stream.species_kg.items()},
        "enthalpy_MJ": _plain(stream.enthalpy_J / MJ, index),
    }
