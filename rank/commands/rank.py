"""``capmuster rank``: the best converters for a brief."""

from __future__ import annotations

from typing import TYPE_CHECKING

import click

if TYPE_CHECKING:
    from capmuster.rank.shortlist import Shortlist

_IN_TERMINAL = (
    "place", "id", "ratio", "families", "flying_capacitors", "switches", "area_mm2", "conductance_per_area_S_per_mm2",
    "impedance_ohm", "efficiency_minimum", "efficiency_nominal", "efficiency_maximum", "highest_blocking_voltage_V",
    "pareto",
)  # fmt: skip


@click.command(
    name="rank",
    epilog="\b\nExamples:\n  capmuster rank greenhouse-node --top 5\n"
    "  capmuster rank my-rail.toml --include 'I-G/O-I' --format csv",
)
@click.argument("brief")
@click.option("--top", type=int, default=10, show_default=True, metavar="K", help="Show the best K.")
@click.option(
    "--include",
    multiple=True,
    metavar="WIRING",
    help="Rank this wiring (or id) with the rest and say where it stands; may be given several times.",
)
@click.option(
    "--format",
    "form",
    type=click.Choice(["table", "csv", "json"]),
    default="table",
    show_default=True,
    help="How rows are written.",
)
def command(brief: str, top: int, include: tuple[str, ...], form: str) -> None:
    """Rank every converter that can do the job of BRIEF by area efficiency.

    BRIEF is the name of a shipped brief or a TOML file. The least area that meets the droop budget comes
    first.
    """
    from capmuster.rank.commands.ranking import ranked  # noqa: PLC0415 -- nothing heavy before it is needed

    found = ranked(brief, top, include)
    if form == "json":
        from capmuster.rank.export_text import to_json  # noqa: PLC0415

        click.echo(to_json(found).decode(), nl=False)
    elif form == "csv":
        from capmuster.rank.export_text import to_csv  # noqa: PLC0415

        click.echo(to_csv(found).decode(), nl=False)
    else:
        _write_table(found)


def _write_table(found: Shortlist) -> None:
    from capmuster.rank.export_text import cell, heading  # noqa: PLC0415
    from capmuster.rank.rows import text_table  # noqa: PLC0415
    from capmuster.rank.shortlist import COLUMNS  # noqa: PLC0415
    from capmuster.rank.summary import assumptions, verdict  # noqa: PLC0415

    for name, value in assumptions(found.brief):
        click.echo(f"{name:20} {value}")
    click.echo()
    if len(found):
        shown = [column for column in COLUMNS if column.name in _IN_TERMINAL]
        rows = [[cell(c, row[c.name]) for c in shown] for row in found.frame.to_dict("records")]
        flush = [column.name not in {"id", "families", "pareto"} for column in shown]
        click.echo(text_table([heading(column) for column in shown], rows, flush))
        click.echo()
    for line in verdict(found):
        click.echo(line)
    for text in found.cautions:
        click.echo(f"Caution: {text}")
