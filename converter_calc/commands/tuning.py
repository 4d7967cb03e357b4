"""Commands that learn from the heat log."""

from __future__ import annotations

import sys
from pathlib import Path
from typing import Any

import click

from converter_calc.commands.shared import JSON, guarded, write_json, write_text

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
    from converter_calc.learning import tuning

    read = _read(log, shop)
    share = tuning.SHARED_ERROR if shared_error is None else shared_error
    found = tuning.tune(read.frame, shop, only=only, without=without, shared_error=share)
    if out is not None:
        found.save(out)
    if not write_json(found.document(), json_to):
        from converter_calc.reporting.tuning_text import tuning_text

        click.echo(tuning_text(found), nl=False)


def _read(log: Path, shop: Path) -> Any:
    """The log, with a line on standard error where rows of it are refused."""
    from converter_calc.heatlog.reading import read_log

    read = read_log(log, shop)
    if read.rows_refused:
        first = read.refused.iloc[0]
        click.echo(
            f"{read.rows_refused} rows of {log} refused, first row {first['row']}: "
            f"{first['field']} {first['reason']}",
            err=True,
        )
    return read


@click.command()
@click.argument("log", type=click.Path(path_type=Path))
@SHOP
@click.option(
    "--from",
    "tuned",
    type=click.Path(path_type=Path),
    help="Tuned parameters to follow from (tune --out); tuned on the log where not given.",
)
@click.option(
    "--out",
    type=click.Path(path_type=Path),
    help="Keep the offsets of the day in this file, for --tuned of plan, predict and spread.",
)
@JSON
@guarded
def follow(
    log: Path, shop: Path, tuned: Path | None, out: Path | None, json_to: str | None
) -> None:
    """Follow the drift of a shop through its heat LOG up to today."""
    from converter_calc.learning.today import learn
    from converter_calc.learning.tuned import load_tuned
    from converter_calc.reporting.drift_text import drift_text

    start = None if tuned is None else load_tuned(tuned)
    today, followed, topped = learn(_read(log, shop).frame, str(shop), tuned=start)
    if out is not None:
        today.save(out)
    if not write_json(today.document(), json_to):
        click.echo(drift_text(today, followed, topped), nl=False)


@click.command()
@click.argument("log", type=click.Path(path_type=Path))
@SHOP
@click.option(
    "--start-share",
    type=click.FloatRange(10.0, 90.0),
    default=40.0,
    show_default=True,
    help="Share of the heats to learn from before the first stage, %.",
)
@click.option("--stage", type=click.IntRange(10, 100000), default=100, show_default=True,
              help="Heats predicted before everything is fitted anew.")  # fmt: skip
@click.option("--html", type=click.Path(path_type=Path), help="Write the report with its pictures.")
@JSON
@guarded
def prove(
    log: Path, shop: Path, start_share: float, stage: int, html: Path | None, json_to: str | None
) -> None:
    """Predict the later heats of a LOG from the earlier ones, stage by stage, and keep score."""
    from converter_calc.learning.proof import walk_forward
    from converter_calc.learning.rivals import rivals
    from converter_calc.reporting.proof_report import proof_document, proof_html, proof_text

    def tell(done: int, of: int) -> None:
        if sys.stderr.isatty():
            click.echo(f"\rstage {done} of {of}", nl=done == of, err=True)

    found = walk_forward(
        _read(log, shop).frame,
        str(shop),
        start_share=0.01 * start_share,
        stage=stage,
        competitors=rivals(),
        progress=tell,
    )
    if html is not None:
        write_text(html, proof_html(found), "--html")
    if not write_json(proof_document(found), json_to):
        click.echo(proof_text(found), nl=False)


COMMANDS: tuple[click.Command, ...] = (tune, follow, prove)
