"""Commands that learn from the heat log."""

from __future__ import annotations

import click

COMMANDS: tuple[click.Command, ...] = ()
