"""The best discrete parts of a small converter by trying everything: the oracle for the searches.

It takes charges and voltages from the exact analysis, what an element must stand from the worst-case ratings,
and figures from the parts, and shares no other code with what it checks.
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import TYPE_CHECKING

import numpy as np

from capmuster.enumerate.converters import table_of
from capmuster.rank.scores.networktable import network_table
from capmuster.rank.scores.switching import switch_network
from capmuster.rank.worstcase import ratings

if TYPE_CHECKING:
    from capmuster.enumerate.wiring import Converter
    from capmuster.rank.inputs.brief import Brief
    from capmuster.rank.inputs.parts_request import PartsRequest


@dataclass(frozen=True, slots=True)
class Choices:
    """Every choice of parts: R_SSL, R_FSL [ohm], fixed loss [W], footprint [mm2] and price [EUR]."""

    slow: np.ndarray
    fast: np.ndarray
    fixed: np.ndarray
    footprint: np.ndarray
    price: np.ndarray

    def best(self, blend, brief: Brief, request: PartsRequest, ratio: float) -> float:
        """Least loss [W], footprint [mm2] or price [EUR] within the limits; infinite if none keeps them."""
        technology, current = brief.technology, brief.current
        held = brief.use == "regulated"
        volts = brief.input_minimum if held else brief.input_nominal
        impedance = blend(self.slow, self.fast) + technology.wiring_resistance
        load_free = self.fixed + technology.controller_power
        if held:
            loss = (ratio * volts - brief.required) * current + load_free
            efficiency = brief.required * current / (ratio * volts * current + load_free)
        else:
            loss = current**2 * impedance + load_free
            efficiency = 1 - loss / (ratio * volts * current + load_free)
        limit = (ratio * brief.input_minimum - brief.required) / current
        good = impedance - technology.wiring_resistance <= (limit - technology.wiring_resistance) * (1 + 1e-9)
        for values, most in ((self.footprint, request.footprint), (self.price, request.price)):
            if most is not None:
                good &= values <= most * (1 + 1e-12)
        if request.least != "loss" and request.loss is not None:
            good &= loss <= request.loss * (1 + 1e-9)
        if request.least != "loss" and request.efficiency is not None:
            good &= efficiency >= request.efficiency - 1e-9
        wanted = {"loss": loss, "footprint": self.footprint, "price": self.price}[request.least]
        return float(np.min(np.where(good, wanted, np.inf), initial=np.inf))


def all_choices(converter: Converter, brief: Brief, request: PartsRequest) -> Choices:
    """Add up every choice of part and count for every element, at the first frequency of the request."""
    held = brief.use == "regulated"
    volts = brief.input_minimum if held else brief.input_nominal
    f, balance = request.frequencies[0], converter.balance
    sums = np.zeros((1, 5))
    table, network = table_of([converter]), switch_network(converter)
    stands = ratings(table, network_table(table, network), brief)
    for i in range(converter.n):
        a, v = abs(balance.charges[i] / balance.port_charges[2]), float(abs(balance.voltages[i]))
        ways = []
        for part in request.stock.capacitors:
            series = _series(stands.capacitors[0, i], part.rating * request.capacitor_derating)
            shift = 1 - part.tolerance if request.capacitance == "least" else 1
            points, shares = zip(*part.bias, strict=True)
            for count in range(1, request.parallel_capacitors + 1) if series <= request.series else ():
                value = part.nominal * shift * np.interp(v * volts / series, points, shares) * count / series
                number = series * count
                resistance = part.series_resistance * series / count
                ways.append(
                    (
                        a**2 / (f * value),
                        4 * a**2 * resistance,
                        0,
                        number * part.footprint,
                        number * part.price,
                    )
                )
        sums = _added(sums, ways)
    for j, switch in enumerate(network.switches):
        a, v = float(switch.multiplier), float(switch.blocking_voltage)
        ways = []
        for part in request.stock.switches:
            series = _series(stands.switches[0, j], part.rating * request.switch_derating)
            for count in range(1, request.parallel_switches + 1) if series <= request.series else ():
                on = part.resistance * (1 + part.rise * (request.temperature - 25)) * series / count
                number, each = series * count, v * volts / series
                charge = (
                    part.output_charge * (each / part.output_charge_voltage) ** part.output_charge_exponent
                )
                lost = number * f * (part.gate_charge * part.drive + charge * each)
                ways.append(
                    (
                        0,
                        2 * a**2 * on,
                        lost,
                        number * part.footprint + request.driver_footprint,
                        number * part.price + request.driver_price,
                    )
                )
        sums = _added(sums, ways)
    return Choices(*sums.T)


def _series(voltage: float, limit: float) -> int:
    return max(1, int(np.ceil(voltage / limit - 1e-9)))


def _added(sums: np.ndarray, ways: list[tuple[float, ...]]) -> np.ndarray:
    if not ways:
        return np.zeros((0, 5))
    return (sums[:, None, :] + np.array(ways)[None, :, :]).reshape(-1, 5)
