"""A table of n heats, ready to solve: read from a file, a dict or a pandas DataFrame.

Arrays have shape (n,). A value that is the same in all heats may be a read-only view of one
number, so that long tables stay small: replace arrays, do not write into them.
"""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass, field, replace
from pathlib import Path
from typing import TYPE_CHECKING, Any

import numpy as np

from converter_calc.balance.checks import (
    Columns,
    Givens,
    check_columns,
    check_document,
    check_ranges,
)
from converter_calc.balance.documents import check_depth, read_document, read_shop, with_shop
from converter_calc.balance.frames import (
    blank_elements,
    columns_of,
    inputs_of_table,
    keys_of,
    one_grade,
    row_ids,
    row_label,
)
from converter_calc.balance.materials import Material
from converter_calc.balance.schema import (
    element_parameter,
    is_element_column,
    material_parameter,
    number_names,
    parameters,
    parse_shares,
)
from converter_calc.basis.dual import Array
from converter_calc.basis.errors import Fault, InputError

if TYPE_CHECKING:
    import pandas as pd


@dataclass
class Choices:
    """What is chosen by name, the same for all heats of a table.

    scrap_mix : shares that sum to 1 (empty where none). dust_species : mass fractions that
    sum to 1. laws : law by topic. ask : what is solved for, None where it is to be inferred.
    """

    scrap_mix: dict[str, float]
    scrap_order: list[str]
    lime: str
    magnesia_flux: str
    coolant: str
    fuel: str
    ask: str | None
    blowing: str
    laws: dict[str, str]
    dust_species: dict[str, float]


@dataclass
class HeatTable:
    """n heats.

    values : every numeric input by flat name, (n,), defaults filled in, NaN where not given;
    `<scrap>_yield_factor` only where it is not 1. Weights, hot metal temperature and oxygen are
    as the instruments of the shop read them.
    hm_pct : hot metal analysis [mass %], iron by difference, 0 where an element is not given;
    the balance reads the analysis from here. masses_kg : materials whose mass is mentioned
    [kg], NaN where a heat does not give it. materials : all at hand. grades, tap,
    errors : tables as the user wrote them. returned : what comes back into the vessel from a
    stage or heat before, see `charge.add_returned`; empty but for slag practices.
    """

    n: int
    ids: list[str]
    values: dict[str, Array]
    hm_pct: dict[str, Array]
    masses_kg: dict[str, Array]
    materials: dict[str, Material]
    choices: Choices
    grades: dict[str, Any] = field(default_factory=dict)
    grade: str | None = None
    tap: dict[str, Any] = field(default_factory=dict)
    errors: dict[str, Any] = field(default_factory=dict)
    why: str = ""
    warnings: list[str] = field(default_factory=list)
    returned: dict[str, Array] = field(default_factory=dict)

    def take(self, index: Any) -> HeatTable:
        """Some of the heats, by indices, slice or boolean mask."""
        rows = np.arange(self.n)[index]

        def pick(columns: Mapping[str, Array]) -> dict[str, Array]:
            if isinstance(index, slice):
                return {name: array[index] for name, array in columns.items()}
            return {
                name: np.broadcast_to(array[:1], rows.shape)
                if array.strides == (0,) and self.n
                else array[index]
                for name, array in columns.items()
            }

        return replace(
            self,
            n=len(rows),
            ids=[self.ids[row] for row in rows.tolist()],
            values=pick(self.values),
            hm_pct=pick(self.hm_pct),
            masses_kg=pick(self.masses_kg),
            returned=pick(self.returned),
        )


def read_heat_file(path: str | Path) -> HeatTable:
    """The heat of a TOML file, laid over the shop file that it names.

    Raises InputError with every fault, one line each: field, what is given, what is allowed.
    """
    path = Path(path)
    document = read_document(path)
    document.setdefault("heat_id", path.stem)
    return heats_from_dict(document, path.parent)


def heats_from_dict(document: Mapping[str, Any], base_dir: Path | None = None) -> HeatTable:
    """One heat from the content of a heat file.

    Parameters
    ----------
    document : sections and keys as in data/parameters.csv. base_dir : directory from which
        the path of the shop file counts.

    Raises InputError with every fault, one line each.
    """
    if not isinstance(document, Mapping):
        raise InputError([Fault("heat", "must be a table of sections")])
    faults: list[Fault] = []
    givens = check_document(with_shop(document, base_dir), faults)
    columns = Columns(
        _all_values(1, givens, {}),
        {el: np.array([pct]) for el, pct in givens.elements.items()},
        1,
        place_of=_place,
        row_label=lambda _: "",
    )
    doubted = {fault.field for fault in faults}
    faults += [fault for fault in check_columns(columns, givens) if fault.field not in doubted]
    if faults:
        raise InputError(faults)
    masses = {name: np.array([kg]) for name, kg in givens.masses_kg.items()}
    heat_id = givens.texts.get("heat_id", "1")
    return _table([heat_id], columns, masses, givens, givens.texts.get("grade"), [])


def heats_from_frame(
    frame: pd.DataFrame,
    shop: str | Path | Mapping[str, Any] | None = None,
    defaults: Mapping[str, float] | None = None,
) -> HeatTable:
    """Heats from a table, one row a heat.

    Parameters
    ----------
    frame : columns are flat input names (data/parameters.csv), `hm_<El>_pct`,
        `<material>_kg`, `heat_id`, `grade`. Columns of a heat log that hold its outcome are
        ignored. A blank cell is not given, not zero.
    shop : shop file or its content: materials, practice, choices, and values for blank cells.
    defaults : flat name to number, for cells that neither frame nor shop gives.

    Raises InputError with every fault, one line each, naming column and row.
    """
    faults: list[Fault] = []
    if shop is None:
        document: dict[str, Any] = {}
    elif isinstance(shop, Mapping):
        check_depth(shop)
        document = dict(shop)
    else:
        document = read_shop(Path(shop))
    givens = check_document(document, faults)
    rows = inputs_of_table(givens, defaults or {}, faults)
    arrays = columns_of(frame, rows, faults)
    n = len(frame)

    elements: dict[str, Array] = {}
    masses: dict[str, Array] = {}
    for into, below, make in (
        (elements, givens.elements, element_parameter),
        (masses, givens.masses_kg, material_parameter),
    ):
        for key in {**below, **dict.fromkeys(keys_of(arrays, rows, make))}:
            into[key] = _filled(arrays.get(make(key).name), below.get(key, np.nan), n)
    ids, label = row_ids(frame), row_label(frame)
    columns = Columns(_all_values(n, givens, arrays), elements, n, place_of=str, row_label=label)
    mass_columns = Columns(
        {f"{name}_kg": kg for name, kg in masses.items()}, {}, n, place_of=str, row_label=label
    )
    faults += check_ranges(columns, [rows[name] for name in arrays if name in rows])
    faults += check_ranges(mass_columns, [material_parameter(name) for name in masses])
    faults += check_columns(columns, givens)
    if faults:
        raise InputError(faults)
    grade, warnings = one_grade(frame, givens)
    warnings += blank_elements(elements)
    return _table(ids, columns, masses, givens, grade, warnings)


def _place(name: str) -> str:
    if is_element_column(name):
        return element_parameter(name[3:-4]).place
    return parameters()[name].place


def _filled(array: Array | None, below: float, n: int) -> Array:
    """A column with its blank cells filled from below; one number where there is no column."""
    if array is None:
        return np.array([below]) if n == 1 else np.broadcast_to(np.array([below]), (n,))
    return np.where(np.isnan(array), below, array) if np.isfinite(below) else array


def _all_values(n: int, givens: Givens, arrays: Mapping[str, Array]) -> dict[str, Array]:
    """Every numeric input: the column, else what the document gives, else the default."""
    values = {}
    for name in number_names():
        below = givens.numbers.get(name, parameters()[name].default_number)
        if name.startswith("hm_"):
            below = givens.elements.get(name[3:-4], below)
        values[name] = _filled(arrays.get(name), below, n)
    for scrap, material in givens.materials.items():
        name = f"{scrap}_yield_factor"
        if name in arrays or material.yield_factor != 1.0:
            values[name] = _filled(arrays.get(name), material.yield_factor, n)
    return values


def _table(
    ids: list[str],
    columns: Columns,
    masses: dict[str, Array],
    givens: Givens,
    grade: str | None,
    warnings: list[str],
) -> HeatTable:
    """The table, once everything has been found right."""
    analysis = {el: pct if np.isfinite(pct).all() else np.nan_to_num(pct)
                for el, pct in columns.elements.items() if el != "Fe"}  # fmt: skip
    analysis["Fe"] = 100.0 - sum(analysis.values(), np.zeros(columns.n))
    choices = _choices(givens)
    used = [*masses, *choices.scrap_mix, *choices.scrap_order]
    used += [choices.lime, choices.magnesia_flux, choices.coolant, choices.fuel]
    used += ["carryover_slag", "retained_slag", "lining"]
    for name in dict.fromkeys(used):
        warnings.extend(givens.materials[name].warnings)
    return HeatTable(
        n=columns.n,
        ids=ids,
        values=dict(columns.values),
        hm_pct=analysis,
        masses_kg=masses,
        materials=givens.materials,
        choices=choices,
        grades=dict(givens.tables.get("grades", {})),
        grade=grade,
        tap=dict(givens.tables.get("tap", {})),
        errors=dict(givens.tables.get("errors", {})),
        why=givens.texts.get("why", ""),
        warnings=warnings,
    )


def _choices(givens: Givens) -> Choices:
    rows = parameters()
    texts = {name: givens.texts.get(name, row.default) for name, row in rows.items()}
    mix = givens.shares.get("scrap_mix", {})
    dust = givens.shares.get("dust_pct") or parse_shares(rows["dust_pct"].default)
    return Choices(
        scrap_mix=_scaled(mix),
        scrap_order=givens.scrap_order,
        lime=texts["lime"],
        magnesia_flux=texts["magnesia_flux"],
        coolant=texts["coolant"],
        fuel=texts["fuel"],
        ask=texts["ask"] or None,
        blowing=texts["blowing"],
        laws={row.key: texts[name] for name, row in rows.items() if row.section == "law"},
        dust_species=_scaled(dust),
    )


def _scaled(shares: Mapping[str, float]) -> dict[str, float]:
    total = sum(shares.values())
    return {name: share / total for name, share in shares.items()}
