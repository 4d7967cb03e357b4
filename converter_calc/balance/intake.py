"""What goes in, as far as it is given and as far as it is unknown."""

from __future__ import annotations

from collections.abc import Mapping

from converter_calc.balance.charge import Content, add_returned
from converter_calc.balance.problem import Problem, given_totals
from converter_calc.balance.state import State
from converter_calc.basis import dual as ad
from converter_calc.basis.dual import Num
from converter_calc.basis.elements import molar_mass
from converter_calc.basis.units import NM3_MOL, ZERO_C_K
from converter_calc.thermo.enthalpy import enthalpy_J_kg


def add_charge(p: Problem, x: Mapping[str, Num], s: State) -> None:
    """Masses charged and their totals: the part that is given, then what is unknown."""
    given = p.values
    free_hot_metal, free_oxygen = "hot_metal_kg" in x, "oxygen_Nm3" in x
    base = given_charge(p, hot_metal=not free_hot_metal, oxygen=not free_oxygen)
    s.charged_kg, s.totals = dict(base.charged_kg), base.totals.copy()
    s.hot_metal_kg = x["hot_metal_kg"] if free_hot_metal else given["hot_metal_kg"]
    if free_hot_metal:
        _add_hot_metal(p, s)
    s.scrap_free_kg = base.scrap_free_kg
    scrap = x.get("scrap_kg")
    if scrap is None and free_hot_metal:
        scrap = _given_scrap(p, s)
    if scrap is not None:
        _add_scrap(p, scrap, s)
    if "lime_kg" in x:
        _add(p, s, p.roles["lime"], x["lime_kg"])
    if "flux_kg" in x:
        _add(p, s, p.roles["magnesia_flux"], x["flux_kg"])
    if "trim_kg" in x:
        trim = x["trim_kg"]
        short = ad.value(trim) < 0.0
        _add(p, s, p.roles["coolant"], ad.where(short, 0.0, trim))
        _add(p, s, p.roles["fuel"], ad.where(short, -trim, 0.0))
    per_t = given["lining_wear_kg_per_t"] * 1e-3
    _add(p, s, "lining", p.pinned("lining_wear_kg", lambda: s.steel_kg * per_t))
    s.stirring_kg = base.stirring_kg
    s.oxygen_kg, s.oxygen_Nm3 = base.oxygen_kg, given.get("oxygen_Nm3")
    if free_oxygen:
        s.oxygen_kg, s.oxygen_Nm3 = {}, x["oxygen_Nm3"]
        _add_oxygen(p, s)


def given_charge(p: Problem, *, hot_metal: bool, oxygen: bool) -> State:
    """What is charged whatever the unknowns are; worked out once for each set of heats.

    hot_metal, oxygen : whether these are given.
    """
    key = (hot_metal, oxygen)
    if key in p.cache:
        found: State = p.cache[key]
        return found
    s = State()
    s.totals = given_totals(p)
    s.charged_kg = dict(p.fixed)
    add_returned(s.totals, p.returned)
    if "retained_slag_kg" in p.values:
        _add(p, s, "retained_slag", p.values["retained_slag_kg"])
    if hot_metal:
        s.hot_metal_kg = p.values["hot_metal_kg"]
        _add_hot_metal(p, s)
        scrap = _given_scrap(p, s)
        if scrap is not None:
            _add_scrap(p, scrap, s)
    if oxygen:
        s.oxygen_Nm3 = p.values["oxygen_Nm3"]
        _add_oxygen(p, s)
    if "stirring_gas_Nm3" in p.values:
        argon = p.values["stirring_argon_pct"] * 0.01
        for gas, share in {"Ar": argon, "N2": 1.0 - argon}.items():
            volume = _where_given(p, "stirring_gas_Nm3", p.values["stirring_gas_Nm3"], 0.0)
            s.stirring_kg[gas] = volume * share * (NM3_MOL * molar_mass(gas) * 1e-3)
            s.totals.add_element(gas.rstrip("2"), s.stirring_kg[gas])
    p.cache[key] = s
    return s


def _add(p: Problem, s: State, name: str, kg: Num) -> None:
    have = s.charged_kg.get(name)
    s.charged_kg[name] = kg if have is None else have + kg
    s.totals.add(kg, p.contents[name])


def _add_hot_metal(p: Problem, s: State) -> None:
    """Hot metal, and the slag that comes with it."""
    for element, pct in p.hot_metal_pct.items():
        s.totals.add_element(element, s.hot_metal_kg * (pct * 0.01))
    s.totals.enthalpy_J = s.totals.enthalpy_J + s.hot_metal_kg * p.hot_metal_J_kg
    _add(p, s, "carryover_slag", s.hot_metal_kg * (p.values["carryover_slag_pct"] * 0.01))


def _given_scrap(p: Problem, s: State) -> Num:
    """Scrap that is given by total or by share [kg]; None where there is none."""
    scrap: Num = None
    if "scrap_kg" in p.values:
        scrap = _where_given(p, "scrap_kg", p.values["scrap_kg"], 0.0)
    if "scrap_share_pct" in p.values:
        share = p.values["scrap_share_pct"] * 0.01
        by_share = p.read("hot_metal", s.hot_metal_kg) * (share / (1.0 - share))
        scrap = _where_given(p, "scrap_share_pct", by_share, 0.0 if scrap is None else scrap)
    return scrap


def _add_scrap(p: Problem, scrap: Num, s: State) -> None:
    """Free scrap as weighed: as one mix, or filled up in the order of preference to each stock."""
    plan = p.roles["scrap"]
    if plan is None:
        return
    s.scrap_free_kg = scrap
    if not isinstance(plan, list):
        _add_mix(p, scrap, plan, s)
        return
    below = 0.0
    for place, (name, stock) in enumerate(plan):
        part = scrap - below
        if place > 0:
            part = ad.where(ad.value(part) > 0.0, part, 0.0)
        if place < len(plan) - 1:
            part = ad.where(ad.value(part) < stock, part, stock)
        true = p.truth(name)
        _add(p, s, name, part if true is None else part * true)
        below += stock


def _add_mix(p: Problem, scrap: Num, mixed: Content, s: State) -> None:
    """A mix by shares as weighed; where some of it is not what it weighs, kind by kind."""
    true = {name: p.truth(name) for name in p.roles["scrap_mix"]}
    if all(share is None for share in true.values()):
        s.totals.add(scrap, mixed)
        return
    for name, share in p.roles["scrap_mix"].items():
        kg = scrap * share
        s.totals.add(kg if true[name] is None else kg * true[name], p.contents[name])


def _add_oxygen(p: Problem, s: State) -> None:
    """Blown oxygen with its argon and nitrogen."""
    totals = s.totals
    for gas, (kg_per_Nm3, J_per_Nm3) in oxygen_content(p).items():
        s.oxygen_kg[gas] = s.oxygen_Nm3 * kg_per_Nm3
        totals.add_element("O" if gas == "O2" else gas.rstrip("2"), s.oxygen_kg[gas])
        totals.enthalpy_J = totals.enthalpy_J + s.oxygen_Nm3 * J_per_Nm3


def oxygen_content(p: Problem) -> dict[str, tuple[Num, Num]]:
    """Kg and J that one Nm3 of the blown oxygen brings, by gas."""
    if "oxygen" in p.cache:
        found: dict[str, tuple[Num, Num]] = p.cache["oxygen"]
        return found
    given = p.values
    purity = given["oxygen_purity_pct"] * 0.01
    argon = given["oxygen_impurity_argon_pct"] * 0.01
    shares = {"O2": purity, "Ar": (1.0 - purity) * argon, "N2": (1.0 - purity) * (1.0 - argon)}
    temp_K = given["oxygen_temp_C"] + ZERO_C_K
    content = {}
    for gas, share in shares.items():
        kg = share * (NM3_MOL * molar_mass(gas) * 1e-3)
        content[gas] = (kg, kg * enthalpy_J_kg(gas, temp_K))
    p.cache["oxygen"] = content
    return content


def _where_given(p: Problem, name: str, yes: Num, no: Num) -> Num:
    return yes if p.mask(name) is True else ad.where(p.mask(name), yes, no)
