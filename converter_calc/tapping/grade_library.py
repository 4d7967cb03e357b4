"""Steel grades: the limits of the ladle analysis, from public standards or from the user."""

from __future__ import annotations

import difflib
import math
from collections.abc import Mapping
from dataclasses import dataclass, field
from functools import cache
from typing import Any, TypeAlias

from converter_calc.basis.elements import atomic_weight
from converter_calc.basis.errors import DataError, Fault, InputError
from converter_calc.data.tables import read_toml

Limit: TypeAlias = tuple[float | None, float | None]
"""Lowest and highest content [mass %]; None where that side is open."""

TEXT_FIELDS = ("standard", "edition", "known", "note")
TABLE_FIELDS = ("limits", "targets")


@dataclass(frozen=True)
class Grade:
    """Composition limits of one grade (ladle analysis).

    Attributes
    ----------
    name, standard, edition : the grade, the standard that defines it, its year.
    limits : element -> (lowest, highest) [mass %], None where a side is open.
    known : how the limits are known ("from memory", "given by the user").
    note : what else the standard says that is not checked here.
    invented : True for a grade of no public standard.
    targets : element -> content aimed at in the ladle [mass %], where it is not simply the
        middle of the range.
    """

    name: str
    standard: str
    edition: str
    limits: dict[str, Limit]
    known: str
    note: str
    invented: bool
    targets: dict[str, float] = field(default_factory=dict)

    def lowest_pct(self, element: str) -> float | None:
        """Lowest content of the element [mass %], None where there is none."""
        return self.limits.get(element, (None, None))[0]

    def highest_pct(self, element: str) -> float | None:
        """Highest content of the element [mass %], None where there is none."""
        return self.limits.get(element, (None, None))[1]

    @property
    def source(self) -> str:
        """Standard, edition and how it is known, for print."""
        standard = f"{self.standard}:{self.edition}" if self.edition else self.standard
        return f"{standard or 'user grade'}, {self.known}"


def grades() -> list[Grade]:
    """All grades of the library, in the order of its data file (ladle analysis, mass %)."""
    return list(_library().values())


def grade(name: str, user_grades: Mapping[str, Any] | None = None) -> Grade:
    """The grade of this name, a user grade before one of the library.

    Parameters
    ----------
    name : as the standard writes it; case and blanks do not matter.
    user_grades : name -> `Grade`, or name -> fields as `parse_user_grade` takes them.

    Raises
    ------
    InputError : no such grade (with the nearest names), or a fault in the user grade.
    """
    own = dict(user_grades or {})
    wanted = _plain(name)
    for key, fields in own.items():
        if _plain(key) == wanted:
            return fields if isinstance(fields, Grade) else parse_user_grade(key, fields)
    for key, found in _library().items():
        if _plain(key) == wanted:
            return found
    names = [*own, *_library()]
    near = difflib.get_close_matches(wanted, [_plain(key) for key in names], n=3, cutoff=0.5)
    hint = ", ".join(key for key in names if _plain(key) in near)
    told = f"nearest: {hint}" if hint else "define it under grades, or give the aims themselves"
    raise InputError([Fault("aim.grade", f"no grade '{name}'; {told}")])


def parse_user_grade(name: str, fields: Mapping[str, Any]) -> Grade:
    """A grade as the user writes it in a shop or heat file.

    Parameters
    ----------
    name : the user's name for it.
    fields : `limits` (element -> [low, high], or {min = ..} / {max = ..} where one side is
        open) [mass %, 0 to 100], and, if wanted, `targets` (element -> content [mass %]),
        `standard`, `edition`, `note`.

    Raises
    ------
    InputError : every fault found, one each, naming the field.
    """
    parsed, faults = _parse(name, fields)
    if faults:
        raise InputError(faults)
    return parsed


@cache
def _library() -> dict[str, Grade]:
    found: dict[str, Grade] = {}
    for name, fields in read_toml("grades.toml").items():
        parsed, faults = _parse(name, fields)
        if faults or not parsed.standard:
            raise DataError(f"grades.toml: {[str(fault) for fault in faults] or name}")
        found[name] = parsed
    return found


def _plain(name: str) -> str:
    return "".join(str(name).split()).casefold()


def _parse(name: str, fields: Any) -> tuple[Grade, list[Fault]]:
    place = f"grades.{name}"
    faults: list[Fault] = []
    if not isinstance(fields, Mapping):
        fault = Fault(place, "must be a table with limits")
        return Grade(name, "", "", {}, "", "", invented=True), [fault]
    for key in fields:
        if key not in TEXT_FIELDS + TABLE_FIELDS:
            near = difflib.get_close_matches(str(key), TEXT_FIELDS + TABLE_FIELDS, n=1, cutoff=0.3)
            hint = f"; nearest: {near[0]}" if near else ""
            faults.append(Fault(f"{place}.{key}", f"unknown field{hint}"))
    texts = {key: fields.get(key, "") for key in TEXT_FIELDS}
    for key, text in texts.items():
        if not isinstance(text, str):
            faults.append(Fault(f"{place}.{key}", f"must be text, given {text!r}"))
    limits = _parse_limits(f"{place}.limits", fields.get("limits"), faults)
    targets = _parse_targets(f"{place}.targets", fields.get("targets", {}), limits, faults)
    for element, (low, high) in limits.items():
        if low is not None and high is None and element not in {"P", "S", *targets}:
            message = "only a minimum: give the content aimed at under targets"
            faults.append(Fault(f"{place}.limits.{element}", message))
    standard = str(texts["standard"])
    known = str(texts["known"]) or "given by the user"
    parsed = Grade(
        name, standard, str(texts["edition"]), limits, known, str(texts["note"]),
        invented=not standard, targets=targets,
    )  # fmt: skip
    return parsed, faults


def _parse_limits(place: str, table: Any, faults: list[Fault]) -> dict[str, Limit]:
    if not isinstance(table, Mapping) or not table:
        faults.append(Fault(place, "missing: give limits as element = [low, high]"))
        return {}
    limits: dict[str, Limit] = {}
    for element, given in table.items():
        spot = f"{place}.{element}"
        if not _is_element(element):
            faults.append(Fault(spot, f"'{element}' is not the symbol of an element"))
            continue
        sides = _sides(given)
        if sides is None:
            message = f"must be [low, high], {{min = ..}} or {{max = ..}}, given {given!r}"
            faults.append(Fault(spot, message))
            continue
        numbers = [side for side in sides if side is not None]
        wrong = [side for side in numbers if not _is_pct(side)]
        faults.extend(Fault(spot, f"must be 0 to 100 mass %, given {side!r}") for side in wrong)
        if wrong:
            continue
        if len(numbers) == 2 and numbers[0] > numbers[1]:
            faults.append(Fault(spot, f"minimum {numbers[0]} above maximum {numbers[1]}"))
            continue
        low, high = (None if side is None else float(side) for side in sides)
        limits[element] = (low, high)
    lows = sum(low for low, _ in limits.values() if low is not None)
    if lows > 100.0:
        faults.append(Fault(place, f"the minima add up to {lows:g} mass %, above 100"))
    return limits


def _parse_targets(
    place: str, table: Any, limits: Mapping[str, Limit], faults: list[Fault]
) -> dict[str, float]:
    if not isinstance(table, Mapping):
        faults.append(Fault(place, "must be a table: element = mass %"))
        return {}
    targets: dict[str, float] = {}
    for element, given in table.items():
        spot = f"{place}.{element}"
        if not _is_element(element):
            faults.append(Fault(spot, f"'{element}' is not the symbol of an element"))
            continue
        if not _is_pct(given):
            faults.append(Fault(spot, f"must be 0 to 100 mass %, given {given!r}"))
            continue
        low, high = limits.get(element, (None, None))
        if (low is not None and given < low) or (high is not None and given > high):
            faults.append(Fault(spot, f"{given} lies outside the limits of the grade"))
            continue
        targets[element] = float(given)
    return targets


def _sides(given: Any) -> tuple[Any, Any] | None:
    if isinstance(given, list | tuple) and len(given) == 2 and None not in given:
        return given[0], given[1]
    if isinstance(given, Mapping) and given and set(given) <= {"min", "max"}:
        return given.get("min"), given.get("max")
    return None


def _is_pct(given: Any) -> bool:
    if isinstance(given, bool) or not isinstance(given, int | float):
        return False
    return math.isfinite(given) and 0.0 <= given <= 100.0


def _is_element(symbol: Any) -> bool:
    try:
        atomic_weight(symbol)
    except (DataError, TypeError):
        return False
    return True
