"""Options of the commands that work on one circuit: its values and its operating point."""

from __future__ import annotations

from typing import TYPE_CHECKING

import click

if TYPE_CHECKING:
    from collections.abc import Callable

    from capmuster.rank.exact.subject import Values
    from capmuster.rank.inputs.quantity import Sign, Unit

_OPTIONS = (
    click.option(
        "--capacitance",
        metavar="C[,C...]",
        help="Of every capacitor, or of each one as show lists them, e.g. '1 uF' or '2.2u,1u'.",
    ),
    click.option(
        "--resistance",
        metavar="R[,R...]",
        help="On-resistance of every switch, or of each one as show lists them, e.g. '20 mohm'.",
    ),
    click.option(
        "--series-resistance", metavar="R[,R...]", help="In series with the capacitors; none by default."
    ),
    click.option(
        "--plate", metavar="SHARE[,...]", help="Bottom-plate capacitance as a share of each, e.g. '5 %'."
    ),
    click.option("--duty", metavar="SHARE", help="Share of the period that phase 1 has; 50 % by default."),
    click.option("--dead-time", metavar="T", help="At the end of each phase, e.g. '20 ns'; none by default."),
    click.option(
        "--frequency", metavar="F", help="Switching frequency; by default the corner or the brief's."
    ),
    click.option("--input-voltage", metavar="V", help="By default 1 V, or the brief's lowest."),
    click.option(
        "--load",
        metavar="I",
        help="Load current; by default one that takes 10 % of the output, or the brief's.",
    ),
)


def circuit_options(command: Callable[..., None]) -> Callable[..., None]:
    """Give a command the options that `read_values` reads."""
    for option in reversed(_OPTIONS):
        command = option(command)
    return command


def read_values(options: dict[str, str | None]) -> Values:
    """Read the options' texts.

    Parameters
    ----------
    options
        Keyword arguments of the command, by click.

    Returns
    -------
    Values
        What was given.

    Raises
    ------
    CapmusterError
        A text is no quantity of the option's unit.
    """
    from capmuster.rank.exact.subject import Values  # noqa: PLC0415
    from capmuster.rank.inputs.quantity import read_quantity  # noqa: PLC0415 -- nothing heavy before it is needed

    def several(name: str, unit: Unit) -> tuple[float, ...]:
        text = options[name]
        field = f"--{name.replace('_', '-')}"
        sign: Sign = "not negative" if name in {"series_resistance", "plate"} else "positive"
        return tuple(read_quantity(field, part, unit, sign=sign) for part in text.split(",")) if text else ()

    def one(name: str, unit: Unit, sign: Sign = "positive") -> float | None:
        text = options[name]
        field = f"--{name.replace('_', '-')}"
        return None if text is None else read_quantity(field, text, unit, sign=sign)

    return Values(
        capacitances=several("capacitance", "F"),
        resistances=several("resistance", "ohm"),
        series_resistances=several("series_resistance", "ohm"),
        plate_fraction=several("plate", "1"),
        duty=one("duty", "1"),
        dead_time=one("dead_time", "s", "not negative"),
        frequency=one("frequency", "Hz"),
        input_voltage=one("input_voltage", "V"),
        load=one("load", "A"),
    )
