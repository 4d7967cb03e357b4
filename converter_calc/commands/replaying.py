"""The command that replays a heat log of any length."""

from __future__ import annotations

import sys
from collections.abc import Callable
from pathlib import Path

import click

from converter_calc.commands.shared import JSON, guarded, write_json


@click.command()
@click.argument("log", type=click.Path(path_type=Path))
@click.option("--shop", type=click.Path(path_type=Path), required=True, help="Shop file.")
@click.option(
    "--out", type=click.Path(path_type=Path), required=True, help="Parquet file to write."
)
@click.option("--tuned", type=click.Path(path_type=Path), help="Tuned parameters of the shop.")
@click.option("--refused", type=click.Path(path_type=Path), help="CSV file for rows not taken.")
@click.option(
    "--workers",
    type=int,
    default=1,
    show_default=True,
    help="Processes to share a long log out to; above 1 needs the extra `cluster`.",
)
@JSON
@guarded
def replay(
    log: Path,
    shop: Path,
    out: Path,
    tuned: Path | None,
    refused: Path | None,
    workers: int,
    json_to: str | None,
) -> None:
    """Predict every heat of LOG (CSV or Parquet, any length) and compare with what it became."""
    from converter_calc.learning.streaming import replay_file, tuned_values

    values = None if tuned is None else tuned_values(tuned, shop)
    if workers == 1:
        came = replay_file(log, shop, out, values, refused_to=refused, progress=_counter())
    else:
        from converter_calc.learning.cluster import local_cluster, replay_on_cluster

        with local_cluster(workers) as client:
            came = replay_on_cluster(
                client, log, shop, out, values, refused_to=refused, progress=_counter()
            )
    if not write_json(came.document(), json_to):
        from converter_calc.reporting.replay_text import replay_text

        click.echo(replay_text(came, str(out), tuned=tuned is not None), nl=False)


def _counter() -> Callable[[int], None] | None:
    """Shows how many heats are done while somebody looks on."""
    if not sys.stderr.isatty():
        return None
    return lambda heats: click.echo(f"\r{heats:,} heats ", nl=False, err=True)


COMMANDS: tuple[click.Command, ...] = (replay,)
