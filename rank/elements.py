"""Every capacitor and switch of one sized candidate: class, area, value, voltage and stress."""

from __future__ import annotations

from dataclasses import dataclass
from typing import TYPE_CHECKING, Literal

import numpy as np

from capmuster.enumerate.converters import table_of
from capmuster.rank.areas import element_areas
from capmuster.rank.design.devicechoice import choose_and_size
from capmuster.rank.design.gatedrive import gate_drives
from capmuster.rank.design.operation import Candidates
from capmuster.rank.evaluation import choose_elements
from capmuster.rank.scores.networktable import network_table
from capmuster.rank.scores.switching import switch_network

if TYPE_CHECKING:
    from capmuster.enumerate.wiring import Converter
    from capmuster.rank.design.exactchoice import ExactChoice
    from capmuster.rank.inputs.brief import Brief


@dataclass(frozen=True, slots=True)
class Element:
    """A sized capacitor or switch.

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
    device
        Name of its class.
    series
        Devices of the class in series.
    area
        Area of all of them [mm2].
    value
        Capacitance [F] or on-resistance [ohm] of all of them.
    multiplier
        a_c or a_r.
    voltage
        Voltage that it must stand [V].
    rating
        What it stands, derated [V].
    polarity
        "nmos" or "pmos"; empty for a capacitor.
    source
        Potential of a switch's source at the nominal input while it conducts and while it blocks [V], ideal;
        None for a capacitor.
    gate
        Potential that its gate needs while it conducts and while it blocks [V]; None for a capacitor.
    supply
        "rails" where ground, input and output span these potentials at the lowest input, or "floating".
    """

    kind: Literal["capacitor", "switch"]
    name: str
    nodes: tuple[str, str]
    phase: int | None
    device: str
    series: int
    area: float
    value: float
    multiplier: float
    voltage: float
    rating: float
    polarity: str = ""
    source: tuple[float, float] | None = None
    gate: tuple[float, float] | None = None
    supply: str = ""

    @property
    def stress(self) -> float:
        """Voltage over rating [1]."""
        return self.voltage / self.rating


def elements_of(
    converter: Converter,
    brief: Brief,
    capacitor_area: float,
    switching_area: float,
    exact: ExactChoice | None = None,
) -> tuple[Element, ...]:
    """Size every element of a converter.

    Parameters
    ----------
    converter
        The converter.
    brief
        Its use and technology.
    capacitor_area
        Area of all capacitors [mm2], where the brief counts no losses; else the objective decides.
    switching_area
        Area of all switches that carry charge [mm2], likewise.
    exact
        Switches, classes and sizes if they have been chosen exactly.
    """
    table = table_of([converter])
    network = switch_network(converter) if exact is None else exact.network
    switches = network_table(table, network)
    chosen = choose_elements(table, switches, brief)
    technology = brief.technology
    if brief.counts_losses:
        if exact is None:
            candidate, sized = choose_and_size(Candidates(table, switches, chosen, brief))
        else:
            candidate, sized = exact.candidate, exact.sized
        chosen = candidate.elements
        capacitor_areas = sized.design.capacitors[0]
        working = switches.charges[0] > 0
        switch_areas = np.where(working, sized.design.switches[0], chosen.switch_choice.cost[0])
    else:
        capacitor_areas = element_areas(chosen.capacitor_weights, np.array([capacitor_area]))[0]
        switch_areas = element_areas(
            chosen.switch_weights, np.array([switching_area]), smallest=chosen.switch_choice.cost
        )[0]
    drives = gate_drives(table, switches, brief, chosen.switch_choice)
    found = []
    plate_of = {plate: cluster.name for cluster in network.clusters for plate in cluster.plates}
    for i, area in enumerate(capacitor_areas.tolist()):
        device = technology.capacitors[int(chosen.capacitor_choice.index[0, i])]
        series = int(chosen.capacitor_choice.series[0, i])
        found.append(
            Element(
                kind="capacitor",
                name=f"C{i + 1}",
                nodes=(plate_of[i, 1], plate_of[i, -1]),
                phase=None,
                device=device.name,
                series=series,
                area=area,
                value=area * device.density / series**2,
                multiplier=float(abs(table.charges[0, i] / table.port_charges[0, 2])),
                voltage=float(chosen.ratings.capacitors[0, i]),
                rating=series * device.rating * technology.capacitor_derating,
            )
        )
    for j, (switch, area) in enumerate(zip(network.switches, switch_areas.tolist(), strict=True)):
        transistor = technology.switches[int(chosen.switch_choice.index[0, j])]
        series = int(chosen.switch_choice.series[0, j])
        found.append(
            Element(
                kind="switch",
                name=switch.name,
                nodes=switch.nodes,
                phase=switch.phase,
                device=transistor.name,
                series=series,
                area=area,
                value=transistor.resistance * series**2 / area,
                multiplier=float(switch.multiplier),
                voltage=float(chosen.ratings.switches[0, j]),
                rating=series * transistor.rating * technology.switch_derating,
                polarity=transistor.polarity,
                source=drives[j].source,
                gate=drives[j].gate,
                supply=drives[j].supply,
            )
        )
    return tuple(found)
