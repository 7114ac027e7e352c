"""The circuit of a converter: capacitors, switches and plate parasitics between hard-wired nodes.

It knows nothing of wirings, so that anything with two phases can be analysed: a converter of the census
(`circuit_of`), or one drawn by hand.
"""

from __future__ import annotations

import math
from dataclasses import dataclass, replace
from functools import lru_cache
from typing import TYPE_CHECKING, Literal

from capmuster.enumerate.errors import CapmusterError

if TYPE_CHECKING:
    from collections.abc import Sequence

    from capmuster.enumerate.wiring import Converter
    from capmuster.rank.scores.switching import SwitchNetwork

PORTS = ("G", "I", "O")
Plate = Literal["plus", "minus"]


@dataclass(frozen=True, slots=True)
class Capacitor:
    """A flying capacitor, with its series resistance, from node `plus` to node `minus`.

    Capacitance in [F], series resistance in [ohm] (0 is allowed).
    """

    name: str
    plus: int
    minus: int
    capacitance: float
    resistance: float = 0.0


@dataclass(frozen=True, slots=True)
class Switch:
    """A switch that joins node `a` to node `b` through `resistance` [ohm] while its phase (1 or 2) lasts."""

    name: str
    a: int
    b: int
    phase: int
    resistance: float


@dataclass(frozen=True, slots=True)
class PlateParasitic:
    """Capacitance [F] from a node to ground: the bottom plate of an integrated capacitor."""

    name: str
    node: int
    capacitance: float


@dataclass(frozen=True, slots=True)
class Circuit:
    """Two phases of linear networks between the same hard-wired nodes.

    Attributes
    ----------
    nodes
        Names of the hard-wired nodes.
    ports
        Indices of ground, input and output among the nodes. All three are stiff.
    capacitors, switches, plates
        The elements; plates may be empty.
    duty
        Share of the period that belongs to phase 1.
    dead_time
        Time [s] at the end of each phase in which no switch conducts.
    """

    nodes: tuple[str, ...]
    ports: tuple[int, int, int]
    capacitors: tuple[Capacitor, ...]
    switches: tuple[Switch, ...]
    plates: tuple[PlateParasitic, ...] = ()
    duty: float = 0.5
    dead_time: float = 0.0

    def __post_init__(self) -> None:
        """Refuse values outside physics and elements outside the circuit."""
        if not 0 < self.duty < 1:
            raise CapmusterError(f"duty {self.duty} of phase 1", accepted="a number between 0 and 1")
        if not (math.isfinite(self.dead_time) and self.dead_time >= 0):
            raise CapmusterError(f"dead time {self.dead_time} s", accepted="0 or a positive number")
        for capacitor in self.capacitors:
            _positive(capacitor.capacitance, f"capacitance of {capacitor.name}", "F")
            if capacitor.resistance:
                _positive(capacitor.resistance, f"series resistance of {capacitor.name}", "ohm")
        for switch in self.switches:
            _positive(switch.resistance, f"resistance of {switch.name}", "ohm")
            if switch.phase not in (1, 2):
                raise CapmusterError(f"phase {switch.phase} of {switch.name}", accepted="1 or 2")
        for plate in self.plates:
            _positive(plate.capacitance, f"plate capacitance of {plate.name}", "F")

    def scaled(self, *, capacitance: float = 1.0, resistance: float = 1.0) -> Circuit:
        """Return the circuit with all capacitances and all resistances multiplied by a factor each."""
        return replace(
            self,
            capacitors=tuple(
                replace(c, capacitance=c.capacitance * capacitance, resistance=c.resistance * resistance)
                for c in self.capacitors
            ),
            switches=tuple(replace(s, resistance=s.resistance * resistance) for s in self.switches),
            plates=tuple(replace(p, capacitance=p.capacitance * capacitance) for p in self.plates),
        )


def _positive(value: float, what: str, unit: str) -> None:
    if not (math.isfinite(value) and value > 0):
        raise CapmusterError(f"{what} is {value} {unit}", accepted="a positive number")


def _count(count: int) -> str:
    return f"1 or {count}" if count > 1 else "1"


def _each(values: float | Sequence[float], count: int, what: str) -> list[float]:
    """One value for all, or one for each."""
    if isinstance(values, int | float):
        return [float(values)] * count
    if len(values) != count:
        raise CapmusterError(f"{len(values)} values for {what}", accepted=_count(count))
    return [float(value) for value in values]


@lru_cache(maxsize=64)
def _network(converter: Converter) -> SwitchNetwork:
    """Switch network of a converter, kept: sizing builds many circuits of one converter."""
    from capmuster.rank.scores.switching import switch_network  # noqa: PLC0415 - a circuit needs no wiring

    return switch_network(converter)


def circuit_of(
    converter: Converter,
    capacitances: float | Sequence[float],
    resistances: float | Sequence[float],
    *,
    series_resistances: float | Sequence[float] = 0.0,
    plate_fraction: float | Sequence[float] = 0.0,
    plate: Plate | Sequence[Plate] = "minus",
    duty: float = 0.5,
    dead_time: float = 0.0,
    between: Sequence[tuple[str, str, int]] | None = None,
) -> Circuit:
    """Build the circuit of a converter with the given element values.

    Parameters
    ----------
    converter
        The converter; its clusters become the nodes, in their order.
    capacitances
        One value for all [F], or one for each capacitor in the order of the wiring.
    resistances
        On-resistance [ohm], one for all or one for each switch in the order of the switch network.
    series_resistances
        Series resistance of the capacitors [ohm], one for all or one for each.
    plate_fraction
        Bottom-plate capacitance as a share of each capacitance; 0 for none.
    plate
        Which plate carries it, one for all or one for each capacitor. A plate that is wired to a port is held
        there, so its parasitic is left out.
    duty, dead_time
        See `Circuit`.
    between
        Names of the two nodes of each switch, and the phase in which it is closed; by default those of the
        switch network, which are chains.

    Returns
    -------
    Circuit
        Capacitors are named ``C1, C2, ...``, switches as in the switch network.

    Raises
    ------
    CapmusterError
        A value is not positive, or the number of values does not fit.
    """
    network = _network(converter)
    count = len(converter.words)
    farads = _each(capacitances, count, "the capacitances")
    series = _each(series_resistances, count, "the series resistances")
    ohms = _each(resistances, len(network.switches), "the switch resistances")
    shares = _each(plate_fraction, count, "the plate fraction")
    sides: list[Plate] = [plate] * count if isinstance(plate, str) else list(plate)
    if len(sides) != count:
        raise CapmusterError(f"{len(sides)} values for the plate", accepted=_count(count))

    where = {
        (index, side): node for node, cluster in enumerate(network.clusters) for index, side in cluster.plates
    }
    at = {cluster.name: node for node, cluster in enumerate(network.clusters)}
    joins = [(*switch.nodes, switch.phase) for switch in network.switches] if between is None else between
    port = {cluster.port: node for node, cluster in enumerate(network.clusters) if cluster.port}
    return Circuit(
        nodes=tuple(cluster.name for cluster in network.clusters),
        ports=(port["G"], port["I"], port["O"]),
        capacitors=tuple(
            Capacitor(f"C{i + 1}", where[i, 1], where[i, -1], farads[i], series[i]) for i in range(count)
        ),
        switches=tuple(
            Switch(switch.name, at[first], at[second], phase, ohm)
            for switch, (first, second, phase), ohm in zip(network.switches, joins, ohms, strict=True)
        ),
        plates=tuple(
            PlateParasitic(f"C{i + 1}", where[i, 1 if sides[i] == "plus" else -1], shares[i] * farads[i])
            for i in range(count)
            if shares[i] > 0 and where[i, 1 if sides[i] == "plus" else -1] not in port.values()
        ),
        duty=duty,
        dead_time=dead_time,
    )
