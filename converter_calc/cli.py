"""The command line. No metallurgy here: it puts the commands together."""

from __future__ import annotations

import click

from converter_calc.commands import heat, log, phosphorus, replaying, sureness, tap, tuning


@click.group(context_settings={"help_option_names": ["-h", "--help"]})
@click.version_option(package_name="converter-calc")
def main() -> None:
    """Charge calculation for an oxygen converter, from first principles."""


for module in (heat, phosphorus, tap, sureness, log, tuning, replaying):
    for command in module.COMMANDS:
        main.add_command(command)
