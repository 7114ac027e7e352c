r"""What a technology makes of a converter: coefficients of its impedance and of every loss, by element.

An element of area ``A`` is ``s`` devices of its class in series, each of area ``A / s`` at ``1 / s`` of the
voltage. Coefficients are per area of the whole element; a coefficient of another term is never part of them.

=================  ========================  ==========  =========================================
term               coefficient               unit        source
=================  ========================  ==========  =========================================
charge transfer    ``a_c^2 s^2 / d``         ohm Hz mm2  slow limit (Seeman and Sanders 2008)
on-resistance      ``a_r^2 s^2 rho``         ohm mm2     fast limit (the same)
series resistance  ``a_c^2 s^2 sigma``       ohm mm2     fast limit (the same)
plate              ``kappa d dU^2``          J/mm2       two edges, half of C dU^2 each (textbook)
gate drive         ``q_g V_drive``           J/mm2       charge times supply voltage (textbook)
output charge      ``q_oss(V / s) V / s``    J/mm2       charged from V, then shorted (textbook)
leakage            ``j (V / s)^2 / V_rated`` W/mm2       j at the rating, in proportion to voltage
controller         power                     W           technology
wiring             series resistance         ohm         technology
=================  ========================  ==========  =========================================

``dU`` is the step of a plate's potential between the phases. A capacitor's voltage is constant, so both
plates make the same step, and stacked devices too: which plate is the parasitic one changes the no-load
ratio, and never this loss.
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import TYPE_CHECKING

import numpy as np

from capmuster.rank.inputs.technology import Choice
from capmuster.rank.sizing import LossModel

if TYPE_CHECKING:
    from numpy.typing import NDArray

    from capmuster.enumerate.converters import ConverterTable
    from capmuster.rank.evaluation import Elements
    from capmuster.rank.inputs.technology import Technology
    from capmuster.rank.scores.switchtable import SwitchTable

    Floats = NDArray[np.float64]

_O = 2
_ROUNDING = 1e-9  # as in `Technology`: a voltage that is the rating but for rounding is the rating
_BLOCKING = 0.5  # share of the time in which a switch blocks, at 50 % duty


@dataclass(frozen=True, slots=True)
class LossTerm:
    """A loss as the shortlist reports it.

    Attributes
    ----------
    name
        Its name in tables for programs, with the unit: the loss at full load.
    heading
        Its heading for people.
    meaning
        What it is and where its figure comes from.
    """

    name: str
    heading: str
    meaning: str


TERMS = (
    LossTerm(
        "loss_charge_transfer_W", "charge transfer", "I^2 R_SSL^2 / R: slow-switching part of conduction"
    ),
    LossTerm("loss_on_resistance_W", "on-resistance", "I^2 R_FSL R_k / R: switches' part of conduction"),
    LossTerm(
        "loss_series_resistance_W", "series resistance", "I^2 R_FSL R_k / R: capacitors' series resistance"
    ),
    LossTerm("loss_wiring_W", "wiring", "I^2 times the technology's wiring resistance"),
    LossTerm("loss_held_W", "output held", "regulated use: I (|M| V_in - |V_out|), all conduction in one"),
    LossTerm("loss_plate_W", "plates", "f C_plate dU^2 with the technology's plate fraction"),
    LossTerm("loss_gate_W", "gate drive", "f Q_g V_drive with the technology's gate charge"),
    LossTerm("loss_output_charge_W", "output charge", "f Q_oss(V) V at each switch's blocking voltage"),
    LossTerm(
        "loss_idle_switches_W",
        "idle switches",
        "gate and output charge of smallest switches without a current",
    ),
    LossTerm("loss_leakage_W", "leakage", "leakage of the technology, in proportion to voltage"),
    LossTerm("loss_controller_W", "controller", "the technology's controller power"),
)
"""Loss terms in the order of `capmuster.rank.sizing.Losses`; they add up to the total."""

TERM_FIELDS = (
    "slow", "switches", "series", "wiring", "held", "plate", "gate", "output_charge", "cycle", "leakage",
    "controller",
)  # fmt: skip
"""Attribute of `capmuster.rank.sizing.Losses` behind each of `TERMS`."""


def loss_model(
    table: ConverterTable, switches: SwitchTable, elements: Elements, technology: Technology, volts: float
) -> LossModel:
    """Write the coefficients of N converters at one input voltage.

    Parameters
    ----------
    table
        The converters.
    switches
        Their switches.
    elements
        Class and series count of every element.
    technology
        What they are built from.
    volts
        Input voltage at which losses count [V]; it does not change the impedance.

    Returns
    -------
    LossModel
        Voltages are the ideal ones of that input, without droop.
    """
    output = np.abs(table.port_charges[:, _O, None]).astype(np.float64)
    scale = table.scale[:, None].astype(np.float64)
    held = np.abs(table.voltages) / scale * volts
    blocked = switches.blocking / scale * volts
    capacitor = capacitor_coefficients(
        technology,
        elements.capacitor_choice,
        np.abs(table.charges) / output,
        held,
        plate_steps(table) * volts,
    )
    present = switches.phase > 0
    switch = switch_coefficients(technology, elements.switch_choice, switches.charges / output, blocked)
    idle_area = np.where(present & (switches.charges == 0), elements.switch_choice.cost, 0.0)
    energy = ((switch.gate + switch.output_charge) * idle_area).sum(axis=1)
    standing = (switch.leakage * idle_area).sum(axis=1)
    return LossModel.build(
        capacitor.slow,
        np.where(present, switch.fast, 0.0),
        switches.phase,
        series=capacitor.series,
        plate=capacitor.plate,
        leakage_c=capacitor.leakage,
        gate=switch.gate,
        output_charge=switch.output_charge,
        leakage_s=switch.leakage,
        controller=technology.controller_power + standing,
        cycle=energy,
        lead=technology.wiring_resistance,
    )


def plate_steps(table: ConverterTable) -> Floats:
    """Step of the plates of every capacitor between the phases, per volt of input, shape (N, n) [1]."""
    row = np.arange(len(table))[:, None]
    first = table.potentials[row, 0, table.words[:, :, 0].astype(np.intp)]
    second = table.potentials[row, 1, table.words[:, :, 2].astype(np.intp)]
    return np.asarray(np.abs(first - second) / table.scale[:, None])


@dataclass(frozen=True, slots=True)
class CapacitorCoefficients:
    """Coefficients of capacitors, all of one shape; see the table of the module.

    `slow` [ohm Hz mm2], `series` [ohm mm2], `plate` [J/mm2], `leakage` [W/mm2].
    """

    slow: Floats
    series: Floats
    plate: Floats
    leakage: Floats


@dataclass(frozen=True, slots=True)
class SwitchCoefficients:
    """Coefficients of switches, all of one shape; see the table of the module.

    `fast` [ohm mm2], `gate` and `output_charge` [J/mm2], `leakage` [W/mm2].
    """

    fast: Floats
    gate: Floats
    output_charge: Floats
    leakage: Floats


def capacitor_coefficients(
    technology: Technology, choice: Choice, multiplier: Floats, held: Floats, step: Floats
) -> CapacitorCoefficients:
    """Coefficients of capacitors of chosen classes.

    Parameters
    ----------
    technology
        Its classes.
    choice
        Class and series count of each.
    multiplier
        a_c of each [1].
    held
        Voltage of each [V].
    step
        Step of its plates [V].
    """
    classes, k, s = technology.capacitor_columns(), choice.index, choice.series
    return CapacitorCoefficients(
        slow=multiplier**2 * s**2 / classes.density[k],
        series=multiplier**2 * s**2 * classes.series_resistance[k],
        plate=classes.plate_fraction[k] * classes.density[k] * step**2,
        leakage=classes.leakage[k] * (held / s) ** 2 / classes.rating[k],
    )


def switch_coefficients(
    technology: Technology, choice: Choice, multiplier: Floats, blocked: Floats
) -> SwitchCoefficients:
    """Coefficients of switches of chosen classes.

    Parameters
    ----------
    technology
        Its classes.
    choice
        Class and series count of each.
    multiplier
        a_r of each [1].
    blocked
        Blocking voltage of each [V].
    """
    classes, k, s = technology.switch_columns(), choice.index, choice.series
    each = blocked / s
    charge = (
        classes.output_charge[k]
        * (each / classes.output_charge_voltage[k]) ** classes.output_charge_exponent[k]
    )
    return SwitchCoefficients(
        fast=multiplier**2 * s**2 * classes.resistance[k],
        gate=np.broadcast_to(classes.gate_charge[k] * classes.drive[k], each.shape),
        output_charge=charge * each,
        leakage=_BLOCKING * classes.leakage[k] * each**2 / classes.rating[k],
    )


def series_counts(voltage: Floats, limit: Floats) -> NDArray[np.int64]:
    """Devices in series that stand a voltage [V], for classes of given derated ratings; (..., classes)."""
    count = np.ceil(voltage[..., None] * (1 - _ROUNDING) / limit)
    return np.maximum(count, 1).astype(np.int64)


def every_class(series: NDArray[np.int64]) -> Choice:
    """Choose every class once, along the last axis."""
    return Choice(np.broadcast_to(np.arange(series.shape[-1]), series.shape), series, np.ones(series.shape))


def best_of_all(
    table: ConverterTable, switches: SwitchTable, elements: Elements, technology: Technology, volts: float
) -> LossModel:
    """Write coefficients that no choice of classes, and in fixed-ratio use no tree of switches, gets below.

    Each coefficient is the least over all classes, whichever class it is. On-resistance is the least per
    squared blocking voltage, so that a switch costs its charge times its voltage times a constant, and the
    chain has the least sum of these of all trees.

    Parameters
    ----------
    table, switches, elements, technology, volts
        As in `loss_model`; the voltages that elements must stand are those of ``elements.ratings``.
    """
    output = np.abs(table.port_charges[:, _O, None]).astype(np.float64)
    held = (np.abs(table.voltages) / table.scale[:, None] * volts)[..., None]
    classes = technology.switch_columns()
    capacitor = capacitor_coefficients(
        technology,
        every_class(series_counts(elements.ratings.capacitors, technology.capacitor_columns().limit)),
        np.abs(table.charges / output)[..., None],
        held,
        (plate_steps(table) * volts)[..., None],
    )
    fast = (switches.charges / output * elements.ratings.switches) ** 2 * np.min(
        classes.resistance / classes.limit**2
    )
    return LossModel.build(
        capacitor.slow.min(axis=-1),
        fast,
        switches.phase,
        series=capacitor.series.min(axis=-1),
        plate=capacitor.plate.min(axis=-1),
        leakage_c=capacitor.leakage.min(axis=-1),
        gate=np.min(classes.gate_charge * classes.drive),
        controller=technology.controller_power,
        lead=technology.wiring_resistance,
    )
