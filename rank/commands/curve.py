"""``capmuster curve``: output resistance and efficiency against frequency and load."""

from __future__ import annotations

from pathlib import Path
from typing import TYPE_CHECKING

import click

from capmuster.rank.commands.circuitoptions import circuit_options, read_values
from capmuster.rank.commands.options import format_option

if TYPE_CHECKING:
    from capmuster.rank.exact.curve import Curve, Sweep

_SHOWN = 13


@click.command(
    name="curve",
    epilog="\b\nExamples:\n  capmuster curve 'I-G/a-I I-G/O-a' --capacitance '1 uF' --resistance '80 mohm'\n"
    "  capmuster curve greenhouse-node --to curve.svg --to curve.csv",
)
@click.argument("subject", metavar="WIRING_OR_ID|BRIEF")
@circuit_options
@click.option(
    "--place", type=int, default=1, show_default=True, metavar="K", help="Which finalist of a brief."
)
@click.option("--lowest", metavar="F", help="Start of the frequency range; by default the corner / 100.")
@click.option("--highest", metavar="F", help="End of the frequency range; by default 100 x the corner.")
@click.option("--points", type=int, metavar="N", help=f"Points of each sweep; {_SHOWN} in a table, else 41.")
@click.option(
    "--to",
    "targets",
    multiple=True,
    metavar="FILE",
    help="Also write a file: .csv, .svg or .png. May be given several times.",
)
@format_option
def command(
    *,
    subject: str,
    place: int,
    lowest: str | None,
    highest: str | None,
    points: int | None,
    targets: tuple[str, ...],
    form: str,
    **options: str | None,
) -> None:
    """Trace output resistance and efficiency, exactly.

    Both are swept over the frequency and over the load.

    Without values a wiring has 1 uF capacitors and 100 mohm switches. A brief stands for its best finalist as
    sized. Efficiency counts conduction and plate parasitics, no gate drive.
    """
    from capmuster.rank.exact.curve import curve  # noqa: PLC0415 -- nothing heavy before it is needed
    from capmuster.rank.exact.curvefiles import check_targets, write  # noqa: PLC0415
    from capmuster.rank.exact.subject import subjects  # noqa: PLC0415
    from capmuster.rank.inputs.quantity import read_quantity  # noqa: PLC0415

    files = [Path(target) for target in targets]
    check_targets(files)
    least = None if lowest is None else read_quantity("--lowest", lowest, "Hz")
    most = None if highest is None else read_quantity("--highest", highest, "Hz")
    values = read_values(options)
    chosen = subjects(subject, values, top=place)[-1]
    whole = curve(chosen, lowest=least, highest=most, points=41 if points is None else points)
    write(whole, files)
    if form == "json":
        _write_json(whole)
    elif form == "csv":
        from capmuster.rank.exact.curvefiles import to_csv  # noqa: PLC0415

        click.echo(to_csv(whole).decode(), nl=False)
    else:
        shown = whole if points else curve(chosen, lowest=least, highest=most, points=_SHOWN)
        _write_table(shown)
        for file in files:
            click.echo(f"Written: {file}")


def _write_json(found: Curve) -> None:
    from capmuster.rank.exact.curve import HEADER  # noqa: PLC0415
    from capmuster.rank.files.rows import json_text  # noqa: PLC0415

    rows = [
        {name: _plain(name, cell) for name, cell in zip(HEADER, row, strict=True)} for row in found.rows()
    ]
    click.echo(
        json_text(
            {
                "id": found.subject.converter.id,
                "wiring": found.subject.converter.code,
                "corner_Hz": found.corner,
                "input_voltage_V": found.subject.input_voltage,
                "points": rows,
            }
        )
    )


def _plain(name: str, cell: str) -> str | float | None:
    if name == "sweep":
        return cell
    return float(cell) if cell else None


def _write_table(found: Curve) -> None:
    from capmuster.rank.files.rows import text_table  # noqa: PLC0415
    from capmuster.rank.inputs.quantity import format_quantity  # noqa: PLC0415

    subject = found.subject
    click.echo(f"{subject.converter.id}   {subject.converter.code}   {subject.title}".rstrip() + "\n")
    click.echo(
        f"Ratio {subject.converter.ratio}, input {format_quantity(subject.input_voltage, 'V')}, "
        f"corner (R_SSL = R_FSL) at {format_quantity(found.corner, 'Hz')}\n"
    )

    def cells(sweep: Sweep) -> list[list[str]]:
        return [
            [
                format_quantity(float(frequency), "Hz"),
                format_quantity(float(load), "A"),
                format_quantity(float(resistance), "ohm", 4),
                format_quantity(float(slow), "ohm"),
                format_quantity(float(fast), "ohm"),
                f"{ratio:.5g}",
                format_quantity(float(output), "V", 4),
                format_quantity(float(efficiency), "1", 4),
            ]
            for frequency, load, resistance, slow, fast, ratio, output, efficiency in zip(
                sweep.frequency,
                sweep.load,
                sweep.resistance,
                sweep.slow,
                sweep.fast,
                sweep.ratio,
                sweep.output,
                sweep.efficiency,
                strict=True,
            )
        ]

    header = ["frequency", "load", "R_out", "R_SSL", "R_FSL", "ratio", "output", "efficiency"]
    for name, sweep in (("frequency", found.over_frequency), ("load", found.over_load)):
        click.echo(f"Over {name}:")
        click.echo(text_table(header, cells(sweep), [True] * len(header)))
        click.echo()
