"""What it takes to drive each switch's gate, and from where.

A MOSFET blocks with its body diode reverse biased: the source of an n-channel device is its lower end while
it blocks, that of a p-channel device its higher end. While it conducts, both ends are at the potential of the
vertex that it closes. The gate must be ``V_drive`` above (p-channel: below) the source to conduct, and at the
source's own potential to block.

If both levels lie between the lowest and the highest of ground, input and output, a level shifter between
those rails makes them. If one lies beyond, the gate needs a floating supply: a bootstrap capacitor or a
charge pump.
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import TYPE_CHECKING

import numpy as np

if TYPE_CHECKING:
    from numpy.typing import NDArray

    from capmuster.enumerate.converters import ConverterTable
    from capmuster.rank.inputs.brief import Brief
    from capmuster.rank.inputs.technology import Choice
    from capmuster.rank.scores.switchtable import SwitchTable

    Floats = NDArray[np.float64]

_O = 2
_ROUNDING = 1e-9  # relative to the input: a level that is a rail but for rounding is the rail


@dataclass(frozen=True, slots=True)
class Gates:
    """Source potentials of the switches of N converters, per volt of input; every array has shape (N, m).

    Attributes
    ----------
    closed
        Potential of both ends while the switch conducts.
    low, high
        Potentials of its ends while it blocks.
    """

    closed: Floats
    low: Floats
    high: Floats


def gates(table: ConverterTable, switches: SwitchTable) -> Gates:
    """Find where the ends of every switch are in both phases.

    Parameters
    ----------
    table
        The converters.
    switches
        Their switches.
    """
    row = np.arange(len(table))[:, None]
    here = np.where(switches.phase == 2, 1, 0)  # noqa: PLR2004 -- phases are 1 and 2 there
    scale = table.scale[:, None]
    return Gates(
        closed=np.asarray(table.potentials[row, here, switches.vertex] / scale),
        low=np.asarray(table.potentials[row, 1 - here, switches.low] / scale),
        high=np.asarray(table.potentials[row, 1 - here, switches.high] / scale),
    )


def levels(at: Gates, nmos: NDArray[np.bool_], drive: Floats, volts: float) -> tuple[Floats, Floats]:
    """Find the gate potentials that make switches conduct and block.

    Parameters
    ----------
    at
        Where the ends are.
    nmos
        Whether each is an n-channel device; broadcasts to (N, m).
    drive
        Drive voltage of each [V].
    volts
        Input voltage [V].

    Returns
    -------
    tuple of numpy.ndarray
        Conducting and blocking, in the broadcast shape [V].
    """
    conducting = at.closed * volts + np.where(nmos, drive, -drive)
    return conducting, np.where(nmos, at.low, at.high) * volts


def rail_driven(table: ConverterTable, switches: SwitchTable, brief: Brief) -> NDArray[np.bool_]:
    """Whether the rails can drive each switch, made of each class of the technology; shape (N, m, classes).

    At the lowest input, where the rails are closest; in regulated use with the output where it is held.
    """
    classes = brief.technology.switches
    nmos = np.array([one.polarity == "nmos" for one in classes])
    drive = np.array([one.drive for one in classes])
    at = gates(table, switches)
    wide = Gates(at.closed[..., None], at.low[..., None], at.high[..., None])
    conducting, blocking = levels(wide, nmos, drive, brief.input_minimum)
    lowest, highest = (one[:, None, None] for one in _rails(table, brief))
    slack = _ROUNDING * brief.input_minimum
    inside = [
        (level >= lowest - slack) & (level <= highest + slack)
        for level in np.broadcast_arrays(conducting, blocking)
    ]
    return np.asarray(inside[0] & inside[1])


def _rails(table: ConverterTable, brief: Brief) -> tuple[Floats, Floats]:
    """Lowest and highest of ground, input and output at the lowest input, shape (N,) [V]."""
    volts = brief.input_minimum
    output = table.ratios * volts if brief.use == "fixed-ratio" else np.full(len(table), brief.required)
    return np.minimum(0.0, output), np.maximum(volts, output)


def floating_drives(able: NDArray[np.bool_], choice: Choice, switches: SwitchTable) -> NDArray[np.int64]:
    """Count the switches that the rails cannot drive, as they were chosen; shape (N,)."""
    driven = np.take_along_axis(able, choice.index[..., None], axis=-1)[..., 0]
    return np.asarray(((switches.phase > 0) & ~driven).sum(axis=1))


@dataclass(frozen=True, slots=True)
class GateDrive:
    """The drive of one switch at the nominal input.

    Attributes
    ----------
    source
        Potential of the source while the switch conducts and while it blocks [V].
    gate
        Potential that the gate needs then [V].
    supply
        "rails" or "floating".
    """

    source: tuple[float, float]
    gate: tuple[float, float]
    supply: str


def gate_drives(
    table: ConverterTable, switches: SwitchTable, brief: Brief, choice: Choice
) -> tuple[GateDrive, ...]:
    """Work out the drive of every switch of the one converter of a table.

    Parameters
    ----------
    table, switches
        The converter and its switches.
    brief
        Its use and technology.
    choice
        Class of each switch.
    """
    at, volts = gates(table, switches), brief.input_nominal
    classes = [brief.technology.switches[k] for k in choice.index[0].tolist()]
    nmos = np.array([[one.polarity == "nmos" for one in classes]])
    conducting, blocking = levels(at, nmos, np.array([[one.drive for one in classes]]), volts)
    able = rail_driven(table, switches, brief)[0]
    return tuple(
        GateDrive(
            source=(float(at.closed[0, j] * volts), float(blocking[0, j])),
            gate=(float(conducting[0, j]), float(blocking[0, j])),
            supply="rails" if able[j, k] else "floating",
        )
        for j, k in enumerate(choice.index[0, : int(switches.count[0])].tolist())
    )
