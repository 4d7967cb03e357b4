"""Commands that learn from the heat log."""

from __future__ import annotations

from pathlib import Path

import click

from converter_calc.commands.shared import JSON, guarded, write_json

SHOP = click.option(
    "--shop",
    type=click.Path(path_type=Path),
    required=True,
    help="Shop file: its materials, and where its parameters are believed to be.",
)


@click.command()
@click.argument("log", type=click.Path(path_type=Path))
@SHOP
@click.option("--only", multiple=True, metavar="NAME", help="Tune this one; may be repeated.")
@click.option("--without", multiple=True, metavar="NAME", help="Leave this one as it is.")
@click.option(
    "--shared-error",
    type=float,
    default=None,
    help="Correlation of the errors of any two heats, 0 to 1.",
)
@click.option(
    "--out",
    type=click.Path(path_type=Path),
    help="Keep the parameters in this file, for --tuned of plan, predict and spread.",
)
@JSON
@guarded
def tune(
    log: Path,
    shop: Path,
    only: tuple[str, ...],
    without: tuple[str, ...],
    shared_error: float | None,
    out: Path | None,
    json_to: str | None,
) -> None:
    """Take the parameters of a shop from its heat LOG (CSV, Parquet or XLSX)."""
    from converter_calc.heatlog.reading import read_log
    from converter_calc.learning import tuning

    read = read_log(log, shop)
    if read.rows_refused:
        first = read.refused.iloc[0]
        click.echo(
            f"{read.rows_refused} rows of {log} refused, first row {first['row']}: "
            f"{first['field']} {first['reason']}",
            err=True,
        )
    share = tuning.SHARED_ERROR if shared_error is None else shared_error
    found = tuning.tune(read.frame, shop, only=only, without=without, shared_error=share)
    if out is not None:
        found.save(out)
    if not write_json(found.document(), json_to):
        from converter_calc.reporting.tuning_text import tuning_text

        click.echo(tuning_text(found), nl=False)


COMMANDS: tuple[click.Command, ...] = (tune,)
