"""``capmuster draw``: one converter as a drawing."""

from __future__ import annotations

import click


@click.command(
    name="draw",
    epilog="\b\nExample:\n  capmuster draw 'I-G/a-I I-G/O-a' --to tripler.svg --to tripler.pdf",
)
@click.argument("converter", metavar="WIRING_OR_ID")
@click.option(
    "--to",
    "targets",
    required=True,
    multiple=True,
    metavar="FILE",
    help="Where to write: .svg, .png or .pdf. May be given several times.",
)
@click.option("--input-voltage", metavar="V", help="Show potentials in volts at this input, e.g. '3.7 V'.")
@click.option("--title", default="", metavar="TEXT", help="A heading instead of the id.")
def command(*, converter: str, targets: tuple[str, ...], input_voltage: str | None, title: str) -> None:
    """Draw the phases and the switches of one converter.

    One panel per phase: every vertex is a rail at its potential, every capacitor stands between two rails
    and is as tall as its voltage. Up to 5 capacitors a third panel shows every switch once, with the phase
    in which it is closed.
    """
    from capmuster.enumerate.families import family_names  # noqa: PLC0415 -- nothing heavy before it is needed
    from capmuster.rank.drawing.files import check_targets, write_drawings  # noqa: PLC0415
    from capmuster.rank.drawing.sheet import converter_sheet  # noqa: PLC0415
    from capmuster.rank.inputs.quantity import read_quantity  # noqa: PLC0415
    from capmuster.rank.lookup import find_converter  # noqa: PLC0415

    check_targets(targets)
    volts = None if input_voltage is None else read_quantity("--input-voltage", input_voltage, "V")
    chosen = find_converter(converter)
    drawing = converter_sheet(
        chosen, input_voltage=volts, title=title, families=family_names(chosen.n).get(chosen.id, ())
    )
    write_drawings(drawing, targets)
