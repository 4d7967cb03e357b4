"""The offsets of the day as text: where parameters stand, how fast they wander, what jumped."""

from __future__ import annotations

from typing import TYPE_CHECKING

import numpy as np

if TYPE_CHECKING:
    from converter_calc.learning.following import Followed, Topped
    from converter_calc.learning.today import Today

WIDTH = 96
SUSPECTED = " (suspected: a wander could have gone so far)"


def drift_text(today: Today, followed: Followed, topped: Topped) -> str:
    """Report of `learn`: today's parameters, speeds, jumps, scatter, and what is left."""
    tuned, now = followed.tuned, today.tuned
    drift = topped.drift
    lines = [
        f"OFFSETS OF THE DAY   after the heat of {today.as_of}",
        "=" * WIDTH,
        (
            f"{'parameter that wanders':<28}{'whole log':>12}{'today':>12}{'±':>10}"
            f"{'a step':>12}  unit"
        ),
        "-" * WIDTH,
    ]
    before, unit = tuned.practice_values(), {p.name: p.unit for p in tuned.parameters}
    error = now.standard_errors()
    steps = dict(zip(drift.offsets, _steps(topped, before), strict=True))
    now_values = now.practice_values()
    lines += [
        f"{name:<28}{before[name]:>12.4g}{now_values[name]:>12.4g}"
        f"{error[name]:>10.2g}{steps[name]:>12.2g}  {unit[name]}"
        for name in drift.offsets
    ]
    lines += ["", "a step: how far it wanders from one heat to the next, one deviation.", ""]
    lines.append("Step changes found" if today.jumps else "No step change found.")
    for time, heat_id, name, size, deviation, sure in today.jumps:
        share = name.endswith("_approach")
        told = f"{100 * size:+.0f} ± {100 * deviation:.0f} %" if share else (
            f"{size:+.3g} ± {deviation:.2g} {unit[name]}")  # fmt: skip
        lines.append(f"  {time}  before heat {heat_id}: {name} {told}{'' if sure else SUSPECTED}")
    lines += ["", f"{'quantity':<16}{'scatter of a heat':>22}{'what is left':>34}", "-" * WIDTH]
    for name, scatter in today.scatter.items():
        model = today.models.get(name)
        told = "not fitted"
        if model is not None:
            verb = "used" if model.used else "not used"
            told = f"{verb}: gains {model.gain:.3g} ± {model.gain_error:.2g}"
        shown = f"{scatter:.1f} K" if name == "end_temp_C" else f"{100 * scatter:.0f} % of it"
        lines.append(f"{name:<16}{shown:>22}{told:>34}")
    lines += [
        "",
        "what is left: a ridge regression on top, used only where it won on later heats; gains in",
        "K, or as a share, of mean absolute error.",
    ]
    return "\n".join(lines) + "\n"


def _steps(topped: Topped, value: dict[str, float]) -> list[float]:
    speeds = np.asarray(topped.drift.walk.speed, dtype=float).tolist()
    return [
        speed * value[name] if name.endswith("_approach") else speed
        for name, speed in zip(topped.drift.offsets, speeds, strict=True)
    ]
