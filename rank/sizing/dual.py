"""Numbers that carry their slopes along: forward differentiation for batches of small equation systems.

A `Dual` is a value per candidate with its partial derivatives by the unknowns that it depends on. Equations
written with it read like the formulas they are, and their Jacobian cannot disagree with them.
"""

from __future__ import annotations

from typing import TYPE_CHECKING, Any

import numpy as np

if TYPE_CHECKING:
    from numpy.typing import NDArray

    Floats = NDArray[np.float64]

__all__ = ["Dual", "combine", "exp", "expm1", "hypot", "log", "solve", "sqrt", "variable"]


class Dual:
    """A batch of values with sparse slopes.

    Parameters
    ----------
    value : (B,) array or float
        Values.
    slopes : dict of int to (B,) array or float
        Partial derivative by each unknown, unknowns numbered from 0; an absent one is 0.
    """

    __slots__ = ("slopes", "value")
    __array_ufunc__ = None  # an array on the left leaves the operation to us

    def __init__(self, value: Any, slopes: dict[int, Any] | None = None) -> None:  # noqa: ANN401 -- array or float
        self.value = value
        self.slopes = slopes or {}

    def __add__(self, other: Dual | Floats | float) -> Dual:
        """Return the sum."""
        if not isinstance(other, Dual):
            return Dual(self.value + other, self.slopes)
        slopes = dict(self.slopes)
        for k, slope in other.slopes.items():
            slopes[k] = slopes[k] + slope if k in slopes else slope
        return Dual(self.value + other.value, slopes)

    __radd__ = __add__

    def __neg__(self) -> Dual:
        """Return the negative."""
        return Dual(-self.value, {k: -slope for k, slope in self.slopes.items()})

    def __sub__(self, other: Dual | Floats | float) -> Dual:
        """Return the difference."""
        if not isinstance(other, Dual):
            return Dual(self.value - other, self.slopes)
        slopes = dict(self.slopes)
        for k, slope in other.slopes.items():
            slopes[k] = slopes[k] - slope if k in slopes else -slope
        return Dual(self.value - other.value, slopes)

    def __rsub__(self, other: Floats | float) -> Dual:
        """Return the difference from a constant."""
        return Dual(other - self.value, {k: -slope for k, slope in self.slopes.items()})

    def __mul__(self, other: Dual | Floats | float) -> Dual:
        """Return the product."""
        if not isinstance(other, Dual):
            return Dual(self.value * other, {k: slope * other for k, slope in self.slopes.items()})
        return combine(self.value * other.value, (other.value, self), (self.value, other))

    __rmul__ = __mul__

    def __truediv__(self, other: Dual | Floats | float) -> Dual:
        """Return the quotient."""
        if not isinstance(other, Dual):
            return self * (1.0 / other)
        inverse = 1.0 / other.value
        ratio = self.value * inverse
        return combine(ratio, (inverse, self), (-ratio * inverse, other))

    def __rtruediv__(self, other: Floats | float) -> Dual:
        """Return a constant divided by this."""
        inverse = 1.0 / self.value
        ratio = other * inverse
        return combine(ratio, (-ratio * inverse, self))


def variable(index: int, value: Floats) -> Dual:
    """Return unknown number `index` at `value`."""
    return Dual(value, {index: 1.0})


def combine(value: Floats, *parts: tuple[Any, Dual]) -> Dual:
    """Return a value whose differential is the sum of factor times differential over the parts."""
    slopes: dict[int, Any] = {}
    for factor, part in parts:
        for k, slope in part.slopes.items():
            term = factor * slope
            slopes[k] = slopes[k] + term if k in slopes else term
    return Dual(value, slopes)


def log(x: Dual) -> Dual:
    """Return the natural logarithm."""
    return combine(np.log(x.value), (1.0 / x.value, x))


def exp(x: Dual) -> Dual:
    """Return the exponential."""
    value = np.exp(x.value)
    return combine(value, (value, x))


def expm1(x: Dual) -> Dual:
    """Return the exponential less one."""
    value = np.expm1(x.value)
    return combine(value, (value + 1.0, x))


def hypot(x: Dual, y: Dual) -> Dual:
    """Return ``sqrt(x^2 + y^2)``."""
    value = np.hypot(x.value, y.value)
    return combine(value, (x.value / value, x), (y.value / value, y))


def sqrt(x: Dual) -> Dual:
    """Return the square root."""
    value = np.sqrt(x.value)
    return combine(value, (0.5 / value, x))


def solve(residuals: list[Dual]) -> list[Floats]:
    """Return the Newton step of as many equations as unknowns, one small linear system per candidate.

    Elimination goes down the diagonal without pivoting: equation k must be the one that says most about
    unknown k. A system that is singular gives inf or NaN for its candidate only.

    Parameters
    ----------
    residuals : list of Dual
        Equations to be brought to zero.

    Returns
    -------
    list of (B,) float array
        What to add to each unknown.
    """
    rows = [dict(equation.slopes) for equation in residuals]
    right = [-equation.value for equation in residuals]
    size = len(rows)
    for k in range(size):
        inverse = 1.0 / rows[k][k]
        for i in range(k + 1, size):
            entry = rows[i].get(k)
            if entry is None:
                continue
            factor = entry * inverse
            for j, above in rows[k].items():
                if j > k:
                    rows[i][j] = rows[i][j] - factor * above if j in rows[i] else -factor * above
            right[i] = right[i] - factor * right[k]
    for k in reversed(range(size)):
        for j, entry in rows[k].items():
            if j > k:
                right[k] = right[k] - entry * right[j]
        right[k] = right[k] / rows[k][k]
    return right
