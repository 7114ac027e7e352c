"""What a sizing is asked for."""

from __future__ import annotations

import enum
from dataclasses import dataclass
from typing import TYPE_CHECKING

if TYPE_CHECKING:
    from numpy.typing import ArrayLike

__all__ = ["Objective", "Task", "Use"]


class Objective(enum.Enum):
    """What is made least or greatest."""

    LOSS = "loss"
    AREA = "area"
    DENSITY = "density"


class Use(enum.Enum):
    """How the output voltage comes about."""

    FIXED_RATIO = "fixed"  # it droops with the load
    FREQUENCY = "frequency"  # held by the frequency
    CONDUCTANCE = "conductance"  # held by the on-resistances, at the frequency of the hardest point


@dataclass(frozen=True, slots=True, kw_only=True)
class Task:
    """An objective with its limits. Every figure is a number or an array of shape (N,).

    - Least loss (`LOSS`): needs `current`, and `most_impedance` where the output is held. Areas go up to
      their budgets, and stay below where more would cost more.
    - Least area (`AREA`): needs `efficiency`, `ideal_output`, `current`, and where the output is held
      `output` and `most_impedance`.
    - Greatest power density (`DENSITY`): needs `efficiency`, `ideal_output`, `current_range`, and where the
      output is held `output` and `most_droop`.

    In fixed-ratio use ``I^2 R_out`` is a loss, and efficiency at least eta means
    ``I^2 R_out + eta Q <= (1 - eta) V_ideal I`` with all other loss Q. Where the output is held, the droop
    from the ideal to the held output is lost whatever the sizing, and the limit is on Q: ``Q <= V_out I / eta
    - V_ideal I``.

    Attributes
    ----------
    objective : Objective
        What is made least or greatest.
    frequency : tuple of array
        Least and most switching frequency [Hz]; the same twice fixes it. Where the output is held by
        frequency, the most one counts and the frequency goes as low as the output lets it.
    use : Use
        How the output voltage comes about.
    duty : float or array or None
        Share of phase 1; None leaves it free.
    current : array
        Load current, its mean over a profile [A].
    mean_square_current : array or None
        Mean square of the load current over a profile [A2]; by default `current` squared.
    current_range : tuple of array or None
        Bounds of a free load [A].
    ideal_output : array or None
        Ideal output ``|M| V_in``, without droop, where the losses are counted [V]; over a profile its mean,
        weighted by the current.
    output : array or None
        Output that is held [V].
    efficiency : array or None
        Least efficiency [1].
    most_impedance : array or None
        Highest output impedance, at the hardest operating point [ohm].
    most_droop : array or None
        Highest droop where the load is free [V].
    most_area, most_capacitor_area, most_silicon_area : array or None
        Area budgets [mm2].
    held_impedance : (K, N) array or None
        With an output held by frequency, the impedance ``(V_ideal,k - V_out) / I_k`` that it asks for at each
        of K operating points [ohm]; by default the one of `ideal_output`, `output` and `current`.
    held_share : (K,) or (K, N) array or None
        Share of time of each of these points, by default 1 / K. They need not add up to 1: the rest is sleep.
    """

    objective: Objective
    frequency: tuple[ArrayLike, ArrayLike]
    use: Use = Use.FIXED_RATIO
    duty: ArrayLike | None = 0.5
    current: ArrayLike = 0.0
    mean_square_current: ArrayLike | None = None
    current_range: tuple[ArrayLike, ArrayLike] | None = None
    ideal_output: ArrayLike | None = None
    output: ArrayLike | None = None
    efficiency: ArrayLike | None = None
    most_impedance: ArrayLike | None = None
    most_droop: ArrayLike | None = None
    most_area: ArrayLike | None = None
    most_capacitor_area: ArrayLike | None = None
    most_silicon_area: ArrayLike | None = None
    held_impedance: ArrayLike | None = None
    held_share: ArrayLike | None = None
