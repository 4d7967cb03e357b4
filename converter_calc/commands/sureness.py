"""Commands on how sure a plan is."""

from __future__ import annotations

from pathlib import Path

import click

from converter_calc.commands.shared import HEAT, JSON, guarded, write_json


@click.command()
@HEAT
@click.option("--draws", type=int, default=20000, show_default=True, help="Least number of draws.")
@click.option("--seed", type=int, default=1, show_default=True, help="Same seed, same numbers.")
@click.option(
    "--probability",
    type=float,
    default=90.0,
    show_default=True,
    help="Wanted of each window, in %; the margin to plan with follows from it.",
)
@click.option("--predict", "as_predict", is_flag=True, help="The charge is complete.")
@click.option(
    "--tuned",
    type=click.Path(path_type=Path),
    help="Tuned parameters of the shop; what the log could not tell adds to the spread.",
)
@JSON
@guarded
def spread(
    heat: Path,
    draws: int,
    seed: int,
    probability: float,
    tuned: Path | None,
    json_to: str | None,
    *,
    as_predict: bool,
) -> None:
    """Show with what chance the planned HEAT hits its aims, and what makes the scatter."""
    from converter_calc.learning.spread import planned_heat
    from converter_calc.learning.spread import spread as spread_of
    from converter_calc.learning.spread_margin import check_probability, margin
    from converter_calc.planning.plan import as_heats

    check_probability(0.01 * probability)
    heats, extra = as_heats(heat), None
    if tuned is not None:
        from converter_calc.learning.today import load_today

        learnt = load_today(tuned).tuned
        heats, extra = learnt.apply(heats), (learnt.names, learnt.covariance)
    outcome = planned_heat(heats, charged=as_predict)
    found = spread_of(outcome, draws, seed, extra=extra)
    moved = None if as_predict else margin(found, 0.01 * probability, extra=extra)
    document = found.document() | ({} if moved is None else {"margin": moved.document()})
    if not write_json(document, json_to):
        from converter_calc.reporting.spread_text import spread_text

        click.echo(spread_text(found, moved), nl=False)


COMMANDS: tuple[click.Command, ...] = (spread,)
