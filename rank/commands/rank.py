"""``capmuster rank``: the best converters for a brief."""

from __future__ import annotations

import textwrap
from typing import TYPE_CHECKING

import click

from capmuster.rank.commands.options import format_option

if TYPE_CHECKING:
    from collections.abc import Mapping, Sequence

    from capmuster.rank.inputs.brief import Brief
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
_WITH_LOSSES = {
    "place": "place",
    "id": "id",
    "ratio": "ratio",
    "flying_capacitors": "flying\ncaps",
    "switches": "switches",
    "loss_W": "loss\n[W]",
    "area_mm2": "area\n[mm²]",
    "frequency_Hz": "frequency\n[Hz]",
    "impedance_ohm": "R_out\n[Ω]",
    "efficiency_minimum": "least",
    "efficiency_nominal": "nominal",
    "efficiency_maximum": "highest",
    "power_density_W_per_mm2": "density\n[W/mm²]",
    "floating_drives": "floating\ndrives",
    "pareto": "Pareto\nset",
    "families": "families",
}
_EXACT = {
    "place": "place",
    "id": "id",
    "area_mm2": "model",
    "exact_area_mm2": "exact",
    "exact_place": "place by\nexact area",
    "exact_fits": "fits",
    "blend_ohm": "blend",
    "exact_ohm": "exact",
    "ratio_shift": "ratio\nshift [%]",
    "highest_ripple_V": "ripple\n[V]",
    "inrush_A": "inrush\n[A]",
    "start_up_stress": "start-up\nstress [%]",
}
_GROUPS = (
    ("area_mm2", "exact_area_mm2", "area [mm²]"),
    ("blend_ohm", "exact_ohm", "R_out [Ω]"),
    ("efficiency_minimum", "efficiency_maximum", "efficiency [%] at V_in"),
    ("ceiling_minimum", "ceiling_maximum", "ceiling [%] at V_in"),
)
_PREFIXED = {"W": "W", "Hz": "Hz", "ohm": "Ω", "W/mm2": "W/mm²", "S/mm2": "S/mm²"}
_FLUSH_LEFT = {"id", "families", "pareto", "wiring"}
_FAMILIES_WIDTH = 24
_LEGEND = (
    "G: output conductance 1/R_out at that area. Ceiling: required output over M V_in.\n"
    "V_block: highest voltage that a switch must block."
)

_EXACT_LEGEND = (
    "Re-sized on the exact output impedance, plate parasitics and series resistance included. Fits: within\n"
    "the brief's area still.\n"
    "Ratio shift: by plate parasitics at no load. Start-up stress: highest voltage over rating while the\n"
    "converter starts from empty capacitors at the highest input; above 100 % limit the rise of the input."
)
_LOSS_LEGEND = (
    "Loss, frequency, R_out and density (output power per area) at the nominal input and full load.\n"
    "Floating drives: switches whose gates need a supply of their own. Each loss: --format csv, or export."
)


@click.command(
    name="rank",
    epilog="\b\nExamples:\n  capmuster rank greenhouse-node --top 5\n"
    "  capmuster rank my-rail.toml --include 'I-G/O-I' --format csv\n"
    "  capmuster rank pump-shelf --columns place,area_mm2,wiring",
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
    "--columns",
    metavar="NAMES",
    help="Show these columns, in this order: names as in CSV, separated by commas.",
)
@format_option
def command(*, brief: str, top: int, include: tuple[str, ...], columns: str | None, form: str) -> None:
    """Rank every converter that can do the job of BRIEF.

    BRIEF is the name of a shipped brief or a TOML file. Its objective decides what comes first: the least
    area that meets the droop budget, or, with all losses counted, the least loss, the least area or the
    greatest power density.
    """
    from capmuster.rank.commands.ranking import ranked  # noqa: PLC0415 -- nothing heavy before it is needed

    shown = None if columns is None else _chosen(brief, columns, form)
    found = ranked(brief, top, include)
    if form == "json":
        from capmuster.rank.files.export_text import to_json  # noqa: PLC0415

        click.echo(to_json(found).decode(), nl=False)
    elif form == "csv":
        from capmuster.rank.files.export_text import to_csv  # noqa: PLC0415

        click.echo(to_csv(found, shown).decode(), nl=False)
    else:
        _write_table(found, shown)


def _chosen(brief: str, columns: str, form: str) -> list[str]:
    """Read names of columns, before any work is done."""
    from capmuster.enumerate.errors import CapmusterError  # noqa: PLC0415
    from capmuster.rank.files.columns import columns_of  # noqa: PLC0415
    from capmuster.rank.inputs.brief import load_brief  # noqa: PLC0415

    if form == "json":
        raise CapmusterError("columns: JSON holds them all", accepted="--columns with a table or CSV")
    known = [column.name for column in columns_of(load_brief(brief))]
    names = [name.strip() for name in columns.split(",")]
    for name in names:
        if name not in known:
            raise CapmusterError(f"columns: unknown column {name!r}", accepted=", ".join(known))
        if names.count(name) > 1:
            raise CapmusterError(f"columns: {name!r} is named twice", accepted="each column once")
    return names


def _write_table(found: Shortlist, shown: list[str] | None) -> None:
    from capmuster.rank.files.summary import assumptions, verdict  # noqa: PLC0415

    for name, value in assumptions(found.brief):
        click.echo(f"{name:20} {value}")
    click.echo()
    if len(found) and shown is not None:
        from capmuster.rank.files.export_text import heading  # noqa: PLC0415

        headings = {column.name: heading(column) for column in found.columns}
        click.echo(_table(found, {name: headings[name] for name in shown}, groups=()))
        click.echo()
    elif len(found):
        click.echo(_table(found, _shown(found.brief)))
        click.echo(f"\n{_LOSS_LEGEND if found.brief.counts_losses else _LEGEND}\n")
        click.echo(_table(found, _EXACT))
        click.echo(f"\n{_EXACT_LEGEND}\n")
    for line in verdict(found):
        click.echo(line)
    for text in found.cautions:
        click.echo(f"Caution: {text}")


def _shown(brief: Brief) -> dict[str, str]:
    """Columns of the table and their headings."""
    if not brief.counts_losses:
        return _IN_TERMINAL
    items = list(_WITH_LOSSES.items())
    if brief.profile:
        items[5:5] = [("profile_loss_W", "mean\nloss [W]"), ("profile_efficiency", "mean\neff. [%]")]
    return dict(items)


def _table(
    found: Shortlist, headings: Mapping[str, str], groups: Sequence[tuple[str, str, str]] = _GROUPS
) -> str:
    from capmuster.rank.files.export_text import cell  # noqa: PLC0415
    from capmuster.rank.files.rows import figures, prefixed, text_table  # noqa: PLC0415

    shown = dict(headings)
    names = list(shown)
    column_of = {column.name: column for column in found.columns}
    cells = []
    for name in names:
        values = found.frame[name].tolist()
        if name == "families":
            cells.append([textwrap.fill(text, _FAMILIES_WIDTH, break_on_hyphens=False) for text in values])
        elif isinstance(values[0], float) and column_of[name].unit != "1":
            unit = _PREFIXED.get(column_of[name].unit, "")
            prefix, texts = prefixed(values) if unit else ("", figures(values))
            shown[name] = shown[name].replace(f"[{unit}]", f"[{prefix}{unit}]")
            cells.append(texts)
        else:
            cells.append([cell(column_of[name], value) for value in values])
    return text_table(
        list(shown.values()),
        list(zip(*cells, strict=True)),
        [name not in _FLUSH_LEFT for name in names],
        [
            (names.index(first), names.index(last), text)
            for first, last, text in groups
            if first in shown and last in shown
        ],
    )
