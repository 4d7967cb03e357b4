"""Where each element goes: steel, droplets, ejections, slag, undissolved lime, gas and dust."""

from __future__ import annotations

from collections.abc import Callable, Iterable, Mapping
from dataclasses import dataclass
from typing import TYPE_CHECKING, Any

import numpy as np

from converter_calc.balance.charge import elements_of
from converter_calc.balance.streams import Stream
from converter_calc.basis.dual import Array
from converter_calc.basis.errors import Fault, InputError
from converter_calc.data.tables import read_toml
from converter_calc.laws import iron_oxide, manganese, phosphorus, sulphur
from converter_calc.laws.catalogue import Outside
from converter_calc.planning.outcome import Outcome, at, spread

if TYPE_CHECKING:
    import pandas as pd

#: What is shown first; the others follow by name.
FIRST = ("Mn", "S", "P", "V", "Cr", "Ti", "Si", "C", "Fe")
#: Streams out, and what a reader calls them.
PLACES = {
    "steel": "steel",
    "iron_droplets": "droplets",
    "ejections": "ejections",
    "slag": "slag",
    "undissolved_lime": "undissolved",
    "off_gas": "gas",
    "dust": "dust",
}


@dataclass(frozen=True)
class Law:
    """What decides where an element goes: name, source, partition ratio, where out of range.

    ratio : (%X)/[%X], (n,), NaN where the law has none. outside : pairs of a text and where it
    holds, (n,) bool.
    """

    name: str
    source: str
    ratio: Array
    outside: tuple[tuple[str, Array], ...] = ()


@dataclass(frozen=True)
class Shares:
    """Where one element goes, n heats: kg brought in and taken out by place, and by what law."""

    element: str
    brought_kg: dict[str, Array]
    taken_kg: dict[str, Array]
    law: Law

    @property
    def input_kg(self) -> Array:
        """All of the element charged [kg], (n,)."""
        total: Array = np.sum(list(self.brought_kg.values()), axis=0)
        return total

    def pct(self) -> dict[str, Array]:
        """Share of the input that goes to each place [%], (n,); NaN where none was charged."""
        with np.errstate(all="ignore"):
            return {place: 100.0 * kg / self.input_kg for place, kg in self.taken_kg.items()}

    def range_note(self, index: int) -> str:
        """In what the law is used outside its range; empty where it is inside."""
        return "; ".join(text for text, mask in self.law.outside if bool(at(mask, index)))


@dataclass(frozen=True)
class ElementShares:
    """Shares by element for n heats."""

    ids: list[str]
    elements: dict[str, Shares]

    def main(self) -> ElementShares:
        """Those of the slag-metal laws, carbon and iron only."""
        kept = {el: shares for el, shares in self.elements.items() if el in FIRST}
        return ElementShares(self.ids, kept)

    def frame(self, index: int = 0) -> pd.DataFrame:
        """One heat: a row an element with kg in, kg and % by place, law, ratio and range."""
        import pandas as pd

        rows = []
        for element, found in self.elements.items():
            row: dict[str, Any] = {"element": element, "input_kg": found.input_kg[index]}
            row |= {f"{place}_kg": kg[index] for place, kg in found.taken_kg.items()}
            row |= {f"{place}_pct": pct[index] for place, pct in found.pct().items()}
            row |= {"law": found.law.name, "ratio": float(at(found.law.ratio, index))}
            row |= {"outside": found.range_note(index), "source": found.law.source}
            rows.append(row)
        return pd.DataFrame(rows)

    def document(self, index: int = 0) -> dict[str, Any]:
        """One heat as plain numbers, ready for JSON: in and out [kg], share [%], law, range."""
        return {
            element: {
                "input_kg": float(found.input_kg[index]),
                "brought_kg": {k: float(kg[index]) for k, kg in found.brought_kg.items()},
                "taken_kg": {k: float(kg[index]) for k, kg in found.taken_kg.items()},
                "taken_pct": {k: float(pct[index]) for k, pct in found.pct().items()},
                "law": found.law.name,
                "ratio": _number(at(found.law.ratio, index)),
                "outside": found.range_note(index),
                "source": found.law.source,
            }
            for element, found in self.elements.items()
        }

    def table(self) -> pd.DataFrame:
        """All heats: a row a heat and element."""
        import pandas as pd

        parts = [self.frame(k).assign(heat_id=self.ids[k]) for k in range(len(self.ids))]
        return pd.concat(parts, ignore_index=True)


def _number(x: Any) -> float | None:
    return float(x) if np.isfinite(x) else None


def element_shares(outcome: Outcome, elements: Iterable[str] | None = None) -> ElementShares:
    """Where the elements of n heats go, read off the streams of the balance.

    Parameters
    ----------
    outcome : solved heats. elements : symbols; all that are charged where None, those of the
    slag-metal laws first; MAIN names these.

    Returns
    -------
    ElementShares: kg and % of the input by place; each element sums to its input as the balance
    closes (1e-9). Raises InputError for a symbol that is not charged.
    """
    brought, taken = shares_of(outcome.streams, outcome.n, PLACES)
    names = [*(el for el in FIRST if el in brought), *sorted(set(brought) - set(FIRST))]
    if elements is not None:
        wanted = list(elements)
        missing = [el for el in wanted if el not in brought]
        if missing:
            allowed = ", ".join(names)
            raise InputError(
                [Fault("element", f"{el!r} is not charged (charged: {allowed})") for el in missing]
            )
        names = wanted
    found = {el: Shares(el, brought[el], taken[el], law_of(outcome, el)) for el in names}
    return ElementShares(list(outcome.heats.ids), found)


def shares_of(
    streams: Iterable[Stream], n: int, places: Mapping[str, str] | None = None
) -> tuple[dict[str, dict[str, Array]], dict[str, dict[str, Array]]]:
    """Kg of each element by stream in and by place out, (n,) each.

    places : stream out to the name of its place; all of them appear, even where empty. A stream
    without an entry keeps its name.
    """
    sides: dict[str, dict[str, dict[str, Array]]] = {"in": {}, "out": {}}
    known = dict(places or {})
    for stream in streams:
        name = known.get(stream.name, stream.name) if stream.side == "out" else stream.name
        for element, kg in elements_of(stream.species_kg).items():
            row = sides[stream.side].setdefault(element, {})
            row[name] = row.get(name, np.zeros(n)) + spread(kg, n)
    for element, row in sides["out"].items():
        sides["out"][element] = {
            **{place: row.get(place, np.zeros(n)) for place in known.values()},
            **row,
        }
    charged = {el: row for el, row in sides["in"].items() if np.any(sum(row.values()) > 0.0)}
    nothing = {place: np.zeros(n) for place in known.values()}
    return charged, {el: sides["out"].get(el, nothing) for el in charged}


def law_of(outcome: Outcome, element: str) -> Law:
    """The law that decides where an element goes in these heats, with its range check."""
    s, p, n = outcome.state, outcome.p, outcome.n
    ratio = spread(s.laws.get(f"L_{element}", np.nan), n)
    for pin in (f"pin_L_{element}", f"pin_end_{element}_pct"):
        if p.mask(pin) is not False:
            return Law("pinned", pin.replace("pin_", "pin.", 1), ratio)
    slag = {name: np.asarray(pct) for name, pct in s.slag_pct.items()}
    ranges: dict[str, tuple[str, Any, Callable[[str], list[Outside]]]] = {
        "P": (
            "phosphorus",
            phosphorus,
            lambda law: phosphorus.out_of_range(law, slag, s.T_K, s.C_pct),
        ),
        "Mn": ("manganese", manganese, lambda law: manganese.out_of_range(law, slag, s.T_K)),
        "S": ("sulphur", sulphur, lambda law: sulphur.out_of_range(law, slag, s.T_K)),
    }
    if element in ranges:
        topic, module, outside = ranges[element]
        name = p.laws[topic]
        note = module.describe(name)
        more = "; practice.S_to_gas_pct to the gas" if element == "S" else ""
        return Law(name, f"{note.source} ({note.known}){more}", ratio, _texts(outside(name)))
    if element == "Fe":
        data = read_toml("iron_oxide.toml")
        source = f"iron oxide against carbon: {data['source']}"
        return Law(
            f"iron oxide, {p.blowing}",
            source,
            ratio,
            _texts(iron_oxide.out_of_range(s.C_pct, s.T_K)),
        )
    if element in ("V", "Cr"):
        return _minor(p.laws["vanadium" if element == "V" else "chromium"], element, ratio)
    if element in ("Si", "Al", "Ti"):
        return _minor("constant", element, ratio)
    return Law(_by_conservation(outcome, element), "conservation", ratio)


def _texts(outside: Iterable[Outside]) -> tuple[tuple[str, Array], ...]:
    return tuple((f"{name} outside {low:g} to {high:g}", mask) for name, low, high, mask in outside)


def _minor(law: str, element: str, ratio: Array) -> Law:
    data = read_toml("minor.toml")
    row = data[law].get(element, {})
    source = f"{row.get('source', '')} ({row.get('known', '')})"
    outside: tuple[tuple[str, Array], ...] = ()
    if "low" in row:
        low, high = float(row["low"]), float(row["high"])
        mask = (ratio < low) | (ratio > high)
        outside = ((f"ratio outside {low:g} to {high:g}", mask),)
    return Law(law, source, ratio, outside)


def _by_conservation(outcome: Outcome, element: str) -> str:
    if element == "C":
        return "end carbon"
    if element in outcome.p.steel_elements:
        return "stays in steel"
    if element in ("Zn", "Pb"):
        return "to dust"
    return "by difference" if element == "O" else "all to slag, dust or gas"
