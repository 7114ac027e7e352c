r"""Sums of decaying exponentials: exact extremes and mean squares.

Every voltage and current of a network that relaxes has the form
:math:`y(t) = y_0 + \sum_k c_k e^{-\lambda_k t}`, so its extremes and its mean square need no sampling.
"""

from __future__ import annotations

import math
from itertools import pairwise
from typing import TYPE_CHECKING

import numpy as np
import numpy.typing as npt
from scipy.optimize import brentq

if TYPE_CHECKING:
    from collections.abc import Sequence

Array = npt.NDArray[np.float64]

# A term below this share of the largest cannot move an extreme by more than rounding does.
NEGLIGIBLE = 1e-14


def extremes(rest: npt.ArrayLike, terms: Array, rates: Array, duration: float) -> tuple[Array, Array]:
    r"""Find the least and the greatest value of a sum of exponentials on an interval.

    The derivative is a sum of exponentials too. With the rates in order it has no more zeros than its
    coefficients have changes of sign (Descartes' rule, which holds for any real exponents), so most sums are
    seen to be monotonic at once; the others are searched between the zeros of a shorter sum (Rolle).

    Parameters
    ----------
    rest
        Value :math:`y_0` at rest, shape (...).
    terms
        Coefficients :math:`c_k`, shape (..., k).
    rates
        Rates :math:`\lambda_k \ge 0` [1/s], shape (k,).
    duration
        Length of the interval [s].

    Returns
    -------
    tuple of Array
        Least and greatest values, shape (...).
    """
    rest = np.broadcast_to(np.asarray(rest, dtype=float), terms.shape[:-1])
    at_start = rest + terms.sum(axis=-1)
    at_end = rest + terms @ np.exp(-rates * duration)
    low, high = np.minimum(at_start, at_end), np.maximum(at_start, at_end)
    order = np.argsort(rates)
    slopes = (-rates * terms)[..., order]
    size = np.abs(terms).max(axis=-1, keepdims=True, initial=0.0)
    signs = np.where(np.abs(terms[..., order]) > NEGLIGIBLE * size, np.sign(slopes), 0.0)
    wavering = (signs.max(axis=-1, initial=0.0) > 0) & (signs.min(axis=-1, initial=0.0) < 0)
    ordered = rates[order]
    for place in zip(*np.nonzero(wavering), strict=True):
        used = signs[place] != 0
        for moment in zeros(slopes[place][used], ordered[used], duration):
            value = rest[place] + float(terms[place] @ np.exp(-rates * moment))
            low[place], high[place] = min(low[place], value), max(high[place], value)
    return low, high


def zeros(terms: Sequence[float] | Array, rates: Sequence[float] | Array, duration: float) -> list[float]:
    """Find the zeros of a sum of exponentials inside an interval.

    Dividing by the slowest exponential and differentiating leaves a sum with one term less, whose zeros
    part the interval into pieces with one zero at most.

    Parameters
    ----------
    terms
        Coefficients, shape (k,).
    rates
        Ascending rates [1/s], shape (k,).
    duration
        Length of the interval [s].

    Returns
    -------
    list of float
        Moments [s] in (0, duration), ascending.
    """
    if len(terms) < 2:  # noqa: PLR2004 - one exponential has no zero
        return []
    shifted = [rate - rates[0] for rate in rates]
    if len(terms) == 2:  # noqa: PLR2004 - a closed form
        ratio = -terms[1] / terms[0]
        if ratio <= 0 or shifted[1] <= 0:
            return []
        moment = math.log(ratio) / shifted[1]
        return [moment] if 0 < moment < duration else []

    def value(moment: float) -> float:
        return float(sum(c * math.exp(-rate * moment) for c, rate in zip(terms, shifted, strict=True)))

    turning = zeros(
        [-rate * c for c, rate in zip(terms[1:], shifted[1:], strict=True)], shifted[1:], duration
    )
    found = []
    edges = [0.0, *turning, duration]
    for left, right in pairwise(edges):
        if value(left) * value(right) < 0:
            found.append(float(brentq(value, left, right, xtol=1e-13 * right, rtol=1e-13)))
    return found


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
