"""Where the prices of the slow and the fast limit come from: the two ways in which impedance matters.

**Blend**: the impedance ``R = hypot(X / f, y)`` has one price kappa, made of the conduction loss, of a limit
on R and of the output power. Its part by the slow limit is ``kappa cos phi / f`` and by the fast limit
``kappa sin phi`` with ``tan phi = y f / X``, since a norm is the largest of its linear bounds ``cos phi x +
sin phi y``. The unknown `angle` is log tan phi.

**Held**: an output held by frequency raises R to what each operating point k wants, so that ``f_k = X /
s_k(y)`` with ``s_k = sqrt(R_k^2 - y^2)``. The mean frequency is ``f = X h(y)`` with ``h = sum_k w_k / s_k``,
and the hardest point, of impedance R_0, must do with the highest frequency: ``hypot(X / f_most, y) <= R_0``.
Both regions are convex, the first because a harmonic mean of concave functions is concave. `angle` is log tan
phi with ``y = R_k sin phi`` for the least R_k, `rate` the logarithm of what log f costs per price of loss,
and `steep` that of ``y f_most / X``, which shares the price of the hardest point between the limits.
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import TYPE_CHECKING

import numpy as np

from capmuster.rank.sizing.dual import Dual, combine, exp, hypot, log, sqrt
from capmuster.rank.sizing.unknowns import Unknowns, polar

if TYPE_CHECKING:
    from numpy.typing import NDArray

    from capmuster.rank.sizing.case import Case

    Floats = NDArray[np.float64]

__all__ = ["Blend", "Held", "Whole"]

_LEAST = 1e-280


@dataclass(frozen=True, slots=True)
class Whole:
    """Sums over all elements of each candidate.

    Attributes
    ----------
    X : Dual
        Slow-switching limit times frequency [ohm Hz].
    y : Dual
        Fast-switching limit with the fixed resistance [ohm].
    area_c, area_s : Dual
        Areas [mm2].
    cycling : Dual
        Loss in proportion to frequency [W].
    loss : Dual
        That and leakage [W].
    """

    X: Dual
    y: Dual
    area_c: Dual
    area_s: Dual
    cycling: Dual
    loss: Dual


class Blend:
    """Prices and conditions of the blended impedance.

    Attributes
    ----------
    log_slow, log_fast : Dual
        Logarithms of the prices of X and y.
    lead_price : Dual
        Price of the resistance in series with the output.
    offset : (B,) float array
        What the limits take off the Lagrangian.
    falling : (B,) float array
        Share of the price of X that falls with frequency.
    """

    def __init__(self, case: Case, u: Unknowns, weight: float) -> None:
        self.limit = case.impedance - u.current * case.lead
        kappa = u.nu * case.conduction
        self.offset = np.zeros_like(case.impedance)
        if "impedance" in u.price:
            kappa = kappa + u.price["impedance"]
            self.offset = -u.price["impedance"].value * self.limit.value
        if "density" in u.free:
            kappa = kappa + weight * exp(u.free["density"])
        log_cos, log_sin = polar(u.free["angle"])
        log_kappa = log(kappa)
        self.log_slow = log_kappa + log_cos - u.log_f
        self.log_fast = log_kappa + log_sin
        self.lead_price = kappa
        self.falling = np.ones_like(case.impedance)

    def droop(self, u: Unknowns, whole: Whole) -> Dual:
        """Return the impedance, or droop where all is per ampere, without the series resistance."""
        return hypot(whole.X / exp(u.log_f), whole.y)

    def rows(self, u: Unknowns, whole: Whole) -> dict[str, Dual]:
        """Return the conditions on impedance and frequency."""
        log_X = log(whole.X)
        rows = {"angle": u.free["angle"] - log(whole.y) + log_X - u.log_f}
        if u.log_f.slopes:
            rows["log_f"] = _log(u.nu * whole.cycling) - self.log_slow - log_X + u.beyond_f
        if "impedance" in u.price:
            rows["impedance"] = log(self.limit) - log(self.droop(u, whole))
        return rows


class Held:
    """Prices and conditions of an output held by frequency. Attributes as in `Blend`."""

    def __init__(self, case: Case, u: Unknowns, weight: float) -> None:  # noqa: ARG002 -- as in `Blend`
        self.limit = case.impedance - u.current * case.lead
        log_cos, log_sin = polar(u.free["angle"])
        cos, sin = exp(log_cos), exp(log_sin)
        least = case.wanted.min(axis=0) - u.current * case.lead
        self.fast_limit = least * sin
        slowest = least * cos
        h, slope, lead = Dual(0.0), Dual(0.0), Dual(0.0)
        for wanted, share in zip(case.wanted, case.share, strict=True):
            R = wanted - u.current * case.lead
            inverse = 1.0 / ((R - least) * (R + least) + slowest * slowest)
            part = share * sqrt(inverse)
            h, cubic = h + part, part * inverse
            slope = slope + cubic
            if u.log_load.slopes:
                lead = lead + cubic * R
        self.h = h
        rate, hard = u.nu * exp(u.free["rate"]), u.price["impedance"]
        f, most = exp(u.log_f), np.exp(case.log_f_most)
        falling = rate * h / f
        by_fast = rate * (slope * self.fast_limit / h)
        log_cos, log_sin = polar(u.free["steep"])
        by_hard = hard * exp(log_cos) / most
        self.log_slow = log(falling + by_hard)
        self.log_fast = log(by_fast + hard * exp(log_sin))
        self.lead_price = rate * lead / h + hard
        self.most = most
        self.offset = -(rate.value + by_fast.value * self.fast_limit.value + hard.value * self.limit.value)
        self.falling = falling.value / (falling.value + by_hard.value)

    def droop(self, u: Unknowns, whole: Whole) -> Dual:  # noqa: ARG002 - as in `Blend`
        """Return what conduction counts: nothing, the droop of a held output is there anyway."""
        return Dual(0.0)

    def rows(self, u: Unknowns, whole: Whole) -> dict[str, Dual]:
        """Return the conditions on impedance and frequency."""
        log_X = log(whole.X)
        return {
            "angle": log(self.fast_limit) - log(whole.y),
            "steep": u.free["steep"] - log(whole.y) + log_X - np.log(self.most),
            "rate": u.free["rate"] - _log(whole.cycling),
            "log_f": u.log_f - log_X - log(self.h),
            "impedance": log(self.limit) - log(hypot(whole.X / self.most, whole.y)),
        }


def _log(x: Dual) -> Dual:
    """Return the logarithm of what may be zero."""
    value = np.maximum(x.value, _LEAST)
    return combine(np.log(value), (1.0 / value, x))
