"""Charge flow of one converter and how well it uses its capacitors and switches, exactly.

The performance metrics of the slow- and fast-switching limits are those of Seeman and Sanders, "Analysis and
optimization of switched-capacitor DC-DC converters", IEEE Trans. Power Electronics, 2008.
"""

from __future__ import annotations

from dataclasses import dataclass
from fractions import Fraction
from typing import TYPE_CHECKING

from capmuster.enumerate.errors import IllPosedError
from capmuster.rank.scores.switching import switch_network

if TYPE_CHECKING:
    from capmuster.enumerate.wiring import Converter
    from capmuster.rank.scores.switching import SwitchNetwork


@dataclass(frozen=True, slots=True)
class ChargeFlow:
    """Charges and voltages of a converter, per unit of output charge and per volt of input.

    Attributes
    ----------
    multipliers
        a_c of each capacitor.
    voltages
        Voltage of each capacitor.
    input_charges, output_charges
        Charge through the input, and through the output, in phase 1 and in phase 2, each counted in the
        direction of its net flow; those of the output add up to 1, those of the input to |M|.
    network
        Clusters and switches.
    capacitor_utilisation, switch_utilisation
        E / sum |q v| over capacitors, and 4 E / sum |q v| over switches, both in (0, 1]; 0 in a unity
        converter, which lifts no energy. E is the energy that has to be lifted per cycle.
    slow_limit_metric
        V_out^2 / (R_SSL f W), W = sum C v^2 / 2 the energy that the capacitors are rated for, optimally
        allotted: 2 / (sum a_c v / V_out)^2.
    fast_limit_metric
        V_out^2 / (R_FSL P), P = sum v^2 / R the volt-amperes that the switches are rated for, optimally
        allotted, at 50 % duty: 1 / (2 (sum a_r v / V_out)^2). None where no switch blocks a voltage.
    """

    multipliers: tuple[Fraction, ...]
    voltages: tuple[Fraction, ...]
    input_charges: tuple[Fraction, Fraction]
    output_charges: tuple[Fraction, Fraction]
    network: SwitchNetwork
    capacitor_utilisation: Fraction
    switch_utilisation: Fraction
    slow_limit_metric: Fraction
    fast_limit_metric: Fraction | None

    @property
    def input_continuous(self) -> bool:
        """Whether the input delivers charge in both phases."""
        return all(charge > 0 for charge in self.input_charges)

    @property
    def output_evenness(self) -> Fraction:
        """Twice the lesser phase's share of the output charge: 1 when both feed it alike, 0 when one does."""
        return max(Fraction(0), 2 * min(self.output_charges))


def charge_flow(converter: Converter) -> ChargeFlow:
    """Work out charge multipliers, port charges, switches, utilisations and metrics.

    Raises
    ------
    IllPosedError
        When the converter is degenerate: some capacitor would hold no voltage.
    """
    refuse_degenerate(converter)
    balance = converter.balance
    output = abs(balance.port_charges[2])
    network = switch_network(converter)
    multipliers = tuple(Fraction(abs(q), output) for q in balance.charges)
    capacitor_sum = sum(
        (a * v for a, v in zip(multipliers, balance.voltages, strict=True)), start=Fraction(0)
    )
    switch_sum = sum((s.multiplier * s.blocking_voltage for s in network.switches), start=Fraction(0))
    lifted = lifted_energy(converter.ratio)
    magnitude = abs(converter.ratio)
    return ChargeFlow(
        multipliers=multipliers,
        voltages=balance.voltages,
        input_charges=_port_charges(converter, 1),
        output_charges=_port_charges(converter, 2),
        network=network,
        capacitor_utilisation=lifted / capacitor_sum if lifted else Fraction(0),
        switch_utilisation=4 * lifted / switch_sum if lifted else Fraction(0),
        slow_limit_metric=2 * (magnitude / capacitor_sum) ** 2,
        fast_limit_metric=(magnitude / switch_sum) ** 2 / 2 if switch_sum else None,
    )


def refuse_degenerate(converter: Converter) -> None:
    """Refuse a converter with a capacitor that would hold no voltage.

    Raises
    ------
    IllPosedError
        When the converter is degenerate; the message names the capacitors and the wiring.
    """
    balance = converter.balance
    if balance.degenerate:
        empty = ", ".join(f"C{i + 1}" for i, v in enumerate(balance.voltages) if not v)
        raise IllPosedError(
            f"wiring '{converter.code}': {empty} would hold no voltage (degenerate)",
            accepted="capacitors that hold a voltage",
        )


def lifted_energy(ratio: Fraction) -> Fraction:
    """Energy lifted per cycle, per unit of output charge and volt of input: |port charge| x potential step.

    Of the ports' potentials 0, 1 and M one is in the middle; the energy is the charge of an outer port times
    its distance from the middle one.
    """
    if ratio > 1:
        return ratio - 1
    if ratio > 0:
        return ratio - ratio**2
    return -ratio


def _port_charges(converter: Converter, port: int) -> tuple[Fraction, Fraction]:
    """Charge through input (1) or output (2) in each phase, in the direction of its net flow."""
    totals = [0, 0]
    for word, taken in zip(converter.words, converter.balance.charges, strict=True):
        for phase, into in ((0, taken), (1, -taken)):
            totals[phase] += into * ((word[2 * phase] == port) - (word[2 * phase + 1] == port))
    net = 1 if sum(totals) > 0 else -1
    output = abs(converter.balance.port_charges[2])
    return Fraction(net * totals[0], output), Fraction(net * totals[1], output)
