r"""How the two limits of the output impedance are joined, with the slopes that bounds are built on.

Every proof here rests on three properties of a blend B(x, y): it is convex, homogeneous of degree one, and
falls with neither limit. Then each tangent plane goes through the origin and lies below the blend,

.. math:: B(x, y) = \max_{\theta} \; B_x(\theta)\, x + B_y(\theta)\, y,

so that tangents turn a converter's loss into the highest of linear costs.
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import TYPE_CHECKING, Final

import numpy as np

from capmuster.rank.exact.impedance import blend, loop_blend

if TYPE_CHECKING:
    from collections.abc import Callable

    from numpy.typing import ArrayLike, NDArray

    Array = NDArray[np.float64]


@dataclass(frozen=True, slots=True)
class Blend:
    """A convex, homogeneous, nowhere falling blend of R_SSL and R_FSL.

    Attributes
    ----------
    name
        Its formula, for tables.
    value
        Blend [ohm] of R_SSL and R_FSL [ohm], any shape; R_FSL is above 0.
    slopes
        Its derivatives by R_SSL and by R_FSL [1].
    """

    name: str
    value: Callable[[ArrayLike, ArrayLike], Array]
    slopes: Callable[[ArrayLike, ArrayLike], tuple[Array, Array]]


def _quadratic_slopes(slow: ArrayLike, fast: ArrayLike) -> tuple[Array, Array]:
    x, y = np.asarray(slow, dtype=np.float64), np.asarray(fast, dtype=np.float64)
    joined = np.hypot(x, y)
    return np.asarray(x / joined), np.asarray(y / joined)


def _loop_slopes(slow: ArrayLike, fast: ArrayLike) -> tuple[Array, Array]:
    x, y = np.asarray(slow, dtype=np.float64), np.asarray(fast, dtype=np.float64)
    u = np.minimum(x / y, _HIGHEST)
    # (u / sinh u)^2, which goes to 1 with u to 0
    share = np.where(u > _LOWEST, u / np.sinh(np.maximum(u, _LOWEST)), 1.0) ** 2
    with np.errstate(divide="ignore", invalid="ignore"):
        by_slow = np.where(u > _LOWEST, 1 / np.tanh(u) - share / u, 2 * u / 3)
    return np.asarray(by_slow), np.asarray(share)


_LOWEST: Final = 1e-6
_HIGHEST: Final = 300.0

QUADRATIC: Final = Blend("sqrt(R_SSL^2 + R_FSL^2)", blend, _quadratic_slopes)
"""What the trade uses."""

LOOP: Final = Blend("R_SSL coth(R_SSL / R_FSL)", loop_blend, _loop_slopes)
"""All charge through one time constant: never above the exact impedance of an irreducible converter."""
