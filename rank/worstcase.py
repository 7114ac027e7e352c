r"""Highest voltage that each element must be rated for, for many converters at once.

In fixed-ratio use an element is rated for its ideal voltage at the highest input.

In regulated use the output is held below M V_in, and charge moves by as much as that difference drives it. Let
``dU`` be the difference at the highest input. Energy balance (Tellegen's theorem) over a cycle says

    sum over capacitors of a_c swing + sum over switches of a_r drop = dU

with the swing of a capacitor between the phases and the voltage drop of a switch while it conducts. As long as no
current reverses within its phase, all terms are positive: a state is a weighted mean of *corners*, in each of
which one element takes all of ``dU``, as swing or drop ``dU / a``, and every other one is ideal. Kirchhoff's
voltage law without that capacitor, or with that switch's drop, gives the corner's potentials. The bound on an
element is the highest voltage that it has in any corner, or in the ideal state.

Currents do reverse, a little, where time constants differ: `ALLOWANCE` covers what was seen. On converters sized in
proportion to their charges, and off that by up to a factor of two either way, exact steady states stay within it
(`tests/test_rank_worstcase.py`), and half of them come within 6 % of the bound.
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import TYPE_CHECKING, TypeAlias

import numpy as np

if TYPE_CHECKING:
    from collections.abc import Iterator

    from numpy.typing import NDArray

    from capmuster.enumerate.converters import ConverterTable
    from capmuster.rank.brief import Brief
    from capmuster.rank.switchtable import SwitchTable

_PORTS = 3
_O = 2
_BLOCK = 4096
ALLOWANCE = 1.02
"""What the bound of regulated use is multiplied with, for currents that reverse within a phase."""


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
    capacitor = np.abs(table.voltages) / scale * brief.input_maximum
    switch = switches.blocking / scale * brief.input_maximum
    if brief.use == "regulated":
        held_down = brief.required - table.ratios * brief.input_maximum
        law = _law(table)
        for slope_c, slope_s in (
            *_capacitor_corners(table, switches, law),
            *_switch_corners(table, switches, law),
        ):
            swung = np.abs(table.voltages / scale * brief.input_maximum + slope_c * held_down[:, None])
            blocked = np.abs(switches.blocking / scale * brief.input_maximum + slope_s * held_down[:, None])
            capacitor = np.maximum(capacitor, ALLOWANCE * swung)
            switch = np.maximum(switch, ALLOWANCE * blocked)
    return Ratings(capacitor, np.where(switches.phase > 0, switch, 0.0))


_Slopes: TypeAlias = "tuple[NDArray[np.float64], NDArray[np.float64]]"


def _capacitor_corners(table: ConverterTable, switches: SwitchTable, law: _Law) -> Iterator[_Slopes]:
    """Yield volts across capacitors and switches per volt at the output, for each swinging capacitor and phase."""
    for i in range(table.n):
        potentials = law.potentials(law.source, left_out=i)
        blocked = _between(potentials, _open_phase(switches), switches.high, switches.low)
        for phase in (0, 1):
            yield _across(table, potentials, np.full(len(table), phase)), blocked


def _switch_corners(table: ConverterTable, switches: SwitchTable, law: _Law) -> Iterator[_Slopes]:
    """Yield volts across capacitors and switches per volt at the output, for each switch that takes it all."""
    for j in range(int(switches.count.max(initial=0))):
        far = _FarSide.of(table, switches, j)
        bridged = np.zeros(law.source.shape)
        for phase, sign in ((0, -1), (1, 1)):
            for plate, polarity in ((0, 1), (1, -1)):
                on_it = far.holds(
                    phase, table.words[:, :, 2 * phase + plate], table.words[:, :, 2 * (1 - phase) + plate]
                )
                bridged += sign * polarity * on_it
        moved = (table.charges * bridged).sum(axis=1)
        with np.errstate(divide="ignore", invalid="ignore"):
            drop = np.where(moved != 0, -(table.charges * law.source).sum(axis=1) / moved, np.nan)
        potentials = law.potentials(law.source + drop[:, None] * bridged, left_out=0)
        swung = _across(table, potentials, 1 - far.phase)
        blocked = _between(potentials, _open_phase(switches), switches.high, switches.low)
        high, low = (
            far.holds(1, end, switches.vertex) * (_open_phase(switches) == 1)
            + far.holds(0, end, switches.vertex) * (_open_phase(switches) == 0)
            for end in (switches.high, switches.low)
        )
        blocked = blocked + drop[:, None] * (high - low)
        works = (moved != 0)[:, None]
        yield np.where(works, swung, 0.0), np.where(works, blocked, 0.0)


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
        """Where clusters (vertices ``here`` in ``phase``, ``there`` in the other) are on the far side, (N, k)."""
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
