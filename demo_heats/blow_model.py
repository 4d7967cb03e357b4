"""How an invented vessel behaves: the truth behind the demo log.

It is built unlike the calculator on purpose, and imports nothing of it, so that the demo does
not flatter the calculator: where that solves one balance at the end of the blow, this follows
the blow step by step and never balances anything.

- oxygen is shared out by rule: silicon, titanium and vanadium first; then carbon takes what
  comes; below a critical carbon its share falls off exponentially, and what it leaves goes in
  part to iron. So iron oxide at the end follows the oxygen blown below critical carbon, not a
  curve over carbon;
- phosphorus, manganese and sulphur move towards a partition at a rate, and revert when the
  slag falls poor in iron oxide; the phosphorus partition is a mean of two published laws
  (Healy 1970, Suito and Inoue 1984, both from memory), flattened and scaled down;
- the bath warms by constant heats of oxidation less round heat contents; scrap melts
  progressively; lime dissolves progressively and some of it never;
- the lining is one lump of heat that drinks from the bath and shines out of the mouth while
  the vessel waits: what a wait costs levels off, and the heat before matters.

Every number is invented within common practice unless named. Masses in kg, times in min,
temperatures in degree Celsius, heats in MJ, oxygen in Nm3.
"""

from __future__ import annotations

import math
from dataclasses import dataclass, field

O2_KG_PER_NM3 = 1.4276

#: Heat of oxidation of an element in the bath, oxygen cold, product at bath heat [MJ/kg].
HEAT = {"C": 9.5, "CO2": 20.5, "Si": 25.6, "Mn": 6.3, "P": 24.0, "Fe": 4.2, "Ti": 13.5, "V": 9.5}
#: Oxygen that a kg of the element takes [kg/kg].
OXYGEN = {"C": 1.332, "Si": 1.139, "Mn": 0.2912, "P": 1.2915, "Fe": 0.2865, "Ti": 0.668}
OXYGEN["V"] = 0.471
OXIDE = {"Si": "SiO2", "Mn": "MnO", "P": "P2O5", "Fe": "FeO", "Ti": "TiO2", "V": "V2O3"}

#: What a kg of charge holds when it arrives [kg/kg]; the rest of a scrap is iron, dirt apart.
SCRAP = {
    "heavy_scrap": {"C": 0.0019, "Si": 0.0021, "Mn": 0.0063, "P": 0.00023, "S": 0.00024},
    "shop_scrap": {"C": 0.0008, "Si": 0.0006, "Mn": 0.0038, "P": 0.00016, "S": 0.00012},
    "galvanised_bundles": {"C": 0.0005, "Si": 0.0003, "Mn": 0.0022, "P": 0.00012, "S": 0.0001},
    "light_scrap": {"C": 0.0016, "Si": 0.0013, "Mn": 0.0042, "P": 0.00033, "S": 0.00038},
    "ladle_skulls": {"C": 0.0024, "Si": 0.001, "Mn": 0.005, "P": 0.0002, "S": 0.0002},
}
#: Usual metallic yield, and minutes a box of it would take to melt at full bite.
SCRAP_YIELD = {
    "heavy_scrap": 0.972,
    "shop_scrap": 0.98,
    "galvanised_bundles": 0.972,
    "light_scrap": 0.925,
    "ladle_skulls": 0.87,
}
MELTING_MIN = {
    "heavy_scrap": 12.0,
    "shop_scrap": 9.0,
    "galvanised_bundles": 6.0,
    "light_scrap": 5.0,
    "ladle_skulls": 10.0,
}


@dataclass
class Charge:
    """What truly goes into the vessel, whatever the instruments say.

    oxygen_share : of the oxygen that reacts. soft : what this blow adds to the share of spare
    oxygen that goes to iron. P_luck : what multiplies the partition of phosphorus.
    """

    hot_metal_kg: float
    hot_metal_temp_C: float
    hm_pct: dict[str, float]
    scrap_kg: dict[str, float]
    scrap_yield: dict[str, float]
    burnt_lime_kg: float
    dolomitic_lime_kg: float
    lump_ore_kg: float
    ferrosilicon_75_kg: float
    carryover_pct: float
    lime_CaO: float
    oxygen_share: float = 0.9965
    soft: float = 0.0
    P_luck: float = 1.0


@dataclass
class Vessel:
    """State of the vessel: carried from heat to heat.

    wall_temp_C : of the lump of lining that drinks heat. age : heats since the reline.
    lance_age : heats since the lance was new. lance_kind : 0 the old design, 1 the new one.
    """

    wall_temp_C: float = 1150.0
    age: int = 0
    lance_age: int = 0
    lance_kind: int = 0

    WALL_MJ_PER_K = 24.0

    def bite_MJ_per_min_K(self) -> float:
        """Heat that the wall drinks; more as the lining wears thin."""
        return 1.05 + 0.22 * math.tanh(self.age / 1800.0)

    def shell_MJ_per_min(self) -> float:
        """Loss through the shell, mouth and lance."""
        return 55.0 + 38.0 * min(self.age / 2600.0, 1.0)

    def post_combustion(self) -> float:
        """CO2/(CO+CO2) at mid-blow; a worn lance blows softer."""
        return (0.098, 0.112)[self.lance_kind] + 0.022 * min(self.lance_age / 260.0, 1.0)

    def iron_share(self) -> float:
        """Share of the oxygen that carbon leaves which goes to iron."""
        return (0.60, 0.54)[self.lance_kind] + 0.07 * min(self.lance_age / 260.0, 1.0)

    def CO_product(self) -> float:
        """[%C][%O] at the end: rises as the stirring plugs clog."""
        return 0.00235 + 0.00075 * (1.0 - math.exp(-self.age / 900.0))

    def wait(self, minutes: float, *, burner: bool = False) -> None:
        """Cool, empty, for some time; a burner holds a spare vessel at about 1100 °C."""
        left = minutes
        while left > 0.0:
            step = min(left, 2.0)
            kelvin = self.wall_temp_C + 273.15
            shine = 105.0 * (kelvin / 1600.0) ** 4
            if burner:
                shine -= 105.0 * (1373.0 / 1600.0) ** 4
            self.wall_temp_C -= (shine + 12.0) * step / self.WALL_MJ_PER_K
            left -= step


@dataclass
class Bath:
    """Metal, slag and what is still solid, at one moment of the blow."""

    metal: dict[str, float]
    slag: dict[str, float]
    temp_C: float
    solid: dict[str, float] = field(default_factory=dict)
    lime_kg: float = 0.0
    ore_kg: float = 0.0
    sulphur_to_gas_kg: float = 0.0

    def metal_kg(self) -> float:
        """Mass of liquid metal."""
        return sum(self.metal.values())

    def slag_kg(self) -> float:
        """Mass of liquid slag."""
        return sum(self.slag.values())

    def pct(self, element: str) -> float:
        """Content of the metal."""
        return 100.0 * self.metal[element] / self.metal_kg()

    def slag_pct(self, oxide: str) -> float:
        """Content of the liquid slag."""
        return 100.0 * self.slag[oxide] / self.slag_kg()

    def warm(self, heat_MJ: float) -> None:
        """Take up heat."""
        self.temp_C += heat_MJ / (0.00083 * self.metal_kg() + 0.00125 * self.slag_kg() + 1.0)

    def oxidise(self, element: str, kg: float) -> float:
        """Move an element to the slag (back, if negative); heat set free [MJ]."""
        self.metal[element] -= kg
        self.slag[OXIDE[element]] += kg * (1.0 + OXYGEN[element])
        return HEAT[element] * kg


def charged(charge: Charge) -> Bath:
    """The vessel just before the lance goes down: hot metal liquid, all else solid."""
    kg = charge.hot_metal_kg * (1.0 - charge.carryover_pct / 100.0)
    metal = {el: kg * pct / 100.0 for el, pct in charge.hm_pct.items()}
    metal["Fe"] = kg - sum(metal.values())
    metal["Si"] += 0.745 * charge.ferrosilicon_75_kg
    metal["Fe"] += 0.235 * charge.ferrosilicon_75_kg
    over = charge.hot_metal_kg - kg
    shares = {"CaO": 0.39, "SiO2": 0.36, "MgO": 0.085, "Al2O3": 0.125, "TiO2": 0.01}
    slag = dict.fromkeys(("CaO", "SiO2", "MgO", "FeO", "MnO", "P2O5", "Al2O3", "TiO2", "V2O3"), 0.0)
    for oxide, share in shares.items():
        slag[oxide] = share * over
    slag["FeO"] = 300.0  # rust, and what clings to the wall
    bath = Bath(metal, slag, charge.hot_metal_temp_C, dict(charge.scrap_kg))
    bath.lime_kg = charge.burnt_lime_kg + charge.dolomitic_lime_kg
    bath.ore_kg = charge.lump_ore_kg
    # ferrosilicon dissolves with a little heat
    bath.warm(1.0 * charge.ferrosilicon_75_kg)
    return bath


def _melt(bath: Bath, charge: Charge, minutes: float) -> float:
    """Heat that melting scrap takes [MJ]; its dirt and rust go to the slag."""
    bite = min(max((bath.temp_C - 1240.0) / 180.0, 0.16), 1.8)
    per_kg = 1.34 + 0.00085 * (bath.temp_C - 1600.0)
    heat = 0.0
    for kind, left in bath.solid.items():
        if left <= 0.0:
            continue
        kg = min(left, charge.scrap_kg[kind] / MELTING_MIN[kind] * bite * minutes)
        bath.solid[kind] = left - kg
        good = kg * charge.scrap_yield[kind]
        for el, share in SCRAP[kind].items():
            bath.metal[el] += share * good
        bath.metal["Fe"] += good * (1.0 - sum(SCRAP[kind].values()))
        lost = kg - good
        bath.slag["FeO"] += 0.25 * lost
        bath.slag["SiO2"] += 0.18 * lost
        bath.slag["CaO"] += 0.12 * lost
        bath.slag["Al2O3"] += 0.10 * lost
        heat += per_kg * kg
    return heat


def _flux(bath: Bath, charge: Charge, minutes: float) -> float:
    """Heat that dissolving lime and ore take [MJ]."""
    total = charge.burnt_lime_kg + charge.dolomitic_lime_kg + 1e-9
    wet = min(bath.slag_pct("FeO") / 18.0, 1.3)
    kg = min(bath.lime_kg, bath.lime_kg * (0.06 + 0.13 * wet) * minutes)
    bath.lime_kg -= kg
    lime, dolo = kg * charge.burnt_lime_kg / total, kg * charge.dolomitic_lime_kg / total
    CaO = charge.lime_CaO * lime + 0.57 * dolo
    bath.slag["CaO"] += CaO
    bath.slag["MgO"] += 0.018 * lime + 0.362 * dolo
    bath.slag["SiO2"] += 0.016 * lime + 0.013 * dolo
    bath.slag["Al2O3"] += 0.006 * kg
    # heated, its last carbonate driven off, molten; less the heat of making silicate
    heat = 1.78 * kg - 0.55 * min(CaO, 1.87 * bath.slag["SiO2"])
    ore = min(bath.ore_kg, charge.lump_ore_kg / 3.0 * minutes)
    bath.ore_kg -= ore
    bath.slag["FeO"] += 0.835 * ore
    bath.slag["SiO2"] += 0.03 * ore
    bath.slag["Al2O3"] += 0.011 * ore
    return heat + 3.05 * ore


def _towards(bath: Bath, element: str, partition: float, rate: float) -> float:
    """Kilograms of an element that go to the slag in a step, towards its partition."""
    oxide = OXIDE[element]
    in_slag = bath.slag[oxide] / (1.0 + OXYGEN[element])
    metal, slag = bath.metal_kg(), bath.slag_kg()
    total = in_slag + bath.metal[element]
    rest = total * metal / (metal + partition * slag)
    return (bath.metal[element] - rest) * (1.0 - math.exp(-rate))


def partition_P(bath: Bath) -> float:
    """(%P)/[%P] that phosphorus moves towards.

    Mean of Healy 1970 and Suito and Inoue 1984 (from memory), iron counted up to 19 % and lime
    up to a basicity of 3.3, times 0.42.
    """
    kelvin = bath.temp_C + 273.15
    iron = min(max(0.7773 * bath.slag_pct("FeO"), 2.0), 19.0)
    CaO = min(bath.slag_pct("CaO"), 3.3 * bath.slag_pct("SiO2"))
    healy = 22350.0 / kelvin - 16.0 + 0.08 * CaO
    other = 0.3 * bath.slag_pct("MgO") + 0.6 * bath.slag_pct("P2O5") + 0.6 * bath.slag_pct("MnO")
    suito = 0.072 * (CaO + other) + 11570.0 / kelvin - 10.52
    return float(0.42 * 10.0 ** (0.5 * (healy + suito) + 2.5 * math.log10(iron)))


def partition_Mn(bath: Bath) -> float:
    """(%Mn)/[%Mn] that manganese moves towards: proportional to (FeO), falling with heat."""
    return float(0.7745 * bath.slag_pct("FeO") * 10.0 ** (7450.0 / (bath.temp_C + 273.15) - 3.64))


def step(bath: Bath, charge: Charge, vessel: Vessel, oxygen_Nm3: float, minutes: float) -> None:
    """One step of the blow."""
    heat = -_melt(bath, charge, minutes) - _flux(bath, charge, minutes)
    free = charge.oxygen_share * O2_KG_PER_NM3 * oxygen_Nm3
    free += 0.092 * (charge.lump_ore_kg / 3.0 * minutes if bath.ore_kg > 0.0 else 0.0)
    blown = free
    carbon, silicon = bath.pct("C"), bath.pct("Si")
    for el, most, half in (("Si", 0.46, 0.10), ("Ti", 0.06, 0.02), ("V", 0.02, 0.01)):
        content = bath.pct(el)
        kg = min(blown * most * content / (content + half) / OXYGEN[el], 0.5 * bath.metal[el])
        heat += bath.oxidise(el, kg)
        free -= kg * OXYGEN[el]
    stirred = 0.75 + 0.5 * min(carbon, 1.0) + (0.35 if carbon < 0.3 else 0.0)
    for el, partition, rate in (
        ("Mn", partition_Mn(bath), 0.42),
        ("P", charge.P_luck * partition_P(bath), 0.34),
    ):
        kg = _towards(bath, el, partition, rate * stirred * minutes)
        heat += bath.oxidise(el, kg)
        free -= kg * OXYGEN[el]
    iron_share = vessel.iron_share() + charge.soft
    early = silicon > 0.06
    heat += _carbon_and_iron(bath, vessel.post_combustion(), iron_share, free, minutes, early=early)
    _sulphur_dust_and_wear(bath, minutes)
    drunk = vessel.bite_MJ_per_min_K() * (bath.temp_C - vessel.wall_temp_C) * minutes
    vessel.wall_temp_C += drunk / vessel.WALL_MJ_PER_K
    bath.warm(heat - drunk - vessel.shell_MJ_per_min() * minutes)


def _carbon_and_iron(
    bath: Bath,
    post_combustion: float,
    iron_share: float,
    free_kg: float,
    minutes: float,
    *,
    early: bool,
) -> float:
    """Share out oxygen between carbon, iron and the mouth; heat set free [MJ]."""
    carbon = bath.pct("C")
    to_iron = 0.13 if early else 0.055
    tail, least, crit = 0.165, 0.014, 0.42
    share = 1.0
    if carbon < crit:
        share = max(1.0 - math.exp(-(carbon - least) / tail), 0.0)
        share /= 1.0 - math.exp(-(crit - least) / tail)
    burnt_ratio = post_combustion * (1.35 if early else 1.0)
    for_carbon = free_kg * (1.0 - to_iron) * share
    left = free_kg * (1.0 - to_iron) * (1.0 - share)
    iron_kg = (free_kg * to_iron + left * iron_share) / OXYGEN["Fe"]
    heat = bath.oxidise("Fe", iron_kg)
    # mid-blow the bath eats iron oxide
    eaten = bath.slag["FeO"] / (1.0 + OXYGEN["Fe"]) * 0.135 * minutes
    eaten *= min(carbon / 0.8, 1.0) * (0.6 if early else 1.0)
    heat += bath.oxidise("Fe", -eaten)
    burnt = (for_carbon + eaten * OXYGEN["Fe"]) / OXYGEN["C"] / (1.0 + burnt_ratio)
    burnt = min(burnt, 0.9 * bath.metal["C"])
    bath.metal["C"] -= burnt
    return heat + burnt * (HEAT["C"] + 0.36 * HEAT["CO2"] * burnt_ratio) + 0.7 * left


def _sulphur_dust_and_wear(bath: Bath, minutes: float) -> None:
    metal, slag = bath.metal_kg(), bath.slag_kg()
    # sulphur to slag at a partition near 5, and a little to the gas
    basic = min(bath.slag["CaO"] / (bath.slag["SiO2"] + 1.0), 3.5)
    kg = bath.metal["S"] * 0.011 * minutes * basic / 3.0 * slag / (metal * 0.08)
    gas = bath.metal["S"] * 0.009 * minutes
    bath.metal["S"] -= min(kg, 0.2 * bath.metal["S"]) + gas
    bath.sulphur_to_gas_kg += gas
    bath.metal["Fe"] -= metal * (0.00055 + 0.00045) * minutes  # dust; thrown out
    bath.slag["CaO"] -= min(0.00008 * metal * minutes, 0.01 * bath.slag["CaO"])
    hungry = max(10.5 - bath.slag_pct("MgO"), 0.0)
    bath.slag["MgO"] += 0.55 * hungry * minutes


def settle(bath: Bath, charge: Charge) -> None:
    """Lance up: what scrap is left melts, what lime is left is warm, droplets hang in the slag."""
    rest = _melt(bath, charge, 60.0) if any(kg > 0.0 for kg in bath.solid.values()) else 0.0
    bath.warm(-rest - 1.45 * bath.lime_kg)


def dissolved_oxygen_ppm(bath: Bath, vessel: Vessel) -> float:
    """From carbon, and a little from the iron oxide of the slag."""
    carbon = max(bath.pct("C"), 0.012)
    product = vessel.CO_product() * (1.0 + 0.0006 * (bath.temp_C - 1650.0))
    return 1e4 * product / carbon * 0.82 + 4.2 * bath.slag_pct("FeO") + 15.0
