r"""Highest voltage that each element must be rated for, for many converters at once.

In fixed-ratio use an element is rated for its ideal voltage at the highest input.

In regulated use the output is held below M V_in, and charge moves by as much as that difference drives it.
Let ``dU`` be the difference at the highest input. Energy balance (Tellegen's theorem) over a cycle says

    sum over capacitors of a_c swing + sum over switches of a_r drop = dU

with the swing of a capacitor between the phases and the voltage drop of a switch while it conducts. As long
as no current reverses within its phase, all terms are positive: a state is a weighted mean of *corners*, in
each of which one element takes all of ``dU``, as swing or drop ``dU / a``, and every other one is ideal.
Kirchhoff's voltage law without that capacitor, or with that switch's drop, gives the corner's potentials.

Currents do reverse where a fast loop drives a slow one through a switch that both use. It is at its worst
when a phase begins, so there is a corner more for each capacitor and phase: the capacitor still has the
voltage of the other phase, ``dU / a`` away from what this one asks for, and the switches, with resistances
in inverse proportion to their charges, share that among them as the resistors that they are.

The deviation of an element from its ideal voltage is taken to lie between its least and its greatest one
over all corners, widened at either end by a share of the width. That share is measured, with exact steady
states of converters of up to four capacitors at frequencies over six decades. In 12,000 of them, as the
ranking sizes them with the shipped technologies, and in 18,000 sized in proportion to the charges, none
needed more than 1 % for capacitors and 5 % for switches. With every element off that by up to a factor of
two either way, of 74,000 a few in 100,000 needed more than is allowed here, one of them 22 % for a switch.
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import TYPE_CHECKING, TypeAlias

import numpy as np

if TYPE_CHECKING:
    from collections.abc import Iterator

    from numpy.typing import NDArray

    from capmuster.enumerate.converters import ConverterTable
    from capmuster.rank.inputs.brief import Brief
    from capmuster.rank.scores.switchtable import SwitchTable

_NOTHING = 1e-9
_STRAY = 1e-6  # resistance in series with every capacitor, beside 1 over a charge number
_PORTS = 3
_O = 2
_BLOCK = 4096
CAPACITOR_ALLOWANCE, SWITCH_ALLOWANCE = 0.02, 0.1
"""What the range of deviations is widened by at either end, as a share of its width."""


@dataclass(frozen=True, slots=True)
class Ratings:
    """Voltages that elements must stand.

    Attributes
    ----------
    capacitors
        Shape (N, n) [V].
    switches
        Shape (N, s) [V], in the order of the switch table; 0 beyond a row's switches.
    """

    capacitors: NDArray[np.float64]
    switches: NDArray[np.float64]


def ratings(table: ConverterTable, switches: SwitchTable, brief: Brief) -> Ratings:
    """Find what every capacitor and switch must stand in the use of the brief."""
    parts = []
    for start in range(0, max(len(table), 1), _BLOCK):
        rows = slice(start, start + _BLOCK)
        parts.append(_ratings(table.take(rows), switches.take(rows), brief))
    return Ratings(*(np.concatenate([getattr(part, name) for part in parts]) for name in Ratings.__slots__))


def _ratings(table: ConverterTable, switches: SwitchTable, brief: Brief) -> Ratings:
    scale = table.scale[:, None].astype(np.float64)
    capacitor = table.voltages / scale * brief.input_maximum
    switch = switches.blocking / scale * brief.input_maximum
    if brief.use == "fixed-ratio":
        return Ratings(np.abs(capacitor), np.where(switches.phase > 0, np.abs(switch), 0.0))
    held_down = (brief.required - table.ratios * brief.input_maximum)[:, None]
    law, ties = _law(table), _Ties.of(table, switches)
    across_capacitors, across_switches = _Range.at_rest(capacitor), _Range.at_rest(switch)
    for slope_c, slope_s in (
        *_swing_corners(table, switches, law),
        *_drop_corners(table, switches, law, ties),
        *_start_corners(table, switches, law, ties),
    ):
        across_capacitors.take(slope_c)
        across_switches.take(slope_s)
    return Ratings(
        across_capacitors.highest(capacitor, held_down, CAPACITOR_ALLOWANCE),
        np.where(switches.phase > 0, across_switches.highest(switch, held_down, SWITCH_ALLOWANCE), 0.0),
    )


@dataclass(slots=True)
class _Range:
    """Least and greatest deviation from the ideal voltage per volt at the output, over the corners seen."""

    low: NDArray[np.float64]
    high: NDArray[np.float64]

    @classmethod
    def at_rest(cls, like: NDArray[np.float64]) -> _Range:
        return cls(np.zeros(like.shape), np.zeros(like.shape))

    def take(self, slope: NDArray[np.float64]) -> None:
        np.minimum(self.low, slope, out=self.low)
        np.maximum(self.high, slope, out=self.high)

    def highest(
        self, ideal: NDArray[np.float64], held_down: NDArray[np.float64], allowance: float
    ) -> NDArray[np.float64]:
        """Greatest magnitude within the range, widened at both ends by a share of its width."""
        more = allowance * (self.high - self.low)
        ends = (ideal + held_down * (self.low - more), ideal + held_down * (self.high + more))
        return np.asarray(np.maximum(*map(np.abs, ends)))


_Slopes: TypeAlias = "tuple[NDArray[np.float64], NDArray[np.float64]]"


def _swing_corners(table: ConverterTable, switches: SwitchTable, law: _Law) -> Iterator[_Slopes]:
    """Yield volts across all elements per volt at the output, for each swinging capacitor and phase."""
    for i in range(table.n):
        potentials = law.potentials(law.source, left_out=i)
        blocked = _between(potentials, _open_phase(switches), switches.high, switches.low)
        for phase in (0, 1):
            yield _across(table, potentials, np.full(len(table), phase)), blocked


def _drop_corners(table: ConverterTable, switches: SwitchTable, law: _Law, ties: _Ties) -> Iterator[_Slopes]:
    """Yield volts across all elements per volt at the output, for each switch that takes it all."""
    for j in range(switches.phase.shape[1]):
        drops = np.zeros(switches.phase.shape)
        drops[:, j] = 1.0
        yield _dropped(table, switches, law, ties, drops=drops, phase=_open_phase(switches)[:, j])


def _start_corners(table: ConverterTable, switches: SwitchTable, law: _Law, ties: _Ties) -> Iterator[_Slopes]:
    """Yield volts across all elements per volt at the output, as each phase begins, for each capacitor."""
    rows, n = table.charges.shape
    for phase in (0, 1):
        # A switch without charge is small; the least charge that the unit allows stands for that.
        closed = switches.phase == phase + 1
        resistances = np.where(closed, 1 / np.maximum(np.abs(ties.charges), 1), 0.0)
        # Currents through the capacitors for a volt in series with each: no charge stays on an internal node.
        law_here = np.zeros((rows, 2 * n - 1, 2 * n - 1))
        through = ties.bridged.transpose(0, 2, 1)
        law_here[:, :n, :n] = through @ (resistances[:, :, None] * ties.bridged)
        # Where a switch blocks no voltage its chain is open to choice and may leave a loop without ohms.
        law_here[:, range(n), range(n)] += _STRAY
        here = (law.phase == phase)[:, None, :]
        law_here[:, :n, n:] = np.where(here, law.nodes, 0.0)
        law_here[:, n:, :n] = law_here[:, :n, n:].transpose(0, 2, 1)
        nodes = np.arange(n, 2 * n - 1)
        law_here[:, nodes, nodes] = ~here[:, 0]
        currents = np.linalg.solve(law_here, np.eye(2 * n - 1, n))[:, :n]
        drops = resistances[:, :, None] * (ties.bridged @ currents)
        for i in range(n):
            yield _dropped(table, switches, law, ties, drops=drops[:, :, i], phase=np.full(rows, 1 - phase))


def _dropped(
    table: ConverterTable,
    switches: SwitchTable,
    law: _Law,
    ties: _Ties,
    *,
    drops: NDArray[np.float64],
    phase: NDArray[np.intp],
) -> _Slopes:
    """Volts across capacitors (in a phase) and switches when switch drops, in any unit, take all of the volt.

    Zeros where the drops take no energy.
    """
    taken = (drops * ties.charges).sum(axis=1)
    works = np.abs(taken) > _NOTHING * np.abs(drops * ties.charges).sum(axis=1)
    unit = np.where(works, -(table.charges * law.source).sum(axis=1) / np.where(works, taken, 1.0), 0.0)
    volts = drops * unit[:, None]
    potentials = law.potentials(law.source + (volts[:, None, :] @ ties.bridged)[:, 0], left_out=0)
    swung = _across(table, potentials, phase)
    blocked = _between(potentials, _open_phase(switches), switches.high, switches.low)
    blocked = blocked + (volts[:, None, :] @ ties.lifted)[:, 0]
    return np.where(works[:, None], swung, 0.0), np.where(works[:, None], blocked, 0.0)


@dataclass(frozen=True, slots=True)
class _Ties:
    """What the drop of each closed switch does to the rest.

    Attributes
    ----------
    bridged
        Shape (N, s, n): what a volt of drop brings to the voltage law of each capacitor, +1, 0 or -1; as well
        the current of the switch for a unit of current through the capacitor.
    charges
        Shape (N, s): charge through each switch in the sense of `bridged`, in the unit of the table.
    lifted
        Shape (N, s, s): what a volt of drop of the first switch brings to the voltage that the second blocks.
    """

    bridged: NDArray[np.float64]
    charges: NDArray[np.float64]
    lifted: NDArray[np.float64]

    @classmethod
    def of(cls, table: ConverterTable, switches: SwitchTable) -> _Ties:
        rows, count = switches.phase.shape
        bridged, lifted = np.zeros((rows, count, table.n)), np.zeros((rows, count, count))
        blocking = _open_phase(switches)
        for j in range(count):
            far = _FarSide.of(table, switches, j)
            for phase, sign in ((0, -1), (1, 1)):
                for plate, polarity in ((0, 1), (1, -1)):
                    here, there = (table.words[:, :, 2 * p + plate] for p in (phase, 1 - phase))
                    bridged[:, j] += sign * polarity * far.holds(phase, here, there)
            for end, polarity in ((switches.high, 1), (switches.low, -1)):
                for phase in (0, 1):
                    on_it = far.holds(phase, end, switches.vertex) * (blocking == phase)
                    lifted[:, j] += polarity * on_it
        return cls(bridged, np.einsum("rsi,ri->rs", bridged, table.charges), lifted)


@dataclass(frozen=True, slots=True)
class _FarSide:
    """The clusters that one switch of each row cuts off from the port, or from the lower part of its chain.

    Attributes
    ----------
    phase
        Shape (N,): phase in which the switch is closed, 0 or 1.
    vertex
        Shape (N,): the vertex that it holds together.
    level
        Shape (N,): potential, in the other phase, from which clusters count as above it.
    above
        Shape (N,): whether the far side is the part above; below where the port is above.
    other
        Shape (N, n + 2): potentials of the other phase.
    """

    phase: NDArray[np.intp]
    vertex: NDArray[np.intp]
    level: NDArray[np.int64]
    above: NDArray[np.bool_]
    other: NDArray[np.int64]

    @classmethod
    def of(cls, table: ConverterTable, switches: SwitchTable, j: int) -> _FarSide:
        row = np.arange(len(table))
        phase = np.where(switches.phase[:, j] == 2, 1, 0)  # noqa: PLR2004 -- phases are 1 and 2 there
        vertex = switches.vertex[:, j].astype(np.intp)
        other = table.potentials[row, 1 - phase]
        level = other[row, switches.high[:, j]]
        port_above = (vertex < _PORTS) & (other[row, np.minimum(vertex, _PORTS - 1)] >= level)
        return cls(phase, vertex, level, ~port_above, other)

    def holds(self, phase: int, here: NDArray[np.int8], there: NDArray[np.int8]) -> NDArray[np.float64]:
        """Where clusters (vertices ``here`` in ``phase``, ``there`` in the other) are on the far side."""
        row = np.arange(len(self.phase))[:, None]
        height = self.other[row, there]
        side = (height >= self.level[:, None]) == self.above[:, None]
        on_it = (self.phase == phase)[:, None] & (here == self.vertex[:, None]) & side
        return np.asarray(on_it, dtype=np.float64)


def _open_phase(switches: SwitchTable) -> NDArray[np.intp]:
    """Phase in which each switch blocks, 0 or 1, shape (N, s)."""
    return np.where(switches.phase == 1, 1, 0)


def _between(
    potentials: NDArray[np.float64], phase: NDArray[np.intp], high: NDArray[np.int8], low: NDArray[np.int8]
) -> NDArray[np.float64]:
    row = np.arange(len(potentials))[:, None]
    return np.asarray(potentials[row, phase, high] - potentials[row, phase, low])


def _across(
    table: ConverterTable, potentials: NDArray[np.float64], phase: NDArray[np.intp]
) -> NDArray[np.float64]:
    """Voltage of every capacitor in one phase per row, shape (N, n)."""
    first = phase[:, None] == 0
    plus = np.where(first, table.words[:, :, 0], table.words[:, :, 2])
    minus = np.where(first, table.words[:, :, 1], table.words[:, :, 3])
    return _between(potentials, np.broadcast_to(phase[:, None], plus.shape), plus, minus)


@dataclass(frozen=True, slots=True)
class _Law:
    """Kirchhoff's voltage law of N converters, in volts per volt at the output.

    Attributes
    ----------
    nodes
        Shape (N, n, n - 1): coefficients of the internal potentials, one line per capacitor.
    source
        Shape (N, n): what the output's own volt brings to each line.
    phase, vertex
        Shape (N, n - 1): which phase and vertex each internal potential belongs to.
    """

    nodes: NDArray[np.float64]
    source: NDArray[np.float64]
    phase: NDArray[np.intp]
    vertex: NDArray[np.intp]

    def potentials(self, residual: NDArray[np.float64], left_out: int) -> NDArray[np.float64]:
        """Solve for residual voltages (N, n) without the line of one capacitor.

        Returns shape (N, 2, n + 2): the potentials of all vertices, ground and input at 0, the output at 1.
        """
        rows, n = residual.shape
        result = np.zeros((rows, 2, n + 2))
        result[..., _O] = 1.0
        if n > 1:
            kept = [i for i in range(n) if i != left_out]
            solution = np.linalg.solve(self.nodes[:, kept], residual[:, kept, None])[..., 0]
            result[np.arange(rows)[:, None], self.phase, self.vertex] = solution
        return result


def _law(table: ConverterTable) -> _Law:
    rows, n, _ = table.words.shape
    first_nodes = table.nodes[:, :1].astype(np.intp)
    nodes = np.zeros((rows, n, n))  # one column more than there are nodes, for what is no node
    source = np.zeros((rows, n))
    row, line = np.arange(rows)[:, None], np.arange(n)[None, :]
    for column, sign in enumerate((1, -1, -1, 1)):
        at = table.words[:, :, column].astype(np.intp)
        unknown = np.where(at >= _PORTS, at - _PORTS + (first_nodes if column > 1 else 0), n - 1)
        nodes[row, line, unknown] += sign * (at >= _PORTS)
        source -= sign * (at == _O)
    place = np.arange(n - 1)[None, :]
    second = place >= first_nodes
    return _Law(
        nodes=nodes[:, :, : n - 1],
        source=source,
        phase=second.astype(np.intp),
        vertex=place + _PORTS - np.where(second, first_nodes, 0),
    )
