"""``capmuster rank``: the best converters for a brief."""

from __future__ import annotations

import textwrap
from typing import TYPE_CHECKING

import click

if TYPE_CHECKING:
    from capmuster.rank.shortlist import Shortlist

# The columns of the table and their headings: short, so that it fits a terminal.
_IN_TERMINAL = {
    "place": "place",
    "id": "id",
    "ratio": "ratio",
    "flying_capacitors": "flying\ncaps",
    "switches": "switches",
    "area_mm2": "area\n[mm²]",
    "conductance_per_area_S_per_mm2": "G/area\n[S/mm²]",
    "impedance_ohm": "R_out\n[Ω]",
    "efficiency_minimum": "least",
    "efficiency_nominal": "nominal",
    "efficiency_maximum": "highest",
    "ceiling_minimum": "least",
    "ceiling_maximum": "highest",
    "highest_blocking_voltage_V": "V_block\n[V]",
    "pareto": "Pareto\nset",
    "families": "families",
}
_GROUPS = (
    ("efficiency_minimum", "efficiency_maximum", "efficiency [%] at V_in"),
    ("ceiling_minimum", "ceiling_maximum", "ceiling [%] at V_in"),
)
_FLUSH_LEFT = {"id", "families", "pareto"}
_FAMILIES_WIDTH = 24
_LEGEND = (
    "G: output conductance 1/R_out at that area. Ceiling: required output over M V_in.\n"
    "V_block: highest voltage that a switch must block."
)


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
    from capmuster.rank.summary import assumptions, verdict  # noqa: PLC0415

    for name, value in assumptions(found.brief):
        click.echo(f"{name:20} {value}")
    click.echo()
    if len(found):
        click.echo(_table(found))
        click.echo(f"\n{_LEGEND}\n")
    for line in verdict(found):
        click.echo(line)
    for text in found.cautions:
        click.echo(f"Caution: {text}")


def _table(found: Shortlist) -> str:
    from capmuster.rank.export_text import cell  # noqa: PLC0415
    from capmuster.rank.rows import figures, text_table  # noqa: PLC0415
    from capmuster.rank.shortlist import COLUMNS  # noqa: PLC0415

    names = list(_IN_TERMINAL)
    column_of = {column.name: column for column in COLUMNS}
    cells = []
    for name in names:
        values = found.frame[name].tolist()
        if name == "families":
            cells.append([textwrap.fill(text, _FAMILIES_WIDTH, break_on_hyphens=False) for text in values])
        elif isinstance(values[0], float) and column_of[name].unit != "1":
            cells.append(figures(values))
        else:
            cells.append([cell(column_of[name], value) for value in values])
    return text_table(
        list(_IN_TERMINAL.values()),
        list(zip(*cells, strict=True)),
        [name not in _FLUSH_LEFT for name in names],
        [(names.index(first), names.index(last), text) for first, last, text in _GROUPS],
    )
