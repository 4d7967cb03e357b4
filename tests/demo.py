"""The ordinary heat of the demo shop as one document that tests may change."""

from __future__ import annotations

import copy
import tomllib
from typing import Any

from tests.conftest import DEMO


def merged(below: dict[str, Any], above: dict[str, Any]) -> dict[str, Any]:
    """`above` laid over `below`, table by table."""
    out = copy.deepcopy(below)
    for key, value in above.items():
        both = isinstance(value, dict) and isinstance(out.get(key), dict)
        out[key] = merged(out[key], value) if both else copy.deepcopy(value)
    return out


def ordinary(**changes: Any) -> dict[str, Any]:
    """The ordinary demo heat with its shop, without limits and stocks; sections changed."""
    return merged(unlimited("ordinary_low_carbon"), changes)


def whole(name: str) -> dict[str, Any]:
    """A demo heat with its shop in one document."""
    shop = tomllib.loads((DEMO / "shop.toml").read_text(encoding="utf-8"))
    heat = tomllib.loads((DEMO / f"{name}.toml").read_text(encoding="utf-8"))
    del heat["shop"], shop["name"]
    if "scrap_order" in heat.get("choice", {}):  # takes the place of the shop's mix
        del shop["choice"]["scrap_mix"]
    return merged(shop, heat)


def unlimited(name: str) -> dict[str, Any]:
    """The same without limits, stocks and largest shares."""
    heat = whole(name)
    heat.pop("limit", None)
    for material in heat.get("materials", {}).values():
        material.pop("stock_kg", None)
        material.pop("max_share_pct", None)
    return heat
