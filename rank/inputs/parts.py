"""Discrete parts: what a ceramic capacitor or a MOSFET of a parts catalog is, and what it does in use."""

from __future__ import annotations

from dataclasses import asdict, dataclass
from typing import TYPE_CHECKING

import numpy as np

if TYPE_CHECKING:
    from pathlib import Path

    from numpy.typing import ArrayLike, NDArray

REFERENCE_TEMPERATURE = 25.0
"""Junction temperature at which on-resistances of a catalog hold [degC]."""


@dataclass(frozen=True, slots=True)
class CapacitorPart:
    """A ceramic capacitor of a catalog.

    Attributes
    ----------
    name
        Its name, unique in the catalog.
    dielectric
        Its temperature class, such as X7R.
    case
        Its size code.
    nominal
        Capacitance without bias [F].
    tolerance
        Share that the capacitance may be off either way [1].
    rating
        Highest voltage across it [V], before derating.
    bias
        DC-bias curve: pairs of voltage [V], from 0 up to the rating at least, and share of the capacitance
        that is left there [1], from 1 down.
    series_resistance
        Series resistance [ohm].
    footprint
        Area on the board [mm2].
    price
        Price [EUR].
    """

    name: str
    dielectric: str
    case: str
    nominal: float
    tolerance: float
    rating: float
    bias: tuple[tuple[float, float], ...]
    series_resistance: float
    footprint: float
    price: float

    def capacitance(self, voltage: ArrayLike, *, least: bool = True) -> NDArray[np.float64]:
        """Capacitance under direct voltage [F], on straight lines between the points of the bias curve.

        Parameters
        ----------
        voltage
            Voltage across the part [V], not negative; any shape.
        least
            Whether the lower end of the tolerance is taken, or the nominal value.
        """
        volts, shares = np.array(self.bias).T
        value = self.nominal * (1 - self.tolerance if least else 1.0)
        return np.asarray(value * np.interp(np.asarray(voltage, dtype=np.float64), volts, shares))


@dataclass(frozen=True, slots=True)
class SwitchPart:
    """An N-channel MOSFET of a catalog.

    Attributes
    ----------
    name
        Its name, unique in the catalog.
    case
        Its package.
    rating
        Highest voltage that it blocks [V], before derating.
    resistance
        On-resistance at the drive voltage and `REFERENCE_TEMPERATURE` [ohm].
    drive
        Gate drive voltage [V].
    rise
        Rise of the on-resistance with temperature, as a share of `resistance` [1/K].
    gate_charge
        Gate charge at the drive voltage [C].
    output_charge
        Output charge at `output_charge_voltage` [C].
    output_charge_voltage
        Blocking voltage at which `output_charge` is given [V].
    output_charge_exponent
        How the output charge grows with voltage [1]: 1 for a linear capacitance, 0.5 for an abrupt junction.
    footprint
        Area on the board [mm2].
    price
        Price [EUR].
    """

    name: str
    case: str
    rating: float
    resistance: float
    drive: float
    rise: float
    gate_charge: float
    output_charge: float
    output_charge_voltage: float
    output_charge_exponent: float
    footprint: float
    price: float

    def resistance_at(self, temperature: float) -> float:
        """On-resistance [ohm] at a junction temperature [degC]: linear from the catalog's value."""
        return self.resistance * (1 + self.rise * (temperature - REFERENCE_TEMPERATURE))

    def output_charge_at(self, voltage: ArrayLike) -> NDArray[np.float64]:
        """Output charge [C] at blocking voltages [V], ``q_ref (V / V_ref)^m``; any shape."""
        relative = np.asarray(voltage, dtype=np.float64) / self.output_charge_voltage
        return np.asarray(self.output_charge * relative**self.output_charge_exponent)


@dataclass(frozen=True, slots=True)
class Stock:
    """The parts that a converter is chosen from.

    Attributes
    ----------
    names
        Names of the capacitor catalog and of the switch catalog.
    capacitors, switches
        Their parts, at least one of each.
    """

    names: tuple[str, str]
    capacitors: tuple[CapacitorPart, ...]
    switches: tuple[SwitchPart, ...]

    @property
    def fingerprint(self) -> str:
        """Twelve hexadecimal digits that change with any part, but not with the name or layout of a file."""
        from capmuster.rank.inputs.technology import fingerprint  # noqa: PLC0415 -- only for provenance

        return fingerprint([[asdict(part) for part in shelf] for shelf in (self.capacitors, self.switches)])


def load_stock(
    capacitors: str | Path = "board-ceramics",
    switches: str | Path = "board-mosfets",
    *,
    beside: Path | None = None,
) -> Stock:
    """Load the parts to choose from.

    Parameters
    ----------
    capacitors, switches
        Names of shipped catalogs, or paths of CSV files (with their suffix).
    beside
        Folder that a relative path starts from; the working directory if None.

    Raises
    ------
    CapmusterError
        If there is no such catalog, or a file holds anything but valid parts: a line for each fault.
    """
    # Readers of files are for those who read files.
    from capmuster.rank.inputs.parts_file import locate_parts, read_capacitors, read_switches  # noqa: PLC0415

    ceramics, transistors = (locate_parts(one, beside) for one in (capacitors, switches))
    return Stock((ceramics.stem, transistors.stem), read_capacitors(ceramics), read_switches(transistors))
