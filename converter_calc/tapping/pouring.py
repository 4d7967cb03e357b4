"""The tap as a mass balance: what steel, slag, additions and air become in the ladle.

Written on arrays of n heats. What an addition loses goes to its oxide and takes oxygen, partly
from the air and partly from steel and slag; the deoxidant that kills the steel takes the rest
down to its equilibrium. Source of the method: mass balance and the equilibria of
`laws.deoxidation`; the shares are those of the practice.
"""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass, field

import numpy as np

from converter_calc.balance.problem import SHARED
from converter_calc.basis.dual import Array
from converter_calc.basis.elements import mass_fractions
from converter_calc.laws import deoxidation, manganese_silicate
from converter_calc.tapping.tap_practice import TapPractice

#: Oxide that an element forms when it is lost or binds oxygen; others stay as metal.
OXIDE = {**SHARED, "Fe": "FeO", "C": "CO"}
KILLERS = {"Al": "aluminium_oxygen", "Si": "silicon_jsps_1988"}
SILICON_LAW = "silicon_jsps_1988"
FIXED_POINT_STEPS = 40
BISECTIONS = 70
LEAST_PCT = 1e-7
#: Dissolved deoxidant under which the steel does not count as killed [mass %].
SHORT_PCT = 1e-3


@dataclass(frozen=True)
class TapCase:
    """Steel and slag of n heats at the end of the blow.

    steel_kg : (n,); steel_pct : element (oxygen too) -> mass % (n,); T_K : (n,);
    slag_pct : species -> mass % of the liquid slag (n,). killer : "Al", "Si" or "none".
    """

    steel_kg: Array
    steel_pct: Mapping[str, Array]
    T_K: Array
    slag_pct: Mapping[str, Array]
    practice: TapPractice
    killer: str

    @property
    def n(self) -> int:
        """Number of heats."""
        return int(self.steel_kg.size)

    @property
    def carried_kg(self) -> Array:
        """Slag that follows the steel [kg]."""
        return self.steel_kg * (1e-3 * self.practice.carried_slag_kg_per_t)

    def take(self, rows: Array) -> TapCase:
        """Some of the heats, by row numbers."""
        return TapCase(
            self.steel_kg[rows],
            {e: pct[rows] for e, pct in self.steel_pct.items()},
            self.T_K[rows],
            {s: pct[rows] for s, pct in self.slag_pct.items()},
            self.practice,
            self.killer,
        )


@dataclass
class Reduced:
    """Part of the carried-over slag that killed steel reduces, arrays (n,) [kg].

    taken : species that go; made : species that stay in the slag instead; metal : what enters
    the steel; oxygen : what is set free (negative: bound).
    """

    taken: dict[str, Array] = field(default_factory=dict)
    made: dict[str, Array] = field(default_factory=dict)
    metal: dict[str, Array] = field(default_factory=dict)
    oxygen: Array | float = 0.0


@dataclass
class Poured:
    """What the tap makes of the steel, arrays (n,) [kg].

    steel, slag : species in the ladle; gas : CO; undissolved : metal that an addition lost and
    that forms no oxide here; carried, added : what came in, added by addition name; air_kg :
    oxygen from the air. oxidised : element -> kg that went to its oxide, by killing
    (`killed`), as loss (`lost`) or before the killing (`first`). oxygen : terms of the oxygen
    account. entered : element -> kg that additions brought into the steel before oxidation.
    """

    steel: dict[str, Array]
    slag: dict[str, Array]
    gas: dict[str, Array]
    undissolved: dict[str, Array]
    carried: dict[str, Array]
    added: dict[str, Array]
    air_kg: Array
    killed: dict[str, Array]
    lost: dict[str, Array]
    first: dict[str, Array]
    reduced: Reduced
    oxygen: dict[str, Array]
    entered: dict[str, Array]
    short: Array

    @property
    def steel_kg(self) -> Array:
        """Steel in the ladle [kg]."""
        return sum(self.steel.values(), np.zeros_like(self.air_kg))

    @property
    def slag_kg(self) -> Array:
        """Slag in the ladle [kg]."""
        return sum(self.slag.values(), np.zeros_like(self.air_kg))

    def steel_pct(self) -> dict[str, Array]:
        """Ladle analysis [mass %]."""
        return {e: kg * (100.0 / self.steel_kg) for e, kg in self.steel.items()}

    def slag_pct(self) -> dict[str, Array]:
        """Analysis of the ladle slag [mass %]; empty where there is none."""
        with np.errstate(invalid="ignore", divide="ignore"):
            return {s: kg * (100.0 / self.slag_kg) for s, kg in self.slag.items()}


def bound_oxygen(element: str) -> float:
    """Oxygen that 1 kg of the element binds in the oxide it forms here [kg/kg]; 0 for none."""
    if element not in OXIDE:
        return 0.0
    return deoxidation.oxygen_per_kg(element, OXIDE[element])


def recovered_share(practice: TapPractice, name: str, element: str, killer: str) -> float:
    """Share of an element of an addition that reaches the steel, before it binds oxygen there.

    Aluminium that kills: all but what burns, unless the shop gives its own recovery, which
    then is the least that is lost in all.
    """
    if element == killer == "Al":
        return 1.0 if practice.aluminium_by_recovery else 1.0 - practice.Al_burnt_share
    return practice.additions[name].recovered_share(element, practice.recovery)


def reduced_slag(case: TapCase) -> Reduced:
    """What killed steel takes out of the carried-over slag; nothing from unkilled steel."""
    practice, found = case.practice, Reduced()
    if case.killer == "none":
        return found
    shares = {
        "FeO": practice.slag_FeO_reduced_share,
        "Fe2O3": practice.slag_FeO_reduced_share,
        "MnO": practice.slag_MnO_reduced_share,
        "P2O5": practice.P_return_share,
    }
    for oxide, share in shares.items():
        if oxide not in case.slag_pct:
            continue
        kg = case.carried_kg * case.slag_pct[oxide] * (0.01 * share)
        found.taken[oxide] = kg
        for element, part in mass_fractions(oxide).items():
            if element == "O":
                found.oxygen = found.oxygen + kg * part
            else:
                found.metal[element] = found.metal.get(element, 0.0) + kg * part
    if "CaS" in case.slag_pct:  # CaS + [O] = CaO + [S]
        kg = case.carried_kg * case.slag_pct["CaS"] * (0.01 * practice.S_return_share)
        sulphur, lime = mass_fractions("CaS")["S"], mass_fractions("CaO")["O"]
        calcium = kg * (1.0 - sulphur)
        found.taken["CaS"] = kg
        found.made["CaO"] = calcium / (1.0 - lime)
        found.metal["S"] = kg * sulphur
        found.oxygen = found.oxygen - calcium * lime / (1.0 - lime)
    return found


def pour(case: TapCase, added: Mapping[str, Array], T_K: Array) -> Poured:
    """Steel, slag and gas in the ladle.

    Parameters
    ----------
    case : steel and slag at the end of the blow.
    added : addition -> kg, (n,).
    T_K : temperature at which the killed steel and its oxide are in equilibrium [K], (n,).

    Returns
    -------
    Poured; `short` is True where the deoxidant did not suffice to kill the steel.
    """
    practice, killer, n = case.practice, case.killer, case.n
    steel = {e: case.steel_kg * (pct * 0.01) for e, pct in case.steel_pct.items()}
    zero = np.zeros(n)
    oxygen = {"dissolved at the end of the blow": steel.pop("O", zero)}
    slag = {s: case.carried_kg * (pct * 0.01) for s, pct in case.slag_pct.items()}
    carried = dict(slag)
    reduced = reduced_slag(case)
    for species, kg in reduced.taken.items():
        slag[species] = slag[species] - kg
    _add(slag, reduced.made)
    _add(steel, reduced.metal)
    oxygen["from the carried-over slag"] = zero + reduced.oxygen
    air = case.steel_kg * (1e-3 * practice.air_oxygen_kg_per_t)
    oxygen["from the air"] = air

    entered, lost, burnt = _enter(practice, added, killer, slag, zero)
    _add(steel, entered)
    to_air, by_bath = practice.loss_to_air_share, zero
    for element, kg in lost.items():
        by_bath = by_bath + kg * (bound_oxygen(element) * (1.0 - to_air))
        air = air + kg * (bound_oxygen(element) * to_air)
    oxygen["bound by losses of additions"] = -by_bath
    if burnt.any():
        lost["Al"] = lost.get("Al", zero) + burnt
        air = air + burnt * bound_oxygen("Al")
    first = _first(practice, steel, entered, oxygen["dissolved at the end of the blow"])
    for element, kg in first.items():
        steel[element] = steel[element] - kg
        oxygen[f"bound by {element} before the killing"] = -kg * bound_oxygen(element)

    left = sum(oxygen.values(), zero)
    floor = zero
    if killer == "Al" and practice.aluminium_by_recovery:
        floor = sum(
            (
                kg * (practice.additions[name].pct.get("Al", 0.0) * 0.01
                      * (1.0 - practice.recovery.get("Al", 1.0)))
                for name, kg in added.items()
            ),
            zero,
        )  # fmt: skip
    killed_kg, stays, short = _kill(case, steel, left, floor, T_K)
    killed = {killer: killed_kg} if killer != "none" else {}
    if killed:
        steel[killer] = steel[killer] - killed_kg
        oxygen[f"bound by {killer}"] = -killed_kg * bound_oxygen(killer)
    balance = sum(oxygen.values(), zero) - stays
    oxygen["more from the air"] = np.maximum(-balance, 0.0)
    air = air + oxygen["more from the air"]
    steel["O"] = stays

    gas, undissolved = {"CO": zero}, dict[str, Array]()
    for part in (lost, first, killed):
        for element, kg in part.items():
            if element not in OXIDE:
                undissolved[element] = undissolved.get(element, zero) + kg
                continue
            into = gas if element == "C" else slag
            oxide = OXIDE[element]
            into[oxide] = into.get(oxide, zero) + kg * (1.0 + bound_oxygen(element))
    return Poured(
        steel, slag, gas, undissolved, carried, dict(added), air, killed, lost, first, reduced,
        oxygen, entered, short,
    )  # fmt: skip


def _add(into: dict[str, Array], more: Mapping[str, Array]) -> None:
    for name, kg in more.items():
        into[name] = into[name] + kg if name in into else kg


def _enter(
    practice: TapPractice,
    added: Mapping[str, Array],
    killer: str,
    slag: dict[str, Array],
    zero: Array,
) -> tuple[dict[str, Array], dict[str, Array], Array]:
    """What enters the steel and what is lost, by element; oxides go to `slag`; aluminium burnt."""
    entered: dict[str, Array] = {}
    lost: dict[str, Array] = {}
    burnt = zero
    for name, kg in added.items():
        addition = practice.additions[name]
        for element, pct in addition.elements_pct().items():
            amount = kg * (pct * 0.01)
            share = recovered_share(practice, name, element, killer)
            entered[element] = entered.get(element, zero) + amount * share
            if element == killer == "Al":
                burnt = burnt + amount * (1.0 - share)
            elif share < 1.0:
                lost[element] = lost.get(element, zero) + amount * (1.0 - share)
        _add(slag, {oxide: kg * (pct * 0.01) for oxide, pct in addition.all_oxides_pct().items()})
    return entered, lost, burnt


def _first(
    practice: TapPractice,
    steel: Mapping[str, Array],
    entered: Mapping[str, Array],
    dissolved: Array,
) -> dict[str, Array]:
    """Kilograms of C, Si and Mn that take up their share of the dissolved oxygen first."""
    found = {}
    for element, share in practice.first_oxygen_share.items():
        if share <= 0.0:
            continue
        at_hand = steel[element] if element == "C" else entered.get(element)
        if at_hand is not None:
            found[element] = np.minimum(dissolved * (share / bound_oxygen(element)), at_hand)
    return found


def _kill(
    case: TapCase, steel: Mapping[str, Array], left: Array, floor: Array, T_K: Array
) -> tuple[Array, Array, Array]:
    """Deoxidant oxidised [kg], oxygen that stays dissolved [kg], where the deoxidant runs short.

    Solves s = (available - (oxygen left - equilibrium oxygen(s)) / bound) / steel for the
    dissolved content s: a contraction where steel is properly killed, else by bisection.
    """
    zero = np.zeros(case.n)
    mass = sum(steel.values(), zero)
    if case.killer == "none" or case.killer not in steel:
        return zero, np.maximum(left, 0.0), zero > 1.0
    at_hand, bound = steel[case.killer], bound_oxygen(case.killer)
    available = 100.0 * at_hand / mass
    others = {e: 100.0 * kg / mass for e, kg in steel.items() if e != case.killer}

    def leaves(s: Array) -> tuple[Array, Array]:
        stays = equilibrium_oxygen_pct(case, s, T_K, others) * mass * 0.01
        oxidised = np.maximum(np.maximum(left - stays, 0.0) / bound, floor)
        return 100.0 * (at_hand - oxidised) / mass, stays

    s = np.maximum(available - 100.0 * np.maximum(left / bound, floor) / mass, 1e-3)
    settled = np.zeros(case.n, dtype=bool)
    for _ in range(FIXED_POINT_STEPS):
        new, _ = leaves(s)
        settled = np.abs(new - s) <= 1e-15
        s = np.maximum(new, LEAST_PCT)
        if settled.all():
            break
    if not settled.all():
        low, high = np.full(case.n, LEAST_PCT), np.maximum(available, 2.0 * LEAST_PCT)
        for _ in range(BISECTIONS):
            middle = np.sqrt(low * high)
            above = leaves(middle)[0] < middle
            high, low = np.where(above, middle, high), np.where(above, low, middle)
        s = np.where(settled, s, high)
    _, stays = leaves(s)
    oxidised = np.minimum(np.maximum(np.maximum(left - stays, 0.0) / bound, floor), at_hand)
    # never less than what is left, so that the oxygen closes; the air makes up for more
    return oxidised, np.maximum(stays, left - oxidised * bound), s < SHORT_PCT


def equilibrium_oxygen_pct(
    case: TapCase, killer_pct: Array, T_K: Array, others: Mapping[str, Array]
) -> Array:
    """Oxygen in equilibrium with the deoxidant that kills the steel [mass %], (n,)."""
    law = case.practice.aluminium_oxygen if case.killer == "Al" else SILICON_LAW
    pct = np.maximum(killer_pct, LEAST_PCT)
    activity: float | Array = 1.0
    if case.killer == "Si":
        activity = case.practice.silica_activity
        if np.isnan(activity):
            manganese = np.maximum(others.get("Mn", np.zeros(case.n)), LEAST_PCT)
            activity = manganese_silicate.silica_activity(pct, manganese, T_K, others)
    found = deoxidation.dissolved_oxygen_pct(law, pct, T_K, others, activity)
    return np.asarray(found, dtype=float)
