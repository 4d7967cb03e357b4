"""The givens of n heats, ready for the residuals: numbers, pins, fixed charge, choices.

A `Problem` is what does not change while a table of heats is solved. Quantities that are the
same in all heats are kept as plain numbers, so that a long table costs little memory.
"""

from __future__ import annotations

from collections.abc import Callable, Iterable, Mapping
from dataclasses import dataclass, field, replace
from typing import Any

import numpy as np

from converter_calc.balance.charge import (
    Content,
    Totals,
    content,
    dust_content,
    mix_contents,
    returned_elements,
)
from converter_calc.balance.heats import HeatTable
from converter_calc.basis import dual as ad
from converter_calc.basis.dual import Array, Num
from converter_calc.basis.errors import Fault, InputError
from converter_calc.basis.units import ZERO_C_K
from converter_calc.thermo.metal import MetalEnthalpy

#: Elements that leave with the slag only, as the oxide named.
TO_SLAG = {"Mg": "MgO", "Na": "Na2O", "K": "K2O"}
#: Elements shared between steel and slag, with the oxide they form.
SHARED = {
    "Si": "SiO2",
    "Al": "Al2O3",
    "Ti": "TiO2",
    "V": "V2O3",
    "Cr": "Cr2O3",
    "Mn": "MnO",
    "P": "P2O5",
}
#: Elements that leave with the dust only, as the oxide named (zinc and lead boil off).
TO_DUST = {"Zn": "ZnO", "Pb": "PbO"}
#: Elements that the rest of the balance places one by one.
PLACED = {"Fe", "C", "S", "Ca", "F", "O", "H", "N", "Ar"}
#: Tramp elements: nobler than iron at the end of the blow, they stay in the steel.
STAYS_IN_STEEL = ("Cu", "Ni", "Mo", "Sn", "Co", "As", "Sb", "W", "Nb")


#: Input that holds the error of the meter of each of these [% of the truth].
METERS = {"hot_metal": "hot_metal_weight_error_pct", "oxygen": "oxygen_meter_error_pct"}


def _true_share(values: Mapping[str, Num], error: str, factors: Iterable[str]) -> Num:
    """Truth / reading, from an error [%] and factors; None where it is one."""
    found: Num = None
    for name in factors:
        factor = values.get(name)
        if factor is not None and not (isinstance(factor, float) and factor == 1.0):
            found = factor if found is None else found * factor
    pct = values.get(error)
    if pct is not None and not (isinstance(pct, float) and pct == 0.0):
        share = 1.0 / (1.0 + pct * 0.01)
        found = share if found is None else found * share
    return found


@dataclass
class Problem:
    """Givens of n heats: truths, where a heat table holds what the instruments read.

    values : each numeric input by its flat name; absent where no heat gives it. masks : True
    where all heats give it, else a boolean array (n,). fixed : masses of materials that are
    given [kg]. hot_metal_pct : analysis of the hot metal [mass %].
    """

    n: int
    values: dict[str, Num]
    masks: dict[str, Any]
    fixed: dict[str, Num]
    hot_metal_pct: dict[str, Num]
    hot_metal_J_kg: Num
    contents: dict[str, Content]
    roles: dict[str, Any]
    blowing: str
    laws: Mapping[str, str]
    dust: Content
    scale_kg: Any
    elements: tuple[str, ...] = ()
    returned: dict[str, Num] = field(default_factory=dict)
    cache: dict[Any, Any] = field(default_factory=dict, repr=False)

    def get(self, name: str) -> Num:
        """A value by flat name, or None where no heat gives it."""
        return self.values.get(name)

    def pinned(self, name: str, law: Callable[[], Num]) -> Num:
        """The pinned value where a heat pins `name`, else what the law says."""
        name = "pin_" + name
        if name not in self.values:
            return law()
        mask = self.masks[name]
        return self.values[name] if mask is True else ad.where(mask, self.values[name], law())

    def truth(self, reading: str) -> Num:
        """What is true as a share of what is read: "hot_metal", "oxygen" or the name of a scrap.

        None where the two are the same.
        """
        if reading in METERS:
            return _true_share(self.values, METERS[reading], ())
        factors = ("scrap_yield_factor", f"{reading}_yield_factor")
        return _true_share(self.values, "scrap_weight_error_pct", factors)

    def read(self, reading: str, true: Num) -> Num:
        """What the shop's instrument shows where `true` is the truth; see `truth`."""
        share = self.truth(reading)
        return true if share is None else true / share

    def mask(self, name: str) -> Any:
        """Where a heat gives `name`: True, False or a boolean array."""
        return self.masks.get(name, False)

    def take(self, index: Any) -> Problem:
        """The givens of some of the heats (indices or slice)."""

        def pick(x: Num) -> Num:
            if isinstance(x, ad.Dual):
                slopes = {key: pick(slope) for key, slope in x.d.items()}
                return ad.Dual(pick(x.v), slopes)
            return x[index] if isinstance(x, np.ndarray) and x.ndim else x

        def pick_all(x: Mapping[str, Num]) -> dict[str, Num]:
            return {name: pick(part) for name, part in x.items()}

        return replace(
            self,
            n=len(np.arange(self.n)[index]),
            values=pick_all(self.values),
            masks=pick_all(self.masks),
            fixed=pick_all(self.fixed),
            hot_metal_pct=pick_all(self.hot_metal_pct),
            returned=pick_all(self.returned),
            hot_metal_J_kg=pick(self.hot_metal_J_kg),
            scale_kg=pick(self.scale_kg),
            cache={},
        )

    @property
    def steel_elements(self) -> tuple[str, ...]:
        """Elements that only the steel keeps, of those charged."""
        return tuple(element for element in self.elements if element in STAYS_IN_STEEL)


def _shrink(array: Array) -> float | Array:
    first = array.flat[0]
    return float(first) if array.size and (array == first).all() else array


def _numbers(heats: HeatTable, seeds: Iterable[str]) -> tuple[dict[str, Num], dict[str, Any]]:
    values: dict[str, Num] = {}
    masks: dict[str, Any] = {}
    wanted = set(seeds)
    for name, array in heats.values.items():
        given = np.isfinite(array)
        if not given.any():
            continue
        masks[name] = True if given.all() else given
        values[name] = ad.seed(array, name) if name in wanted else _shrink(array)
    return values, masks


def _check_elements(elements: Iterable[str]) -> None:
    known = {*TO_SLAG, *SHARED, *TO_DUST, *PLACED, *STAYS_IN_STEEL}
    unknown = sorted(set(elements) - known)
    if unknown:
        raise InputError(
            [
                Fault(
                    "materials",
                    f"element {name} has no place in the balance; allowed: "
                    f"{', '.join(sorted(known))}",
                )
                for name in unknown
            ]
        )


def build_problem(heats: HeatTable, seeds: Iterable[str] = ()) -> Problem:
    """Givens of a table of heats; `seeds` names the inputs that carry derivatives.

    Raises InputError where a material holds an element that the balance cannot place.
    """
    seeds = tuple(seeds)
    values, masks = _numbers(heats, seeds)
    _correct(values)
    choices = heats.choices
    used = _used_materials(heats)
    contents = {name: content(heats.materials[name]) for name in used}
    dust = dust_content(tuple(choices.dust_species.items()))
    hot_metal_pct = {
        element: ad.seed(pct, f"hm_{element}_pct") if f"hm_{element}_pct" in seeds else _shrink(pct)
        for element, pct in heats.hm_pct.items()
        if element == "Fe" or np.any(pct > 0.0) or f"hm_{element}_pct" in seeds
    }
    seeded = [key for key in seeds if key.startswith("hm_")]
    for key in seeded:  # iron is what is left to 100 %, so its share follows each other one
        symbol = key.removeprefix("hm_").removesuffix("_pct")
        iron = hot_metal_pct["Fe"]
        hot_metal_pct["Fe"] = iron + (heats.hm_pct[symbol] - hot_metal_pct[symbol])
    fixed = {
        name: ad.seed(_zero(kg), name + "_kg") if name + "_kg" in seeds else _shrink(_zero(kg))
        for name, kg in heats.masses_kg.items()
    }
    for name, kg in fixed.items():
        if heats.materials[name].kind == "scrap":
            factors = ("scrap_yield_factor", f"{name}_yield_factor")
            share = _true_share(values, "scrap_weight_error_pct", factors)
            fixed[name] = kg if share is None else kg * share
    elements = set(hot_metal_pct) | set(dust.elements) | {"O", "N", "Ar", "Fe", "C"}
    for part in contents.values():
        elements.update(part.elements)
    elements.update(returned_elements(heats.returned))
    _check_elements(elements)
    metal = MetalEnthalpy(tuple(hot_metal_pct)).evaluate_dual(values["hot_metal_temp_C"] + ZERO_C_K)
    heat = sum(hot_metal_pct[element] * 0.01 * metal[element] for element in hot_metal_pct)
    return Problem(
        n=heats.n,
        values=values,
        masks=masks,
        fixed=fixed,
        hot_metal_pct=hot_metal_pct,
        hot_metal_J_kg=heat,
        contents=contents,
        roles={
            "scrap": _scrap_plan(heats, contents),
            "scrap_mix": dict(choices.scrap_mix),
            **{role: getattr(choices, role) for role in ("lime", "magnesia_flux")},
            **{role: getattr(choices, role) for role in ("coolant", "fuel")},
        },
        blowing=choices.blowing,
        laws=choices.laws,
        dust=dust,
        scale_kg=_scale_kg(heats),
        elements=tuple(sorted(elements)),
        returned={name: _shrink(x) for name, x in heats.returned.items()},
    )


def _correct(values: dict[str, Num]) -> None:
    """Put the truth in place of what thermometer, hot metal scale and oxygen meter read."""
    for reading, name in (("hot_metal", "hot_metal_kg"), ("oxygen", "oxygen_Nm3")):
        share = _true_share(values, METERS[reading], ())
        if share is not None and name in values:
            values[name] = values[name] * share
    error = values["hot_metal_temp_error_C"]
    if not (isinstance(error, float) and error == 0.0):
        values["hot_metal_temp_C"] = values["hot_metal_temp_C"] - error


def _zero(kg: Array) -> Array:
    return np.nan_to_num(kg, nan=0.0)


def _used_materials(heats: HeatTable) -> list[str]:
    choices = heats.choices
    names = [name for name, kg in heats.masses_kg.items() if np.any(_zero(kg) != 0.0)]
    names += [choices.lime, choices.magnesia_flux, choices.coolant, choices.fuel]
    names += [*choices.scrap_mix, *choices.scrap_order]
    names += ["carryover_slag", "retained_slag", "lining"]
    return [name for name in dict.fromkeys(names) if name]


def _scrap_plan(heats: HeatTable, contents: Mapping[str, Content]) -> Any:
    """How free scrap is made up: one mixed content, or an order with stock limits [kg]."""
    choices = heats.choices
    if choices.scrap_order:
        stocks = [heats.materials[name].stock_kg for name in choices.scrap_order]
        limits = [np.inf if stock is None or not np.isfinite(stock) else stock for stock in stocks]
        return list(zip(choices.scrap_order, limits, strict=True))
    if not choices.scrap_mix:
        return None
    return mix_contents((share, contents[name]) for name, share in choices.scrap_mix.items())


def _scale_kg(heats: HeatTable) -> Any:
    """A mass that grows with the heat, to make the residuals dimensionless [kg]."""
    hot_metal = heats.values["hot_metal_kg"]
    steel = heats.values["aim_steel_kg"]
    scale = np.where(np.isfinite(hot_metal), hot_metal, steel)
    return _shrink(np.where(np.isfinite(scale) & (scale > 0.0), scale, 1.0))


def given_totals(p: Problem) -> Totals:
    """Totals of the charge whose masses are given."""
    totals = Totals()
    for name, kg in p.fixed.items():
        if name in p.contents:
            totals.add(kg, p.contents[name])
    return totals
