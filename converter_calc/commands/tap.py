"""Commands of the tap: from the end of the blow to the ladle."""

from __future__ import annotations

import click

COMMANDS: tuple[click.Command, ...] = ()
