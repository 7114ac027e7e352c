"""``capmuster count``: the census in numbers, certified."""

from __future__ import annotations

from typing import TYPE_CHECKING

import click

from capmuster.rank.commands.options import format_option

if TYPE_CHECKING:
    from capmuster.rank.scores.counting import CensusCount


@click.command(name="count", epilog="\b\nExample:\n  capmuster count 4")
@click.argument("capacitors", type=int, metavar="N")
@click.option(
    "--jobs", type=int, default=-1, metavar="J", help="Processes for six capacitors; all cores unless said."
)
@format_option
def command(capacitors: int, jobs: int, form: str) -> None:
    """Count every cell of exactly N flying capacitors, twice.

    One count adds up what the listed cells stand for, the other lists nothing (a convolution per skeleton);
    the skeletons are counted apart by a generator of their own. Exit status 1 when any two numbers differ.
    Up to six capacitors; six are some four hundred million cells, listed in passing and not kept.
    """
    from capmuster.rank.progress import told  # noqa: PLC0415
    from capmuster.rank.scores.counting import count_census  # noqa: PLC0415 -- nothing heavy before it is needed

    with told() as say:
        counted = count_census(capacitors, jobs=jobs, say=say)
    if form == "json":
        _write_json(counted)
    elif form == "csv":
        _write_csv(counted)
    else:
        _write_table(counted)
    if not counted.certificate.holds:
        raise click.ClickException("the counts differ: " + "; ".join(counted.certificate.differences))


def _per_triple(counted: CensusCount) -> list[list[str]]:
    certificate = counted.certificate
    return [
        [
            ",".join(map(str, triple)),
            str(certificate.cells.get(triple, 0)),
            str(certificate.labelled_listed.get(triple, 0)),
            str(certificate.labelled_counted.get(triple, 0)),
        ]
        for triple in sorted({*certificate.labelled_listed, *certificate.labelled_counted})
    ]


def _write_json(counted: CensusCount) -> None:
    from capmuster.rank.files.rows import json_text  # noqa: PLC0415

    click.echo(
        json_text(
            {
                "max_capacitors": counted.n,
                "cells": counted.cells,
                "degenerate": counted.degenerate,
                "clean": counted.clean,
                "unity": counted.unity,
                "labelled_listed": counted.labelled_listed,
                "labelled_counted": counted.labelled_counted,
                "triples": {row[0]: int(row[1]) for row in _per_triple(counted)},
            }
        )
    )


def _write_csv(counted: CensusCount) -> None:
    from capmuster.rank.files.rows import csv_text  # noqa: PLC0415

    click.echo(
        csv_text(["triple", "cells", "labelled_listed", "labelled_counted"], _per_triple(counted)), nl=False
    )


def _write_table(counted: CensusCount) -> None:
    from capmuster.rank.files.rows import text_table  # noqa: PLC0415

    rows = _per_triple(counted)
    total = ["all", str(counted.cells), str(counted.labelled_listed), str(counted.labelled_counted)]
    click.echo(
        text_table(
            ["triple", "cells", "labelled, listed", "labelled, counted"],
            [*rows, total],
            [False, True, True, True],
        )
    )
    certificate = counted.certificate
    click.echo(
        f"\n{counted.n} flying capacitor{'' if counted.n == 1 else 's'}: "
        f"{counted.cells} cell{'' if counted.cells == 1 else 's'}, "
        f"{counted.clean} clean, {counted.degenerate} degenerate; {counted.unity} unity cells besides.\n"
        f"Labelled skeletons: {certificate.skeletons_listed} listed, {certificate.skeletons_counted} by the "
        "separate generator.\n"
        f"{'Certified: every pair of counts agrees.' if certificate.holds else 'NOT certified.'}"
    )
