"""How far lime goes: end phosphorus against lime, its slope, and the limits on the way.

Built on the sweeps of `planning.lime_sweeps`; the slope comes from the balance by implicit
differentiation, so the lime at which more of it only makes more slag is exact.
"""

from __future__ import annotations

from collections.abc import Callable, Iterator
from dataclasses import dataclass
from typing import TYPE_CHECKING, Any

import numpy as np

from converter_calc.balance.heats import HeatTable
from converter_calc.balance.schema import parameters
from converter_calc.basis.dual import Array
from converter_calc.basis.errors import InfeasibleError
from converter_calc.laws import phosphorus, saturation
from converter_calc.planning.explain import Term, source_of
from converter_calc.planning.lime_sweeps import (
    asked,
    crossing,
    lime_curve,
    lime_free,
    lime_lines,
    phosphorus_free,
)
from converter_calc.planning.outcome import Outcome, at, spread
from converter_calc.planning.sensitivities import derivatives
from converter_calc.planning.solving import solve_heats, with_masses
from converter_calc.planning.sweeps import only_one, repeated

if TYPE_CHECKING:
    import pandas as pd

#: Gain below which a further kilogram of lime per tonne of steel counts as in vain [mass % P].
LEAST_GAIN_PCT = 1e-4
POINTS = 41


@dataclass(frozen=True)
class LimeMark:
    """One limit on the lime axis of a heat; NaN where it is not met between 0 and the most lime.

    key : a name without spaces. label : words. lime_kg : where [kg]. end_P_pct, basicity,
    slag_kg, scrap_kg : the heat there [mass %, -, kg, kg]. note : what the limit means for
    this heat. terms : what stands behind it.
    """

    key: str
    label: str
    lime_kg: float
    end_P_pct: float
    basicity: float
    slag_kg: float
    scrap_kg: float
    note: str
    terms: tuple[Term, ...]


@dataclass(frozen=True)
class LimeLimits:
    """The lime curve of one heat with its limits.

    curve : rows by rising lime: lime_kg, end_P_pct, gain_pct_per_kg_t (fall of end P for one
    more kg of lime per tonne of steel), basicity, undissolved_lime_kg, slag_kg, scrap_kg,
    slag_T_Fe_pct, slag_MgO_pct, MgO_saturation_pct, silicate_margin_pct, L_P, in_range,
    on_plateau. marks : by rising lime, those without an answer last.
    """

    lime: str
    law: str
    curve: pd.DataFrame
    marks: list[LimeMark]

    def mark(self, key: str) -> LimeMark:
        """One mark by its key.

        Raises KeyError for an unknown key.
        """
        return {mark.key: mark for mark in self.marks}[key]


def lime_limits(heats: HeatTable, lime_kg: Any = None) -> LimeLimits:
    """Lime curve and limits of one heat by its chosen phosphorus law.

    Scrap (or coolant) follows the aim temperature and the magnesia flux its aim at every
    point, as in a plan.

    Parameters
    ----------
    heats : one heat. lime_kg : points of the curve [kg], (n,); None: POINTS from 0 to 1.4
        times the lime at which dissolution stops.

    Returns
    -------
    LimeLimits. The mark "in_vain" is where a further kilogram of lime per tonne of steel takes
    out less than LEAST_GAIN_PCT phosphorus, "least_P" where it takes out nothing at all.

    Raises
    ------
    InputError : not one heat, lime negative or not finite, input missing. InfeasibleError : no
    lime gives the heat an end point.
    """
    only_one(heats)
    base = phosphorus_free(heats)
    lines = lime_lines(base)
    reach = np.nanmax([lines.dissolution_stops_kg, lines.least_basicity_kg, 0.0])
    if not reach > 0.0:
        message = f"no mass of {base.choices.lime} gives this heat an end point"
        raise InfeasibleError(message, frees=["what the plan of this heat names"])
    points = (
        np.linspace(0.0, 1.4 * reach, POINTS) if lime_kg is None else np.sort(np.ravel(lime_kg))
    )
    curve = lime_curve(base, points, laws=[])
    outcome = _outcome(base, points)
    extra = {
        "gain_pct_per_kg_t": gain_pct_per_kg_t(outcome),
        "silicate_margin_pct": _silicate(outcome),
    }
    for name, column in extra.items():
        curve[name] = np.where(outcome.converged, column, np.nan)
    slag = {oxide: np.asarray(pct) for oxide, pct in outcome.state.slag_pct.items()}
    curve["on_plateau"] = np.broadcast_to(phosphorus.on_plateau(slag), (points.size,))
    most = 1.4 * float(reach)
    free = lime_free(base)
    found = {
        "least_basicity": lines.least_basicity_kg,
        "for_aim": lines.for_aim_kg.get(lines.law, np.nan),
        "dissolution_stops": lines.dissolution_stops_kg,
        "MgO_saturation": lines.MgO_saturation_kg,
        **_silicate_marks(free, most),
        "in_vain": _falls(free, lambda o: gain_pct_per_kg_t(o) - LEAST_GAIN_PCT, most),
        "least_P": _falls(free, gain_pct_per_kg_t, most),
    }
    marks = [_mark(key, float(kg), base) for key, kg in found.items()]
    marks.sort(key=lambda mark: (not np.isfinite(mark.lime_kg), mark.lime_kg))
    return LimeLimits(base.choices.lime, lines.law, curve, marks)


def gain_pct_per_kg_t(outcome: Outcome) -> Array:
    """Fall of end phosphorus for one more kg of lime per tonne of steel, (n,) [mass %].

    outcome : heats with their lime given. Exact, by implicit differentiation of the balance at
    constant aims.
    """
    name = f"{outcome.heats.choices.lime}_kg"
    slopes = derivatives(outcome.heats, outcome.ask, outcome.x, [name])
    per_kg = spread(slopes["end_P_pct"][name], outcome.n)
    return np.array(-per_kg * spread(outcome.state.steel_kg, outcome.n) * 1e-3)


def _outcome(heats: HeatTable, lime_kg: Array) -> Outcome:
    """One heat at each lime given."""
    name = heats.choices.lime
    table = repeated(with_masses(heats, {name: 0.0}), lime_kg.size)
    group, ask = asked(with_masses(table, {name: lime_kg}))
    return solve_heats(group, ask)


def _silicate(outcome: Outcome) -> Array:
    s = outcome.state
    slag = {oxide: np.asarray(pct) for oxide, pct in s.slag_pct.items()}
    with np.errstate(all="ignore"):
        return spread(saturation.silicate_margin_pct(slag, s.T_K), outcome.n)


def _silicate_marks(heats: HeatTable, most: float) -> dict[str, float]:
    """Lime at which dicalcium silicate comes, and at which it is gone again [kg]."""
    comes = _falls(heats, _silicate, most)
    goes = _falls(heats, lambda outcome: -_silicate(outcome), most)
    return {"silicate_comes": comes, "silicate_goes": goes}


def _falls(heats: HeatTable, margin: Callable[[Outcome], Array], most: float) -> float:
    return crossing(heats, margin, most)


LABELS = {
    "least_basicity": "least basicity reached",
    "for_aim": "phosphorus aim met",
    "dissolution_stops": "lime stops dissolving",
    "MgO_saturation": "saturated with magnesia",
    "silicate_comes": "dicalcium silicate comes out",
    "silicate_goes": "dicalcium silicate gone again",
    "in_vain": "one more kg/t gains less than 0.0001 % P",
    "least_P": "more lime only makes more slag",
}
ABSENT = {
    "least_basicity": "no lime brings the slag to the least basicity",
    "for_aim": "no aim, or no lime that dissolves meets it",
    "dissolution_stops": "all lime dissolves",
    "MgO_saturation": "the magnesia flux follows saturation, or it is not reached",
    "silicate_comes": "this slag stays free of dicalcium silicate, or holds it from the start",
    "silicate_goes": "no dicalcium silicate that goes again",
    "in_vain": "every further kilogram still gains phosphorus",
    "least_P": "end phosphorus still falls at the end of the curve",
}


def _mark(key: str, kg: float, base: HeatTable) -> LimeMark:
    if not np.isfinite(kg):
        blank = np.nan
        return LimeMark(key, LABELS[key], kg, blank, blank, blank, blank, ABSENT[key], ())
    outcome = _outcome(base, np.array([kg]))
    s = outcome.state
    numbers = [outcome.steel_pct().get("P", 0.0), s.basicity, s.slag_kg, outcome.kind_kg("scrap")]
    P, B, slag, scrap = (float(at(x, 0)) for x in numbers)
    return LimeMark(
        key, LABELS[key], kg, P, B, slag, scrap, _note(key, outcome), tuple(_terms(key, outcome))
    )


def _note(key: str, outcome: Outcome) -> str:
    beyond = {
        "dissolution_stops": "lime beyond this stays solid and does not dephosphorise",
        "MgO_saturation": "from here on the slag spares the lining",
        "silicate_comes": "the slag turns dry here; more iron oxide or MgO keeps it liquid",
        "silicate_goes": "lime and tricalcium silicate take over from here",
        "in_vain": "beyond this lime costs scrap and iron for next to nothing",
        "least_P": "beyond this end phosphorus rises with lime",
    }
    text = beyond.get(key, "")
    slag = {oxide: np.asarray(pct) for oxide, pct in outcome.state.slag_pct.items()}
    if key.startswith("silicate") and saturation.out_of_range(slag, outcome.state.T_K):
        text += "; outside the range of the marks behind it"
    return text


def _terms(key: str, outcome: Outcome) -> Iterator[Term]:
    s, values = outcome.state, outcome.heats.values
    slag = {oxide: np.asarray(pct) for oxide, pct in s.slag_pct.items()}
    if key == "least_basicity":
        least, place = values["aim_basicity"], parameters()["aim_basicity"].place
        yield Term("least CaO/SiO2", float(least[0]), "", place)
    elif key == "for_aim":
        yield Term("aim phosphorus", float(values["aim_P_pct"][0]), "%", "aim.P_pct")
        law = outcome.p.laws["phosphorus"]
        yield Term("L_P reached", float(at(s.laws["L_P"], 0)), "", phosphorus.describe(law).source)
    elif key == "dissolution_stops":
        limit = float(at(s.laws["lime_limit_pct"], 0))
        yield Term("(CaO) at which dissolution stops", limit, "%", source_of("lime"))
    elif key == "MgO_saturation":
        yield Term("(MgO) of the slag", float(at(slag["MgO"], 0)), "%", source_of("magnesia"))
    elif key.startswith("silicate"):
        B, flux = saturation.plane(slag)
        least = saturation.least_flux_pct(B, s.T_K)
        yield Term("CaO/(SiO2 + P2O5)", float(at(B, 0)), "")
        yield Term("FeO + Fe2O3 + MnO + MgO of the three", float(at(flux, 0)), "%")
        yield Term("least that keeps it liquid, +- 4", float(at(least, 0)), "%",
                   source_of("saturation"))  # fmt: skip
    else:
        gain = float(at(gain_pct_per_kg_t(outcome), 0))
        yield Term("gain of one more kg/t of lime", gain, "% P", "implicit derivative of the plan")
