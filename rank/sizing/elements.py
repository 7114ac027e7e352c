"""What elements answer to prices: closed-form areas, summed over the elements, with their slopes.

With a price on each quantity of the whole converter the Lagrangian of a sizing task falls apart into one term
``n_i / A_i + c_i A_i`` per element, with

- ``n_i = slow alpha_i + fast zeta_i``, the prices of the two limits times what the element adds to them,
- ``c_i = price of area + price of loss x (f gamma_i + leakage_i)``.

By the inequality of the arithmetic and the geometric mean its least value is ``2 T_i`` with
``T_i = sqrt(n_i c_i)``, at ``A_i = sqrt(n_i / c_i)``. All that a solver or a bound needs are sums of T_i
weighted by the shares

- ``a_i``, the part of n_i that is due to the slow limit (0 for a switch),
- ``g_i = f gamma_i / c_i``, ``u_i = 1 / c_i``, ``e_i = (f gamma_i + leakage_i) / c_i``,

and, for the slopes, by their products two by two. Elements run along the first axis and candidates along the
last, so that numpy's inner loops are long.
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import TYPE_CHECKING, Any

import numpy as np

from capmuster.rank.sizing.dual import Dual, combine

if TYPE_CHECKING:
    from collections.abc import Sequence

    from numpy.typing import NDArray

    Floats = NDArray[np.float64]

__all__ = ["Kind", "KindPrices", "KindResponse", "areas", "respond"]

_TINY = 1e-300


@dataclass(frozen=True, slots=True)
class Kind:
    """Elements of one kind (capacitors, or switches of one duty) of B candidates.

    Padding has no weight (`slow` and `fast` 0) and unit leakage.

    Attributes
    ----------
    slow : (n, B) float array or None
        ``a_c^2 / d`` of capacitors [ohm Hz mm2]; None for switches.
    fast : (n, B) float array
        Fast-limit resistance times area [ohm mm2]: ``a_c^2 sigma`` or ``a_r^2 rho``, with their duty factors
        where the duty is fixed.
    cycle : (n, B) float array
        Energy per cycle and area [J/mm2].
    leakage : (n, B) float array
        Steady loss per area [W/mm2].
    """

    slow: Floats | None
    fast: Floats
    cycle: Floats
    leakage: Floats

    def take(self, places: NDArray[np.intp]) -> Kind:
        """Return the candidates at these places only."""
        return Kind(
            None if self.slow is None else self.slow[:, places],
            self.fast[:, places],
            self.cycle[:, places],
            self.leakage[:, places],
        )


@dataclass(frozen=True, slots=True)
class KindPrices:
    """Prices that one kind sees.

    Attributes
    ----------
    log_slow, log_fast : Dual
        Logarithms of the prices of ``sum slow_i / A_i`` and ``sum fast_i / A_i``.
    area, loss : Dual
        Prices of area and of loss.
    log_f : Dual
        Logarithm of the frequency.
    loss_leads : bool
        True where the price of loss is given, False where it is an unknown and that of area is certain to be
        positive.
    """

    log_slow: Dual
    log_fast: Dual
    area: Dual
    loss: Dual
    log_f: Dual
    loss_leads: bool


@dataclass(frozen=True, slots=True)
class KindResponse:
    """What one kind comes to at its prices.

    Attributes
    ----------
    X : Dual
        ``sum slow_i / A_i``; 0 for switches.
    Y : Dual
        ``sum fast_i / A_i``.
    area : Dual
        Area of the kind [mm2].
    cycling : Dual
        Loss in proportion to frequency [W].
    loss : Dual
        That and leakage [W].
    total : (B,) float array
        ``sum T_i``.
    curvature : tuple of (B,) float array
        Sums of T over ``a, a a, a g, g, g g``, for the curvature along log f.
    """

    X: Dual
    Y: Dual
    area: Dual
    cycling: Dual
    loss: Dual
    total: Floats
    curvature: tuple[Any, ...]


def areas(kind: Kind, prices: Sequence[Floats], area: Floats, loss: Floats, f: Floats) -> Floats:
    """Return the area ``sqrt(n_i / c_i)`` of each element.

    Parameters
    ----------
    kind : Kind
        Elements of B candidates.
    prices : sequence of (B,) float array
        Prices of ``sum slow_i / A_i`` and ``sum fast_i / A_i``.
    area, loss : (B,) float array
        Prices of area and of loss.
    f : (B,) float array
        Frequency [Hz].

    Returns
    -------
    (n, B) float array
        Areas [mm2].
    """
    slow, fast = prices
    n = fast * kind.fast
    if kind.slow is not None:
        n += slow * kind.slow
    return np.asarray(np.sqrt(n / (area + loss * (f * kind.cycle + kind.leakage))))


def respond(kind: Kind, prices: KindPrices) -> KindResponse:
    """Return what the elements of a kind come to at their prices.

    Parameters
    ----------
    kind : Kind
        Elements of B candidates.
    prices : KindPrices
        Prices with their slopes.

    Returns
    -------
    KindResponse
    """
    theta, nu = prices.area.value, prices.loss.value
    slow, fast, f = (np.exp(price.value) for price in (prices.log_slow, prices.log_fast, prices.log_f))
    cycling = f * kind.cycle
    spend = cycling + kind.leakage
    u = nu * spend
    u += theta
    n = fast * kind.fast
    a: Floats | None = None
    if kind.slow is not None:
        a = slow * kind.slow
        n += a
        a /= n + _TINY
    T = np.sqrt(n * u)
    np.reciprocal(u, out=u)
    g = np.multiply(cycling, u, out=cycling)
    w = u if prices.loss_leads else spend * u
    Tg, Tw = T * g, T * w
    s1, sg, sw = T.sum(0), Tg.sum(0), Tw.sum(0)
    sgg, sgw, sww = _dot(Tg, g), _dot(Tg, w), _dot(Tw, w)
    sa: Any = 0.0
    saa: Any = 0.0
    sag: Any = 0.0
    saw: Any = 0.0
    if a is not None:
        Ta = np.multiply(T, a, out=n)
        sa, saa, sag, saw = Ta.sum(0), _dot(Ta, a), _dot(Ta, g), _dot(Ta, w)

    # theta u + nu e = 1 for every element: sums over one of the two give those over the other. That cancels
    # where the other price is all, so the first-order sum, which must be precise, is taken directly.
    sae: Any
    sge: Any
    sue: Any
    see: Any
    if prices.loss_leads:
        su, sau, sgu, suu = sw, saw, sgw, sww
        se, sae, sge, sue, see = _dot(Tw, spend), 0.0, 0.0, 0.0, 0.0  # the price of loss has no slope here
    else:
        se, sae, sge, see = sw, saw, sgw, sww
        su = _dot(T, u)
        sau, sgu, sue = ((left - nu * right) / theta for left, right in ((sa, saw), (sg, sgw), (sw, sww)))
        suu = (su - nu * sue) / theta

    # Slopes by log slow, log fast, price of area, price of loss, log f; all follow from those of log A_i.
    sb, sab = s1 - sa, sa - saa
    X = Dual(0.0)
    if a is not None:
        X = _answer(prices, sa / slow, -0.5 / slow, (saa, sab, -sau, -sae, -nu * sag))
    Y = _answer(prices, sb / fast, -0.5 / fast, (sab, sb - sab, sau - su, sae - se, nu * (sag - sg)))
    loss = Dual(se)
    if not prices.loss_leads:
        loss = _answer(prices, se, 0.5, (sae, se - sae, -sue, -see, 2.0 * sg - nu * sge))
    return KindResponse(
        X=X,
        Y=Y,
        area=_answer(prices, su, 0.5, (sau, su - sau, -suu, -sue, -nu * sgu)),
        cycling=_answer(prices, sg, 0.5, (sag, sg - sag, -sgu, -sge, 2.0 * sg - nu * sgg)),
        loss=loss,
        total=s1,
        curvature=(sa, saa, sag, sg, sgg),
    )


def _dot(left: Floats, right: Floats) -> Floats:
    """Return the sum over elements of a product."""
    return np.asarray(np.einsum("ib,ib->b", left, right))


def _answer(prices: KindPrices, value: Floats, scale: Floats | float, by: tuple[Any, ...]) -> Dual:
    """Return a sum with its slopes, `scale` times those given by each price."""
    sources = (prices.log_slow, prices.log_fast, prices.area, prices.loss, prices.log_f)
    parts = [(scale * slope, price) for slope, price in zip(by, sources, strict=True) if price.slopes]
    return combine(value, *parts)
