"""The balance of one heat as cost and conditions of its flux masses, and the search in it."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass, field
from typing import Any

import numpy as np

from converter_calc.balance.closures import (
    basicity_margin,
    lime_limit,
    magnesia_aim_pct,
    phosphorus_margin,
)
from converter_calc.balance.heats import HeatTable
from converter_calc.balance.problem import Problem, build_problem
from converter_calc.balance.state import State
from converter_calc.basis.dual import Array, Num
from converter_calc.basis.elements import mass_fractions
from converter_calc.basis.errors import ConvergenceError, InfeasibleError
from converter_calc.planning.outcome import Outcome
from converter_calc.planning.sensitivities import Outputs, response
from converter_calc.planning.solving import plan_groups, solve_heats, with_masses

#: Accuracy of the optimum: cost relative, and how far a condition may be missed (as a share).
ACCURACY, MISSED = 1e-11, 1e-6
#: A flux below this share of the hot metal counts as not used; a condition within this of its
#: limit counts as binding.
UNUSED, BINDING = 1e-7, 1e-5
#: Slope that may be left at the optimum, as a share of the largest.
STATIONARY = 1e-5
MOST_STEPS = 80
#: Unit of the search: 1 % of the hot metal. A material of no mass at all has no slopes in the
#: balance, so each is taken with at least this many units (a few milligrams) while searching.
UNIT, PRESENT = 0.01, 1e-9
LABELS = {
    "phosphorus": "phosphorus aim",
    "basicity": "least basicity",
    "magnesia": "MgO aim",
    "dissolution": "lime dissolves",
    "fluorspar": "most fluorspar",
    "recycled_P": "most phosphorus by recycled slag",
}


@dataclass(frozen=True)
class FluxLimits:
    """Limits of a flux choice.

    fluorspar_kg_per_t : most fluorspar [kg/t steel]; 0 keeps it out (permits for fluoride and
    local codes decide). recycled_P_kg_per_t : most phosphorus brought back by recycled slag
    [kg/t steel]. most_kg : most of single materials [kg]; stocks of the shop hold in any case.
    Defaults: common practice, no source.
    """

    fluorspar_kg_per_t: float = 0.0
    recycled_P_kg_per_t: float = 0.1
    most_kg: Mapping[str, float] = field(default_factory=dict)


@dataclass(frozen=True)
class Optimum:
    """Conditions of Karush, Kuhn and Tucker at a mix.

    tight : conditions that hold just so. prices : what easing each is worth. reduced : slope of
    the aim by each flux once the conditions are paid for, (k,). missed : largest slope of the
    wrong sign, as a share of the largest slope of the aim.
    """

    tight: tuple[str, ...]
    prices: Array
    reduced: Array
    missed: float


class FluxSearch:
    """The balance of one heat as cost and conditions of its flux masses, with derivatives.

    z : masses [UNIT of the hot metal].
    """

    def __init__(
        self,
        base: HeatTable,
        names: Sequence[str],
        limits: FluxLimits,
        steel_value_per_t: float | None,
    ) -> None:
        self.steel_value = steel_value_per_t
        self.base, self.names, self.limits = base, list(names), limits
        hot_metal = float(base.values["hot_metal_kg"][0])
        scale = hot_metal if np.isfinite(hot_metal) else float(base.values["aim_steel_kg"][0])
        self.unit_kg = UNIT * scale
        self.done: dict[bytes, tuple[Outcome, dict[str, float], dict[str, Array]]] = {}
        roles = (base.choices.lime, base.choices.magnesia_flux)
        self.rest = {name: 0.0 for name in roles if name not in self.names}
        aim = np.isfinite(base.values["aim_P_pct"]).all()
        self.conditions = ["basicity", "magnesia", "dissolution"]
        self.conditions += ["phosphorus"] if aim else []
        self.conditions += ["fluorspar"] if "fluorspar" in self.names else []
        self.conditions += ["recycled_P"] if "recycled_slag" in self.names else []

    def bounds(self) -> list[tuple[float, float]]:
        """Least and most of each flux in units."""
        found = []
        for name in self.names:
            stock = self.base.materials[name].stock_kg
            most = min(self.limits.most_kg.get(name, np.inf), np.inf if stock is None else stock)
            if name == "fluorspar" and self.limits.fluorspar_kg_per_t == 0.0:
                most = 0.0
            if name == "recycled_slag" and self.limits.recycled_P_kg_per_t == 0.0:
                most = 0.0
            found.append((0.0, min(most / self.unit_kg, 25.0)))
        return found

    def heats(self, z: Array) -> HeatTable:
        """The heat with these fluxes."""
        kg = np.maximum(z, PRESENT) * self.unit_kg
        masses = dict(zip(self.names, kg, strict=True))
        return with_masses(self.base, {**self.rest, **masses})

    def at(self, z: Array) -> tuple[Outcome, dict[str, float], dict[str, Array]]:
        """Outcome, values and gradients by z of cost and conditions."""
        key = np.ascontiguousarray(z).tobytes()
        if key not in self.done:
            ((_, group, ask),) = plan_groups(self.heats(z))
            outcome = solve_heats(group, ask)
            seeds = [f"{name}_kg" for name in self.names]
            p = build_problem(group, seeds=seeds)
            with np.errstate(all="ignore"):
                found = response(p, ask, outcome.x, seeds, self._outputs(group, ask))
            values = {name: float(x[0]) for name, x in found.values.items()}
            slopes = {name: x[0] * self.unit_kg for name, x in found.slopes.items()}
            if not outcome.converged[0]:
                values = dict.fromkeys(values, np.nan)
            self.done[key] = outcome, values, slopes
        return self.done[key]

    def _outputs(self, heats: HeatTable, ask: Any) -> Outputs:
        phosphorus_share = sum(
            kg * mass_fractions(species).get("P", 0.0)
            for species, kg in heats.materials["recycled_slag"].species_kg.items()
        )
        limits, value = self.limits, self.steel_value

        def outputs(p: Problem, s: State, x: Mapping[str, Num]) -> dict[str, Num]:
            blank = np.zeros(1)
            steel_t = s.steel_kg * 1e-3
            cost = Outcome(heats, ask, p, {}, s, blank, blank, blank).cost()
            found = {
                "cost": cost,
                "aimed": cost if value is None else (cost - value) * steel_t,
                "steel_t": steel_t,
                "basicity": basicity_margin(p, s),
                "magnesia": s.slag_pct["MgO"] / magnesia_aim_pct(p, s) - 1.0,
                "dissolution": lime_limit(p, x, s) * -1.0,
            }
            if "phosphorus" in self.conditions:
                found["phosphorus"] = phosphorus_margin(p, s)
            if "fluorspar" in self.conditions and limits.fluorspar_kg_per_t > 0.0:
                used = s.charged_kg["fluorspar"] / steel_t
                found["fluorspar"] = used * (-1.0 / limits.fluorspar_kg_per_t) + 1.0
            if "recycled_P" in self.conditions and limits.recycled_P_kg_per_t > 0.0:
                brought = s.charged_kg["recycled_slag"] * phosphorus_share / steel_t
                found["recycled_P"] = brought * (-1.0 / limits.recycled_P_kg_per_t) + 1.0
            return found

        return outputs

    def run(self, start: Array) -> Array:
        """The masses of least cost, from a start near the aims."""
        from scipy import optimize

        minimize: Any = optimize.minimize
        first = abs(self.at(start)[1]["aimed"])
        live = [name for name in self.conditions if name in self.at(start)[1]]

        def values(z: Array) -> Array:
            return np.array([self.at(z)[1][name] for name in live])

        def slopes(z: Array) -> Array:
            return np.array([self.at(z)[2][name] for name in live])

        found = minimize(
            lambda z: self.at(z)[1]["aimed"] / first,
            start,
            jac=lambda z: self.at(z)[2]["aimed"] / first,
            bounds=self.bounds(),
            constraints={"type": "ineq", "fun": values, "jac": slopes},
            method="SLSQP",
            options={"ftol": ACCURACY, "maxiter": MOST_STEPS},
        )
        z: Array = np.where(found.x < UNUSED / UNIT, 0.0, found.x)
        short = {name: x for name, x in zip(live, values(z), strict=True) if not x > -MISSED}
        # next to the optimum rounding can stop the search before it says so itself
        if not short and (found.success or self.optimum(z).missed < STATIONARY):
            return z
        if short:
            what = " and ".join(LABELS[name] for name in short)
            message = f"no mix of {', '.join(self.names)} reaches the aims; what binds is {what}"
            frees = ["more materials to choose from, or higher limits", "an easier aim"]
            raise InfeasibleError(message, what, frees)
        raise ConvergenceError(f"the least-cost fluxes were not found: {found.message}")

    def optimum(self, z: Array) -> Optimum:
        """Prices of the binding conditions at z, and what each flux would still save."""
        _, values, slopes = self.at(z)
        tight = tuple(name for name in self.conditions if abs(values.get(name, 1.0)) < BINDING)
        most = np.array([high for _, high in self.bounds()])
        free = (z > 0.0) & (z < most * (1.0 - 1e-9))
        prices: Array = np.zeros(len(tight))
        reduced = slopes["aimed"]
        if tight:
            conditions = np.array([slopes[name] for name in tight])
            prices = np.linalg.lstsq(conditions[:, free].T, reduced[free], rcond=None)[0]
            reduced = reduced - prices @ conditions
        gain = np.where(free, np.abs(reduced), np.where(z > 0.0, reduced, -reduced))
        wrong = np.maximum(gain, 0.0).max() / np.abs(slopes["aimed"]).max()
        return Optimum(tight, prices, reduced, float(max(wrong, 0.0)))
