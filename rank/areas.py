"""How a converter's area is best shared when output impedance is all that counts.

A capacitor of area ``A_i`` and density ``d_i`` adds ``a_c,i^2 / (f d_i A_i)`` to the slow-switching limit;
a switch of area ``A_j`` and specific on-resistance ``rho_j`` adds ``a_r,j^2 rho_j / (D_j A_j)`` to the
fast-switching limit (Seeman and Sanders, "Analysis and optimization of switched-capacitor DC-DC converters",
IEEE Trans. Power Electronics 23(2), 2008, doi:10.1109/TPEL.2007.915182).

Within a kind: by the Cauchy-Schwarz inequality ``(sum_i w_i)^2 <= (sum_i w_i^2 / A_i) (sum_i A_i)``, with
equality where the areas are proportional to the weights ``w_i``. So the best sharing of a kind's area ``A``
leaves ``(sum w)^2 / A``, and one coefficient per kind, in ohm mm2, says all: ``S`` for the capacitors
(``w = a_c / sqrt(d)``), ``F`` for the switches (``w = a_r sqrt(rho / D)``).

Between the kinds: ``R_out^2 = (S / A_c)^2 + (F / A_s)^2`` at ``A_c + A_s = A`` has its minimum where both
derivatives agree, ``S^2 / A_c^3 = F^2 / A_s^3``, hence ``A_c / A_s = (S / F)^(2/3)`` and
``R_out A = (S^(2/3) + F^(2/3))^(3/2)``.

Every function takes arrays of candidates and broadcasts; none loops over them.
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import TYPE_CHECKING

import numpy as np

if TYPE_CHECKING:
    from numpy.typing import ArrayLike, NDArray

    Floats = NDArray[np.float64]

__all__ = [
    "Allotment",
    "allot",
    "element_areas",
    "fast_coefficient",
    "impedance_area",
    "impedance_at",
    "impedance_at_split",
    "least_area",
    "optimal_split",
    "slow_coefficient",
]


@dataclass(frozen=True, slots=True)
class Allotment:
    """Capacitor and silicon area of N candidates, and the impedance that they give.

    A candidate that no area within the budgets makes good has NaN areas and an infinite impedance.

    Attributes
    ----------
    capacitor_area, silicon_area : (N,) float array
        Area of all capacitors and of all switches that carry charge [mm2].
    impedance : (N,) float array
        Output impedance by the quadratic blend of both limits [ohm].
    """

    capacitor_area: Floats
    silicon_area: Floats
    impedance: Floats

    @property
    def area(self) -> Floats:
        """Capacitor and silicon area together, shape (N,) [mm2]."""
        return self.capacitor_area + self.silicon_area

    @property
    def feasible(self) -> NDArray[np.bool_]:
        """Whether the candidate can be built as asked, shape (N,)."""
        return np.isfinite(self.impedance)


def slow_coefficient(weights: ArrayLike, frequency: ArrayLike) -> Floats:
    """Return S = (sum of w)^2 / f: slow-switching limit times capacitor area, best shared.

    Parameters
    ----------
    weights : (..., n) array
        ``a_c,i / sqrt(d_i)`` of each capacitor [mm / F^(1/2)]; 0 for an idle one or for padding.
    frequency : (...) array
        Switching frequency [Hz].

    Returns
    -------
    (...) float array
        S [ohm mm2].
    """
    total = np.sum(np.asarray(weights, dtype=np.float64), axis=-1)
    return np.asarray(total * total / np.asarray(frequency, dtype=np.float64), dtype=np.float64)


def fast_coefficient(weights: ArrayLike, duty: ArrayLike = 0.5) -> Floats:
    """Return F = (sum of w / sqrt(D))^2: fast-switching limit times silicon area, best shared.

    Parameters
    ----------
    weights : (..., m) array
        ``a_r,j sqrt(rho_j)`` of each switch [ohm^(1/2) mm]; 0 for an idle one or for padding.
    duty : array that broadcasts to `weights`, optional
        Share of the period in which the switch is on [1]. At 50 % F is ``2 (sum w)^2``.

    Returns
    -------
    (...) float array
        F [ohm mm2].
    """
    total = np.sum(
        np.asarray(weights, dtype=np.float64) / np.sqrt(np.asarray(duty, dtype=np.float64)), axis=-1
    )
    return np.asarray(total * total, dtype=np.float64)


def optimal_split(S: ArrayLike, F: ArrayLike) -> Floats:
    """Return the share of the total area that capacitors should have for the least output impedance.

    Parameters
    ----------
    S, F : (N,) array
        Slow and fast coefficients [ohm mm2], not negative.

    Returns
    -------
    (N,) float array
        ``S^(2/3) / (S^(2/3) + F^(2/3))`` [1]; NaN where both coefficients are 0.
    """
    slow, fast = _roots(S, F)
    with np.errstate(invalid="ignore"):
        return np.asarray(slow / (slow + fast))


def impedance_area(S: ArrayLike, F: ArrayLike) -> Floats:
    """Return the product of output impedance and total area at the optimal split.

    Parameters
    ----------
    S, F : (N,) array
        Slow and fast coefficients [ohm mm2], not negative.

    Returns
    -------
    (N,) float array
        ``(S^(2/3) + F^(2/3))^(3/2)`` [ohm mm2].
    """
    slow, fast = _roots(S, F)
    return np.asarray((slow + fast) ** 1.5)


def impedance_at(S: ArrayLike, F: ArrayLike, area: ArrayLike) -> Floats:
    """Return the least output impedance that a total area allows.

    Parameters
    ----------
    S, F : (N,) array
        Slow and fast coefficients [ohm mm2], not negative.
    area : (N,) array
        Capacitor and silicon area together [mm2], positive.

    Returns
    -------
    (N,) float array
        Output impedance [ohm].
    """
    return np.asarray(impedance_area(S, F) / np.asarray(area, dtype=np.float64))


def impedance_at_split(
    S: ArrayLike, F: ArrayLike, capacitor_area: ArrayLike, silicon_area: ArrayLike
) -> Floats:
    """Return the output impedance with capacitor and silicon area given apart.

    Parameters
    ----------
    S, F : (N,) array
        Slow and fast coefficients [ohm mm2], not negative.
    capacitor_area, silicon_area : (N,) array
        Areas [mm2]. An area of 0 gives an infinite impedance unless its coefficient is 0 as well.

    Returns
    -------
    (N,) float array
        ``sqrt((S / A_c)^2 + (F / A_s)^2)`` [ohm].
    """
    return np.asarray(np.hypot(_quotient(S, capacitor_area), _quotient(F, silicon_area)))


def allot(S: ArrayLike, F: ArrayLike, area: ArrayLike) -> Allotment:
    """Share a total area between capacitors and switches for the least output impedance.

    Parameters
    ----------
    S, F : (N,) array
        Slow and fast coefficients [ohm mm2], not negative and not both 0.
    area : (N,) array
        Capacitor and silicon area together [mm2], positive.

    Returns
    -------
    Allotment
    """
    share, total = np.broadcast_arrays(optimal_split(S, F), np.asarray(area, dtype=np.float64))
    return Allotment(share * total, (1.0 - share) * total, impedance_at(S, F, area))


def least_area(
    S: ArrayLike,
    F: ArrayLike,
    R_max: ArrayLike,
    most_capacitor_area: ArrayLike | None = None,
    most_silicon_area: ArrayLike | None = None,
) -> Allotment:
    """Return the least total area whose output impedance is at most `R_max`.

    Where the free optimum asks more of one kind than its budget, that kind is held at its budget and the
    other takes what the impedance still needs. That is the optimum, because along the curve of constant
    impedance the total is a convex function of the logarithms: it only grows away from the free optimum.

    Parameters
    ----------
    S, F : (N,) array
        Slow and fast coefficients [ohm mm2], not negative and not both 0.
    R_max : (N,) array
        Highest output impedance [ohm]. A candidate with one that is not positive is infeasible.
    most_capacitor_area, most_silicon_area : (N,) array, optional
        Budgets of the two kinds [mm2]; none means no limit.

    Returns
    -------
    Allotment
        NaN areas and infinite impedance where no areas within the budgets reach `R_max`.
    """
    no_limit = np.float64(np.inf)
    S, F, limit, most_c, most_s = np.broadcast_arrays(
        *(
            np.asarray(value, dtype=np.float64)
            for value in (
                S,
                F,
                R_max,
                no_limit if most_capacitor_area is None else most_capacitor_area,
                no_limit if most_silicon_area is None else most_silicon_area,
            )
        )
    )
    with np.errstate(divide="ignore", invalid="ignore"):
        limit = np.where(limit > 0.0, limit, np.nan)
        total = impedance_area(S, F) / limit
        share = optimal_split(S, F)
        area_c, area_s = share * total, (1.0 - share) * total
        held_c, held_s = area_c > most_c, area_s > most_s
        area_s = np.where(held_c, _complement(F, limit, _quotient(S, most_c)), area_s)
        area_c = np.where(held_c, most_c, area_c)
        area_c = np.where(held_s & ~held_c, _complement(S, limit, _quotient(F, most_s)), area_c)
        area_s = np.where(held_s & ~held_c, most_s, area_s)
        good = (area_c <= most_c) & (area_s <= most_s) & np.isfinite(area_c + area_s)
    area_c, area_s = np.where(good, area_c, np.nan), np.where(good, area_s, np.nan)
    return Allotment(area_c, area_s, np.where(good, limit, np.inf))


def element_areas(
    weights: ArrayLike,
    total: ArrayLike,
    smallest: ArrayLike = 0.0,
    present: ArrayLike | None = None,
) -> Floats:
    """Share the area of one kind among its elements, in proportion to their weights.

    An idle element (weight 0) gets the smallest device. That comes on top of `total`, so the impedance that
    belongs to `total` stays exact.

    Parameters
    ----------
    weights : (N, n) array
        ``a_c,i / sqrt(d_i)`` of the capacitors or ``a_r,j sqrt(rho_j / D_j)`` of the switches, in any unit.
    total : (N,) array
        Area of all elements that carry charge [mm2].
    smallest : array that broadcasts to `weights`, optional
        Area of the smallest device of the element's class [mm2].
    present : (N, n) bool array, optional
        False where the arrays are only padded; those places get 0. By default every place is an element.

    Returns
    -------
    (N, n) float array
        Area of each element [mm2].
    """
    w = np.asarray(weights, dtype=np.float64)
    sums = np.sum(w, axis=-1, keepdims=True)
    shares = w / np.where(sums > 0.0, sums, 1.0)
    areas = np.where(w > 0.0, shares * np.asarray(total, dtype=np.float64)[..., None], smallest)
    return areas if present is None else np.where(present, areas, 0.0)


def _roots(S: ArrayLike, F: ArrayLike) -> tuple[Floats, Floats]:
    """Return S^(2/3) and F^(2/3)."""
    slow, fast = np.cbrt(np.asarray(S, dtype=np.float64)), np.cbrt(np.asarray(F, dtype=np.float64))
    return slow * slow, fast * fast


def _quotient(coefficient: ArrayLike, area: ArrayLike) -> Floats:
    """Return coefficient / area, and 0 where the coefficient is 0 whatever the area."""
    coefficient, area = np.asarray(coefficient, dtype=np.float64), np.asarray(area, dtype=np.float64)
    with np.errstate(divide="ignore", invalid="ignore"):
        return np.where(coefficient == 0.0, 0.0, coefficient / area)


def _complement(coefficient: Floats, limit: Floats, other: Floats) -> Floats:
    """Return the area at which one limit fills up what the other leaves of the impedance, or NaN."""
    rest = (limit - other) * (limit + other)
    rest = np.where((limit > other) & (rest > 0.0), rest, np.nan)
    return np.where(coefficient == 0.0, np.where(limit >= other, 0.0, np.nan), coefficient / np.sqrt(rest))
