"""All checks of a heat document and of columns of heats. Every fault is found, one line each."""

from __future__ import annotations

from collections.abc import Callable, Iterable, Mapping
from dataclasses import dataclass, field
from typing import Any

import numpy as np

from converter_calc.balance.documents import lay_materials
from converter_calc.balance.fields import (
    outside,
    show,
    take_number,
    take_shares,
    take_table,
    take_text,
)
from converter_calc.balance.materials import (
    Material,
    compile_material,
    known_species,
    library_fields,
    library_material,
)
from converter_calc.balance.schema import (
    Parameter,
    allowed_texts,
    element_of_key,
    element_parameter,
    material_parameter,
    nearest,
    parameters,
    sections,
)
from converter_calc.basis.dual import Array
from converter_calc.basis.elements import mass_fractions
from converter_calc.basis.errors import Fault, InputError

LEAST_IRON_PCT = 70.0
ROWS_NAMED = 3


@dataclass
class Givens:
    """What a document gives, each value checked by itself.

    numbers : flat name to number; elements : hot metal, mass %; masses_kg : by material.
    """

    numbers: dict[str, float] = field(default_factory=dict)
    elements: dict[str, float] = field(default_factory=dict)
    masses_kg: dict[str, float] = field(default_factory=dict)
    texts: dict[str, str] = field(default_factory=dict)
    shares: dict[str, dict[str, float]] = field(default_factory=dict)
    scrap_order: list[str] = field(default_factory=list)
    materials: dict[str, Material] = field(default_factory=dict)
    tables: dict[str, Mapping[str, Any]] = field(default_factory=dict)


def check_document(document: Mapping[str, Any], faults: list[Fault]) -> Givens:
    """Check a merged document against the schema; faults are added to `faults`."""
    found = Givens()
    _materials(document.get("materials", {}), found, faults)
    for section, given in document.items():
        top = sections()[""].get(section) if isinstance(section, str) else None
        if section == "materials":
            continue
        if top is not None:
            _take(given, top, section, found, faults)
        elif section not in sections() or section == "":
            names = [*sections(), *sections()[""]]
            faults.append(
                Fault(str(section)[:60], f"unknown section{nearest(str(section), names)}")
            )
        else:
            table = take_table(given, section, faults)
            for key, value in (table or {}).items():
                _take_key(section, key, value, found, faults)
    _choices(found, faults)
    return found


def _take_key(section: str, key: str, value: Any, found: Givens, faults: list[Fault]) -> None:
    place = f"{section}.{key}"
    row = sections()[section].get(key)
    if row is not None and not row.name.startswith("hm_"):
        _take(value, row, place, found, faults)
        return
    element = element_of_key(key) if section == "hot_metal" else None
    if element is not None:
        number = take_number(value, element_parameter(element), place, faults)
        if number is not None:
            found.elements[element] = number
        return
    material = key.removesuffix("_kg") if section == "charge" and key.endswith("_kg") else None
    if material in found.materials:
        number = take_number(value, material_parameter(material), place, faults)
        if number is not None:
            found.masses_kg[material] = number
        return
    names = list(sections()[section])
    if section == "charge":
        names += [name + "_kg" for name in found.materials]
    what = "unknown material or field" if section == "charge" else "unknown field"
    faults.append(Fault(place[:80], what + nearest(key, names)))


def _take(value: Any, row: Parameter, place: str, found: Givens, faults: list[Fault]) -> None:
    if row.kind == "number":
        number = take_number(value, row, place, faults)
        if number is not None:
            found.numbers[row.name] = number
    elif row.kind == "text":
        text = take_text(value, allowed_texts(row.name), place, faults)
        if text is not None:
            found.texts[row.name] = text
    elif row.kind == "list":
        names = value if isinstance(value, list | tuple) else None
        if names is None or not all(isinstance(name, str) for name in names):
            faults.append(Fault(place, f"must be a list of material names, given {show(value)}"))
        else:
            found.scrap_order = list(names)
    elif row.name in ("scrap_mix", "dust_pct"):
        shares = take_shares(value, place, faults)
        if shares is not None:
            found.shares[row.name] = shares
    else:
        table = take_table(value, place, faults)
        if table is not None:
            found.tables[row.name] = table


def _materials(given: Any, found: Givens, faults: list[Fault]) -> None:
    """Materials of the library and of the document."""
    found.materials = {name: library_material(name) for name in library_fields()}
    table = take_table(given, "materials", faults)
    if not table:
        return
    merged = lay_materials(library_fields(), table)
    for name in table:
        place = f"materials.{name[:40]}"
        if not name.isidentifier() or not name.isascii():
            faults.append(Fault(place, "a name is made of letters, digits and _"))
            continue
        if f"{name}_kg" in parameters() and name != "retained_slag":
            faults.append(Fault(place, f"{name}_kg is a field of its own; choose another name"))
            continue
        try:
            found.materials[name] = compile_material(name, merged[name])
        except InputError as error:
            faults.extend(error.faults)
            found.materials.setdefault(name, library_material("lining"))  # no fault of its users


def _choices(found: Givens, faults: list[Fault]) -> None:
    """Materials that are chosen must exist and be able to do what they are chosen for."""
    if found.shares.get("scrap_mix") and found.scrap_order:
        message = "given beside choice.scrap_mix; leave one of the two out"
        faults.append(Fault("choice.scrap_order", message))
    broken = {fault.field.split(".")[1] for fault in faults if fault.field.startswith("materials.")}
    for name, share in found.shares.get("scrap_mix", {}).items():
        place = f"choice.scrap_mix.{name[:40]}"
        _is_scrap(name, place, found, broken, faults)
        if share <= 0.0:
            faults.append(Fault(place, f"must be a share above zero, given {share:g}"))
    for name in found.scrap_order:
        _is_scrap(name, "choice.scrap_order", found, broken, faults)
    if len(set(found.scrap_order)) < len(found.scrap_order):
        faults.append(Fault("choice.scrap_order", "names a scrap twice"))
    _roles(found, broken, faults)
    for species in found.shares.get("dust_pct", {}):
        if species not in known_species() or species in ("CO2", "P2O5", "H2O"):
            message = f"{show(species)} is not a species known here"
            faults.append(Fault("practice.dust_pct", message + nearest(species, known_species())))


def _roles(found: Givens, broken: set[str], faults: list[Fault]) -> None:
    """Lime, magnesia flux, coolant and fuel are materials that can serve as such."""
    for role, element in (("lime", "Ca"), ("magnesia_flux", "Mg"), ("coolant", ""), ("fuel", "")):
        row = parameters()[role]
        name = found.texts.setdefault(role, row.default)
        if name not in found.materials:
            hint = nearest(name, found.materials)
            faults.append(Fault(row.place, f"no material {show(name)}{hint}"))
        elif element and name not in broken and not _holds(found.materials[name], element):
            message = f"{name} holds no {element}, so it cannot serve as {row.key}"
            faults.append(Fault(row.place, message))


def _is_scrap(name: str, place: str, found: Givens, broken: set[str], faults: list[Fault]) -> None:
    scraps = [key for key, material in found.materials.items() if material.kind == "scrap"]
    if name not in found.materials:
        faults.append(Fault(place, f"no material {show(name)}{nearest(name, scraps)}"))
    elif name not in scraps and name not in broken:
        kind = found.materials[name].kind
        faults.append(Fault(place, f'{name} is of kind "{kind}", not "scrap"'))


def _holds(material: Material, element: str) -> bool:
    return any(element in mass_fractions(species) for species in material.species_kg)


@dataclass
class Columns:
    """Columns of n heats, NaN where not given, and how a fault names column and row."""

    values: Mapping[str, Array]
    elements: Mapping[str, Array]
    n: int
    place_of: Callable[[str], str]
    row_label: Callable[[int], str]

    def given(self, name: str) -> Any:
        """Where a column is given, (n,) bool."""
        return np.isfinite(self.values[name])

    def tell(self, mask: Any, name: str, message: Callable[[int], str] | str) -> Iterable[Fault]:
        """A fault for the first rows of `mask`, with the number of those that follow."""
        rows = np.flatnonzero(np.broadcast_to(mask, (self.n,)))
        for row in rows[:ROWS_NAMED].tolist():
            text = message if isinstance(message, str) else message(row)
            yield Fault(self.place_of(name), text + self.row_label(row))
        if rows.size > ROWS_NAMED:
            more = f"the same in {rows.size - ROWS_NAMED} more rows"
            yield Fault(self.place_of(name), more)


def check_ranges(columns: Columns, names: Iterable[Parameter]) -> Iterable[Fault]:
    """Numbers of a column outside the bounds of the schema."""
    for row in names:
        values = columns.elements.get(row.key.removesuffix("_pct")) if row.name.startswith(
            "hm_"
        ) else columns.values.get(row.name)  # fmt: skip
        if values is None:
            continue
        with np.errstate(invalid="ignore"):
            bad = (values < row.low) | (values > row.high)
        if bad.any():
            yield from columns.tell(bad, row.name, _outside_at(values, row))


def _outside_at(values: Array, row: Parameter) -> Callable[[int], str]:
    return lambda i: outside(float(values[i]), row)


def check_columns(columns: Columns, found: Givens) -> list[Fault]:
    """Checks across columns: what is missing, sums, and what contradicts itself."""
    faults = [*_missing(columns), *_analysis(columns)]
    given, tell = columns.given, columns.tell
    for first, second in CONTRADICTIONS:
        both = given(first) & given(second)
        if both.any():
            other = columns.place_of(second)
            faults += tell(both, first, f"given beside {other}; leave one of the two out")
    pin, aim = columns.values["pin_end_temp_C"], columns.values["aim_temp_C"]
    with np.errstate(invalid="ignore"):
        apart = np.abs(pin - aim) > 1e-9
    faults += tell(
        apart,
        "pin_end_temp_C",
        lambda i: f"{pin[i]:g} contradicts {columns.place_of('aim_temp_C')} {aim[i]:g}",
    )
    oxides = sum(
        (np.nan_to_num(columns.values[f"pin_slag_{oxide}_pct"]) for oxide in PINNED_OXIDES),
        np.zeros(columns.n),
    )
    faults += tell(
        oxides > 100.0, "pin_slag_FeO_pct", lambda i: f"pinned oxides add up to {oxides[i]:g} %"
    )
    if not found.shares.get("scrap_mix") and not found.scrap_order:
        for name in ("scrap_kg", "scrap_share_pct"):
            some = given(name) & (np.nan_to_num(columns.values[name]) > 0.0)
            message = "given, but no choice.scrap_mix or choice.scrap_order says of which scrap"
            faults += tell(some, name, message)
    return faults


PINNED_OXIDES = ("FeO", "Fe2O3", "MgO", "CaO")
HEAT_LOSSES = tuple(
    "pin_heat_loss_" + unit for unit in ("MJ", "MJ_per_t", "MJ_per_min", "share_pct")
)
SHARED_ELEMENTS = ("P", "Mn", "S", "V", "Cr", "Ti", "Si", "Al")
#: Pairs of inputs of which only one can be given.
CONTRADICTIONS: tuple[tuple[str, str], ...] = (
    *((f"pin_L_{el}", f"pin_end_{el}_pct") for el in SHARED_ELEMENTS),
    *((HEAT_LOSSES[i], HEAT_LOSSES[j]) for i in range(4) for j in range(i + 1, 4)),
    *((loss, "pin_end_temp_C") for loss in HEAT_LOSSES),
    ("pin_slag_T_Fe_pct", "pin_iron_to_slag_pct"),
    ("pin_basicity", "pin_slag_CaO_pct"),
    ("scrap_kg", "scrap_share_pct"),
)


def _missing(columns: Columns) -> Iterable[Fault]:
    text = "not given; the hot metal needs its {}"
    yield from columns.tell(
        ~columns.given("hot_metal_temp_C"), "hot_metal_temp_C", text.format("temperature [C]")
    )
    carbon = columns.elements.get("C")
    none = np.ones(columns.n, dtype=bool) if carbon is None else ~np.isfinite(carbon)
    yield from columns.tell(none, "hm_C_pct", text.format("analysis, carbon at least [mass %]"))


def _analysis(columns: Columns) -> Iterable[Fault]:
    """Hot metal above 100 %, or with too little iron to be hot metal; pins of three irons."""
    parts = {el: np.nan_to_num(pct) for el, pct in columns.elements.items()}
    iron = parts.pop("Fe", None)
    rest = sum(parts.values(), np.zeros(columns.n))
    total = rest if iron is None else rest + iron
    yield from columns.tell(
        total > 100.5, "hm_C_pct", lambda i: f"the analysis adds up to {total[i]:g} %, above 100"
    )
    low = (100.0 - rest < LEAST_IRON_PCT) & (total <= 100.5)
    yield from columns.tell(
        low,
        "hm_C_pct",
        lambda i: (
            f"the analysis leaves {100.0 - rest[i]:g} % iron; hot metal has {LEAST_IRON_PCT:g} "
            "or more"
        ),
    )
    if iron is not None:
        short = np.isfinite(columns.elements["Fe"]) & (total < 99.5)
        yield from columns.tell(
            short, "hm_Fe_pct", lambda i: f"given, but the analysis adds up to {total[i]:g} % only"
        )
    both = columns.given("pin_slag_FeO_pct") & columns.given("pin_slag_Fe2O3_pct")
    for third in ("pin_slag_T_Fe_pct", "pin_iron_to_slag_pct"):
        yield from columns.tell(
            both & columns.given(third),
            third,
            "given beside both pin.slag_FeO_pct and pin.slag_Fe2O3_pct; leave one of the three out",
        )
