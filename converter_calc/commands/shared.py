"""What all commands share: arguments, errors as lines and exit codes, JSON out."""

from __future__ import annotations

import json
import os
import sys
from collections.abc import Callable
from functools import wraps
from pathlib import Path
from typing import Any

import click

from converter_calc.basis.errors import (
    ConverterError,
    Fault,
    InfeasibleError,
    InputError,
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
TUNED = click.option(
    "--tuned",
    type=click.Path(path_type=Path),
    help="What the heat log says of the shop (tune --out or follow --out), in place of the file.",
)
JSON = click.option(
    "--json", "json_to", metavar="FILE|-", help="Write the result as JSON; - is standard output."
)


#: Parameters of the commands that name a file to write, and their option.
_WRITTEN = {
    "json_to": "--json", "out": "--out", "html": "--html",
    "refused": "--refused", "refused_to": "--refused",
}  # fmt: skip


def guarded(command: Callable[..., None]) -> Callable[..., None]:
    """Turn every error of ours into lines on standard error and an exit code."""

    @wraps(command)
    def run(*args: Any, **kwargs: Any) -> None:
        try:
            _check_written(kwargs)
            command(*args, **kwargs)
        except InfeasibleError as error:
            _tell_infeasible(error)
            sys.exit(NO_ANSWER)
        except ConverterError as error:
            from converter_calc.basis.errors import ConvergenceError

            click.echo(str(error), err=True)
            sys.exit(NO_ANSWER if isinstance(error, ConvergenceError) else WRONG_INPUT)

    return run


def _check_written(given: dict[str, Any]) -> None:
    """Refuse, before any work is done, a file that cannot be written or that is read as well."""
    taken = {Path(x).resolve(): "is read by this command" for name, x in given.items()
             if isinstance(x, Path) and name not in _WRITTEN}  # fmt: skip
    for name, option in _WRITTEN.items():
        if given.get(name) in (None, "-"):
            continue
        path = Path(given[name])
        try:
            where = path.resolve()
            if where.is_dir():
                reason = "Is a directory"
            elif not where.parent.is_dir():
                reason = "No such file or directory"
            elif where in taken:
                reason = f"it {taken[where]}"
            elif not os.access(where if where.exists() else where.parent, os.W_OK):
                reason = "Permission denied"
            else:
                taken[where] = f"is written by {option} already"
                continue
        except (OSError, ValueError) as error:  # a name too long, or with a null byte
            reason = getattr(error, "strerror", None) or str(error)
        raise InputError([Fault(option, f"cannot write {path}: {reason}")])


def with_tuned(heat: Path, tuned: Path | None) -> Any:
    """The heat as it stands, or with tuned parameters in place of the shop's."""
    if tuned is None:
        return heat
    from converter_calc.learning.today import load_today
    from converter_calc.planning.plan import as_heats

    return load_today(tuned).tuned.apply(as_heats(heat))


def planned(heat: Path, tuned: Path | None, *, move_aims: bool = False) -> Any:
    """The heat planned; with the offsets of the day where a file of them is given."""
    from converter_calc.planning.plan import as_heats, plan

    if tuned is None:
        return plan(heat)
    from converter_calc.learning.today import load_today, plan_one

    return plan_one(as_heats(heat), load_today(tuned), move_aims=move_aims)


def _tell_infeasible(error: InfeasibleError) -> None:
    click.echo(str(error), err=True)
    for free in error.frees:
        click.echo(f"  it would be freed by: {free}", err=True)
    if error.nearest:
        near = ", ".join(f"{name} {x:.4g}" for name, x in error.nearest.items())
        click.echo(f"  nearest reachable end point: {near}", err=True)


def write_json(document: dict[str, Any], json_to: str | None) -> bool:
    """Write JSON where asked; True if standard output is taken."""
    if json_to is None:
        return False
    text = json.dumps(document, indent=1, allow_nan=False)
    if json_to == "-":
        click.echo(text)
        return True
    write_text(Path(json_to), text + "\n", "--json")
    return False


def write_text(path: Path, text: str, option: str) -> None:
    """Write a file. Raises InputError where that is not possible."""
    try:
        path.write_text(text, encoding="utf-8")
    except OSError as error:
        raise InputError([Fault(option, f"cannot write {path}: {error.strerror}")]) from error
