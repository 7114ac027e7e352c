"""A bound for every candidate of a pool at once, before any of them is looked at on its own.

With the multipliers of a few candidates every element has a priced cost that depends on its charge, its
voltage and nothing else of its converter. There are few different ones in a pool, so the cost of each is
found once, and the bound of a converter is a sum of them (see `capmuster.rank.discrete.relaxed`).
"""

from __future__ import annotations

import math
from dataclasses import dataclass
from fractions import Fraction
from typing import TYPE_CHECKING, Final

import numpy as np

from capmuster.rank.discrete.options import lowered
from capmuster.rank.discrete.problem import SLACK, frame_of, operating_input, phase_factors, reported
from capmuster.rank.discrete.relaxed import tangents
from capmuster.rank.scores.switchtable import switch_table
from capmuster.rank.worstcase import ratings

if TYPE_CHECKING:
    from collections.abc import Iterator, Sequence

    from numpy.typing import NDArray

    from capmuster.enumerate.converters import ConverterTable
    from capmuster.rank.discrete.blends import Blend
    from capmuster.rank.discrete.options import Kind, OptionBook
    from capmuster.rank.discrete.problem import Problem
    from capmuster.rank.discrete.relaxed import Multipliers
    from capmuster.rank.inputs.brief import Brief
    from capmuster.rank.pool import Pool

    Floats = NDArray[np.float64]
    Integers = NDArray[np.intp]

_BLOCK: Final = 4096
_ANGLES: Final = np.linspace(0.0, np.pi / 2, 9)[1:-1]


@dataclass(frozen=True, slots=True)
class _Elements:
    """The elements of one kind of N converters; every array has shape (N, elements).

    Attributes
    ----------
    kind
        "capacitor" or "switch".
    multiplier
        Charge multiplier [1].
    ideal
        Voltage per volt of input [1].
    voltage
        What it must stand [V].
    factor
        What its resistance counts for in R_FSL [1]; 0 where a row has no such element.
    input_voltage
        Input at which losses count [V].
    """

    kind: Kind
    multiplier: Floats
    ideal: Floats
    voltage: Floats
    factor: Floats
    input_voltage: float

    @property
    def there(self) -> NDArray[np.bool_]:
        """Where a row has such an element."""
        return self.factor > 0


@dataclass(frozen=True, slots=True)
class PoolBounds:
    """What is known of every candidate of a pool; every array has shape (N,).

    Attributes
    ----------
    bounds
        No choice of parts is below it, in what is reported; infinite where none keeps the limits.
    lacking
        Where no part stands the voltage of some element.
    """

    bounds: Floats
    lacking: NDArray[np.bool_]


def pool_bounds(
    pool: Pool,
    brief: Brief,
    books: Sequence[OptionBook],
    multipliers: Sequence[Sequence[Multipliers]],
    blend: Blend,
) -> PoolBounds:
    """Bound what is made least of every candidate, whatever the frequency.

    Parameters
    ----------
    pool
        The candidates.
    brief, books, blend
        As in `capmuster.rank.discrete.problem.pose`, a book for each frequency.
    multipliers
        For each book, multipliers of problems of this brief and request.
    """
    bounds, lacking = np.full(len(pool), np.inf), np.zeros(len(pool), dtype=bool)
    for g, table in enumerate(pool.tables):
        members = np.flatnonzero(pool.group == g)
        for start in range(0, len(members), _BLOCK):
            places = members[start : start + _BLOCK]
            rows = table.take(pool.row[places])
            elements = _elements(rows, brief)
            for one in elements:
                steps = books[0].steps(one.kind)
                lacking[places] |= (one.there & (lowered(one.voltage) > steps[-1])).any(axis=1)
            for book, prices in zip(books, multipliers, strict=True):
                here = _bounds(rows, elements, list(_frames(rows, brief, book, blend)), book, prices)
                bounds[places] = np.minimum(bounds[places], here)
    return PoolBounds(np.where(lacking, np.inf, bounds), lacking)


def _elements(table: ConverterTable, brief: Brief) -> tuple[_Elements, _Elements]:
    switches = switch_table(table)
    stands = ratings(table, switches, brief)
    output = np.abs(table.port_charges[:, 2:].astype(np.float64))
    scale = table.scale[:, None].astype(np.float64)
    of_capacitor, of_phase = phase_factors(brief)
    return (
        _Elements(
            kind="capacitor",
            multiplier=np.abs(table.charges) / output,
            ideal=np.abs(table.voltages) / scale,
            voltage=stands.capacitors,
            factor=np.full(table.charges.shape, of_capacitor),
            input_voltage=operating_input(brief),
        ),
        _Elements(
            kind="switch",
            multiplier=switches.charges / output,
            ideal=switches.blocking / scale,
            voltage=stands.switches,
            factor=np.array([0.0, *of_phase])[switches.phase],
            input_voltage=operating_input(brief),
        ),
    )


def _bounds(
    table: ConverterTable,
    elements: tuple[_Elements, _Elements],
    frames: Sequence[tuple[Problem, Integers]],
    book: OptionBook,
    prices: Sequence[Multipliers],
) -> Floats:
    """Best bound of each row over all multipliers, shape (N,)."""
    bounds = np.full(len(table), np.inf)
    if not frames:
        return bounds
    priced = np.array([[m.slow, m.fast, m.fixed, m.footprint, m.price] for m in prices]).reshape(-1, 5)
    weights = np.vstack([priced, *(weighed for weighed, _ in _least_sums(frames[0][0]))])
    nothing = np.zeros((len(table), len(weights)))
    costs = sum((_costs(one, book, weights) for one in elements), start=nothing)
    for frame, rows in frames:
        if frame.impedance_limit <= 0 or frame.limit < 0:
            continue
        limits = np.array([one.limits(frame) for one in prices])
        best = (costs[rows, : len(prices)] - limits).max(axis=1, initial=-np.inf)
        for used, (_, most) in zip(costs[rows, len(prices) :].T, _least_sums(frame), strict=True):
            best = np.where(used > most, np.inf, best)
        bounds[rows] = reported(frame, book.units, best)
    return bounds


def _least_sums(frame: Problem) -> list[tuple[Floats, float]]:
    """Weights of R_SSL, R_FSL, fixed loss, footprint and price, and the most that a choice may sum up to.

    An element that takes the least of one sum alone shows which limits are out of reach altogether.
    """
    none = math.inf
    found = [
        (np.array([0.0, 0, 0, 1, 0]), none if frame.footprint is None else frame.footprint),
        (np.array([0.0, 0, 0, 0, 1]), none if frame.price is None else frame.price),
    ]
    square = frame.square_current if frame.conducts else 0.0
    for a, b in zip(*tangents(frame, _ANGLES), strict=True):
        found.append((np.array([a, b, 0, 0, 0]), frame.impedance_limit * (1 + SLACK)))
        found.append((np.array([square * a, square * b, frame.share, 0, 0]), frame.limit * (1 + SLACK)))
    return found


def _frames(
    table: ConverterTable, brief: Brief, book: OptionBook, blend: Blend
) -> Iterator[tuple[Problem, Integers]]:
    """Yield, for each ratio, the problem without elements, and the rows that have it."""
    pairs, row_of = np.unique(table.port_charges[:, 1:], axis=0, return_inverse=True)
    for k, (into, out) in enumerate(pairs.tolist()):
        ratio = Fraction(-int(into), int(out))
        yield frame_of(ratio, brief, book, blend), np.flatnonzero(row_of.reshape(-1) == k)


def _costs(elements: _Elements, book: OptionBook, weights: Floats) -> Floats:
    """Least weighted cost of the elements of each row, for each line of weights, shape (N, lines)."""
    there = elements.there
    steps = book.steps(elements.kind)
    figures = (
        elements.ideal[there] * elements.input_voltage,
        steps[np.minimum(np.searchsorted(steps, lowered(elements.voltage[there])), len(steps) - 1)],
        elements.multiplier[there],
        elements.factor[there],
    )
    code = np.zeros(int(there.sum()), dtype=np.int64)
    for one in figures:
        values, which = np.unique(one, return_inverse=True)
        code = code * len(values) + which
    _, first, which = np.unique(code, return_index=True, return_inverse=True)
    least = np.empty((len(first), len(weights)))
    for k, place in enumerate(first.tolist()):
        operating, step, multiplier, factor = (float(one[place]) for one in figures)
        options = (book.capacitor if elements.kind == "capacitor" else book.switch)(
            step, operating, pruned=False
        ).scaled(multiplier**2, multiplier**2 * factor)
        columns = np.stack(
            [options.slow, options.fast, options.fixed, options.footprint, options.price]
        ).astype(np.float64)
        least[k] = (weights @ columns).min(axis=1)
    costs = np.zeros((*there.shape, len(weights)))
    costs[there] = least[which]
    return np.asarray(costs.sum(axis=1))
