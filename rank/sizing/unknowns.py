"""The unknowns of a sizing task: prices of limits, bounded scalars and free ones.

The price of a limit is ``reference exp(v)``: the share of the limit that is used falls with v, steeply where
the price matters and not at all where it does not, so that Newton's method meets a curve without a kink. A
limit that is not reached drives its v down until the price is nothing; the solver then holds it there
(`newton`).

A scalar between bounds is the point of its interval that is nearest to its unknown, and the remainder is the
price of the bound (the normal map of Robinson 1992, doi:10.1287/moor.17.3.691).
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import TYPE_CHECKING

import numpy as np

from capmuster.rank.sizing.dual import Dual, combine, exp, variable
from capmuster.rank.sizing.task import Objective

if TYPE_CHECKING:
    from numpy.typing import NDArray

    from capmuster.rank.sizing.case import Case

    Floats = NDArray[np.float64]

__all__ = ["LIMITS", "Unknowns", "polar", "read"]

#: Limits that may carry a price, in the order of their unknowns.
LIMITS = ("loss", "impedance", "area", "area_c", "area_s")


@dataclass(frozen=True, slots=True)
class Unknowns:
    """The unknowns of a batch as the prices and scalars that they stand for.

    Attributes
    ----------
    price : dict of str to Dual
        Price of each limit that is there.
    free : dict of str to Dual
        Scalars without bounds.
    log_f, log_load : Dual
        Logarithms of frequency and, where the load is free, of the load current (else 0).
    beyond_f, beyond_load : Dual
        Price of their bounds.
    current : Dual
        Load current where it is free, else 1.
    nu, theta_c, theta_s : Dual
        Prices of loss, capacitor area and silicon area.
    log_shares : tuple of Dual or None
        Logarithms of the shares of both phases, where they are free.
    """

    price: dict[str, Dual]
    free: dict[str, Dual]
    log_f: Dual
    beyond_f: Dual
    log_load: Dual
    beyond_load: Dual
    current: Dual
    nu: Dual
    theta_c: Dual
    theta_s: Dual
    log_shares: tuple[Dual, Dual] | None


def read(
    case: Case, names: tuple[str, ...], values: Floats, reference: Floats, weight: float = 1.0
) -> Unknowns:
    """Return what a batch of unknowns stands for.

    Parameters
    ----------
    case : Case
        The task.
    names : tuple of str
        Name of each unknown.
    values, reference : (d, B) float array
        The unknowns, and the scale of those that stand for a price.
    weight : float, optional
        Weight of the objective: 0 leaves the limits alone, to ask whether they can be met at all.

    Returns
    -------
    Unknowns
    """
    places = {name: k for k, name in enumerate(names)}
    price, free = {}, {}
    for name, k in places.items():
        if name in LIMITS:
            value = reference[k] * np.exp(values[k])
            price[name] = Dual(value, {k: value})
        elif name not in ("log_f", "log_load") or (name == "log_f" and case.held):
            free[name] = variable(k, values[k])

    log_f, beyond_f = Dual(case.log_f_least), Dual(0.0)
    if "log_f" in free:
        log_f = free["log_f"]
    elif "log_f" in places:
        k = places["log_f"]
        log_f, beyond_f = _bounded(k, values[k], case.log_f_least, case.log_f_most)
    log_load, beyond_load, current = Dual(0.0), Dual(0.0), Dual(1.0)
    if "log_load" in places:
        k = places["log_load"]
        log_load, beyond_load = _bounded(k, values[k], case.log_load_least, case.log_load_most)
        current = exp(log_load)

    ones = np.ones_like(case.log_f_least)
    by_loss = case.objective is Objective.LOSS
    theta = Dual((0.0 if by_loss else weight) * ones)
    if "area" in price:
        theta = theta + price["area"]
    return Unknowns(
        price=price,
        free=free,
        log_f=log_f,
        beyond_f=beyond_f,
        log_load=log_load,
        beyond_load=beyond_load,
        current=current,
        nu=Dual(weight * ones) if by_loss else price["loss"],
        theta_c=theta + price["area_c"] if "area_c" in price else theta,
        theta_s=theta + price["area_s"] if "area_s" in price else theta,
        log_shares=_shares(free["duty"]) if "duty" in free else None,
    )


def polar(angle: Dual) -> tuple[Dual, Dual]:
    """Return log cos phi and log sin phi for angle = log tan phi."""
    t = angle.value
    log_cos = -0.5 * np.logaddexp(0.0, 2.0 * t)
    cos2 = np.exp(2.0 * log_cos)
    return combine(log_cos, (cos2 - 1.0, angle)), combine(log_cos + t, (cos2, angle))


def _bounded(k: int, v: Floats, least: Floats, most: Floats) -> tuple[Dual, Dual]:
    """Return a scalar kept between bounds, and how far its unknown goes beyond them."""
    inside = np.where((v >= least) & (v <= most), 1.0, 0.0)
    x = np.clip(v, least, most)
    return Dual(x, {k: inside}), Dual(v - x, {k: 1.0 - inside})


def _shares(logit: Dual) -> tuple[Dual, Dual]:
    """Return the logarithms of D1 and D2 = 1 - D1 for logit = log(D1 / D2)."""
    log_1, log_2 = -np.logaddexp(0.0, -logit.value), -np.logaddexp(0.0, logit.value)
    return combine(log_1, (np.exp(log_2), logit)), combine(log_2, (-np.exp(log_1), logit))
