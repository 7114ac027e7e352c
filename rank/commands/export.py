"""``capmuster export``: the shortlist of a brief as files."""

from __future__ import annotations

import click


@click.command(
    name="export",
    epilog="\b\nExample:\n  capmuster export greenhouse-node --to shortlist.html --to shortlist.xlsx",
)
@click.argument("brief")
@click.option(
    "--to",
    "paths",
    multiple=True,
    required=True,
    metavar="FILE",
    help="Where to write, as the suffix says: .csv, .html, .json, .md, .parquet, .xlsx. "
    "May be given several times.",
)
@click.option("--top", type=int, default=10, show_default=True, metavar="K", help="Hold the best K.")
@click.option(
    "--include",
    multiple=True,
    metavar="WIRING",
    help="Rank this wiring (or id) with the rest; may be given several times.",
)
def command(brief: str, paths: tuple[str, ...], top: int, include: tuple[str, ...]) -> None:
    """Write the shortlist of BRIEF to files.

    BRIEF is the name of a shipped brief or a TOML file. Either every file is written or none.
    """
    from capmuster.rank.commands.ranking import ranked  # noqa: PLC0415 -- nothing heavy before it is needed
    from capmuster.rank.files.export import check_targets, export  # noqa: PLC0415
    from capmuster.rank.files.summary import verdict  # noqa: PLC0415

    check_targets(paths)
    found = ranked(brief, top, include)
    export(found, paths)
    for line in verdict(found):
        click.echo(line)
    for path in paths:
        click.echo(f"Written: {path}")
