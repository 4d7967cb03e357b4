"""People and instruments of the invented vessel: from the ladle to the line in the log.

What happens and when is told in `make_log.py`; what the vessel does in `blow_model.py`.
"""

from __future__ import annotations

import math
from dataclasses import dataclass, field
from datetime import UTC, datetime
from statistics import NormalDist
from typing import Any

import numpy as np
from blow_model import (
    SCRAP_YIELD,
    Bath,
    Charge,
    Vessel,
    charged,
    dissolved_oxygen_ppm,
    settle,
    step,
)

#: Heats and first tap of each turn.
TURNS = (
    (540, datetime(2026, 1, 5, 6, 40, tzinfo=UTC)),
    (500, datetime(2026, 3, 2, 7, 10, tzinfo=UTC)),
    (10**9, datetime(2026, 6, 8, 6, 55, tzinfo=UTC)),
)
RECALIBRATED = datetime(2026, 1, 19, 6, 0, tzinfo=UTC)
NEW_DESIGN = datetime(2026, 3, 14, tzinfo=UTC)
NEW_SUPPLIER = datetime(2026, 6, 17, tzinfo=UTC)
LANCE_LIFE = 260
NM3_PER_MIN = 650.0
RELINED_TURN = 1

#: Grade: share of heats, aim temperature, carbon and phosphorus.
GRADES = {
    "S235JR": (0.24, 1662.0, 0.055, 0.018),
    "DC01": (0.22, 1668.0, 0.042, 0.014),
    "DC04": (0.16, 1676.0, 0.035, 0.012),
    "S355JR": (0.18, 1657.0, 0.050, 0.016),
    "DX51D": (0.12, 1670.0, 0.040, 0.014),
    "B500B": (0.08, 1650.0, 0.070, 0.022),
}
#: One standard deviation of a reading: (part of it, fixed).
NOISE = {
    "hot_metal_kg": (0.004, 0.0),
    "hot_metal_temp_C": (0.0, 7.0),
    "hm_C_pct": (0.0, 0.05),
    "hm_Si_pct": (0.0, 0.018),
    "hm_Mn_pct": (0.0, 0.008),
    "hm_P_pct": (0.0, 0.0015),
    "hm_S_pct": (0.0, 0.0006),
    "hm_Ti_pct": (0.0, 0.003),
    "hm_V_pct": (0.0, 0.0015),
    "hm_Cr_pct": (0.0, 0.002),
    "scrap": (0.012, 0.0),
    "flux": (0.008, 0.0),
    "oxygen_Nm3": (0.007, 0.0),
    "end_temp_C": (0.0, 3.0),
    "end_C_pct": (0.03, 0.001),
    "end_Mn_pct": (0.02, 0.001),
    "end_P_pct": (0.03, 0.0002),
    "end_S_pct": (0.04, 0.0003),
    "end_O_ppm": (0.04, 8.0),
    "slag": (0.018, 0.03),
    "steel_kg": (0.005, 0.0),
}
#: Share of heats on which a reading is missing; slag stands for its whole analysis.
MISSING = {
    "slag": 0.33,
    "end_O_ppm": 0.5,
    "hm_Cr_pct": 0.3,
    "hm_V_pct": 0.06,
    "hm_Ti_pct": 0.04,
    "end_S_pct": 0.03,
    "end_Mn_pct": 0.02,
    "end_P_pct": 0.01,
    "end_C_pct": 0.006,
    "steel_kg": 0.03,
    "hot_metal_temp_C": 0.008,
    "hm_C_pct": 0.005,
    "wait_min": 0.01,
}
ELEMENTS = ("C", "Si", "Mn", "P", "S", "Ti", "V", "Cr")
SLAG = ("CaO", "SiO2", "MgO", "FeO", "MnO", "P2O5", "Al2O3")
SCRAPS = ("heavy_scrap", "shop_scrap", "galvanised_bundles", "light_scrap", "ladle_skulls")
FLUXES = ("burnt_lime", "dolomitic_lime", "lump_ore", "ferrosilicon_75")
#: Column and the decimals with which the shop writes it.
DECIMALS = {
    "hot_metal_kg": -2, "hot_metal_temp_C": 0, "hm_C_pct": 2, "hm_Si_pct": 3, "hm_Mn_pct": 3,
    "hm_P_pct": 4, "hm_S_pct": 4, "hm_Ti_pct": 3, "hm_V_pct": 3, "hm_Cr_pct": 3,
    **{f"{kind}_kg": -1 for kind in (*SCRAPS, *FLUXES)},
    "oxygen_Nm3": 0, "wait_min": 0, "blow_min": 1,
    "aim_temp_C": 0, "aim_C_pct": 3, "aim_P_pct": 3,
    "end_temp_C": 0, "end_C_pct": 4, "end_Mn_pct": 3, "end_P_pct": 4, "end_S_pct": 4,
    "end_O_ppm": 0, **{f"slag_{oxide}_pct": 2 for oxide in SLAG}, "steel_kg": -2,
}  # fmt: skip
COLUMNS = ("heat_id", "tapped_at", "vessel", "grade", *DECIMALS)

#: One line of the log by column.
Row = dict[str, Any]


class Draw:
    """Random numbers of one heat."""

    def __init__(self, seed: int, heat: int, stream: int = 0) -> None:
        self._rng = np.random.Generator(np.random.PCG64([seed, heat, stream]))

    def uniform(self) -> float:
        """Even between 0 and 1."""
        return float(self._rng.random())

    def normal(self, mean: float = 0.0, sd: float = 1.0) -> float:
        """Normal, cut at about 4 standard deviations."""
        return mean + sd * NormalDist().inv_cdf(min(max(self.uniform(), 3e-5), 1.0 - 3e-5))

    def choice(self, shares: dict[str, float]) -> str:
        """One name by its share."""
        left = self.uniform() * sum(shares.values())
        for name, share in shares.items():
            left -= share
            if left <= 0.0:
                return name
        return next(reversed(shares))


@dataclass
class Shop:
    """What the shop carries from heat to heat."""

    vessel: Vessel
    when: datetime
    heat: int = 0
    turn: int = 0
    turn_heat: int = 0
    silicon: float = 0.0  # of the blast furnace, against its mean
    furnace_temp: float = 0.0
    lean_K: float = 0.0  # how much hotter than aimed the last heats came out
    lean_oxygen: float = 0.0
    expected: dict[str, float] = field(default_factory=lambda: {"temp": 1345.0, "Si": 0.46})


def hot_metal(shop: Shop, draw: Draw) -> tuple[float, float, dict[str, float]]:
    """True weight, temperature and analysis of the next ladle."""
    shop.silicon = 0.86 * shop.silicon + draw.normal(0.0, 0.045)
    shop.furnace_temp = 0.7 * shop.furnace_temp + draw.normal(0.0, 8.0)
    Si = max(0.46 + shop.silicon + draw.normal(0.0, 0.03), 0.16)
    temp = 1344.0 + shop.furnace_temp + 70.0 * shop.silicon + draw.normal(0.0, 9.0)
    C = 4.62 - 0.30 * (Si - 0.46) + 0.0016 * (temp - 1344.0) + draw.normal(0.0, 0.04)
    pct = {
        "C": C,
        "Si": Si,
        "Mn": 0.33 + 0.12 * (Si - 0.46) + draw.normal(0.0, 0.03),
        "P": 0.083 + draw.normal(0.0, 0.006),
        "S": max(0.009 + draw.normal(0.0, 0.003), 0.002),
        "Ti": max(0.05 + 0.09 * (Si - 0.46) + draw.normal(0.0, 0.008), 0.01),
        "V": max(0.020 + draw.normal(0.0, 0.003), 0.005),
        "Cr": max(0.022 + draw.normal(0.0, 0.004), 0.005),
    }
    return 185000.0 + draw.normal(0.0, 3200.0), temp, pct


def scrap_box(shop: Shop, aim_temp: float, crew: int, draw: Draw) -> dict[str, float]:
    """Scrap that the crane weighs in, made up from what the last ladles were like."""
    heat = 0.70 * (shop.expected["temp"] - 1345.0) + 118.0 * (shop.expected["Si"] - 0.46)
    heat += 0.8 * shop.lean_K - (aim_temp - 1665.0)
    total = 42500.0 + 1000.0 * heat / 8.0 + (0.0, 600.0, -500.0, 0.0)[crew]
    total = min(max(round(total / 500.0) * 500.0, 30000.0), 62000.0)
    shares = {"heavy_scrap": 0.48, "shop_scrap": 0.28, "galvanised_bundles": 0.24}
    if draw.uniform() < 0.55:  # the yard mixes in old thin scrap as it comes
        part = 0.10 + 0.25 * draw.uniform()
        shares = {name: share * (1.0 - part) for name, share in shares.items()}
        shares["light_scrap"] = part
    if draw.uniform() < 0.18:
        shares["ladle_skulls"] = 0.05
        shares["heavy_scrap"] -= 0.05
    box = dict.fromkeys(SCRAPS, 0.0)
    for name, share in shares.items():
        lifts = round(share * total / 1250.0 + draw.normal(0.0, 0.5))
        if lifts > 0:
            box[name] = lifts * 1250.0 + draw.normal(0.0, 160.0)
    return box


def fluxes(log: Row, scrap_kg: float, shop: Shop, crew: int, wait_min: float) -> dict[str, float]:
    """Lime, dolomite, and ore or ferrosilicon, by rules of thumb on what the log says."""
    kg, Si = log["hot_metal_kg"], log["hm_Si_pct"]
    silica = kg * Si / 100.0 * 2.14 + 0.004 * kg * 0.36 + 0.006 * scrap_kg
    tight = 1.0 + 12.0 * max(0.016 - log["aim_P_pct"], 0.0)
    dolomite = round(3100.0 * (0.5 + 0.5 * Si / 0.46), -2)
    lime = (3.25 * tight * silica - 0.57 * dolomite) / 0.86 + (0.0, 0.0, 150.0, -100.0)[crew]
    spare = 0.72 * (log["hot_metal_temp_C"] - 1345.0) + 118.0 * (Si - 0.46)
    spare += 105.0 * (log["hm_C_pct"] - 4.62) * 0.8
    spare -= 7.8 * (scrap_kg - 42500.0 * kg / 185000.0) / 1000.0
    spare -= log["aim_temp_C"] - 1665.0 + 0.25 * min(wait_min - 30.0, 60.0)
    spare += shop.lean_K + (2.0, -2.0, 3.0, 0.0)[crew] + 34.0
    ore = max(round(spare / 24.0 * 2.0) * 500.0, 0.0)
    silicon = max(round(-spare / 14.0) * 200.0, 0.0) if spare < -8.0 else 0.0
    return {
        "burnt_lime": max(round(lime, -2), 3000.0),
        "dolomitic_lime": dolomite,
        "lump_ore": min(ore, 6000.0),
        "ferrosilicon_75": min(silicon, 1200.0),
    }


def planned_oxygen(log: Row, scrap_kg: float, flux: dict[str, float], shop: Shop) -> float:
    """Oxygen by rule of thumb [Nm3]."""
    kg = log["hot_metal_kg"] / 1000.0
    oxygen = kg * (8.95 * log["hm_C_pct"] + 9.2 * log["hm_Si_pct"] + 5.8)
    oxygen += 0.014 * scrap_kg - 0.185 * flux["lump_ore"] + 0.75 * flux["ferrosilicon_75"]
    oxygen += 300.0 * math.log(0.045 / log["aim_C_pct"])
    return float(oxygen + shop.lean_oxygen)


def blow(
    bath: Bath, charge: Charge, shop: Shop, plan_Nm3: float, aim_C: float, flame: float
) -> tuple[float, float]:
    """Blow until the flame says so; (oxygen truly blown [Nm3], minutes)."""
    oxygen = minutes = 0.0
    while oxygen < 1.035 * plan_Nm3:
        carbon = bath.pct("C")
        if oxygen > 0.965 * plan_Nm3 and carbon * flame <= aim_C:
            break
        short = 0.25 if carbon > 0.45 else 0.05
        step(bath, charge, shop.vessel, NM3_PER_MIN * short, short)
        oxygen, minutes = oxygen + NM3_PER_MIN * short, minutes + short
    settle(bath, charge)
    return oxygen, minutes


def correct(
    bath: Bath, charge: Charge, shop: Shop, log: Row, draw: Draw
) -> tuple[float, float, float, float]:
    """Blow again or cool; (oxygen, minutes, lime, ore) added."""
    reads = bath.temp_C + draw.normal(0.0, 3.0)
    aim, aim_P = log["aim_temp_C"], log["aim_P_pct"]
    P = bath.pct("P") * (1.0 + draw.normal(0.0, 0.03))
    if reads < aim - 20.0 or aim_P + 0.002 < P:
        lime = 600.0 if aim_P + 0.002 < P else 0.0
        wanted = min(max((aim - 4.0 - reads) / 0.075, 120.0), 450.0)
        oxygen = round(wanted / 50.0) * 50.0
        bath.lime_kg += lime
        minutes = oxygen / NM3_PER_MIN
        pieces = max(round(minutes / 0.05), 1)
        for _ in range(pieces):
            step(bath, charge, shop.vessel, oxygen / pieces, minutes / pieces)
        settle(bath, charge)
        shop.vessel.wait(6.0)
        return oxygen, minutes, lime, 0.0
    if reads > aim + 23.0:
        ore = min(round((reads - aim - 6.0) / 22.0 * 2.0) * 500.0, 1500.0)
        bath.slag["FeO"] += 0.85 * ore
        bath.warm(-3.1 * ore)
        # some of it burns carbon
        bath.metal["C"] *= 1.0 - 0.08 * ore / 1000.0
        return 0.0, 0.0, 0.0, ore
    return 0.0, 0.0, 0.0, 0.0


def read(name: str, truth: float, draw: Draw, kind: str = "") -> float:
    """An instrument reads a true value."""
    part, fixed = NOISE[kind or name]
    return max(truth * (1.0 + part * draw.normal()) + fixed * draw.normal(), 0.0)


def one_heat(shop: Shop, draw: Draw, wait_min: float | None) -> Row:
    """One heat from ladle to tap, as the log has it."""
    grade = draw.choice({name: row[0] for name, row in GRADES.items()})
    _, aim_temp, aim_C, aim_P = GRADES[grade]
    aim_temp += round(draw.normal(0.0, 4.0))
    crew = (shop.when.toordinal() * 3 + shop.when.hour // 8) % 4
    hm_kg, hm_temp, hm_pct = hot_metal(shop, draw)
    log: Row = {"vessel": "2", "grade": grade, "wait_min": wait_min}
    log |= {"aim_temp_C": aim_temp, "aim_C_pct": aim_C, "aim_P_pct": aim_P}
    log["hot_metal_kg"] = read("hot_metal_kg", hm_kg, draw)
    wrong_K = 11.0 if shop.when < RECALIBRATED else 0.0
    log["hot_metal_temp_C"] = read("hot_metal_temp_C", hm_temp, draw) + wrong_K
    for el in ELEMENTS:
        log[f"hm_{el}_pct"] = read(f"hm_{el}_pct", hm_pct[el], draw)

    box = scrap_box(shop, aim_temp, crew, draw)
    shown = {name: read("", kg, draw, "scrap") for name, kg in box.items()}
    waited = 40.0 if wait_min is None else wait_min
    flux = fluxes(log, sum(shown.values()), shop, crew, waited)
    worse = {"light_scrap": 0.06 if shop.when >= NEW_SUPPLIER else 0.0}
    common = draw.normal(0.0, 0.006)
    good = {
        name: min(SCRAP_YIELD[name] - worse.get(name, 0.0) + common + draw.normal(0.0, 0.01), 0.998)
        for name in SCRAPS
    }
    true = {name: read("", kg, draw, "flux") for name, kg in flux.items()}
    charge = Charge(
        hm_kg, hm_temp, {el: hm_pct[el] for el in ELEMENTS if el != "Cr"}, box, good,
        true["burnt_lime"], true["dolomitic_lime"], true["lump_ore"], true["ferrosilicon_75"],
        max(draw.normal(0.45, 0.12), 0.05), draw.normal(0.905, 0.008),
        draw.normal(0.9965, 0.006), draw.normal(0.0, 0.035), math.exp(draw.normal(0.0, 0.10)),
    )  # fmt: skip
    bath = charged(charge)
    meter = 1.0 + 0.015 * min(shop.heat / 1500.0, 1.2)
    plan = planned_oxygen(log, sum(shown.values()), flux, shop)
    flame = math.exp(draw.normal((0.0, 0.0, 0.06, -0.04)[crew], 0.20))
    blown, minutes = blow(bath, charge, shop, plan / meter, aim_C, flame)
    again, more_min, lime, ore = correct(bath, charge, shop, log, draw)
    flux["burnt_lime"] += lime
    flux["lump_ore"] += ore
    log |= {f"{name}_kg": shown[name] for name in SCRAPS}
    log |= {f"{name}_kg": flux[name] for name in FLUXES}
    log["oxygen_Nm3"] = read("oxygen_Nm3", (blown + again) * meter, draw)
    log["blow_min"] = minutes + more_min
    _ends(log, bath, shop.vessel, draw)
    _learn(shop, log, plan, again)
    return log


def _ends(log: Row, bath: Bath, vessel: Vessel, draw: Draw) -> None:
    """Readings at the end of the blow."""
    bath.temp_C += draw.normal(0.0, 5.5)  # what nobody knows
    log["end_temp_C"] = read("end_temp_C", bath.temp_C, draw)
    for el in ("C", "Mn", "P", "S"):
        log[f"end_{el}_pct"] = read(f"end_{el}_pct", bath.pct(el), draw)
    log["end_O_ppm"] = read("end_O_ppm", dissolved_oxygen_ppm(bath, vessel), draw)
    # the spoon brings up a little lime that has not dissolved; oxides not analysed are 1.5 %
    seen = dict(bath.slag)
    seen["CaO"] += 0.3 * 0.9 * bath.lime_kg
    whole = sum(seen.values()) * 1.015 + 0.035 * seen["FeO"]
    for oxide in SLAG:
        log[f"slag_{oxide}_pct"] = read("", 100.0 * seen[oxide] / whole, draw, "slag")
    droplets = 0.05 * bath.slag_kg() * (0.8 + 0.4 * draw.uniform())
    log["steel_kg"] = read("steel_kg", bath.metal_kg() - droplets, draw)


def _learn(shop: Shop, log: Row, plan_Nm3: float, again_Nm3: float) -> None:
    """The operator leans against what the last heats did."""
    miss = min(max(log["end_temp_C"] - log["aim_temp_C"], -25.0), 25.0)
    shop.lean_K = min(max(shop.lean_K + 0.16 * miss, -40.0), 40.0)
    off = log["oxygen_Nm3"] - again_Nm3 - plan_Nm3
    shop.lean_oxygen += 0.15 * min(max(off, -250.0), 250.0)
    temp, Si = log["hot_metal_temp_C"], log["hm_Si_pct"]
    shop.expected["temp"] += 0.3 * (temp - shop.expected["temp"])
    shop.expected["Si"] += 0.3 * (Si - shop.expected["Si"])


def next_wait(shop: Shop, draw: Draw) -> float | None:
    """Let the vessel wait for its next heat; None for the first of a turn."""
    vessel = shop.vessel
    size = TURNS[shop.turn][0]
    first = shop.turn_heat >= size or shop.heat == 0
    if first:
        if shop.heat:
            shop.turn, shop.turn_heat = shop.turn + 1, 0
        if shop.turn == RELINED_TURN:
            vessel.age = 0
        shop.when = TURNS[shop.turn][1]
        vessel.wall_temp_C = 1090.0
        return None
    wait = round(14.0 + 22.0 * -math.log(1.0 - 0.985 * draw.uniform()) * 0.8)
    if draw.uniform() < 0.03:
        wait += round(40.0 + 180.0 * draw.uniform())  # a caster or crane was down
    vessel.wait(7.0)  # tapping, slagging off
    vessel.wait(float(wait), burner=wait > 120)
    return float(wait)


def change_lance(shop: Shop) -> None:
    """A new lance on its day, or when the old one is worn."""
    vessel = shop.vessel
    worn = vessel.lance_age >= LANCE_LIFE
    design = int(shop.when >= NEW_DESIGN)
    if worn or design != vessel.lance_kind:
        vessel.lance_age, vessel.lance_kind = 0, design
