"""The command line. No metallurgy here: it reads, asks, prints."""

from __future__ import annotations

import json
import sys
from collections.abc import Callable
from functools import wraps
from pathlib import Path
from typing import Any

import click

from converter_calc.basis.errors import (
    ConverterError,
    InfeasibleError,
)

WRONG_INPUT = 2
NO_ANSWER = 3

HEAT = click.argument("heat", type=click.Path(path_type=Path))
UNITS = click.option(
    "--units",
    type=click.Choice(["metric", "us"]),
    default="metric",
    help="Units shown: metric, or short tons, °F and scf.",
)
JSON = click.option(
    "--json", "json_to", metavar="FILE|-", help="Write the result as JSON; - is standard output."
)


def _guarded(command: Callable[..., None]) -> Callable[..., None]:
    """Turn every error of ours into lines on standard error and an exit code."""

    @wraps(command)
    def run(*args: Any, **kwargs: Any) -> None:
        try:
            command(*args, **kwargs)
        except InfeasibleError as error:
            _tell_infeasible(error)
            sys.exit(NO_ANSWER)
        except ConverterError as error:
            from converter_calc.basis.errors import ConvergenceError

            click.echo(str(error), err=True)
            sys.exit(NO_ANSWER if isinstance(error, ConvergenceError) else WRONG_INPUT)

    return run


def _tell_infeasible(error: InfeasibleError) -> None:
    click.echo(str(error), err=True)
    for free in error.frees:
        click.echo(f"  it would be freed by: {free}", err=True)
    if error.nearest:
        near = ", ".join(f"{name} {x:.4g}" for name, x in error.nearest.items())
        click.echo(f"  nearest reachable end point: {near}", err=True)


@click.group(context_settings={"help_option_names": ["-h", "--help"]})
@click.version_option(package_name="converter-calc")
def main() -> None:
    """Charge calculation for an oxygen converter, from first principles."""


def _write(document: dict[str, Any], json_to: str | None) -> bool:
    """Write JSON where asked; True if standard output is taken."""
    if json_to is None:
        return False
    text = json.dumps(document, indent=1, allow_nan=False)
    if json_to == "-":
        click.echo(text)
        return True
    try:
        Path(json_to).write_text(text + "\n", encoding="utf-8")
    except OSError as error:
        from converter_calc.basis.errors import Fault, InputError

        raise InputError([Fault("--json", f"cannot write {json_to}: {error.strerror}")]) from error
    return False


def _show(outcome: Any, json_to: str | None, units: str) -> None:
    if not _write(outcome.document(), json_to):
        from converter_calc.reporting.charge_sheet import charge_sheet

        click.echo(charge_sheet(outcome, units=units), nl=False)


@main.command()
@HEAT
@JSON
@UNITS
@_guarded
def plan(heat: Path, json_to: str | None, units: str) -> None:
    """Solve for what is missing from the charge of HEAT and print the charge sheet."""
    from converter_calc.planning.plan import plan as plan_heat

    _show(plan_heat(heat), json_to, units)


@main.command()
@HEAT
@JSON
@UNITS
@_guarded
def predict(heat: Path, json_to: str | None, units: str) -> None:
    """Print where the blow of HEAT ends; its charge is complete."""
    from converter_calc.planning.plan import predict as predict_heat

    _show(predict_heat(heat), json_to, units)


@main.command()
@HEAT
@click.argument("quantity")
@click.option("--predict", "as_predict", is_flag=True, help="The charge is complete.")
@_guarded
def explain(heat: Path, quantity: str, *, as_predict: bool) -> None:
    """Show how QUANTITY of HEAT comes about: lime, oxygen, scrap, temperature, phosphorus ..."""
    from converter_calc.planning import plan as planning
    from converter_calc.planning.explain import check_quantity
    from converter_calc.planning.explain import explain as explain_heat

    check_quantity(quantity)
    outcome = planning.predict(heat) if as_predict else planning.plan(heat)
    click.echo(explain_heat(outcome, quantity).text())


@main.command()
@HEAT
@_guarded
def sensitivity(heat: Path) -> None:
    """Show how end point and charge of a planned HEAT change with each input."""
    from converter_calc.planning.plan import plan as plan_heat
    from converter_calc.planning.sensitivities import sensitivities
    from converter_calc.reporting.text_tables import sensitivity_text

    click.echo(sensitivity_text(sensitivities(plan_heat(heat))), nl=False)


@main.command()
@click.argument("name", required=False)
@_guarded
def grades(name: str | None) -> None:
    """List the grades of the library, or show the limits of one."""
    from converter_calc.reporting.text_tables import grade_text

    click.echo(grade_text(name), nl=False)


@main.command()
@_guarded
def laws() -> None:
    """List the slag-metal laws with source and range."""
    from converter_calc.reporting.text_tables import law_text

    click.echo(law_text(), nl=False)


@main.command()
@click.option("--port", type=click.IntRange(1, 65535), default=8501, show_default=True)
@_guarded
def page(port: int) -> None:
    """Open the page in a browser at 127.0.0.1; stop it with Ctrl-C."""
    from converter_calc.page.launch import launch

    launch(port)
