"""``capmuster show``: one converter in detail."""

from __future__ import annotations

from typing import TYPE_CHECKING

import click

from capmuster.rank.commands.options import format_option

if TYPE_CHECKING:
    from capmuster.rank.scores.detail import Detail


@click.command(name="show", epilog="\b\nExamples:\n  capmuster show 'I-G/a-I I-G/O-a'\n  capmuster show 1-0h")
@click.argument("converter", metavar="WIRING_OR_ID")
@format_option
def command(converter: str, form: str) -> None:
    """Show charges, voltages and switches of one converter, exactly.

    All figures are per unit of output charge and per volt of input. A wiring code has one word for each
    capacitor, plus-minus/plus-minus: where its plates sit in phase 1 and in phase 2. G, I, O are ground,
    input and output; lower-case names are internal nodes of their phase.
    """
    from capmuster.rank.lookup import find_converter  # noqa: PLC0415
    from capmuster.rank.scores.detail import detail  # noqa: PLC0415 -- nothing heavy before it is needed

    found = detail(find_converter(converter))
    if form == "json":
        from capmuster.rank.files.rows import json_text  # noqa: PLC0415

        click.echo(json_text(found.as_json()))
    elif form == "csv":
        from capmuster.rank.files.rows import csv_text  # noqa: PLC0415

        click.echo(csv_text(found.HEADER, found.rows()), nl=False)
    else:
        _write_table(found)


def _write_table(found: Detail) -> None:
    from capmuster.rank.drawing.terminal import terminal_diagram  # noqa: PLC0415
    from capmuster.rank.files.rows import text_table  # noqa: PLC0415

    click.echo(f"{found.converter.id}   {found.converter.code}\n")
    click.echo(terminal_diagram(found.converter) + "\n")
    click.echo(text_table(["figure", "value"], found.figures(), [False, False]))
    click.echo()
    click.echo(text_table(found.HEADER, found.rows(), [False, False, False, False, False, True, True]))
    click.echo()
    click.echo(
        text_table(
            ["node", "wired to it", "U in phase 1", "U in phase 2"], found.nodes(), [False, False, True, True]
        )
    )
