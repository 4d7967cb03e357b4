"""Commands of the tap: from the end of the blow to the ladle."""

from __future__ import annotations

from pathlib import Path

import click

from converter_calc.commands.shared import HEAT, JSON, UNITS, guarded, write_json


@click.command()
@HEAT
@JSON
@UNITS
@click.option("--predict", "as_predict", is_flag=True, help="The charge is complete.")
@click.option("--why", metavar="TOPIC", help="Show the terms behind oxygen, deoxidant, ...")
@guarded
def tap(heat: Path, json_to: str | None, units: str, why: str | None, *, as_predict: bool) -> None:
    """Plan HEAT, then show its tap: additions, temperature, ladle analysis against the grade."""
    from converter_calc.planning.tap import tap as tap_heat
    from converter_calc.planning.tap_report import check_topic

    if why is not None:
        check_topic(why)
    result = tap_heat(heat, predicted=as_predict)
    if write_json(result.document(), json_to):
        return
    if why is not None:
        click.echo(result.explain(why).text())
        return
    from converter_calc.reporting.tap_sheet import tap_sheet

    click.echo(tap_sheet(result, units=units), nl=False)


COMMANDS: tuple[click.Command, ...] = (tap,)
