"""The schema of a heat or shop file, read from its table.

`data/parameters.csv` lists every input once: flat name, place in the file, type, unit,
default, bounds. Checks, defaults and column names are all built from it.
"""

from __future__ import annotations

from collections.abc import Iterable
from dataclasses import dataclass, replace
from functools import cache

from converter_calc.basis.elements import known_elements
from converter_calc.data.tables import read_csv_rows, read_toml

#: Bounds of an element of the hot metal that has no row of its own, mass %.
OTHER_ELEMENT_PCT = (0.0, 10.0)


@dataclass(frozen=True)
class Parameter:
    """One input. `low` and `high` bound a number; `allowed` lists the texts it may be."""

    name: str
    section: str
    key: str
    kind: str
    unit: str
    default: str
    low: float
    high: float
    allowed: tuple[str, ...]
    description: str
    source: str

    @property
    def place(self) -> str:
        """Where it stands in the file: section.key."""
        return f"{self.section}.{self.key}" if self.section else self.key

    @property
    def default_number(self) -> float:
        """The default of a number; NaN where there is none."""
        return float(self.default) if self.default else float("nan")


def _read(name: str) -> tuple[Parameter, ...]:
    return tuple(
        Parameter(
            name=row["name"],
            section=row["section"],
            key=row["key"],
            kind=row["type"],
            unit=row["unit"],
            default=row["default"],
            low=float(row["min"] or "-inf"),
            high=float(row["max"] or "inf"),
            allowed=tuple(part for part in row["allowed"].split(";") if part),
            description=row["description"],
            source=row["source"],
        )
        for row in read_csv_rows(name)
    )


@cache
def parameters() -> dict[str, Parameter]:
    """All inputs by flat name, in the order of the table."""
    return {row.name: row for row in _read("parameters.csv")}


@cache
def material_fields() -> dict[str, Parameter]:
    """Fields of a material by key."""
    return {row.key: row for row in _read("material_fields.csv")}


@cache
def sections() -> dict[str, dict[str, Parameter]]:
    """Inputs by section and key; section "" holds the keys outside any section."""
    found: dict[str, dict[str, Parameter]] = {}
    for row in parameters().values():
        found.setdefault(row.section, {})[row.key] = row
    return found


@cache
def number_names() -> tuple[str, ...]:
    """Flat names of all numeric inputs."""
    return tuple(row.name for row in parameters().values() if row.kind == "number")


def element_parameter(symbol: str) -> Parameter:
    """The input that holds an element of the hot metal [mass %], whether it has a row or not."""
    name = f"hm_{symbol}_pct"
    if name in parameters():
        return parameters()[name]
    high = 100.0 if symbol == "Fe" else OTHER_ELEMENT_PCT[1]
    return Parameter(
        name, "hot_metal", f"{symbol}_pct", "number", "mass %", "", OTHER_ELEMENT_PCT[0], high, (),
        f"{symbol} in the hot metal", "",
    )  # fmt: skip


def material_parameter(material: str) -> Parameter:
    """The input that holds the mass of a material charged [kg]."""
    return Parameter(
        f"{material}_kg", "charge", f"{material}_kg", "number", "kg", "", 0.0, 1e6, (),
        f"{material} charged", "",
    )  # fmt: skip


def yield_parameter(material: str) -> Parameter:
    """The input that holds the yield factor of one scrap, a column of a table of heats."""
    row = material_fields()["yield_factor"]
    return replace(row, name=f"{material}_yield_factor", section=f"materials.{material}")


def is_element_column(name: str) -> bool:
    """Whether a flat name is that of an element of the hot metal, `hm_<El>_pct`."""
    return name.startswith("hm_") and element_of_key(name[3:]) is not None


def element_of_key(key: str) -> str | None:
    """The element of a key like `Cr_pct`; None where it is no known element."""
    symbol = key.removesuffix("_pct")
    return symbol if symbol != key and symbol in known_elements() else None


@cache
def allowed_texts(name: str) -> tuple[str, ...]:
    """What a text input may be; empty where anything goes. Laws are those of their table."""
    row = parameters()[name]
    if row.allowed or row.section != "law":
        return row.allowed
    return tuple(law["name"] for law in read_toml(f"{row.key}.toml")["law"])


def parse_shares(text: str) -> dict[str, float]:
    """A table that stands in one cell: "FeO=55;Fe=8" -> {"FeO": 55.0, "Fe": 8.0}."""
    pairs = (part.split("=") for part in text.split(";") if part)
    return {key.strip(): float(share) for key, share in pairs}


def nearest(word: str, names: Iterable[str]) -> str:
    """`; nearest: <name>`, or nothing where no name is near. Case, 0 and o do not count."""
    import difflib

    def fold(text: str) -> str:
        return text.casefold().replace("0", "o")

    folded = {fold(name): name for name in names if name}
    near = difflib.get_close_matches(fold(word[:80]), list(folded), n=1, cutoff=0.5)
    return f"; nearest: {folded[near[0]]}" if near else ""
