"""Commands of the metallurgist: laws, lime, slag practices, fluxes."""

from __future__ import annotations

import click

COMMANDS: tuple[click.Command, ...] = ()
