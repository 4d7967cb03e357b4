"""The charge sheet as text: what to charge and blow, where it ends, and the cautions."""

from __future__ import annotations

import numpy as np

from converter_calc.basis.units import MJ, ZERO_C_K
from converter_calc.planning.heat_terms import heat_terms
from converter_calc.planning.outcome import Outcome, at
from converter_calc.reporting.display import SYSTEMS, Display

#: Shown on every sheet. ILO code of practice, Safety and health in the iron and steel
#: industry (from memory); CO limits: common handbook value.
SAFETY = (
    (
        "No moisture, ice, closed vessels, ammunition or oily turnings in the scrap; never hot "
        "metal onto a wet vessel or wet scrap."
    ),
    "Off-gas holds carbon monoxide: poisonous, and explosive in air from 12.5 to 74 %.",
    (
        "Slopping: mind silicon, slag weight, freeboard, soft blow and late ore. Never above the "
        "vessel's working weight."
    ),
    (
        "A calculation, not an instruction: local codes, the shop's own practice and its licensed "
        "engineers decide."
    ),
)
WIDTH = 84


def charge_sheet(outcome: Outcome, index: int = 0, units: str = "metric") -> str:
    """The sheet of one heat; units "metric" or "us"."""
    show = SYSTEMS[units]
    heats = outcome.heats
    lines = [f"CHARGE SHEET   heat {heats.ids[index]}", "=" * WIDTH]
    if heats.why:
        lines += [heats.why, ""]
    lines += _recipe(outcome, index, show)
    lines += _end_point(outcome, index, show)
    lines += _slag(outcome, index, show)
    lines += _gas(outcome, index, show)
    lines += _heat(outcome, index, show)
    lines += _closure(outcome, index)
    lines += _warnings(outcome, index)
    return "\n".join(lines) + "\n"


def _row(label: str, number: str, unit: str, more: str = "") -> str:
    return f"  {label:<30}{number:>12} {unit:<12}{more}".rstrip()


def _mass(label: str, kg: float, steel_kg: float, show: Display) -> str:
    digits = 0 if show.mass == "kg" else 3
    if show.mass == "kg" and abs(kg) < 100.0:
        digits = 2
    per = kg / steel_kg * (1000.0 if show.mass == "kg" else 2000.0)
    return _row(label, f"{show.mass_of(kg):,.{digits}f}", show.mass, f"{per:>9.2f} {show.per_mass}")


def _recipe(outcome: Outcome, i: int, show: Display) -> list[str]:
    steel = float(at(outcome.state.steel_kg, i))
    lines = ["Charge and blow" + " " * 44 + "per tonne of steel" * (show.mass == "kg")]
    lines[0] = lines[0].rstrip()
    recipe = {key: float(at(x, i)) for key, x in outcome.recipe().items()}
    for key, x in recipe.items():
        if key == "scrap_total_kg":
            if sum(1 for name in outcome.charged_kg if _kind(outcome, name) == "scrap") > 1:
                lines.append(_mass("scrap, all", x, steel, show))
        elif key.endswith("_kg") and (abs(x) > 0.0005 or key == "hot_metal_kg"):
            lines.append(_mass(key.removesuffix("_kg").replace("_", " "), x, steel, show))
        elif key.endswith("_Nm3"):
            per = x / steel * 1000.0
            per_text = f"{per:>9.2f} Nm3/t" if show.gas == "Nm3" else ""
            label = key.removesuffix("_Nm3").replace("_", " ")
            lines.append(_row(label, f"{show.gas_of(x):,.0f}", show.gas, per_text))
    hot_metal, scrap = recipe["hot_metal_kg"], recipe["scrap_total_kg"]
    if hot_metal + scrap > 0.0:
        share = 100.0 * scrap / (hot_metal + scrap)
        lines.append(_row("scrap share", f"{share:.2f}", "%"))
    cost = float(at(outcome.cost(), i))
    if np.isfinite(cost) and cost > 0.0:
        lines.append(_row("priced items per tonne steel", f"{cost:,.2f}", "shop currency"))
    return [*lines, ""]


def _kind(outcome: Outcome, name: str) -> str:
    return outcome.heats.materials[name].kind


def _end_point(outcome: Outcome, i: int, show: Display) -> list[str]:
    s, values = outcome.state, outcome.heats.values
    temp_C, aim = float(at(s.T_K, i)) - ZERO_C_K, values["aim_temp_C"][i]
    lines = [*_expected(outcome, i, show), "End of blow, in the balance"
             if outcome.expected else "End of blow"]  # fmt: skip
    more = f"aim {show.temperature_of(aim):,.0f}" if np.isfinite(aim) else ""
    lines.append(_row("temperature", f"{show.temperature_of(temp_C):,.1f}", show.temperature, more))
    for element, x in sorted(outcome.steel_pct().items(), key=lambda e: _order(e[0])):
        if element in ("Fe", "O"):
            continue
        pct = float(at(x, i))
        aim = values.get(f"aim_{element}_pct", np.full(outcome.n, np.nan))[i]
        more = f"aim {aim:.4f}" if np.isfinite(aim) else ""
        if abs(pct) >= 5e-5 or more:
            lines.append(_row(f"[{element}]", f"{pct:.4f}", "%", more))
    lines.append(_row("dissolved oxygen", f"{float(at(s.O_pct, i)) * 1e4:,.0f}", "ppm"))
    steel = float(at(s.steel_kg, i))
    lines.append(_mass("steel tapped", steel, steel, show))
    charge = float(at(s.hot_metal_kg + outcome.kind_kg("scrap"), i))
    lines.append(_row("metallic yield", f"{100.0 * steel / charge:.2f}", "%"))
    return [*lines, ""]


def _expected(outcome: Outcome, i: int, show: Display) -> list[str]:
    """Where heats like this have ended, beside the aims of the heat itself."""
    if not outcome.expected:
        return []
    lines = ["Expected, by what heats like this have shown"]
    for name, (value, deviation) in outcome.expected.items():
        x, sd = float(at(value, i)), float(at(deviation, i))
        aim_name = "aim_" + name.removeprefix("end_")
        aims = outcome.wanted.get(aim_name, outcome.heats.values.get(aim_name, np.nan))
        aim = float(at(aims, i))
        if name == "end_temp_C":
            shown, unit = f"{show.temperature_of(x):,.0f}", show.temperature
            told = f"± {sd * (1.8 if unit == 'F' else 1.0):.0f}"
            goal = f"aim {show.temperature_of(aim):,.0f}"
            label = "temperature"
        else:
            shown, unit, told, goal = f"{x:.4f}", "%", f"± {sd:.4f}", f"aim {aim:.4f}"
            label = f"[{name.removeprefix('end_').removesuffix('_pct')}]"
        lines.append(_row(label, shown, unit, f"{told:<11}{goal if np.isfinite(aim) else ''}"))
    return [*lines, ""]


def _order(element: str) -> tuple[int, str]:
    first = ("C", "Si", "Mn", "P", "S")
    return (first.index(element) if element in first else len(first), element)


def _slag(outcome: Outcome, i: int, show: Display) -> list[str]:
    s = outcome.state
    steel = float(at(s.steel_kg, i))
    lines = ["Slag", _mass("liquid slag", float(at(s.slag_kg, i)), steel, show)]
    pct = {name: float(at(x, i)) for name, x in outcome.slag_pct().items()}
    parts = [
        f"{name} {x:.2f}" for name, x in sorted(pct.items(), key=lambda e: -e[1]) if x >= 0.005
    ]
    lines += [
        "    " + "  ".join(parts[k : k + 6]) + (" %" if k + 6 >= len(parts) else "")
        for k in range(0, len(parts), 6)
    ]
    lines.append(_row("CaO/SiO2", f"{float(at(s.basicity, i)):.2f}", ""))
    lines.append(_row("total iron", f"{float(at(s.laws['T_Fe_pct'], i)):.2f}", "%"))
    for label, kg in (
        ("iron droplets in slag", s.droplets_kg),
        ("undissolved lime", s.undissolved_kg),
        ("dust and fume", sum(s.dust_kg.values())),
        ("ejections", s.ejections_kg),
    ):
        if float(at(kg, i)) > 0.05:
            lines.append(_mass(label, float(at(kg, i)), steel, show))
    lines.append(f"  laws: phosphorus {outcome.p.laws['phosphorus']}" + _ratio(outcome, "L_P", i))
    lines.append(f"        manganese {outcome.p.laws['manganese']}" + _ratio(outcome, "L_Mn", i))
    lines.append(f"        sulphur {outcome.p.laws['sulphur']}" + _ratio(outcome, "L_S", i))
    return [*lines, ""]


def _ratio(outcome: Outcome, name: str, i: int) -> str:
    x = outcome.state.laws.get(name)
    return "" if x is None else f", {name} = {float(at(x, i)):.1f}"


def _gas(outcome: Outcome, i: int, show: Display) -> list[str]:
    volumes = {name: float(at(x, i)) for name, x in outcome.gas_Nm3().items()}
    total = sum(volumes.values())
    stream = next(stream for stream in outcome.streams if stream.name == "off_gas")
    temp = show.temperature_of(float(at(stream.temperature_C, i)))
    parts = [f"{name} {100.0 * x / total:.1f}" for name, x in volumes.items() if x > 5e-4 * total]
    return [
        "Off-gas",
        _row(
            "volume",
            f"{show.gas_of(total):,.0f}",
            show.gas,
            f"leaves at {temp:,.0f} {show.temperature}",
        ),
        "    " + "  ".join(parts) + " vol %",
        "",
    ]


def _heat(outcome: Outcome, i: int, show: Display) -> list[str]:
    total = float(at(outcome.heat_input_MJ(), i))
    lines = [f"Heat balance ({show.heat} above 25 C; % of heat supplied)"]
    for term in heat_terms(outcome):
        x = float(at(term.heat_MJ, i))
        if abs(x) >= 1e-4 * total:
            heat = show.heat_of(x)
            lines.append(f"  {term.label:<50}{heat:>14,.1f}{100.0 * x / total:>9.2f} %")
    return [*lines, ""]


def _closure(outcome: Outcome, i: int) -> list[str]:
    worst = max((abs(float(at(c.relative, i))), name) for name, c in outcome.closures.items())
    energy = float(at(outcome.closures["energy"].relative, i))
    loss = float(at(outcome.state.heat_loss_J, i)) / MJ
    text = f"Balance: worst closure {worst[0]:.1e} ({worst[1]}), energy {energy:.1e}; "
    return [f"{text}heat loss {loss:,.0f} MJ", ""]


def _warnings(outcome: Outcome, i: int) -> list[str]:
    lines = []
    warnings = outcome.warnings(i)
    if warnings:
        lines.append("Warnings")
        for warning in warnings:
            lines += _wrap(f"! {warning['message']} [{warning['field']}]")
        lines.append("")
    lines.append("Safety")
    for text in SAFETY:
        lines += _wrap("- " + text)
    return lines


def _wrap(text: str) -> list[str]:
    import textwrap

    return textwrap.wrap(text, WIDTH, initial_indent="  ", subsequent_indent="    ")
