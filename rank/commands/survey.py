"""``capmuster survey``: every cell of exactly N capacitors in passing, the best of each ratio."""

from __future__ import annotations

from typing import TYPE_CHECKING

import click

from capmuster.rank.commands.options import format_option

if TYPE_CHECKING:
    from collections.abc import Sequence
    from fractions import Fraction

    from capmuster.rank.files.rows import Json
    from capmuster.rank.scores.keeping import Score
    from capmuster.rank.scores.listed import Listed
    from capmuster.rank.scores.survey import Survey


@click.command(
    name="survey",
    epilog="\b\nExamples:\n  capmuster survey 6\n  capmuster survey 6 --ratio 24/11\n"
    "  capmuster survey 6 --scheduler tcp://10.0.0.5:8786",
)
@click.argument("capacitors", type=int, metavar="N")
@click.option("--ratio", metavar="M", help="Show what was kept for one ratio; without it, a line per ratio.")
@click.option(
    "--keep",
    type=int,
    default=10,
    show_default=True,
    metavar="K",
    help="Cells kept as the best of each ratio, besides those that no other beats.",
)
@click.option(
    "--by",
    type=click.Choice(["product", "capacitor", "switch"]),
    default="product",
    show_default=True,
    help="What the best are best in: a utilisation, or the product of both.",
)
@click.option("--jobs", type=int, metavar="J", help="Processes; all cores for six capacitors, else one.")
@click.option("--scheduler", metavar="ADDRESS", help="Run on the Dask cluster of this scheduler.")
@format_option
def command(
    *,
    capacitors: int,
    ratio: str | None,
    keep: int,
    by: Score,
    jobs: int | None,
    scheduler: str | None,
    form: str,
) -> None:
    """Go through every cell of exactly N flying capacitors (up to 6) and keep the best of each ratio.

    Six capacitors have some four hundred million cells: none is stored, an interrupted survey goes on where
    it stopped, and a finished one is kept and answers at once. The counts are certified as by count.
    """
    from capmuster.rank.inputs.quantity import parse_ratio  # noqa: PLC0415
    from capmuster.rank.progress import told  # noqa: PLC0415 -- nothing heavy before it is needed
    from capmuster.rank.scores.shards import spread  # noqa: PLC0415
    from capmuster.rank.scores.survey import survey  # noqa: PLC0415

    wanted = None if ratio is None else parse_ratio(ratio)
    with told() as say, spread(scheduler):
        found = survey(capacitors, keep=keep, by=by, jobs=_jobs(capacitors, jobs, scheduler), say=say)
    if not found.certificate.holds:
        raise click.ClickException("the counts differ: " + "; ".join(found.certificate.differences))
    ratios = found.ratios if wanted is None else [wanted]
    if form == "json":
        _write_json(found, ratios)
    elif wanted is None:
        _write_ratios(found, form)
    else:
        _write_converters(found, wanted, form)


def _jobs(capacitors: int, jobs: int | None, scheduler: str | None) -> int | None:
    if jobs is not None or scheduler is not None:
        return jobs
    return -1 if capacitors > 5 else 1  # noqa: PLR2004 -- below, starting processes takes longer than the work


def _write_json(found: Survey, ratios: Sequence[Fraction]) -> None:
    from capmuster.rank.files.rows import json_text  # noqa: PLC0415
    from capmuster.rank.scores.surveytable import kept_converters  # noqa: PLC0415

    content: list[Json] = []
    for ratio in ratios:
        clean, every = found.counts(ratio)
        content.append(
            {
                "ratio": str(ratio),
                "count": clean,
                "count_all": every,
                "best": [_json_row(row) for row in kept_converters(found, ratio, "best")],
                "frontier": [_json_row(row) for row in kept_converters(found, ratio, "frontier")],
            }
        )
    click.echo(json_text({"capacitors": found.n, "keep": found.keep, "by": found.by, "ratios": content}))


def _json_row(row: Listed) -> Json:
    return {
        "id": row.id,
        "wiring": row.wiring,
        "switches": row.switches,
        "capacitor_utilisation": row.capacitor_utilisation,
        "switch_utilisation": row.switch_utilisation,
        "highest_blocking_voltage": row.highest_blocking_voltage,
        "families": list(row.families),
    }


def _write_ratios(found: Survey, form: str) -> None:
    from capmuster.rank.files.rows import csv_text, text_table  # noqa: PLC0415
    from capmuster.rank.scores.surveytable import COLUMNS, best_per_ratio  # noqa: PLC0415

    rows = best_per_ratio(found)
    if form == "csv":
        click.echo(csv_text(list(COLUMNS), [row.exact() for row in rows]), nl=False)
        return
    utilisations = ["cap. util.", "switch util."]
    header = ["ratio", "clean", "all", *utilisations, *utilisations, "S", "id", "wiring"]
    right = [True] * (len(header) - 2) + [False, False]
    groups = [(1, 2, "converters"), (3, 4, "best alone"), (5, 9, "best product of both")]
    click.echo(text_table(header, [row.shown() for row in rows], right, groups))
    click.echo(
        f"\nExactly {found.n} flying capacitors. Clean: no idle and no equipotential switch; only such "
        "converters are kept.\nS: switches."
    )


def _write_converters(found: Survey, ratio: Fraction, form: str) -> None:
    from capmuster.rank.files.rows import csv_text, text_table  # noqa: PLC0415
    from capmuster.rank.scores.surveytable import kept_converters  # noqa: PLC0415

    best, frontier = (kept_converters(found, ratio, which) for which in ("best", "frontier"))
    on_frontier, among_best = {row.id for row in frontier}, {row.id for row in best}
    rows = [*best, *(row for row in frontier if row.id not in among_best)]
    if form == "csv":
        header = ["id", "wiring", "switches", "capacitor_utilisation", "switch_utilisation"]
        header += ["highest_blocking_voltage", "best", "frontier", "families"]
        cells = [
            [
                row.id,
                row.wiring,
                str(row.switches),
                repr(row.capacitor_utilisation),
                repr(row.switch_utilisation),
                repr(row.highest_blocking_voltage),
                str(int(row.id in among_best)),
                str(int(row.id in on_frontier)),
                "; ".join(row.families),
            ]
            for row in rows
        ]
        click.echo(csv_text(header, cells), nl=False)
        return
    header = [
        "id",
        "S",
        "cap. util.",
        "switch util.",
        "max V switch",
        "best",
        "frontier",
        "families",
        "wiring",
    ]
    cells = [
        [
            row.id,
            str(row.switches),
            f"{row.capacitor_utilisation:.4f}",
            f"{row.switch_utilisation:.4f}",
            f"{row.highest_blocking_voltage:.3f}",
            "yes" if row.id in among_best else "-",
            "yes" if row.id in on_frontier else "-",
            ", ".join(row.families) or "-",
            row.wiring,
        ]
        for row in rows
    ]
    if cells:
        click.echo(
            text_table(header, cells, [False, True, True, True, True, False, False, False, False]) + "\n"
        )
    clean, every = found.counts(ratio)
    click.echo(
        f"Ratio {ratio}, exactly {found.n} flying capacitors: {clean} converters, {every - clean} more with "
        f"an idle or an equipotential switch; {len(rows)} kept."
    )
