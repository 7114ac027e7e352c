"""What a listing may be narrowed by, before anything is ranked."""

from __future__ import annotations

from dataclasses import dataclass
from typing import TYPE_CHECKING

import numpy as np

from capmuster.enumerate.errors import CapmusterError
from capmuster.enumerate.families import check_family

if TYPE_CHECKING:
    from numpy.typing import NDArray

    from capmuster.rank.scores.candidates import Measures

_TOLERANCE = 1e-12
"""Bounds are met by values that equal them, however either was rounded."""


@dataclass(frozen=True, slots=True)
class Filters:
    """Bounds that a listed converter keeps; None leaves one open.

    Attributes
    ----------
    switches
        Most switches.
    blocking_voltage
        Largest blocking voltage of a switch [V per V of input].
    capacitor_utilisation, switch_utilisation
        Least utilisation, 0 to 1.
    output_evenness
        Least evenness of the output's feeding, 0 to 1: the lesser phase share of its charge over one half.
    plate_on_ports
        Whether every capacitor must have a plate that meets a port in both phases.
    families
        Names of families; a converter must belong to one of them. Empty for any.
    """

    switches: int | None = None
    blocking_voltage: float | None = None
    capacitor_utilisation: float | None = None
    switch_utilisation: float | None = None
    output_evenness: float | None = None
    plate_on_ports: bool = False
    families: tuple[str, ...] = ()

    def __post_init__(self) -> None:
        """Refuse bounds that no converter could be measured by.

        Raises
        ------
        CapmusterError
            When a bound is out of its range, or a family is unknown.
        """
        if self.switches is not None and self.switches < 0:
            raise CapmusterError(f"switches: {self.switches} is negative", accepted="0 or more")
        # Written so that NaN is refused too.
        if self.blocking_voltage is not None and not self.blocking_voltage > 0:
            raise CapmusterError(
                f"blocking voltage: {self.blocking_voltage} is not positive",
                accepted="volts per volt of input, above 0",
            )
        for name in ("capacitor_utilisation", "switch_utilisation", "output_evenness"):
            value = getattr(self, name)
            if value is not None and not 0 <= value <= 1:
                raise CapmusterError(f"{name.replace('_', ' ')}: {value} is out of range", accepted="0 to 1")
        object.__setattr__(self, "families", tuple(check_family(name) for name in self.families))

    def passing(self, measures: Measures) -> NDArray[np.bool_]:
        """Where candidates keep every bound but the families, shape (N,)."""
        passed = np.ones(len(measures), dtype=bool)
        if self.switches is not None:
            passed &= measures.switches <= self.switches
        if self.blocking_voltage is not None:
            passed &= measures.highest_blocking_voltage <= self.blocking_voltage * (1 + _TOLERANCE)
        for name in ("capacitor_utilisation", "switch_utilisation", "output_evenness"):
            least = getattr(self, name)
            if least is not None:
                passed &= getattr(measures, name) >= least - _TOLERANCE
        if self.plate_on_ports:
            passed &= measures.plate_on_ports
        return passed
