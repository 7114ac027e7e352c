"""What a listing may be narrowed by, before anything is ranked."""

from __future__ import annotations

from dataclasses import dataclass

from capmuster.enumerate.errors import CapmusterError


@dataclass(frozen=True, slots=True)
class Filters:
    """Bounds that a listed converter keeps; None leaves one open.

    Attributes
    ----------
    switches
        Most switches.
    """

    switches: int | None = None

    def __post_init__(self) -> None:
        """Refuse bounds that no converter could be measured by.

        Raises
        ------
        CapmusterError
            When a bound is out of its range.
        """
        if self.switches is not None and self.switches < 0:
            raise CapmusterError(f"switches: {self.switches} is negative", accepted="0 or more")
