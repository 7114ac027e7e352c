"""``capmuster parts``: the parts to buy for the best converters of a board."""

from __future__ import annotations

from typing import TYPE_CHECKING

import click

from capmuster.rank.commands.options import format_option

if TYPE_CHECKING:
    from capmuster.rank.discrete.finalists import PartsShortlist
    from capmuster.rank.inputs.brief import Brief
    from capmuster.rank.inputs.parts_request import PartsRequest
    from capmuster.rank.inputs.quantity import Sign, Unit

_IN_TERMINAL = (
    "place", "id", "ratio", "families", "flying_capacitors", "switches", "parts", "footprint_mm2",
    "price_EUR", "loss_W", "impedance_ohm", "exact_impedance_ohm", "efficiency_minimum", "efficiency_maximum",
    "proven",
)  # fmt: skip
_TEXTUAL = {"id", "ratio", "families", "proven"}


@click.command(
    name="parts",
    epilog="\b\nExamples:\n  capmuster parts pump-shelf\n  capmuster parts pump-shelf --to parts.xlsx\n"
    "  capmuster parts pump-shelf --least footprint --efficiency '98 %' --format json",
)
@click.argument("brief")
@click.option("--top", type=int, default=3, show_default=True, metavar="K", help="Show the best K.")
@click.option("--least", type=click.Choice(["loss", "footprint", "price"]), help="What is made least.")
@click.option("--footprint", metavar="AREA", help="Most footprint of all parts, such as '500 mm2'.")
@click.option("--price", metavar="PRICE", help="Most price of all parts, such as '12 EUR'.")
@click.option("--loss", metavar="POWER", help="Most loss, such as '2 W', where it is not made least.")
@click.option("--efficiency", metavar="SHARE", help="Least efficiency, such as '98 %', likewise.")
@click.option("--frequency", "frequencies", multiple=True, metavar="F", help="Choose from these; repeat.")
@click.option("--temperature", metavar="T", help="Junction temperature of the MOSFETs, such as '100 degC'.")
@click.option("--capacitor-derating", metavar="SHARE", help="Share of its rating that a capacitor may see.")
@click.option("--switch-derating", metavar="SHARE", help="Share of its rating that a MOSFET may see.")
@click.option("--series", type=int, metavar="S", help="Most parts in series in one element.")
@click.option("--include", multiple=True, metavar="WIRING", help="Rank this wiring (or id) with the rest.")
@click.option("--elements", is_flag=True, help="With csv: one row per capacitor and switch.")
@click.option(
    "--to",
    "paths",
    multiple=True,
    metavar="FILE",
    help="Write files instead: .csv (a row per element), .json or .xlsx; repeat.",
)
@format_option
def command(
    brief: str,
    top: int,
    include: tuple[str, ...],
    form: str,
    *,
    elements: bool,
    paths: tuple[str, ...],
    **changes: object,
) -> None:
    """Choose the discrete parts of the best converters for BRIEF, with proof.

    BRIEF is the name of a shipped brief or a TOML file whose technology is a board. Part and count of every
    capacitor and switch are chosen together, from the catalogs that its table [parts] names; options here
    come before that table.
    """
    from capmuster.rank.discrete.choose import choose_parts  # noqa: PLC0415
    from capmuster.rank.inputs.brief import load_brief  # noqa: PLC0415 -- nothing heavy before it is needed
    from capmuster.rank.lookup import find_converter  # noqa: PLC0415

    if paths:
        from capmuster.rank.discrete.files import check_parts_targets  # noqa: PLC0415

        check_parts_targets(paths)
    job = load_brief(brief)
    request = _changed(_request(job), changes)
    found = choose_parts(job, request, top=top, include=[find_converter(text) for text in include])
    if paths:
        from capmuster.rank.discrete.files import write_parts  # noqa: PLC0415

        write_parts(found, paths)
        click.echo("\n".join([found.certificate, *(f"Written: {path}" for path in paths)]))
    elif form == "json":
        from capmuster.rank.discrete.report import document  # noqa: PLC0415
        from capmuster.rank.files.rows import json_text  # noqa: PLC0415

        click.echo(json_text(document(found)))  # type: ignore[arg-type]  # plain content all the way down
    elif form == "csv":
        _write_csv(found, elements=elements)
    else:
        _write_table(found)


def _request(job: Brief) -> PartsRequest:
    """Return what the brief asks of the parts, or plain settings where a board's brief says nothing."""
    from capmuster.enumerate.errors import CapmusterError  # noqa: PLC0415
    from capmuster.rank.inputs.parts import load_stock  # noqa: PLC0415
    from capmuster.rank.inputs.parts_request import PartsRequest  # noqa: PLC0415

    if job.parts is not None:
        return job.parts
    if job.technology.kind != "board":
        raise CapmusterError(
            f"brief '{job.name}' is for a chip ({job.technology.name}), which has no discrete parts",
            accepted="a brief whose technology is a board, or one with a table [parts]",
        )
    return PartsRequest(load_stock())


def _changed(request: PartsRequest, changes: dict[str, object]) -> PartsRequest:
    """Put the options that were given in place of what the brief says."""
    from dataclasses import replace  # noqa: PLC0415

    from capmuster.rank.inputs.quantity import read_quantity  # noqa: PLC0415

    units: dict[str, Unit] = {
        "footprint": "mm2",
        "price": "EUR",
        "loss": "W",
        "efficiency": "1",
        "temperature": "degC",
        "capacitor_derating": "1",
        "switch_derating": "1",
    }
    values: dict[str, object] = {}
    for name, unit in units.items():
        if changes[name] is not None:
            sign: Sign = "any" if name == "temperature" else "positive"
            option = f"--{name.replace('_', '-')}"
            values[name] = read_quantity(option, changes[name], unit, sign=sign)
    if changes["frequencies"]:
        values["frequencies"] = tuple(
            read_quantity("--frequency", one, "Hz")
            for one in changes["frequencies"]  # type: ignore[attr-defined]
        )
    for name in ("least", "series"):
        if changes[name] is not None:
            values[name] = changes[name]
    # What is given here takes the place of the brief's targets.
    if values.get("least") == "loss" or "loss" in values or "efficiency" in values:
        values = {"loss": None, "efficiency": None, **values}
    return replace(request, **values)  # type: ignore[arg-type]  # each of its field's type


def _write_csv(found: PartsShortlist, *, elements: bool) -> None:
    from capmuster.rank.discrete.files import rows_as_csv  # noqa: PLC0415
    from capmuster.rank.discrete.report import (  # noqa: PLC0415
        COLUMNS,
        ELEMENT_COLUMNS,
        candidate_rows,
        element_rows,
    )

    columns, rows = (ELEMENT_COLUMNS, element_rows(found)) if elements else (COLUMNS, candidate_rows(found))
    click.echo(rows_as_csv(columns, rows, found), nl=False)


def _write_table(found: PartsShortlist) -> None:
    from capmuster.rank.discrete.report import (  # noqa: PLC0415
        BILL_HEADER,
        COLUMNS,
        TERMS,
        bill,
        candidate_rows,
        settings,
    )
    from capmuster.rank.files.export_text import cell, heading  # noqa: PLC0415
    from capmuster.rank.files.rows import text_table  # noqa: PLC0415
    from capmuster.rank.inputs.quantity import format_quantity  # noqa: PLC0415

    for name, value in settings(found):
        click.echo(f"{name:18} {value}")
    click.echo()
    if found.finalists:
        shown = [(k, column) for k, column in enumerate(COLUMNS) if column.name in _IN_TERMINAL]
        rows = [[cell(column, row[k]) for k, column in shown] for row in candidate_rows(found)]
        flush = [column.name not in _TEXTUAL for _, column in shown]
        click.echo(text_table([heading(column) for _, column in shown], rows, flush))
    for place, one in enumerate(found.finalists, start=1):
        losses = one.operating.losses
        terms = [(term.replace("_", " "), getattr(losses, term)) for term in TERMS]
        listed = ", ".join(f"{name} {format_quantity(value, 'W')}" for name, value in terms if value)
        click.echo(f"\n{place}. {one.converter.id}   {one.converter.code}")
        total, frequency = format_quantity(losses.total, "W", 4), format_quantity(one.frequency, "Hz", 4)
        click.echo(f"Loss {total} at {frequency}: {listed}.")
        click.echo(
            text_table(BILL_HEADER, bill(found, one), [False, False, *[True] * (len(BILL_HEADER) - 2)])
        )
    click.echo(f"\n{found.certificate}" if found.finalists else found.certificate)
    for reason, count in found.left_out.items():
        click.echo(f"Left out: {count} {reason}.")
    for text in found.cautions:
        click.echo(f"Caution: {text}")
