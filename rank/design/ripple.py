r"""The capacitors around a converter: how large they must be for a ripple.

Within a period the output receives its charge in portions, one per phase, while the load draws evenly. The
voltage of the output capacitor moves by ``(received - drawn) / C``. Its peak-to-peak movement is greatest if
each phase's portion arrives at once, at the start of the phase (slow-switching limit); spread over the phase
it is smaller, whatever its shape. So ``C = e I / (f V_ripple)`` suffices, with ``e`` the movement in units of
the charge of one period. At the input the same holds for the charge that is drawn.

Copies that share the load and are evenly shifted in time deliver in smaller portions at more instants.
"""

from __future__ import annotations

from typing import TYPE_CHECKING

import numpy as np

if TYPE_CHECKING:
    from numpy.typing import ArrayLike, NDArray

    from capmuster.enumerate.converters import ConverterTable

    Floats = NDArray[np.float64]


def phase_shares(table: ConverterTable, port: int) -> Floats:
    """Share of a port's charge that flows in either phase.

    Parameters
    ----------
    table
        N converters.
    port
        0, 1, 2: ground, input, output.

    Returns
    -------
    numpy.ndarray
        Shape (N, 2); each row adds up to 1. One of the two may be negative.
    """
    flow = np.zeros((len(table), 2))
    for phase, sign in ((0, 1), (1, -1)):
        plus, minus = table.words[:, :, 2 * phase] == port, table.words[:, :, 2 * phase + 1] == port
        flow[:, phase] = sign * (table.charges * (plus.astype(np.int64) - minus)).sum(axis=1)
    return np.asarray(flow / table.port_charges[:, port, None])


def excursion(shares: ArrayLike, duty: ArrayLike = 0.5, copies: int = 1) -> Floats:
    """Peak-to-peak charge on the capacitor at a port, over the charge of one period.

    Parameters
    ----------
    shares
        Shares of either phase, shape (N, 2) [1].
    duty
        Share of phase 1 in time, shape (N,) or a number [1].
    copies
        Interleaved copies.

    Returns
    -------
    numpy.ndarray
        Shape (N,) [1].
    """
    share = np.asarray(shares, dtype=np.float64)
    start = np.arange(copies) / copies
    first = np.broadcast_to(start, (len(share), copies))
    second = (first + np.broadcast_to(np.asarray(duty, dtype=np.float64), len(share))[:, None]) % 1.0
    when = np.concatenate([first, second], axis=1)
    portion = np.repeat(share / copies, copies, axis=1)
    # Rounding must not tear apart portions of different copies that arrive together.
    when = np.round(when, _DIGITS)
    order = np.argsort(when, axis=1, kind="stable")
    when, portion = np.take_along_axis(when, order, axis=1), np.take_along_axis(portion, order, axis=1)
    after = np.cumsum(portion, axis=1) - when
    edge = np.zeros((len(share), 1), dtype=bool)
    with_next = np.concatenate([np.diff(when) == 0, edge], axis=1)
    with_last = np.concatenate([edge, with_next[:, :-1]], axis=1)
    high = np.where(with_next, -np.inf, after).max(axis=1)
    low = np.where(with_last, np.inf, after - portion).min(axis=1)
    return np.asarray(high - low)


_DIGITS = 12  # of an instant within the period


def capacitor_for(movement: Floats, current: Floats, frequency: Floats, ripple: float) -> Floats:
    """Capacitance that keeps a ripple, shape (N,) [F].

    Parameters
    ----------
    movement
        As from `excursion` [1].
    current
        Mean current at the port [A].
    frequency
        Lowest switching frequency at that current [Hz].
    ripple
        Peak-to-peak ripple [V].
    """
    return movement * current / (frequency * ripple)
