"""What happens between the end of the blow and the ladle analysis, as the shop does it.

Margins, slag carried over, recoveries, and the additions that can be made at tap.
"""

from __future__ import annotations

import difflib
import math
from collections.abc import Mapping
from dataclasses import dataclass
from typing import Any

from converter_calc.basis.errors import Fault, InputError
from converter_calc.data.tables import read_csv_rows, read_toml

GROUPS = ("residual", "recovery", "stays")
BY_SHOP = "given by the shop"


@dataclass(frozen=True)
class Addition:
    """A ferro-alloy or other addition at tap.

    Attributes
    ----------
    name : trade name.
    supplies : the element it is added for.
    pct : analysis as weighed [mass %].
    rest_is_iron : what is missing to 100 is iron and joins the steel.
    recovery : element -> share (0..1) that ends in the steel, where it is not the shop's.
    source : of the analysis.
    """

    name: str
    supplies: str
    pct: dict[str, float]
    rest_is_iron: bool
    source: str
    recovery: dict[str, float]

    def gain_kg(self, recovery: Mapping[str, float]) -> dict[str, float]:
        """Element -> kg that ends in the steel per kg added [kg/kg].

        `recovery` is the shop's; the addition's own goes before it. An element with none
        is taken to enter wholly.
        """
        pct = dict(self.pct)
        if self.rest_is_iron:
            pct["Fe"] = pct.get("Fe", 0.0) + 100.0 - sum(self.pct.values())
        return {
            element: content / 100.0 * self.recovery.get(element, recovery.get(element, 1.0))
            for element, content in pct.items()
        }


@dataclass(frozen=True)
class TapPractice:
    """The shop's practice from the end of the blow to the ladle analysis.

    Margins, lowest and highest end contents and slag analyses [mass %]; carried-over slag
    [kg/t of tapped steel]; shares and recoveries 0..1. `residual_pct`: content left at the end
    of the blow [mass %]; `stays_share`: share of a charged tramp element left in the steel;
    `alloy_order`: element -> additions, the first whose carbon fits is used; `sources`:
    field -> source.
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
    residual_pct: dict[str, float]
    recovery: dict[str, float]
    stays_share: dict[str, float]
    alloy_order: dict[str, tuple[str, ...]]
    additions: dict[str, Addition]
    sources: dict[str, str]


def additions() -> dict[str, Addition]:
    """Additions of the library by name (typical analyses, mass %, a source on each)."""
    return {
        name: Addition(
            name=name,
            supplies=row["supplies"],
            pct=dict(row["pct"]),
            rest_is_iron=row["rest"] == "Fe",
            source=row["source"],
            recovery={},
        )
        for name, row in read_toml("ferroalloys.toml").items()
    }


def tap_practice(
    overrides: Mapping[str, Any] | None = None, own_additions: Mapping[str, Addition] | None = None
) -> TapPractice:
    """The default practice with the shop's own values in place.

    Parameters
    ----------
    overrides : field -> number [units of `TapPractice`]; `residual_pct`, `recovery`,
        `stays_share`: element -> number; `alloy_order`: element -> list of addition names.
    own_additions : additions of the shop, beside or in place of those of the library.

    Raises
    ------
    InputError : unknown field (with the nearest), value that is no number or out of its
        range, unknown addition.
    """
    bounds, values, order, sources = _defaults()
    known = {**additions(), **(own_additions or {})}
    faults: list[Fault] = []
    for key, given in (overrides or {}).items():
        group = {"residual_pct": "residual", "stays_share": "stays"}.get(key, key)
        if key in values["number"]:
            _take(values["number"], bounds, "number", key, given, faults)
            sources[key] = BY_SHOP
        elif group not in (*GROUPS, "alloy_order"):
            fields = [*values["number"], "residual_pct", "recovery", "stays_share", "alloy_order"]
            near = difflib.get_close_matches(str(key), fields, n=1, cutoff=0.3)
            faults.append(Fault(f"tap.{key}", f"unknown field; nearest: {', '.join(near)}"))
        elif not isinstance(given, Mapping):
            faults.append(Fault(f"tap.{key}", "must be a table by element"))
        else:
            for element, entry in given.items():
                sources[f"{group}.{element}"] = BY_SHOP
                if group == "alloy_order":
                    _take_order(order, element, entry, known, faults)
                else:
                    _take(values[group], bounds, group, element, entry, faults)
    if not faults and values["number"]["lowest_end_C_pct"] > values["number"]["highest_end_C_pct"]:
        faults.append(Fault("tap.lowest_end_C_pct", "is above highest_end_C_pct"))
    if faults:
        raise InputError(faults)
    return TapPractice(
        **values["number"],
        residual_pct=values["residual"],
        recovery=values["recovery"],
        stays_share=values["stays"],
        alloy_order=order,
        additions=known,
        sources=sources,
    )


def _defaults() -> tuple[
    dict[tuple[str, str], dict[str, str]],
    dict[str, dict[str, float]],
    dict[str, tuple[str, ...]],
    dict[str, str],
]:
    """Rows by (group, name), their numbers by group, the alloy orders, the sources."""
    rows = {(row["group"], row["name"]): row for row in read_csv_rows("tap_practice.csv")}
    values: dict[str, dict[str, float]] = {group: {} for group in ("number", *GROUPS)}
    order: dict[str, tuple[str, ...]] = {}
    sources: dict[str, str] = {}
    for (group, name), row in rows.items():
        sources[name if group == "number" else f"{group}.{name}"] = row["source"]
        if group == "alloy_order":
            order[name] = tuple(row["value"].split(";"))
        else:
            values[group][name] = float(row["value"])
    return rows, values, order, sources


def _take(
    into: dict[str, float],
    bounds: Mapping[tuple[str, str], Mapping[str, str]],
    group: str,
    name: str,
    given: Any,
    faults: list[Fault],
) -> None:
    """Store one number, or a fault that names the field and what is allowed."""
    # an element without a row of its own has the bounds of its group
    row = bounds.get((group, name)) or next(r for key, r in bounds.items() if key[0] == group)
    low, high = float(row["min"]), float(row["max"])
    spot = f"tap.{name}" if group == "number" else f"tap.{group}.{name}"
    number = isinstance(given, int | float) and not isinstance(given, bool)
    if not number or not math.isfinite(given) or not low <= given <= high:
        message = f"must be {low:g} to {high:g} {row['unit']}, given {given!r}"
        faults.append(Fault(spot, message))
        return
    into[name] = float(given)


def _take_order(
    order: dict[str, tuple[str, ...]],
    element: str,
    given: Any,
    known: Mapping[str, Addition],
    faults: list[Fault],
) -> None:
    spot = f"tap.alloy_order.{element}"
    texts = isinstance(given, list | tuple) and all(isinstance(name, str) for name in given)
    if not texts or not given:
        faults.append(Fault(spot, f"must be a list of additions, given {given!r}"))
        return
    wrong = [name for name in given if name not in known]
    poor = [name for name in given if name in known and element not in known[name].pct]
    for name in wrong:
        near = difflib.get_close_matches(str(name), list(known), n=1, cutoff=0.3)
        faults.append(Fault(spot, f"no addition '{name}'; nearest: {', '.join(near)}"))
    faults.extend(Fault(spot, f"'{name}' holds no {element}") for name in poor)
    if not wrong and not poor:
        order[element] = tuple(given)
