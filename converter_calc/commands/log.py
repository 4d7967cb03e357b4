"""Commands on the heat log and the register."""

from __future__ import annotations

import json
from collections.abc import Callable
from pathlib import Path
from typing import Any

import click

from converter_calc.basis.errors import Fault, InputError
from converter_calc.commands.shared import HEAT, JSON, UNITS, WRONG_INPUT, guarded, write_json
from converter_calc.data.tables import read_csv_rows

_FILE = click.Path(path_type=Path)
REGISTER = click.option(
    "--register",
    "register",
    type=_FILE,
    default="converter_register.sqlite",
    show_default=True,
    envvar="CONVERTER_REGISTER",
    show_envvar=True,
    help="File of the register.",
)
SHOP = click.option(
    "--shop", type=_FILE, help="Shop file, where the log names materials of the shop's own."
)
#: Columns beside the outcomes that have an option of their own.
_ALSO_TYPED = ("tapped_at", "vessel", "grade", "oxygen_Nm3")


def _open(path: Path, *, create: bool = False) -> Any:
    from converter_calc.register.register import Register

    new = create and not path.exists()
    book = Register.open(path, create=create)
    if new:
        click.echo(f"new register {path}", err=True)
    return book


@click.command()
@HEAT
@REGISTER
@JSON
@UNITS
@guarded
def record(heat: Path, register: Path, json_to: str | None, units: str) -> None:
    """Plan HEAT, print the charge sheet and keep the plan in the register."""
    from converter_calc.planning.plan import plan
    from converter_calc.register.snapshots import whole_document
    from converter_calc.reporting.charge_sheet import charge_sheet

    document = whole_document(heat)
    outcome = plan(document)
    with _open(register, create=True) as book:
        number = book.record_plan(outcome, inputs=document)
    if not write_json({"plan_id": number, **outcome.document()}, json_to):
        click.echo(charge_sheet(outcome, units=units), nl=False)
        click.echo(f"\nkept as plan {number} of heat {outcome.heats.ids[0]} in {register}")


def _outcome_options(command: Callable[..., None]) -> Callable[..., None]:
    """An option for each outcome of the heat log; text, so that the log's own checks speak."""
    for row in reversed(read_csv_rows("log_columns.csv")):
        name, unit = row["name"], row["unit"]
        if row["group"] == "outcome" or name in _ALSO_TYPED:
            flag = "--" + name.replace("_", "-")
            text = f"{row['description']}{f' [{unit}]' if unit else ''}."
            command = click.option(flag, f"value_{name}", help=text)(command)
    return command


@click.command()
@click.argument("heat_id")
@REGISTER
@SHOP
@click.option(
    "--from", "source", type=_FILE, help="File with the values: TOML, or a heat log with the heat."
)
@click.option(
    "--set", "given", multiple=True, metavar="NAME=VALUE",
    help="Any other column of the heat log, as heavy_scrap_kg=41200; may be repeated.",
)  # fmt: skip
@click.option("--clear", multiple=True, metavar="NAME", help="Take back a value that was wrong.")
@_outcome_options
@guarded
def actual(
    heat_id: str,
    register: Path,
    shop: Path | None,
    source: Path | None,
    given: tuple[str, ...],
    clear: tuple[str, ...],
    **options: str | None,
) -> None:
    """Record what became of the heat HEAT_ID; values are laid over those recorded before."""
    typed = {name.removeprefix("value_"): x for name, x in options.items() if x is not None}
    for pair in given:
        name, sign, value = pair.partition("=")
        if not sign or not name.strip():
            raise InputError([Fault("--set", f"must be NAME=VALUE, given {pair[:60]!r}")])
        typed[name.strip()] = value
    blank = [Fault(name, "no value given; --clear takes back a recorded one")
             for name, value in typed.items() if not value.strip()]  # fmt: skip
    if blank:
        raise InputError(blank)
    with _open(register, create=True) as book:
        values: dict[str, Any] = {}
        if source is not None:
            values = _values_of_file(source, heat_id, shop, book.materials())
        values |= typed
        if not values and not clear:
            message = "no value given; see converter-calc actual --help"
            raise InputError([Fault("actual", message)])
        origin = source.name if source is not None else "typed"
        number = book.record_actual(heat_id, values, clear=clear, origin=origin, shop=shop)
    click.echo(f"kept as record {number} of heat {heat_id} in {register}")


def _values_of_file(
    source: Path, heat_id: str, shop: Path | None, materials: tuple[str, ...]
) -> dict[str, Any]:
    """Values of one heat from a TOML file or from its row of a heat log."""
    if source.suffix.lower() == ".toml":
        from converter_calc.balance.documents import read_document

        values = read_document(source)
        named = values.pop("heat_id", heat_id)
        if str(named) != heat_id:
            message = f"is of heat {named}, not of {heat_id}"
            raise InputError([Fault(str(source), message)])
        return values
    from converter_calc.heatlog.columns import material_names
    from converter_calc.heatlog.reading import fault_text, read_log
    from converter_calc.register.contents import contents_of

    read = read_log(source, materials=(*material_names(shop), *materials))
    faults = read.refused[read.refused["heat_id"] == heat_id]
    if len(faults):
        raise InputError(
            Fault(str(name), f"{fault_text(why, given)} (row {row})")
            for row, _, name, given, why in faults.to_numpy().tolist()
        )
    found = dict(contents_of(read.frame)).get(heat_id)
    if found is None:
        raise InputError([Fault(str(source), f"holds no heat {heat_id}")])
    return found


@click.group("log")
def log() -> None:
    """Read heat logs into the register and out of it; list, compare and back up."""


@log.command("import")
@click.argument("source", type=_FILE)
@REGISTER
@SHOP
@click.option("--strict", is_flag=True, help="Record nothing if any row is refused.")
@click.option("--decimal-comma", is_flag=True, help="Numbers have a comma as decimal mark.")
@click.option("--skip-unknown", is_flag=True, help="Leave out columns that a log does not have.")
@click.option("--refused", "refused_to", type=_FILE, help="Write the refused rows as CSV.")
@guarded
def import_(
    source: Path,
    register: Path,
    shop: Path | None,
    refused_to: Path | None,
    *,
    strict: bool,
    decimal_comma: bool,
    skip_unknown: bool,
) -> None:
    """Record the heats of SOURCE (CSV, Parquet, XLSX), all in one step.

    Good rows are recorded, refused rows are told with the reason; exit code 2 where --strict
    kept everything out.
    """
    from converter_calc.reporting.exports import csv_text
    from converter_calc.reporting.register_text import import_text

    with _open(register, create=True) as book:
        report = book.import_log(
            source, shop=shop, strict=strict, decimal_mark="," if decimal_comma else ".",
            skip_unknown=skip_unknown,
        )  # fmt: skip
    if refused_to is not None:
        _write_text(refused_to, csv_text(report.refused))
    click.echo(import_text(report, source, strict=strict), nl=False, err=not report.taken)
    if not report.taken:
        click.get_current_context().exit(WRONG_INPUT)


def _write_text(path: Path, text: str) -> None:
    try:
        path.write_text(text, encoding="utf-8", newline="")
    except OSError as error:
        raise InputError([Fault(str(path), f"cannot be written: {error.strerror}")]) from error


@log.command()
@click.argument("target", type=_FILE)
@REGISTER
@guarded
def export(target: Path, register: Path) -> None:
    """Write all recorded heats as a heat log to TARGET (.csv, .parquet or .xlsx)."""
    with _open(register) as book:
        n = book.export_log(target)
    click.echo(f"{n} heats written to {target}")


@log.command()
@click.argument("target", type=_FILE)
@REGISTER
@guarded
def backup(target: Path, register: Path) -> None:
    """Copy the register to the new file TARGET and check the copy."""
    with _open(register) as book:
        book.backup(target)
    click.echo(f"{register} copied to {target} and found sound")


@log.command("list")
@REGISTER
@click.option("--last", type=click.IntRange(min=1), default=30, show_default=True,
              help="How many heats.")  # fmt: skip
@click.option("--parameters", is_flag=True, help="List the parameter sets instead.")
@guarded
def list_(register: Path, last: int, *, parameters: bool) -> None:
    """List the heats of the register, the latest last."""
    from converter_calc.reporting.register_text import heats_text, parameters_text

    with _open(register) as book:
        if parameters:
            click.echo(parameters_text(book.parameter_sets()), nl=False)
            return
        click.echo(heats_text(book.overview(last)), nl=False)


@log.command()
@click.argument("heat_id")
@REGISTER
@JSON
@guarded
def show(heat_id: str, register: Path, json_to: str | None) -> None:
    """Show all plans and actuals of HEAT_ID, corrected ones too."""
    from converter_calc.reporting.exports import json_text
    from converter_calc.reporting.register_text import heat_text

    with _open(register) as book:
        plans, latest = book.plans(heat_id), book.latest_plan(heat_id)
        actuals = book.actuals(heat_id, history=True)
    if not len(plans) and not len(actuals):
        raise InputError([Fault("heat_id", f"the register holds no heat {heat_id}")])
    actuals["tapped_at"] = actuals["tapped_at"].astype(str).where(actuals["tapped_at"].notna())
    document = {
        "heat_id": heat_id,
        "plans": json.loads(json_text(plans)),
        "inputs": latest.inputs if latest else None,
        "result": latest.result if latest else None,
        "actuals": json.loads(json_text(actuals)),
    }
    if not write_json(document, json_to):
        click.echo(heat_text(heat_id, plans, latest, actuals), nl=False)


@log.command()
@click.argument("heat_id")
@REGISTER
@click.option("--plan", "plan_id", type=int, help="Number of the plan; the latest if not given.")
@JSON
@guarded
def compare(heat_id: str, register: Path, plan_id: int | None, json_to: str | None) -> None:
    """Show plan and actual of HEAT_ID side by side, and what the charge made should have given."""
    from converter_calc.reporting.exports import json_text
    from converter_calc.reporting.register_text import comparison_text

    with _open(register) as book:
        found = book.compare(heat_id, plan_id)
    document = {
        "heat_id": found.heat_id,
        "plan_id": found.plan_id,
        "planned_at": found.planned_at,
        "rows": json.loads(json_text(found.rows)),
        "notes": found.notes,
    }
    if not write_json(document, json_to):
        click.echo(comparison_text(found), nl=False)


COMMANDS: tuple[click.Command, ...] = (record, actual, log)
