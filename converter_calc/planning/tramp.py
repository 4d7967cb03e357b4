"""Tramp elements of a scrap mix against the limits of a grade, and the share that would fit.

Mass balance: what is charged of an element that iron does not oxidise ends in the steel.
"""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from typing import Any, TypeAlias

import numpy as np
import numpy.typing as npt

from converter_calc.basis.dual import Array
from converter_calc.basis.errors import Fault, InputError

Flags: TypeAlias = npt.NDArray[np.bool_]


@dataclass(frozen=True)
class TrampCheck:
    """One element of a mix against its limit, n heats.

    Attributes
    ----------
    element, max_pct : the element, its limit in the steel [mass %].
    steel_pct : content that the mix brings [mass %], shape (n,).
    breaks : the limit is broken, shape (n,).
    offender : the scrap of the mix richest in the element, n names.
    offender_share : its share of the mix, shape (n,).
    fitting_share : largest share of it at which the mix just meets the limit, the others
        taking its place in proportion; its present share where nothing breaks; 0 where even
        that is not enough, shape (n,).
    fits_when_cut : the mix meets the limit at `fitting_share`, shape (n,).
    fitting_scrap_share : largest share of this mix, as it is, in the metallic charge that
        meets the limit (0 where the rest of the charge alone breaks it), shape (n,).
    """

    element: str
    max_pct: float
    steel_pct: Array
    breaks: Flags
    offender: list[str]
    offender_share: Array
    fitting_share: Array
    fits_when_cut: Flags
    fitting_scrap_share: Array


def largest_fitting_share(
    scrap_pct: Mapping[str, Mapping[str, float]],
    mix_share: Mapping[str, Any],
    scrap_kg: Any,
    metallic_charge_kg: Any,
    yield_share: Any,
    tramp_max: Mapping[str, float],
    rest_pct: Mapping[str, Any] | None = None,
    stays_share: Mapping[str, Any] | None = None,
) -> list[TrampCheck]:
    """Check each tramp element of a mix and find the share that would fit.

    Steel content = stays * (scrap_kg * sum_s x_s c_s + (charge - scrap) * c_rest)
    / (charge * yield), linear in the share x_s, so that the fitting share is exact. A heat with
    a NaN is not said to break a limit.

    Parameters
    ----------
    scrap_pct : scrap -> element -> content as weighed [mass %, 0 to 100]; absent = 0.
    mix_share : scrap -> share of the mix, the sum over the mix 1; a number or shape (n,).
    scrap_kg, metallic_charge_kg : all scrap; hot metal and scrap together [kg]; numbers or (n,).
    yield_share : steel per kg of metallic charge [kg/kg], above 0; number or (n,).
    tramp_max : element -> limit in the steel [mass %].
    rest_pct : element -> content of the rest of the charge, the hot metal [mass %].
    stays_share : element -> share that is left in the steel, 0..1; number or (n,); absent = 1.

    Returns
    -------
    One `TrampCheck` per element of `tramp_max`, in its order.

    Raises
    ------
    InputError : empty mix, shares that do not add up to 1, a scrap without an analysis.
    """
    names = list(mix_share)
    _check_mix(names, scrap_pct, mix_share)
    columns = [*mix_share.values(), scrap_kg, metallic_charge_kg, yield_share]
    per_element = [
        (given or {}).get(element, absent)
        for given, absent in ((rest_pct, 0.0), (stays_share, 1.0))
        for element in tramp_max
    ]
    arrays = np.broadcast_arrays(
        *(np.atleast_1d(np.asarray(x, dtype=float)) for x in [*columns, *per_element])
    )
    m, k = len(names), len(tramp_max)
    x = np.stack(arrays[:m])
    scrap, charge, steel_yield = arrays[m : m + 3]
    rests, stay = arrays[m + 3 : m + 3 + k], arrays[m + 3 + k :]
    checks = []
    for (element, limit), rest, stays in zip(tramp_max.items(), rests, stay, strict=True):
        content = np.array([scrap_pct[name].get(element, 0.0) for name in names])
        checks.append(
            _check_element(element, limit, names, content, x, scrap, charge, steel_yield * charge,
                           rest, stays)
        )  # fmt: skip
    return checks


def _check_mix(
    names: list[str], scrap_pct: Mapping[str, Any], mix_share: Mapping[str, Any]
) -> None:
    if not names:
        raise InputError([Fault("choice.scrap_mix", "is empty: name at least one scrap")])
    faults = [
        Fault(f"choice.scrap_mix.{name}", "has no analysis")
        for name in names
        if name not in scrap_pct
    ]
    total = np.ravel(sum(np.asarray(share, dtype=float) for share in mix_share.values()))
    wrong = total[np.abs(total - 1.0) > 1e-9]
    if wrong.size:
        faults.append(Fault("choice.scrap_mix", f"shares add up to {wrong[0]:g}, not 1"))
    if faults:
        raise InputError(faults)


def _check_element(
    element: str,
    limit: float,
    names: list[str],
    content: Array,
    x: Array,
    scrap: Array,
    charge: Array,
    steel: Array,
    rest: Array,
    stays: Array,
) -> TrampCheck:
    mix = content @ x
    brought_by_rest = (charge - scrap) * rest
    steel_pct = stays * (scrap * mix + brought_by_rest) / steel
    # rounding of the sum alone must not refuse a mix that sits at the limit
    breaks = steel_pct > limit * (1.0 + 1e-12)

    richest = np.argmax(np.where(x > 0.0, content[:, None], -1.0), axis=0)
    share = np.take_along_axis(x, richest[None, :], axis=0)[0]
    worst = content[richest]
    others = 1.0 - share
    with np.errstate(divide="ignore", invalid="ignore"):
        # a mix of one scrap is thinned by metal that is free of the element
        mean_others = np.where(others > 1e-12, (mix - share * worst) / others, 0.0)
        allowed = np.where(stays > 0.0, limit * steel / stays, np.inf)
        allowed_mix = np.where(scrap > 0.0, (allowed - brought_by_rest) / scrap, np.inf)
        fitting = (allowed_mix - mean_others) / (worst - mean_others)
        per_charge = (allowed / charge - rest) / (mix - rest)
    fits_when_cut = ~breaks | (allowed_mix >= mean_others)
    fitting = np.where(breaks, np.where(fits_when_cut, fitting, 0.0), share)
    scrap_share = np.where(breaks, np.clip(per_charge, 0.0, scrap / charge), scrap / charge)
    # hot metal at least as rich as the mix: less scrap does not help
    scrap_share = np.where(breaks & (mix <= rest), 0.0, scrap_share)
    return TrampCheck(
        element=element,
        max_pct=limit,
        steel_pct=steel_pct,
        breaks=breaks,
        offender=[names[k] for k in richest],
        offender_share=share,
        fitting_share=fitting,
        fits_when_cut=fits_when_cut,
        fitting_scrap_share=scrap_share,
    )


def worst_element(checks: Sequence[TrampCheck], heat: int = 0) -> TrampCheck | None:
    """The check of one heat that lies farthest above its limit, as a ratio; None if all fit.

    `heat` is the row, 0 to n - 1; contents in mass %.
    """
    broken = [check for check in checks if check.breaks[heat]]
    if not broken:
        return None
    return max(broken, key=lambda check: float(check.steel_pct[heat]) / max(check.max_pct, 1e-12))


def tell_tramp(check: TrampCheck, heat: int = 0) -> str:
    """One sentence: what breaks the limit in this heat (row `heat`), and what would fit.

    Contents in mass %, shares in % of the scrap mix or of the metallic charge.
    """
    scrap, now = check.offender[heat], 100.0 * check.offender_share[heat]
    start = (
        f"{check.element} {check.steel_pct[heat]:.4f} % exceeds {check.max_pct:g} %;"
        f" '{scrap}' at {now:.1f} % of the mix brings most"
    )
    whole = f"this mix fits up to {100.0 * check.fitting_scrap_share[heat]:.2f} % of the charge"
    if check.fits_when_cut[heat]:
        return f"{start}: {100.0 * check.fitting_share[heat]:.2f} % of it would fit; {whole}"
    return f"{start}: the others alone break the limit; {whole}"
