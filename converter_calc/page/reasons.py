"""Why each figure of the recipe is what it is: which explanation belongs to which figure."""

from __future__ import annotations

from dataclasses import dataclass

from converter_calc.planning.explain import Explanation, Term, explain
from converter_calc.planning.outcome import Outcome, at
from converter_calc.reporting import tables


@dataclass(frozen=True)
class Figure:
    """A figure that can be asked about: its name, amount and unit, and what explains it."""

    name: str
    value: float
    unit: str
    quantity: str


def figures(outcome: Outcome) -> list[Figure]:
    """All figures of the recipe, then temperature, carbon and phosphorus of the end point."""
    choices = outcome.heats.choices
    by_name = {
        "scrap, all": "scrap",
        "oxygen": "oxygen",
        choices.lime.replace("_", " "): "lime",
        choices.magnesia_flux.replace("_", " "): "magnesia",
    }
    # one material may serve as lime and as magnesia flux; then lime says it
    by_name[choices.lime.replace("_", " ")] = "lime"
    if outcome.ask.heat == "trim_kg":
        by_name |= {name.replace("_", " "): "coolant" for name in (choices.coolant, choices.fuel)}
    found = [
        Figure(row.name, row.amount, row.unit, by_name.get(row.name, ""))
        for row in tables.recipe_rows(outcome)
    ]
    end = outcome.end_point()
    found.append(Figure("end temperature", float(at(end["temperature_C"], 0)), "°C", "temperature"))
    for name, element in (("carbon", "C"), ("phosphorus", "P")):
        if element in end["steel_pct"]:
            pct = float(at(end["steel_pct"][element], 0))
            found.append(Figure(f"end {name}", pct, "%", name))
    return found


def reason_for(outcome: Outcome, figure: Figure) -> Explanation:
    """The explanation of a figure: the planner's own, or what the recipe says of it."""
    if figure.quantity:
        return explain(outcome, figure.quantity)
    if figure.name == "hot metal":
        return _hot_metal(outcome, figure)
    material = outcome.heats.materials.get(figure.name.replace(" ", "_"))
    if material is not None and material.kind == "scrap":
        return _one_scrap(outcome, figure)
    given = "was given; every balance counts it as it is."
    return Explanation(
        figure.name, figure.value, figure.unit, f"{figure.name.capitalize()} {given}"
    )


def _hot_metal(outcome: Outcome, figure: Figure) -> Explanation:
    steel = float(at(outcome.state.steel_kg, 0))
    scrap = float(at(outcome.kind_kg("scrap"), 0))
    terms = [
        Term("steel tapped", steel, "kg"),
        Term("scrap charged", scrap, "kg"),
        Term("steel for each kg of hot metal and scrap", steel / (figure.value + scrap), "kg/kg"),
    ]
    reason = "Hot metal was given; it makes, with the scrap:"
    if outcome.ask.hot_metal:
        reason = "Hot metal follows from the steel to tap, by the iron balance:"
    return Explanation(figure.name, figure.value, "kg", reason, terms)


def _one_scrap(outcome: Outcome, figure: Figure) -> Explanation:
    name = figure.name.replace(" ", "_")
    total = float(at(outcome.kind_kg("scrap"), 0))
    choices = outcome.heats.choices
    terms = [Term("scrap, all", total, "kg")]
    terms.append(Term("share of it", 100.0 * figure.value / total if total else 0.0, "%"))
    reason = "This scrap was given by its mass:"
    if name in choices.scrap_order:
        reason = "Scrap is taken in order of preference, each up to its stock:"
    elif name in choices.scrap_mix:
        reason = "All scrap of the mix times the share of this one in the mix:"
        terms.append(Term("share in the mix", 100.0 * choices.scrap_mix[name], "%"))
    return Explanation(figure.name, figure.value, "kg", reason, terms)
