"""Loader of the package's data files. Lines that start with `#` are comments."""

from __future__ import annotations

import csv
import tomllib
from functools import cache
from importlib.resources import files
from typing import Any


def _text(name: str) -> str:
    return files("converter_calc.data").joinpath(name).read_text(encoding="utf-8")


@cache
def read_csv_rows(name: str) -> list[dict[str, str]]:
    """Rows of a CSV data file, each a dict by column name (text as it stands)."""
    lines = [line for line in _text(name).splitlines() if line and not line.startswith("#")]
    return list(csv.DictReader(lines))


@cache
def read_toml(name: str) -> dict[str, Any]:
    """Content of a TOML data file."""
    return tomllib.loads(_text(name))
