"""Charge calculation for an oxygen converter, from first principles.

`plan` solves for what is missing from the charge, `predict` says where a complete charge
ends; both take one heat or a table of heats. `explain` and `sensitivities` read a result. `tap`
goes on to the ladle, `compare_laws` and `compare_practices` serve the metallurgist, `spread` says
how sure a plan is, and `tune` learns from a heat log.
"""

from __future__ import annotations

from typing import Any

__all__ = [
    "compare_laws",
    "compare_practices",
    "explain",
    "plan",
    "predict",
    "sensitivities",
    "spread",
    "tap",
    "tune",
]
__version__ = "0.1.0"

_HOME = {
    "plan": "converter_calc.planning.plan",
    "predict": "converter_calc.planning.plan",
    "explain": "converter_calc.planning.explain",
    "tap": "converter_calc.planning.tap",
    "compare_laws": "converter_calc.metallurgy.laws_compared",
    "compare_practices": "converter_calc.metallurgy.practices",
    "spread": "converter_calc.learning.spread",
    "tune": "converter_calc.learning.tuning",
    "sensitivities": "converter_calc.planning.sensitivities",
}


def __getattr__(name: str) -> Any:
    """Import on first use: the command line starts quicker without what it does not need."""
    if name in _HOME:
        from importlib import import_module

        return getattr(import_module(_HOME[name]), name)
    raise AttributeError(f"module {__name__!r} has no attribute {name!r}")
