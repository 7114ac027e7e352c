"""``capmuster verify``: the exact steady state against ngspice."""

from __future__ import annotations

from typing import TYPE_CHECKING

import click

from capmuster.rank.commands.circuitoptions import circuit_options, read_values
from capmuster.rank.commands.options import format_option

if TYPE_CHECKING:
    from capmuster.rank.exact.subject import Subject
    from capmuster.rank.exact.verification import Comparison

_HEADER = ["id", "quantity", "exact", "simulated", "difference"]


@click.command(
    name="verify",
    epilog="\b\nExamples:\n  capmuster verify 'I-G/a-I I-G/O-a' --frequency '200 kHz'\n"
    "  capmuster verify greenhouse-node --top 3 --format csv",
)
@click.argument("subject", metavar="WIRING_OR_ID|BRIEF")
@circuit_options
@click.option(
    "--top", type=int, default=3, show_default=True, metavar="K", help="How many finalists of a brief."
)
@format_option
def command(*, subject: str, top: int, form: str, **options: str | None) -> None:
    """Hold the exact results against ngspice.

    It is run on the deck of the wiring, or on those of the best finalists of BRIEF.

    Without values a wiring has unequal ones (1, 1.5, 2.2, ... uF and 0.1 ohm), so that no symmetry hides a
    fault. Exit status 1 when any two values differ by more than 0.1 %; peaks are compared on the scale
    of the input voltage.
    """
    from capmuster.rank.exact.subject import subjects  # noqa: PLC0415 -- nothing heavy before it is needed
    from capmuster.rank.exact.verification import TOLERANCE, verify  # noqa: PLC0415

    results = [(one, verify(one)) for one in subjects(subject, read_values(options), top=top, unequal=True)]
    if form == "json":
        _write_json(results)
    elif form == "csv":
        from capmuster.rank.files.rows import csv_text  # noqa: PLC0415

        click.echo(csv_text(_HEADER, [row for one, rows in results for row in _plain(one, rows)]), nl=False)
    else:
        for one, rows in results:
            _write_table(one, rows)
    apart = [row for _, rows in results for row in rows if not row.agrees]
    if apart:
        worst = max(abs(row.difference) for row in apart)
        raise click.ClickException(
            f"{len(apart)} values differ by more than {100 * TOLERANCE:g} %, the worst by {100 * worst:.3g} %"
        )


def _plain(subject: Subject, rows: tuple[Comparison, ...]) -> list[list[str]]:
    return [
        [subject.converter.id, row.quantity, repr(row.exact), repr(row.simulated), repr(row.difference)]
        for row in rows
    ]


def _write_json(results: list[tuple[Subject, tuple[Comparison, ...]]]) -> None:
    from capmuster.rank.files.rows import json_text  # noqa: PLC0415

    click.echo(
        json_text(
            [
                {
                    "id": one.converter.id,
                    "wiring": one.converter.code,
                    "frequency_Hz": one.frequency,
                    "input_voltage_V": one.input_voltage,
                    "load_A": one.load,
                    "comparisons": [
                        {
                            "quantity": row.quantity,
                            "unit": row.unit,
                            "exact": row.exact,
                            "simulated": row.simulated,
                            "difference": row.difference,
                        }
                        for row in rows
                    ],
                }
                for one, rows in results
            ]
        )
    )


def _write_table(subject: Subject, rows: tuple[Comparison, ...]) -> None:
    from capmuster.rank.files.rows import text_table  # noqa: PLC0415
    from capmuster.rank.inputs.quantity import format_quantity  # noqa: PLC0415

    def shown(row: Comparison, value: float) -> str:
        if row.quantity == "no-load ratio":
            return f"{value:.6g}"
        return format_quantity(value, row.unit, 6)

    volts = format_quantity(subject.input_voltage, "V", 4)
    click.echo(f"{subject.converter.id}   {subject.converter.code}   {subject.title}".rstrip())
    click.echo(
        f"{format_quantity(subject.frequency, 'Hz', 4)}, input {volts}, "
        f"load {format_quantity(subject.load, 'A', 4)}\n"
    )
    cells = [
        [row.quantity, shown(row, row.exact), shown(row, row.simulated), f"{100 * row.difference:+.4f} %"]
        for row in rows
    ]
    click.echo(text_table(_HEADER[1:], cells, [False, True, True, True]))
    click.echo()
