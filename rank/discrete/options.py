"""Ways to build one capacitor or one switch from a stock: part, count in series, count in parallel.

Footprints and prices are whole numbers of a small unit in which every part of the stock is exact, so that a
budget is met or not, without rounding.
"""

from __future__ import annotations

import math
from dataclasses import dataclass, field, fields, replace
from fractions import Fraction
from typing import TYPE_CHECKING, Literal, TypeAlias, TypeVar

import numpy as np

from capmuster.enumerate.errors import CapmusterError
from capmuster.rank.frontier import frontier
from capmuster.rank.inputs.quantity import format_quantity

if TYPE_CHECKING:
    from collections.abc import Iterable

    from numpy.typing import NDArray

    from capmuster.rank.inputs.parts import CapacitorPart, SwitchPart
    from capmuster.rank.inputs.parts_request import PartsRequest

    Floats: TypeAlias = NDArray[np.float64]
    Integers: TypeAlias = NDArray[np.int64]

Kind = Literal["capacitor", "switch"]
"""What an element is."""

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


_Volts = TypeVar("_Volts", float, "NDArray[np.float64]")


def lowered(voltage: _Volts) -> _Volts:
    """Voltage [V] less the rounding that may have lifted it above a rating."""
    return voltage * (1 - _ROUNDING)


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
    _steps: dict[str, Floats] = field(default_factory=dict, repr=False)

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
        step = self._step("capacitor", voltage)
        key = ("capacitor", step, bias, pruned)
        if key not in self._known:
            found = self._capacitors(step, bias)
            self._known[key] = self._unbeaten(found) if pruned else found
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
        step = self._step("switch", voltage)
        key = ("idle switch" if idle else "switch", step, blocking, pruned)
        if key not in self._known:
            found = self._switches(step, blocking)
            if idle:
                found = found.scaled(0.0, 0.0)
            self._known[key] = self._unbeaten(found) if pruned else found
        return self._known[key]

    def steps(self, kind: Kind) -> Floats:
        """Voltages [V], rising, between which the ways to build an element are the same.

        An element belongs to the first one that is not below what it must stand, and to none beyond the last.
        """
        if kind not in self._steps:
            limits = self._limits(kind)
            strings = np.outer(np.arange(1, self.request.series + 1), limits[limits > 0])
            self._steps[kind] = np.unique(strings)
        return self._steps[kind]

    def _step(self, kind: Kind, voltage: float) -> float:
        steps = self.steps(kind)
        place = int(np.searchsorted(steps, lowered(voltage)))
        if place == len(steps):
            raise NoPartError(
                f"no {kind} of the stock stands {format_quantity(voltage, 'V')} after derating",
                accepted="parts of a higher rating, less derating, or more in series",
            )
        return float(steps[place])

    def _limits(self, kind: Kind) -> Floats:
        """Derated rating of every part [V]; 0 for one that is not used."""
        request = self.request
        if kind == "capacitor":
            return np.array([one.rating for one in request.stock.capacitors]) * (
                request.capacitor_derating or 1.0
            )
        driven = [request.drive is None or one.drive <= request.drive for one in request.stock.switches]
        ratings = np.array([one.rating for one in request.stock.switches])
        return np.asarray(ratings * driven * (request.switch_derating or 1.0))

    def _capacitors(self, voltage: float, bias: float) -> Options:
        request, units = self.request, self.units
        parts, strings = self._usable("capacitor", voltage)
        shelf = [request.stock.capacitors[k] for k in parts.tolist()]
        least = request.capacitance == "least"
        single = np.array(
            [
                float(one.capacitance(bias / s, least=least))
                for one, s in zip(shelf, strings.tolist(), strict=True)
            ]
        )
        most = request.parallel_capacitors
        parallel = np.tile(np.arange(1, most + 1), len(parts))
        series = np.repeat(strings, most)
        value = np.repeat(single, most) * parallel / series
        nothing = np.zeros(len(value))
        with np.errstate(divide="ignore"):
            slow = 1 / (self.frequency * value)
        found = Options(
            part=np.repeat(parts, most),
            series=series,
            parallel=parallel,
            value=value,
            slow=slow,
            fast=np.repeat(np.array([one.series_resistance for one in shelf]), most) * series / parallel,
            gate=nothing,
            output=nothing,
            footprint=np.repeat(_whole([p.footprint for p in shelf], units.per_mm2), most)
            * series
            * parallel,
            price=np.repeat(_whole([p.price for p in shelf], units.per_eur), most) * series * parallel,
        )
        return found.take(np.isfinite(slow))

    def _switches(self, voltage: float, blocking: float) -> Options:
        request, units = self.request, self.units
        parts, strings = self._usable("switch", voltage)
        shelf = [request.stock.switches[k] for k in parts.tolist()]
        each = blocking / strings
        # Loss of one part [W]: gate charge times drive, and output charge times blocking voltage.
        gate = np.array([one.gate_charge * one.drive for one in shelf]) * self.frequency
        output = self.frequency * np.array(
            [float(one.output_charge_at(v)) * v for one, v in zip(shelf, each.tolist(), strict=True)]
        )
        most = request.parallel_switches
        parallel = np.tile(np.arange(1, most + 1), len(parts))
        series = np.repeat(strings, most)
        number = series * parallel
        resistance = np.array([one.resistance_at(request.temperature) for one in shelf])
        value = np.repeat(resistance, most) * series / parallel
        footprint = np.repeat(_whole([one.footprint for one in shelf], units.per_mm2), most) * number
        price = np.repeat(_whole([one.price for one in shelf], units.per_eur), most) * number
        return Options(
            part=np.repeat(parts, most),
            series=series,
            parallel=parallel,
            value=value,
            slow=np.zeros(len(value)),
            fast=value,
            gate=np.repeat(gate, most) * number,
            output=np.repeat(output, most) * number,
            footprint=footprint + _whole([request.driver_footprint], units.per_mm2),
            price=price + _whole([request.driver_price], units.per_eur),
        )

    def _usable(self, kind: Kind, voltage: float) -> tuple[Integers, Integers]:
        """Parts that stand a voltage, and how many of them in series."""
        limits = self._limits(kind)
        parts = np.flatnonzero(limits > 0)
        needed = np.maximum(np.ceil(lowered(voltage) / limits[parts]), 1).astype(np.int64)
        stands = needed <= self.request.series
        return parts[stands], needed[stands]

    def _unbeaten(self, options: Options) -> Options:
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
