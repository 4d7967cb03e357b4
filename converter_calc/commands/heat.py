"""Commands about one heat: plan it, predict it, explain it; and the lists behind them."""

from __future__ import annotations

from pathlib import Path
from typing import Any

import click

from converter_calc.commands.shared import (
    HEAT,
    JSON,
    TUNED,
    UNITS,
    guarded,
    planned,
    with_tuned,
    write_json,
)


def _show(outcome: Any, json_to: str | None, units: str) -> None:
    if not write_json(outcome.document(), json_to):
        from converter_calc.reporting.charge_sheet import charge_sheet

        click.echo(charge_sheet(outcome, units=units), nl=False)


@click.command()
@HEAT
@JSON
@UNITS
@TUNED
@click.option("--move-aims", is_flag=True, help="Aim the balance past what the log shows is left.")
@guarded
def plan(
    heat: Path, json_to: str | None, units: str, tuned: Path | None, *, move_aims: bool
) -> None:
    """Solve for what is missing from the charge of HEAT and print the charge sheet."""
    _show(planned(heat, tuned, move_aims=move_aims), json_to, units)


@click.command()
@HEAT
@JSON
@UNITS
@TUNED
@guarded
def predict(heat: Path, json_to: str | None, units: str, tuned: Path | None) -> None:
    """Print where the blow of HEAT ends; its charge is complete."""
    from converter_calc.planning.plan import predict as predict_heat

    _show(predict_heat(with_tuned(heat, tuned)), json_to, units)


@click.command()
@HEAT
@click.argument("quantity")
@click.option("--predict", "as_predict", is_flag=True, help="The charge is complete.")
@TUNED
@guarded
def explain(heat: Path, quantity: str, tuned: Path | None, *, as_predict: bool) -> None:
    """Show how QUANTITY of HEAT comes about: lime, oxygen, scrap, temperature, phosphorus ..."""
    from converter_calc.planning import plan as planning
    from converter_calc.planning.explain import check_quantity
    from converter_calc.planning.explain import explain as explain_heat

    check_quantity(quantity)
    asked = with_tuned(heat, tuned)
    outcome = planning.predict(asked) if as_predict else planning.plan(asked)
    click.echo(explain_heat(outcome, quantity).text())


@click.command()
@HEAT
@TUNED
@guarded
def sensitivity(heat: Path, tuned: Path | None) -> None:
    """Show how end point and charge of a planned HEAT change with each input."""
    from converter_calc.planning.plan import plan as plan_heat
    from converter_calc.planning.sensitivities import sensitivities
    from converter_calc.reporting.text_tables import sensitivity_text

    click.echo(sensitivity_text(sensitivities(plan_heat(with_tuned(heat, tuned)))), nl=False)


@click.command()
@click.argument("name", required=False)
@guarded
def grades(name: str | None) -> None:
    """List the grades of the library, or show the limits of one."""
    from converter_calc.reporting.text_tables import grade_text

    click.echo(grade_text(name), nl=False)


@click.command()
@guarded
def laws() -> None:
    """List the slag-metal laws with source and range."""
    from converter_calc.reporting.text_tables import law_text

    click.echo(law_text(), nl=False)


@click.command()
@click.option("--port", type=click.IntRange(1, 65535), default=8501, show_default=True)
@click.option(
    "--register",
    type=click.Path(path_type=Path),
    envvar="CONVERTER_REGISTER",
    show_envvar=True,
    help="File of the register, else converter_register.sqlite here; the page offers the "
    "registers of its folder.",
)
@guarded
def page(port: int, register: Path | None) -> None:
    """Open the page in a browser at 127.0.0.1; stop it with Ctrl-C."""
    from converter_calc.page.launch import launch

    launch(port, register)


COMMANDS = (plan, predict, explain, sensitivity, grades, laws, page)
