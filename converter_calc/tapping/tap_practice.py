"""What happens between the end of the blow and the ladle analysis, as the shop does it.

Margins, slag carried over, recoveries, additions, deoxidation and temperature losses.
"""

from __future__ import annotations

import difflib
import math
from collections.abc import Mapping
from dataclasses import dataclass, replace
from typing import Any

from converter_calc.basis.errors import Fault, InputError
from converter_calc.data.tables import read_csv_rows
from converter_calc.laws import deoxidation
from converter_calc.tapping.additions import Addition, additions

#: Group of the data file -> field of a practice.
TABLES = {
    "residual": "residual_pct",
    "recovery": "recovery",
    "stays": "stays_share",
    "first_oxygen": "first_oxygen_share",
    "price_per_t": "price_per_t",
    "additions_kg_per_t": "additions_kg_per_t",
}
#: Tables by the name of an addition; the others go by element.
BY_ADDITION = ("price_per_t", "additions_kg_per_t")
FIRST_TAKERS = ("C", "Si", "Mn")
BY_SHOP = "given by the shop"


@dataclass(frozen=True)
class TapPractice:
    """The shop's practice from the end of the blow to the ladle analysis.

    Margins, lowest and highest end contents and slag analyses [mass %]; carried-over slag
    [kg/t of tapped steel]; shares and recoveries 0..1; all other units and meanings:
    data/tap_practice.csv. `residual_pct`: content left at the end of the blow [mass %];
    `stays_share`: share of a charged tramp element left in the steel; `alloy_order`: element
    -> additions, the first whose carbon fits is used; `additions_kg_per_t`: made whatever the
    grade asks; `use`: additions at hand, empty = all; `sources`: field -> source. NaN: not given.
    """

    margin_C_pct: float
    margin_P_pct: float
    margin_S_pct: float
    carried_slag_kg_per_t: float
    slag_P_pct: float
    slag_S_pct: float
    P_return_share: float
    S_return_share: float
    lowest_end_C_pct: float
    highest_end_C_pct: float
    lowest_end_P_pct: float
    lowest_end_S_pct: float
    slag_FeO_reduced_share: float
    slag_MnO_reduced_share: float
    air_oxygen_kg_per_t: float
    loss_to_air_share: float
    Al_burnt_share: float
    soluble_Al_pct: float
    silica_activity: float
    C_tolerance_pct: float
    near_share: float
    tap_min: float
    stream_K_per_min: float
    standing_min: float
    standing_K_per_min: float
    lining_temp_C: float
    lining_effusivity: float
    ladle_temp_C: float
    additions_temp_C: float
    ladle: str
    aim_at: str
    kill: str
    aluminium_oxygen: str
    residual_pct: dict[str, float]
    recovery: dict[str, float]
    stays_share: dict[str, float]
    first_oxygen_share: dict[str, float]
    additions_kg_per_t: dict[str, float]
    use: tuple[str, ...]
    alloy_order: dict[str, tuple[str, ...]]
    additions: dict[str, Addition]
    sources: dict[str, str]

    @property
    def priced(self) -> dict[str, Addition]:
        """Additions at hand that have a price: what least cost chooses from."""
        return {
            name: addition
            for name, addition in self.additions.items()
            if addition.price_per_t is not None and (not self.use or name in self.use)
        }

    @property
    def lining_start_C(self) -> float:
        """Lining temperature before the tap: as given, else by the state of the ladle [C]."""
        return self.lining_temp_C if math.isfinite(self.lining_temp_C) else ladles()[self.ladle]

    @property
    def aluminium_by_recovery(self) -> bool:
        """The shop gave its own recovery of aluminium, which then stands for all its losses."""
        return self.sources.get("recovery.Al") == BY_SHOP


def ladles() -> dict[str, float]:
    """State of the ladle -> lining temperature before the tap [C]. Common practice, no source."""
    return {
        row["name"]: float(row["value"])
        for row in read_csv_rows("tap_practice.csv")
        if row["group"] == "ladle"
    }


def named_additions(overrides: Mapping[str, Any] | None) -> list[str]:
    """Every name of an addition that the `tap` table of a heat or shop file mentions."""
    names: list[str] = []
    given = overrides or {}
    for key in BY_ADDITION:
        table = given.get(key)
        names += list(table) if isinstance(table, Mapping) else []
    order = given.get("alloy_order")
    lists = [given.get("use"), *(order.values() if isinstance(order, Mapping) else ())]
    for entry in lists:
        names += list(entry) if isinstance(entry, list | tuple) else []
    return list(dict.fromkeys(map(str, names)))


def tap_practice(
    overrides: Mapping[str, Any] | None = None, own_additions: Mapping[str, Addition] | None = None
) -> TapPractice:
    """The default practice with the shop's own values in place.

    Parameters
    ----------
    overrides : field -> number [units of `TapPractice`] or text; `residual_pct`, `recovery`,
        `stays_share`, `first_oxygen_share`: element -> number; `price_per_t`,
        `additions_kg_per_t`: addition -> number; `alloy_order`: element -> list of addition
        names; `use`: list of addition names.
    own_additions : additions of the shop, beside or in place of those of the library.

    Raises
    ------
    InputError : unknown field (with the nearest), value that is no number or out of its
        range, unknown addition.
    """
    values = _Values({**additions(), **(own_additions or {})})
    for key, given in (overrides or {}).items():
        values.take(key, given)
    return values.practice()


class _Values:
    """Defaults of the data file, what the shop puts in their place, and the faults found."""

    def __init__(self, known: dict[str, Addition]) -> None:
        rows = read_csv_rows("tap_practice.csv")
        self.known = known
        self.rows = {(row["group"], row["name"]): row for row in rows}
        self.faults: list[Fault] = []
        self.numbers: dict[str, float] = {}
        self.texts: dict[str, str] = {}
        self.tables: dict[str, dict[str, float]] = {group: {} for group in TABLES}
        self.order: dict[str, tuple[str, ...]] = {}
        self.use: tuple[str, ...] = ()
        self.sources: dict[str, str] = {}
        for (group, name), row in self.rows.items():
            single = group in ("number", "text")
            self.sources[name if single else f"{group}.{name}"] = row["source"]
            if group == "alloy_order":
                self.order[name] = tuple(row["value"].split(";"))
            elif group == "number":
                self.numbers[name] = float(row["value"] or "nan")
            elif group == "text":
                self.texts[name] = row["value"]
            elif group in TABLES and row["value"]:
                self.tables[group][name] = float(row["value"])

    def take(self, key: str, given: Any) -> None:
        """Put one field of the shop in place, or note its fault."""
        group = {name: group for group, name in TABLES.items()}.get(key, key)
        if key in self.numbers:
            self._number(self.numbers, "number", key, given)
            self.sources[key] = BY_SHOP
        elif key in self.texts:
            self._text(key, given)
        elif key == "use":
            names = self._names("tap.use", given)
            self.use = names or ()
        elif group not in TABLES and group != "alloy_order":
            fields = [*self.numbers, *self.texts, *TABLES.values(), "alloy_order", "use"]
            near = difflib.get_close_matches(str(key), fields, n=1, cutoff=0.3)
            self.faults.append(Fault(f"tap.{key}", f"unknown field; nearest: {', '.join(near)}"))
        elif not isinstance(given, Mapping):
            what = "addition" if group in BY_ADDITION else "element"
            self.faults.append(Fault(f"tap.{key}", f"must be a table by {what}"))
        else:
            for name, entry in given.items():
                self.sources[f"{group}.{name}"] = BY_SHOP
                self._entry(group, str(name), entry)

    def _entry(self, group: str, name: str, entry: Any) -> None:
        if group == "alloy_order":
            self._order(name, entry)
        elif group in BY_ADDITION and name not in self.known:
            self._unknown(f"tap.{group}", name)
        elif group == "first_oxygen" and name not in FIRST_TAKERS:
            message = f"must be one of {', '.join(FIRST_TAKERS)}, given '{name}'"
            self.faults.append(Fault("tap.first_oxygen_share", message))
        else:
            self._number(self.tables[group], group, name, entry)

    def _number(self, into: dict[str, float], group: str, name: str, given: Any) -> None:
        """Store one number, or a fault that names the field and what is allowed."""
        # an element without a row of its own has the bounds of its group
        row = self.rows.get((group, name)) or next(
            r for key, r in self.rows.items() if key[0] == group
        )
        low, high = float(row["min"]), float(row["max"])
        spot = f"tap.{name}" if group == "number" else f"tap.{group}.{name}"
        number = isinstance(given, int | float) and not isinstance(given, bool)
        if not number or not math.isfinite(given) or not low <= given <= high:
            unit = f" {row['unit']}" if row["unit"] else ""
            message = f"must be {low:g} to {high:g}{unit}, given {given!r}"
            self.faults.append(Fault(spot, message))
            return
        into[name] = float(given)

    def _text(self, key: str, given: Any) -> None:
        allowed = {
            "ladle": list(ladles()),
            "aim_at": ["middle", "minimum"],
            "kill": ["Al", "Si", "none"],
            "aluminium_oxygen": deoxidation.laws("Al"),
        }[key]
        if given not in allowed:
            message = f"must be one of {', '.join(allowed)}, given {given!r}"
            self.faults.append(Fault(f"tap.{key}", message))
            return
        self.texts[key], self.sources[key] = given, BY_SHOP

    def _unknown(self, spot: str, name: str) -> None:
        near = difflib.get_close_matches(name, list(self.known), n=1, cutoff=0.3)
        self.faults.append(Fault(spot, f"no addition '{name}'; nearest: {', '.join(near)}"))

    def _names(self, spot: str, given: Any) -> tuple[str, ...] | None:
        texts = isinstance(given, list | tuple) and all(isinstance(name, str) for name in given)
        if not texts or not given:
            self.faults.append(Fault(spot, f"must be a list of additions, given {given!r}"))
            return None
        wrong = [name for name in given if name not in self.known]
        for name in wrong:
            self._unknown(spot, name)
        return None if wrong else tuple(given)

    def _order(self, element: str, given: Any) -> None:
        spot = f"tap.alloy_order.{element}"
        names = self._names(spot, given)
        if names is None:
            return
        poor = [name for name in names if element not in self.known[name].pct]
        self.faults.extend(Fault(spot, f"'{name}' holds no {element}") for name in poor)
        if not poor:
            self.order[element] = names

    def practice(self) -> TapPractice:
        """The practice; raises InputError with every fault."""
        if not self.faults:
            if self.numbers["lowest_end_C_pct"] > self.numbers["highest_end_C_pct"]:
                self.faults.append(Fault("tap.lowest_end_C_pct", "is above highest_end_C_pct"))
            if sum(self.tables["first_oxygen"].values()) > 1.0:
                self.faults.append(Fault("tap.first_oxygen_share", "adds up to more than 1"))
        if self.faults:
            raise InputError(self.faults)
        prices = self.tables.pop("price_per_t")
        known = {
            name: replace(addition, price_per_t=prices.get(name, addition.price_per_t))
            for name, addition in self.known.items()
        }
        single: dict[str, Any] = {**self.numbers, **self.texts}
        return TapPractice(
            **single,
            residual_pct=self.tables["residual"],
            recovery=self.tables["recovery"],
            stays_share=self.tables["stays"],
            first_oxygen_share=self.tables["first_oxygen"],
            additions_kg_per_t=self.tables["additions_kg_per_t"],
            use=self.use,
            alloy_order=self.order,
            additions=known,
            sources=self.sources,
        )
