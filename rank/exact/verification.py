"""The exact steady state against a circuit simulator, quantity by quantity."""

from __future__ import annotations

from dataclasses import dataclass
from typing import TYPE_CHECKING

from capmuster.rank.exact.deck import subject_deck
from capmuster.rank.exact.impedance import output_impedance
from capmuster.rank.exact.simulate import simulate

if TYPE_CHECKING:
    from capmuster.rank.exact.subject import Subject
    from capmuster.rank.inputs.quantity import Unit

TOLERANCE = 1e-3
"""Greatest difference that counts as agreement: the simulator's own steps are good to some 1e-4."""


@dataclass(frozen=True, slots=True)
class Comparison:
    """One quantity, both ways.

    Attributes
    ----------
    quantity
        What it is; ``peak S1`` is the peak voltage of a switch while it blocks.
    unit
        Its unit.
    exact, simulated
        Both values [unit].
    scale
        What the difference is a share of: the exact value, or for a peak the input voltage.
    """

    quantity: str
    unit: Unit
    exact: float
    simulated: float
    scale: float

    @property
    def difference(self) -> float:
        """Simulated less exact, as a share [1]."""
        return (self.simulated - self.exact) / self.scale

    @property
    def agrees(self) -> bool:
        """Whether the difference is within `TOLERANCE`."""
        return abs(self.difference) <= TOLERANCE


def verify(subject: Subject) -> tuple[Comparison, ...]:
    """Simulate a subject's deck and compare.

    Parameters
    ----------
    subject
        The circuit and its operating point.

    Returns
    -------
    tuple of Comparison
        No-load ratio, output resistance, efficiency, then each switch's peak voltage.

    Raises
    ------
    CapmusterError
        ngspice is missing or fails, or the circuit takes too long to settle.
    """
    found = simulate(subject_deck(subject))
    impedance = output_impedance(subject.steady, subject.frequency)
    point = subject.point()
    pairs: list[tuple[str, Unit, float, float]] = [
        ("no-load ratio", "1", float(impedance.ratio[0]), found.no_load_ratio),
        ("output resistance", "ohm", float(impedance.resistance[0]), found.output_resistance),
        ("efficiency", "1", point.efficiency, found.efficiency),
    ]
    compared = [Comparison(name, unit, exact, other, abs(exact)) for name, unit, exact, other in pairs]
    for switch, exact, simulated in zip(
        subject.circuit.switches, point.switch_peak.tolist(), found.switch_peaks, strict=True
    ):
        compared.append(Comparison(f"peak {switch.name}", "V", exact, simulated, abs(subject.input_voltage)))
    return tuple(compared)
