"""Options that commands share."""

from __future__ import annotations

import click

format_option = click.option(
    "--format",
    "form",
    type=click.Choice(["table", "csv", "json"]),
    default="table",
    show_default=True,
    help="How rows are written.",
)
"""``--format``, given to the command as ``form``."""
