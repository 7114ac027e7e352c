r"""Sums of decaying exponentials: exact extremes and mean squares.

Every voltage and current of a network that relaxes has the form
:math:`y(t) = y_0 + \sum_k c_k e^{-\lambda_k t}`, so its extremes and its mean square need no sampling.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
import numpy.typing as npt

Array = npt.NDArray[np.float64]

# All relative: rates that count as one, terms that cannot move an extreme by more than rounding does, and by
# how much of the largest coefficient a found extreme may miss.
SAME = 1e-9
NEGLIGIBLE = 1e-14
RESOLUTION = 1e-11
_STEP = 1.1
_DEPTH = 100
_NEWTON = 60


def extremes(rest: npt.ArrayLike, terms: Array, rates: Array, duration: float) -> tuple[Array, Array]:
    r"""Find the least and the greatest value of sums of exponentials on an interval, over a batch.

    The derivative is a sum of exponentials too. With the rates in order it has no more zeros than its
    coefficients have changes of sign (Descartes' rule, which holds for any real exponents), so most sums are
    seen to be monotonic at once. For the others the interval is cut into cells, and cells are halved until
    each one either cannot hold an extreme (between its ends the sum leaves the chord by at most `w^2/8` times
    its greatest second derivative, which the coefficients bound) or is certainly convex or concave; then
    Newton's method finds its stationary point.

    Parameters
    ----------
    rest
        Value :math:`y_0` at rest, shape (b, c).
    terms
        Coefficients :math:`c_k`, shape (b, c, k).
    rates
        Rates :math:`\lambda_k \ge 0` [1/s], shape (k,).
    duration
        Length of the interval [s].

    Returns
    -------
    tuple of Array
        Least and greatest values over time and batch, shape (c,).
    """
    rest = np.broadcast_to(np.asarray(rest, dtype=float), terms.shape[:-1])
    at_start = rest + terms.sum(axis=-1)
    at_end = rest + terms @ np.exp(-rates * duration)
    low = np.minimum(at_start, at_end).min(axis=0)
    high = np.maximum(at_start, at_end).max(axis=0)
    if len(rates) < 2:  # noqa: PLR2004 - a single exponential is monotonic
        return low, high
    terms, rates = _merged(terms, rates)
    sizes = np.abs(terms)
    scale = sizes.max(axis=-1)
    signs = np.where(sizes > NEGLIGIBLE * scale[..., None], np.sign(terms * rates), 0.0)
    wavering = (signs.max(axis=-1) > 0) & (signs.min(axis=-1) < 0)
    if wavering.any():
        element = np.nonzero(wavering)[1]
        _search(_Sums(rest[wavering], terms[wavering], rates, element, scale[wavering]), duration, low, high)
    return low, high


def _merged(terms: Array, rates: Array) -> tuple[Array, Array]:
    """Add the terms of equal rates, in ascending order of rates."""
    order = np.argsort(rates)
    rates = rates[order]
    starts = np.flatnonzero(np.concatenate([[True], np.diff(rates) > SAME * rates[1:]]))
    return np.add.reduceat(terms[..., order], starts, axis=-1), rates[starts]


@dataclass(frozen=True, slots=True)
class _Sums:
    """Sums to be searched: shapes (m,), (m, k), (k,); `element` says which extreme each belongs to."""

    rest: Array
    terms: Array
    rates: Array
    element: npt.NDArray[np.intp]
    scale: Array

    def derivative(self, which: npt.NDArray[np.intp], degree: int) -> Array:
        """Coefficients of a derivative, shape (cells, k)."""
        return np.asarray(self.terms[which] * (-self.rates) ** degree)

    def update(self, which: npt.NDArray[np.intp], values: Array, low: Array, high: Array) -> None:
        """Let values of some sums move the extremes."""
        np.minimum.at(low, self.element[which], values)
        np.maximum.at(high, self.element[which], values)

    def beyond(
        self, which: npt.NDArray[np.intp], ends: tuple[Array, Array], sag: Array, low: Array, high: Array
    ) -> npt.NDArray[np.bool_]:
        """Where a cell with these end values and this greatest sag may hold an extreme."""
        slack = (RESOLUTION * self.scale)[which]
        above = np.maximum(*ends) + sag > high[self.element[which]] + slack
        below = np.minimum(*ends) - sag < low[self.element[which]] - slack
        return np.asarray(above | below)


def _search(sums: _Sums, duration: float, low: Array, high: Array) -> None:
    """Branch and bound over cells of the interval; moves `low` and `high`."""
    first = min(0.1 / float(sums.rates[-1]), duration)
    count = 1 + int(np.ceil(np.log(duration / first) / np.log(_STEP)))
    grid = np.concatenate([[0.0], np.geomspace(first, duration, count + 1)])
    decay = np.exp(-np.outer(grid, sums.rates))
    values = sums.rest[:, None] + sums.terms @ decay.T
    everyone = np.arange(len(sums.rest))
    sums.update(everyone, values.min(axis=1), low, high)
    sums.update(everyone, values.max(axis=1), low, high)
    sags = np.diff(grid) ** 2 / 8 * (np.abs(sums.terms) * sums.rates**2 @ decay[:-1].T)
    shape = sags.shape
    which, cell = (index.ravel() for index in np.indices(shape))
    ends = (values[:, :-1].ravel(), values[:, 1:].ravel())
    alive = sums.beyond(which, ends, sags.ravel(), low, high)
    which, left, right = which[alive], grid[cell[alive]], grid[cell[alive] + 1]
    for _ in range(_DEPTH):
        if not len(which):
            return
        early, late = np.exp(-np.outer(left, sums.rates)), np.exp(-np.outer(right, sums.rates))
        bend = sums.derivative(which, 2)
        plus, minus = np.maximum(bend, 0.0), np.minimum(bend, 0.0)
        # A positive coefficient counts most at the start of the cell, a negative one at its end.
        convex = (plus * late + minus * early).sum(axis=-1) >= 0
        concave = (plus * early + minus * late).sum(axis=-1) <= 0
        curved = convex | concave
        if curved.any():
            _stationary(sums, which[curved], (left[curved], right[curved]), low, high)
        which, left, right = which[~curved], left[~curved], right[~curved]
        middle = 0.5 * (left + right)
        which, left, right = (
            np.concatenate([which, which]),
            np.concatenate([left, middle]),
            np.concatenate([middle, right]),
        )
        early, late = np.exp(-np.outer(left, sums.rates)), np.exp(-np.outer(right, sums.rates))
        terms, rest = sums.terms[which], sums.rest[which]
        ends = (rest + (terms * early).sum(axis=-1), rest + (terms * late).sum(axis=-1))
        sums.update(which, ends[0], low, high)
        sag = (right - left) ** 2 / 8 * (np.abs(terms) * sums.rates**2 * early).sum(axis=-1)
        alive = sums.beyond(which, ends, sag, low, high)
        which, left, right = which[alive], left[alive], right[alive]


def _stationary(
    sums: _Sums, which: npt.NDArray[np.intp], cells: tuple[Array, Array], low: Array, high: Array
) -> None:
    """Find the stationary points in cells of monotonic slope, by Newton's method kept inside the cell."""
    slope, bend = sums.derivative(which, 1), sums.derivative(which, 2)

    def at(moments: Array, coefficients: Array) -> Array:
        return np.asarray((coefficients * np.exp(-np.outer(moments, sums.rates))).sum(axis=-1))

    left, right = cells
    rising = at(left, slope) > 0
    inside = rising != (at(right, slope) > 0)
    which, left, right, rising = which[inside], left[inside], right[inside], rising[inside]
    slope, bend = slope[inside], bend[inside]
    moments = 0.5 * (left + right)
    for _ in range(_NEWTON):
        value = at(moments, slope)
        before = (value > 0) == rising
        left, right = np.where(before, moments, left), np.where(before, right, moments)
        with np.errstate(divide="ignore", invalid="ignore"):
            following = moments - value / at(moments, bend)
        following = np.where((following > left) & (following < right), following, 0.5 * (left + right))
        # The sum is flat there: an error of 1e-7 in time is one of 1e-14 in its value.
        done = bool((np.abs(following - moments) <= 1e-7 * moments).all())
        moments = following
        if done:
            break
    decay = np.exp(-np.outer(moments, sums.rates))
    sums.update(which, sums.rest[which] + (sums.terms[which] * decay).sum(axis=-1), low, high)


def mean_square(terms: Array, rates: Array, duration: float) -> Array:
    r"""Average the square of :math:`\sum_k c_k e^{-\lambda_k t}` over an interval.

    Parameters
    ----------
    terms
        Coefficients, shape (..., k).
    rates
        Positive rates [1/s], shape (k,).
    duration
        Length of the interval [s].

    Returns
    -------
    Array
        Mean squares, shape (...).
    """
    both = (rates[:, None] + rates[None, :]) * duration
    weights = -np.expm1(-both) / both
    result: Array = np.einsum("...i,ij,...j->...", terms, weights, terms)
    return np.maximum(result, 0.0)
