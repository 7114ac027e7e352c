"""``capmuster list``: every converter of one ratio."""

from __future__ import annotations

from typing import TYPE_CHECKING

import click

from capmuster.rank.commands.options import format_option

if TYPE_CHECKING:
    from capmuster.rank.scores.listed import Listed
    from capmuster.rank.scores.listing import Listing

_SHOWN = 25


@click.command(
    name="list",
    epilog="\b\nExample:\n  capmuster list --ratio 2/5 --capacitors 4 --switches 11",
)
@click.option("--ratio", required=True, metavar="M", help="Output over input voltage: 2/5, 3, -1/2.")
@click.option(
    "--capacitors",
    required=True,
    type=int,
    metavar="N",
    help="Most flying capacitors (the output's not counted).",
)
@click.option("--switches", type=int, metavar="S", help="Most switches.")
@click.option(
    "--blocking-voltage", type=float, metavar="V", help="Largest blocking voltage, per volt of input."
)
@click.option("--capacitor-utilisation", type=float, metavar="U", help="Least capacitor utilisation, 0 to 1.")
@click.option("--switch-utilisation", type=float, metavar="U", help="Least switch utilisation, 0 to 1.")
@click.option(
    "--output-evenness",
    type=float,
    metavar="E",
    help="Least evenness of the output's feeding: 1 when both phases bring alike, 0 for one phase only.",
)
@click.option(
    "--plate-on-ports", is_flag=True, help="Only where every capacitor has a plate on a port in both phases."
)
@click.option(
    "--family", "families", multiple=True, metavar="NAME", help="Only members of a family; may be repeated."
)
@click.option(
    "--frontier",
    "frontier_only",
    is_flag=True,
    help="Only what no other beats in capacitors, switches, both utilisations and blocking voltage.",
)
@click.option(
    "--all",
    "include_unclean",
    is_flag=True,
    help="List converters with an idle or an equipotential switch too.",
)
@click.option(
    "--limit",
    type=int,
    metavar="K",
    help=f"Show the best K only. Without it a table shows {_SHOWN}; CSV and JSON hold everything.",
)
@format_option
def command(
    *,
    ratio: str,
    capacitors: int,
    switches: int | None,
    blocking_voltage: float | None,
    capacitor_utilisation: float | None,
    switch_utilisation: float | None,
    output_evenness: float | None,
    plate_on_ports: bool,
    families: tuple[str, ...],
    frontier_only: bool,
    include_unclean: bool,
    limit: int | None,
    form: str,
) -> None:
    """List every converter of one ratio, best first.

    Best is the greatest product of capacitor and switch utilisation; then come fewer capacitors, fewer
    switches, higher capacitor utilisation and the id. The list is complete up to the census; with more
    capacitors it goes on with the members of the known families.

    The census of five capacitors is built once and kept in the user's cache folder; the environment variable
    CAPMUSTER_CACHE names another one.
    """
    from capmuster.rank.inputs.quantity import parse_ratio  # noqa: PLC0415
    from capmuster.rank.progress import told  # noqa: PLC0415
    from capmuster.rank.scores.filters import Filters  # noqa: PLC0415 -- nothing heavy before it is needed
    from capmuster.rank.scores.listing import find_converters  # noqa: PLC0415

    filters = Filters(
        switches=switches,
        blocking_voltage=blocking_voltage,
        capacitor_utilisation=capacitor_utilisation,
        switch_utilisation=switch_utilisation,
        output_evenness=output_evenness,
        plate_on_ports=plate_on_ports,
        families=families,
    )
    with told() as say:
        listing = find_converters(
            parse_ratio(ratio),
            capacitors,
            filters=filters,
            include_unclean=include_unclean,
            frontier_only=frontier_only,
            limit=_SHOWN if limit is None and form == "table" else limit,
            say=say,
        )
    if form == "json":
        _write_json(listing)
    elif form == "csv":
        _write_csv(listing)
    else:
        _write_table(listing)


def _write_json(listing: Listing) -> None:
    from capmuster.rank.files.rows import Json, json_text  # noqa: PLC0415

    content: dict[str, Json] = {
        "ratio": str(listing.ratio),
        "max_capacitors": listing.max_capacitors,
        "complete_up_to": listing.complete_up_to,
        "count": listing.count,
        "count_all": listing.count_all,
        "converters": [
            {
                "id": row.id,
                "wiring": row.wiring,
                "flying_capacitors": row.flying_capacitors,
                "switches": row.switches,
                "ratio": str(row.ratio),
                "capacitor_utilisation": row.capacitor_utilisation,
                "switch_utilisation": row.switch_utilisation,
                "families": list(row.families),
            }
            for row in listing.converters
        ],
    }
    if listing.nearest:
        content["nearest"] = [str(ratio) for ratio in listing.nearest]
        content["capacitors_needed"] = listing.capacitors_needed
    click.echo(json_text(content))


def _write_csv(listing: Listing) -> None:
    from capmuster.rank.files.rows import csv_text  # noqa: PLC0415

    header = [
        "id",
        "wiring",
        "flying_capacitors",
        "switches",
        "ratio",
        "capacitor_utilisation",
        "switch_utilisation",
        "families",
    ]
    rows = [
        [
            row.id,
            row.wiring,
            str(row.flying_capacitors),
            str(row.switches),
            str(row.ratio),
            repr(row.capacitor_utilisation),
            repr(row.switch_utilisation),
            "; ".join(row.families),
        ]
        for row in listing.converters
    ]
    click.echo(csv_text(header, rows), nl=False)
    if listing.nearest:
        click.echo(_out_of_reach(listing), err=True)


def _write_table(listing: Listing) -> None:
    from capmuster.rank.files.rows import text_table  # noqa: PLC0415

    if listing.nearest:
        click.echo(_out_of_reach(listing))
        return
    header = [
        "id",
        "C",
        "S",
        "cap. util.",
        "switch util.",
        "max V cap.",
        "max V switch",
        "even",
        "families",
        "wiring",
    ]
    flush = [False, True, True, True, True, True, True, True, False, False]
    if listing.converters:
        click.echo(text_table(header, [_cells(row) for row in listing.converters], flush))
        click.echo()
    click.echo(_summary(listing))


def _cells(row: Listed) -> list[str]:
    return [
        row.id,
        str(row.flying_capacitors),
        str(row.switches),
        f"{row.capacitor_utilisation:.4f}",
        f"{row.switch_utilisation:.4f}",
        f"{row.highest_capacitor_voltage:.3f}",
        f"{row.highest_blocking_voltage:.3f}",
        f"{row.output_evenness:.2f}",
        ", ".join(row.families) or "-",
        row.wiring,
    ]


def _summary(listing: Listing) -> str:
    unclean = listing.count_all - listing.count
    first = (
        f"Ratio {listing.ratio}, up to {_counted(listing.max_capacitors, 'flying capacitor')}: "
        f"{_counted(listing.count, 'converter')}, "
        f"{unclean} more with an idle or an equipotential switch (--all); "
        f"{len(listing.converters)} of {listing.total} shown."
    )
    lines = [first]
    if listing.complete_up_to < listing.max_capacitors:
        lines.append(
            f"Complete up to {_counted(listing.complete_up_to, 'flying capacitor')}; "
            "above that, family members only."
        )
    if listing.converters:
        lines.append(
            "C: flying capacitors, S: switches; voltages per volt of input; "
            "even: how alike both phases feed the output."
        )
    return "\n".join(lines)


def _out_of_reach(listing: Listing) -> str:
    from capmuster.enumerate.attainable import ENUMERATED  # noqa: PLC0415

    nearest = " and ".join(str(ratio) for ratio in listing.nearest)
    known = "" if listing.capacitors_needed <= ENUMERATED else "at most "
    needed = _counted(listing.capacitors_needed, "flying capacitor")
    said = (
        f"0 converters: ratio {listing.ratio} takes {known}{needed}; "
        f"nearest with at most {listing.complete_up_to}: {nearest}."
    )
    if listing.complete_up_to < listing.capacitors_needed <= ENUMERATED:
        said += f" To go through them: capmuster survey {ENUMERATED} --ratio {listing.ratio}"
    return said


def _counted(number: int, thing: str) -> str:
    return f"{number} {thing}{'' if number == 1 else 's'}"
