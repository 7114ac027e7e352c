"""Ways to build one capacitor or one switch from a stock: part, count in series, count in parallel.

Footprints and prices are whole numbers of a small unit in which every part of the stock is exact, so that a
budget is met or not, without rounding.
"""

from __future__ import annotations

import math
from dataclasses import dataclass, field, fields, replace
from fractions import Fraction
from typing import TYPE_CHECKING, TypeAlias

import numpy as np

from capmuster.enumerate.errors import CapmusterError
from capmuster.rank.frontier import frontier
from capmuster.rank.quantity import format_quantity

if TYPE_CHECKING:
    from collections.abc import Iterable

    from numpy.typing import NDArray

    from capmuster.rank.parts import CapacitorPart, SwitchPart
    from capmuster.rank.parts_request import PartsRequest

    Floats: TypeAlias = NDArray[np.float64]
    Integers: TypeAlias = NDArray[np.int64]

_ROUNDING = 1e-9  # relative: a voltage that is the rating but for rounding is the rating


class NoPartError(CapmusterError):
    """No part of a stock stands what an element must stand."""


@dataclass(frozen=True, slots=True)
class Options:
    """Ways to build one element; every array has shape (options,).

    Attributes
    ----------
    part
        Position of the part in its catalog.
    series, parallel
        Parts in series, and such strings in parallel [1].
    value
        Capacitance [F] or on-resistance [ohm] of all of them.
    slow, fast
        What they add to R_SSL and to R_FSL [ohm]. In an `OptionBook` for a multiplier of 1 and a duty of 1:
        one over frequency times capacitance, and the resistance.
    gate, output
        Loss by gate drive and by output charge [W].
    footprint, price
        In units of the `Units`; the driver of a switch included.
    """

    part: Integers
    series: Integers
    parallel: Integers
    value: Floats
    slow: Floats
    fast: Floats
    gate: Floats
    output: Floats
    footprint: Integers
    price: Integers

    def __len__(self) -> int:
        """Return the number of ways."""
        return len(self.part)

    @property
    def fixed(self) -> Floats:
        """Loss whatever the load [W]."""
        return self.gate + self.output

    def take(self, rows: NDArray[np.generic]) -> Options:
        """Return the ways at these places."""
        return Options(*(getattr(self, one.name)[rows] for one in fields(self)))

    def scaled(self, slow: float, fast: float) -> Options:
        """Return the ways with both impedances multiplied."""
        return replace(self, slow=self.slow * slow, fast=self.fast * fast)


@dataclass(frozen=True, slots=True)
class Units:
    """Whole units per mm2 and per EUR in which a stock is exact."""

    per_mm2: int
    per_eur: int

    @classmethod
    def of(cls, request: PartsRequest) -> Units:
        """Find the coarsest units that hold every footprint and price of a request."""
        parts: list[CapacitorPart | SwitchPart] = [*request.stock.capacitors, *request.stock.switches]
        return cls(
            _common([request.driver_footprint, *(part.footprint for part in parts)]),
            _common([request.driver_price, *(part.price for part in parts)]),
        )


def exact(value: float) -> Fraction:
    """Fraction of the shortest decimal text of a float: what was typed, up to 15 digits."""
    return Fraction(repr(float(value)))


def _whole(values: Iterable[float], per: int) -> Integers:
    """Values in units of which ``per`` make one, exactly."""
    return np.array([int(exact(value) * per) for value in values], dtype=np.int64)


def _common(values: Iterable[float]) -> int:
    return math.lcm(*(exact(value).denominator for value in values))


@dataclass(frozen=True, slots=True)
class OptionBook:
    """The ways to build elements of a request, at one frequency; what many candidates share is found once.

    Attributes
    ----------
    request
        What is asked of the parts, with its deratings filled in.
    units
        Units of footprint and price.
    frequency
        Switching frequency [Hz].
    counts
        Whether footprint and whether price decides between two ways that are otherwise equal or better.
    """

    request: PartsRequest
    units: Units
    frequency: float
    counts: tuple[bool, bool]
    _known: dict[tuple[str, float, float, bool], Options] = field(default_factory=dict, repr=False)

    def capacitor(self, voltage: float, bias: float, *, pruned: bool = True) -> Options:
        """Ways to build a capacitor.

        Parameters
        ----------
        voltage
            What it must stand [V].
        bias
            Direct voltage at which its capacitance counts [V].
        pruned
            Whether ways that another one beats are left out.

        Raises
        ------
        NoPartError
            If no part of the stock stands the voltage.
        """
        key = ("capacitor", voltage, bias, pruned)
        if key not in self._known:
            self._known[key] = self._kept(
                self._capacitors(voltage, bias), "capacitor", voltage, pruned=pruned
            )
        return self._known[key]

    def switch(self, voltage: float, blocking: float, *, idle: bool = False, pruned: bool = True) -> Options:
        """Ways to build a switch.

        Parameters
        ----------
        voltage
            What it must stand [V].
        blocking
            Blocking voltage at which its output charge counts [V].
        idle
            Whether it carries no charge, so that its resistance does not count.
        pruned
            Whether ways that another one beats are left out.

        Raises
        ------
        NoPartError
            If no part of the stock stands the voltage.
        """
        key = ("idle switch" if idle else "switch", voltage, blocking, pruned)
        if key not in self._known:
            found = self._switches(voltage, blocking)
            if idle:
                found = found.scaled(0.0, 0.0)
            self._known[key] = self._kept(found, "switch", voltage, pruned=pruned)
        return self._known[key]

    def _capacitors(self, voltage: float, bias: float) -> Options:
        request = self.request
        shelf = request.stock.capacitors
        part, series, parallel = self._counts(
            [one.rating for one in shelf], voltage, request.capacitor_derating, request.parallel_capacitors
        )
        least = request.capacitance == "least"
        single = np.array(
            [float(shelf[k].capacitance(bias / s, least=least)) for k, s in zip(part, series, strict=True)]
        )
        resistance = np.array([one.series_resistance for one in shelf])[part] * series / parallel
        value = single * parallel / series
        with np.errstate(divide="ignore"):
            slow = 1 / (self.frequency * value)
        nothing = np.zeros(len(part))
        number = series * parallel
        return Options(
            part=part,
            series=series,
            parallel=parallel,
            value=value,
            slow=slow,
            fast=resistance,
            gate=nothing,
            output=nothing,
            footprint=_whole([one.footprint for one in shelf], self.units.per_mm2)[part] * number,
            price=_whole([one.price for one in shelf], self.units.per_eur)[part] * number,
        )

    def _switches(self, voltage: float, blocking: float) -> Options:
        request = self.request
        shelf = request.stock.switches
        part, series, parallel = self._counts(
            [one.rating if request.drive is None or one.drive <= request.drive else 0.0 for one in shelf],
            voltage,
            request.switch_derating,
            request.parallel_switches,
        )
        number = series * parallel
        value = np.array([one.resistance_at(request.temperature) for one in shelf])[part] * series / parallel
        gate = np.array([one.gate_charge * one.drive for one in shelf])[part] * number * self.frequency
        each = blocking / series
        charge = np.array(
            [float(shelf[k].output_charge_at(v)) for k, v in zip(part, each.tolist(), strict=True)]
        )
        mm2, eur = self.units.per_mm2, self.units.per_eur
        footprint = _whole([one.footprint for one in shelf], mm2)[part] * number
        price = _whole([one.price for one in shelf], eur)[part] * number
        return Options(
            part=part,
            series=series,
            parallel=parallel,
            value=value,
            slow=np.zeros(len(part)),
            fast=value,
            gate=gate,
            output=charge * each * number * self.frequency,
            footprint=footprint + _whole([request.driver_footprint], mm2),
            price=price + _whole([request.driver_price], eur),
        )

    def _counts(
        self, ratings: list[float], voltage: float, derating: float | None, most_parallel: int
    ) -> tuple[Integers, Integers, Integers]:
        """Part, series and parallel count of every way; a part of rating 0 is not used."""
        limits = np.array(ratings) * (derating or 1.0)
        usable = np.flatnonzero(limits > 0)
        needed = np.maximum(np.ceil(voltage * (1 - _ROUNDING) / limits[usable]), 1).astype(np.int64)
        stands = needed <= self.request.series
        usable, needed = usable[stands], needed[stands]
        parallel = np.tile(np.arange(1, most_parallel + 1), len(usable))
        return np.repeat(usable, most_parallel), np.repeat(needed, most_parallel), parallel

    def _kept(self, options: Options, kind: str, voltage: float, *, pruned: bool) -> Options:
        options = options.take(np.isfinite(options.slow))
        if not len(options):
            raise NoPartError(
                f"no {kind} of the stock stands {format_quantity(voltage, 'V')} after derating",
                accepted="parts of a higher rating, less derating, or more in series",
            )
        if not pruned:
            return options
        by_footprint, by_price = self.counts
        decisive = [options.slow, options.fast, options.fixed]
        decisive += [options.footprint.astype(np.float64)] if by_footprint else []
        decisive += [options.price.astype(np.float64)] if by_price else []
        costs = np.stack(decisive, axis=1)
        # Of equal ways the cheapest stays, then the smallest, then that of the earliest part.
        order = np.lexsort((options.part, options.footprint, options.price))
        _, first = np.unique(costs[order], axis=0, return_index=True)
        distinct = order[first]
        return options.take(np.sort(distinct[frontier(costs[distinct])]))
