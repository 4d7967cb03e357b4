"""Commands on the heat log and the register."""

from __future__ import annotations

import click

COMMANDS: tuple[click.Command, ...] = ()
