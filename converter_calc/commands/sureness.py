"""Commands on how sure a plan is."""

from __future__ import annotations

import click

COMMANDS: tuple[click.Command, ...] = ()
