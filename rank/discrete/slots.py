"""What must be built for a converter: every capacitor and switch with its charge and its voltages."""

from __future__ import annotations

from dataclasses import dataclass
from fractions import Fraction
from typing import TYPE_CHECKING, Literal

from capmuster.enumerate.converters import table_of
from capmuster.rank.scores.networktable import network_table
from capmuster.rank.scores.switching import switch_network
from capmuster.rank.worstcase import ratings

if TYPE_CHECKING:
    from capmuster.enumerate.wiring import Converter
    from capmuster.rank.inputs.brief import Brief


@dataclass(frozen=True, slots=True)
class Slot:
    """A capacitor or switch of a converter, to be filled with parts.

    Attributes
    ----------
    kind
        "capacitor" or "switch".
    name
        As in `capmuster.rank.scores.switching` and in the wiring's order: C1, ..., S1, ....
    nodes
        Names of its two nodes; of a switch the positive one first while it blocks.
    phase
        Phase in which a switch is closed; None for a capacitor.
    multiplier
        a_c or a_r [1].
    ideal
        Its voltage, or blocking voltage, per volt of input [1].
    voltage
        What it must stand [V].
    """

    kind: Literal["capacitor", "switch"]
    name: str
    nodes: tuple[str, str]
    phase: int | None
    multiplier: Fraction
    ideal: Fraction
    voltage: float


def slots_of(converter: Converter, brief: Brief) -> tuple[Slot, ...]:
    """Find what must be built for a converter in the use of a brief, capacitors first."""
    table = table_of([converter])
    network = switch_network(converter)
    stands = ratings(table, network_table(table, network), brief)
    balance = converter.balance
    output = abs(balance.port_charges[2])
    plate_of = {plate: cluster.name for cluster in network.clusters for plate in cluster.plates}
    capacitors = [
        Slot(
            kind="capacitor",
            name=f"C{i + 1}",
            nodes=(plate_of[i, 1], plate_of[i, -1]),
            phase=None,
            multiplier=Fraction(abs(balance.charges[i]), output),
            ideal=abs(balance.voltages[i]),
            voltage=float(stands.capacitors[0, i]),
        )
        for i in range(converter.n)
    ]
    switches = [
        Slot(
            kind="switch",
            name=switch.name,
            nodes=switch.nodes,
            phase=switch.phase,
            multiplier=switch.multiplier,
            ideal=switch.blocking_voltage,
            voltage=float(stands.switches[0, j]),
        )
        for j, switch in enumerate(network.switches)
    ]
    return (*capacitors, *switches)
