"""``capmuster deck``: a SPICE deck that measures a converter."""

from __future__ import annotations

from pathlib import Path

import click

from capmuster.rank.commands.circuitoptions import circuit_options, read_values


@click.command(
    name="deck",
    epilog="\b\nExamples:\n  capmuster deck 'I-G/a-I I-G/O-a' --to tripler.cir\n"
    "  capmuster deck greenhouse-node --place 2 --to second.cir && ngspice -b second.cir",
)
@click.argument("subject", metavar="WIRING_OR_ID|BRIEF")
@circuit_options
@click.option(
    "--place", type=int, default=1, show_default=True, metavar="K", help="Which finalist of a brief."
)
@click.option("--to", "target", metavar="FILE", help="Where to write; without it the deck is printed.")
def command(*, subject: str, place: int, target: str | None, **options: str | None) -> None:
    """Write a SPICE deck that measures a converter.

    It runs unchanged in ngspice's batch mode.

    The deck holds the converter as a subcircuit with a parameter for every value, and a bench that measures
    no-load ratio, output resistance, efficiency and the peak voltage of each switch. Without values a wiring
    has 1 uF capacitors and 100 mohm switches; a brief stands for a finalist as sized.
    """
    from capmuster.rank.exact.deck import subject_deck  # noqa: PLC0415 -- nothing heavy before it is needed
    from capmuster.rank.exact.subject import subjects  # noqa: PLC0415
    from capmuster.rank.files.export import check_writable, write_all  # noqa: PLC0415

    if target is not None:
        check_writable(Path(target))
    text = subject_deck(subjects(subject, read_values(options), top=place)[-1])
    if target is None:
        click.echo(text, nl=False)
    else:
        write_all([Path(target)], [text.encode("ascii")])
        click.echo(f"Written: {target}")
