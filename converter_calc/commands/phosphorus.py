"""Commands of the metallurgist: laws, lime, slag practices, fluxes."""

from __future__ import annotations

import sys
from collections.abc import Callable
from pathlib import Path
from typing import TYPE_CHECKING, Any

import click

from converter_calc.basis.errors import Fault, InputError
from converter_calc.commands.shared import HEAT, JSON, NO_ANSWER, guarded, write_json

if TYPE_CHECKING:
    from converter_calc.balance.heats import HeatTable

#: Most of a material that --add takes [kg]: no converter holds more.
MOST_ADDED_KG = 1e5


@click.command()
@HEAT
@click.option(
    "--log",
    "log_file",
    type=click.Path(path_type=Path),
    metavar="FILE",
    help="Heat log: rank the laws by its heats and use their approach factors.",
)
@click.option("--decimal-comma", is_flag=True, help="Numbers of the log have a decimal comma.")
@click.option("--marginal/--no-marginal", default=True, help="Cost of the last 0.001 % P.")
@JSON
@guarded
def phosphorus(
    heat: Path, log_file: Path | None, json_to: str | None, *, decimal_comma: bool, marginal: bool
) -> None:
    """Plan HEAT under every phosphorus law; with a log, rank the laws by measured heats."""
    from converter_calc.metallurgy.laws_compared import compare_laws
    from converter_calc.metallurgy.marginal_cost import marginal_cost, marginal_table
    from converter_calc.planning.plan import as_heats
    from converter_calc.reporting import phosphorus_tables as text
    from converter_calc.reporting.phosphorus_tables import plain, records

    heats = as_heats(heat)
    ranking = None
    names, approach, scatter = None, None, None
    if log_file is not None:
        from converter_calc.heatlog.reading import read_log
        from converter_calc.metallurgy.law_ranking import rank_laws

        mark = "," if decimal_comma else "."
        read = read_log(log_file, materials=heats.materials, decimal_mark=mark)
        ranking = rank_laws(read.frame)
        if read.rows_refused:
            ranking.notes.append(f"{read.rows_refused} rows of the log were refused as faulty")
        names = ranking.table["law"].to_list()
        approach = {law: fit.approach for law, fit in ranking.fits.items()}
        scatter = {law: fit.scatter_log10 for law, fit in ranking.fits.items()}
    compared = compare_laws(heats, names, approach, scatter)
    cost = _marginal_or_none(marginal_cost, heats) if marginal else None
    document: dict[str, Any] = {"laws": records(compared.table)}
    if ranking is not None:
        document |= {"ranking": records(ranking.table), "notes": ranking.notes}
    if cost is not None:
        table = marginal_table(heats)
        document |= {"marginal": plain(vars(cost)), "marginal_table": records(table)}
    if not write_json(document, json_to):
        if ranking is not None:
            click.echo(text.ranking_text(ranking))
        click.echo(text.laws_compared_text(compared))
        if cost is not None:
            click.echo(text.marginal_text(cost, table), nl=False)
    _exit_without_plan(compared.table)


def _exit_without_plan(table: Any) -> None:
    """Exit code 3, and what binds, where no law has a plan."""
    if (table["status"] == "solved").any():
        return
    for binding in dict.fromkeys(table["binding"]):
        click.echo(f"no charge reaches the aim under any law; what binds is {binding}", err=True)
    sys.exit(NO_ANSWER)


def _marginal_or_none(marginal_cost: Callable[[HeatTable], Any], heats: HeatTable) -> Any:
    """The marginal cost; None, with a line on standard error, where the aim has no plan."""
    try:
        return marginal_cost(heats)
    except InputError as error:
        click.echo(f"no marginal cost: {error}", err=True)
        return None


@click.command()
@HEAT
@JSON
@guarded
def lime(heat: Path, json_to: str | None) -> None:
    """Show end phosphorus of HEAT against lime, and the limits on the way."""
    from converter_calc.metallurgy.lime_limits import lime_limits
    from converter_calc.planning.plan import as_heats
    from converter_calc.reporting.phosphorus_tables import lime_limits_text, plain, records

    limits = lime_limits(as_heats(heat))
    document = {
        "lime": limits.lime,
        "law": limits.law,
        "marks": [plain(vars(mark) | {"terms": [vars(term) for term in mark.terms]})
                  for mark in limits.marks],
        "curve": records(limits.curve),
    }  # fmt: skip
    if not write_json(document, json_to):
        click.echo(lime_limits_text(limits), nl=False)


@click.command()
@HEAT
@click.option(
    "--steel-value",
    type=float,
    metavar="PRICE",
    help="Value of a tonne of steel; without it the least cost per tonne is sought.",
)
@click.option(
    "--fluorspar",
    type=float,
    default=0.0,
    metavar="KG/T",
    help="Most fluorspar, kg per tonne of steel (0: none).",
)
@click.option(
    "--recycled-p",
    type=float,
    default=0.1,
    metavar="KG/T",
    show_default=True,
    help="Most phosphorus brought back by recycled slag, kg per tonne of steel.",
)
@click.option("--of", "materials", metavar="NAMES", help="Fluxes to choose from, with commas.")
@click.option(
    "--add",
    "added",
    multiple=True,
    metavar="MATERIAL=KG",
    help="A material charged in every mix, such as recycled_slag=2000.",
)
@JSON
@guarded
def fluxes(
    heat: Path,
    steel_value: float | None,
    fluorspar: float,
    recycled_p: float,
    materials: str | None,
    added: tuple[str, ...],
    json_to: str | None,
) -> None:
    """Compare carriers of lime and magnesia for HEAT, and choose fluxes by least cost."""
    from converter_calc.metallurgy.flux_choice import CANDIDATES, choose_fluxes
    from converter_calc.metallurgy.flux_mixes import check_materials, flux_mixes
    from converter_calc.metallurgy.flux_search import FluxLimits
    from converter_calc.planning.plan import as_heats
    from converter_calc.planning.solving import with_masses
    from converter_calc.reporting.phosphorus_tables import (
        flux_choice_text,
        flux_mixes_text,
        plain,
        records,
    )

    extra = _masses(added)
    heats = as_heats(heat)
    check_materials(heats, list(extra))
    heats = with_masses(heats, extra)
    limits = FluxLimits(fluorspar_kg_per_t=fluorspar, recycled_P_kg_per_t=recycled_p)
    names = [name.strip() for name in materials.split(",")] if materials else list(CANDIDATES)
    names = [name for name in names if name not in extra]
    choice = None
    try:
        choice = choose_fluxes(heats, names, limits, steel_value)
    except InputError as error:  # without prices the pairs can still be compared
        if not all(fault.field.startswith(("price.", "materials")) for fault in error.faults):
            raise
        click.echo(f"no least cost: {error}", err=True)
    mixes = flux_mixes(heats)
    document: dict[str, Any] = {"pairs": records(mixes.table)}
    if choice is not None:
        document["least_cost"] = {
            "cost_per_t": choice.cost_per_t,
            "own_cost_per_t": plain(choice.beside),
            "fluxes": [plain(vars(use)) for use in choice.uses],
            "binding": dict(choice.binding),
            "left_out": list(choice.left_out),
            "terms": [plain(vars(term)) for term in choice.terms()],
        }
    if write_json(document, json_to):
        return
    click.echo(flux_mixes_text(mixes))
    if choice is not None:
        click.echo(flux_choice_text(choice), nl=False)


@click.command()
@HEAT
@click.option("--of", "names", metavar="NAMES", help="Practices to compare, with commas.")
@JSON
@guarded
def practices(heat: Path, names: str | None, json_to: str | None) -> None:
    """Compare slag practices on the hot metal of HEAT: one slag, two, kept slag, pre-treated."""
    from converter_calc.metallurgy.practices import compare_practices
    from converter_calc.reporting.practice_tables import practices_text

    wanted = [name.strip() for name in names.split(",")] if names else None
    compared = compare_practices(heat, wanted)
    if not write_json(compared.document(), json_to):
        click.echo(practices_text(compared), nl=False)
    chains = {name: chain for name, ((_, chain),) in compared.chains.items()}
    if any(chain.status[0] == "solved" for chain in chains.values()):
        return
    for name, chain in chains.items():
        click.echo(f"{name}: {chain.status[0]}; what binds is {chain.binding[0]}", err=True)
        for free in chain.frees[0]:
            click.echo(f"  it would be freed by: {free}", err=True)
    sys.exit(NO_ANSWER)


def _solved(heat: Path, *, as_predict: bool) -> Any:
    from converter_calc.planning import plan as planning

    return planning.predict(heat) if as_predict else planning.plan(heat)


@click.command()
@HEAT
@click.option("--predict", "as_predict", is_flag=True, help="The charge is complete.")
@JSON
@guarded
def slag(heat: Path, json_to: str | None, *, as_predict: bool) -> None:
    """Show the slag of HEAT as a product: analysis, basicities, free lime, iron and heat in it."""
    from converter_calc.metallurgy.slag_product import slag_product
    from converter_calc.reporting.practice_tables import slag_text

    product = slag_product(_solved(heat, as_predict=as_predict))
    document = {"heat_id": product.ids[0], "slag": product.document()}
    if not write_json(document, json_to):
        click.echo(slag_text(product), nl=False)


@click.command()
@HEAT
@click.argument("elements", nargs=-1)
@click.option("--predict", "as_predict", is_flag=True, help="The charge is complete.")
@click.option("--all", "everything", is_flag=True, help="All elements, not the main ones only.")
@JSON
@guarded
def shares(
    heat: Path,
    elements: tuple[str, ...],
    json_to: str | None,
    *,
    as_predict: bool,
    everything: bool,
) -> None:
    """Show where the elements of HEAT go: steel, slag, gas, dust; the main ones, or ELEMENTS."""
    from converter_calc.metallurgy.element_shares import element_shares
    from converter_calc.reporting.practice_tables import shares_text

    found = element_shares(_solved(heat, as_predict=as_predict), elements or None)
    if not (everything or elements):
        found = found.main()
    document = {"heat_id": found.ids[0], "elements": found.document()}
    if not write_json(document, json_to):
        click.echo(shares_text(found), nl=False)


def _masses(given: tuple[str, ...]) -> dict[str, float]:
    """Masses [kg] from texts like "recycled_slag=2000"."""
    found: dict[str, float] = {}
    for text in given:
        name, _, number = text.partition("=")
        try:
            kg = float(number)
        except ValueError:
            kg = -1.0
        if not 0.0 <= kg < MOST_ADDED_KG:
            message = f"must be MATERIAL=KG with 0 kg or more, given {text!r}"
            raise InputError([Fault("--add", message)])
        found[name.strip()] = kg
    return found


COMMANDS: tuple[click.Command, ...] = (phosphorus, lime, fluxes, practices, slag, shares)
