"""One candidate, slowly and plainly: classes by trying each, areas by general-purpose minimisers.

It takes charges and voltages from the exact analysis and the figures of the classes from the technology, and
shares no formula of the ranking.
"""

from __future__ import annotations

from dataclasses import dataclass
from math import ceil, inf
from typing import TYPE_CHECKING

import numpy as np
from scipy.optimize import minimize, minimize_scalar

from capmuster.rank.scores.utilisation import charge_flow

if TYPE_CHECKING:
    from collections.abc import Sequence

    from capmuster.enumerate.wiring import Converter
    from capmuster.rank.inputs.brief import Brief


@dataclass(frozen=True, slots=True)
class Part:
    """One element: its kind, multiplier, the class of least cost with its series count, and that cost."""

    kind: str
    multiplier: float
    device: str
    series: int
    cost: float


def parts_of(converter: Converter, brief: Brief) -> list[Part]:
    """Every element in fixed-ratio use, with the class that stands its ideal voltage at least cost."""
    flow, technology = charge_flow(converter), brief.technology
    found = []
    for multiplier, voltage in zip(flow.multipliers, flow.voltages, strict=True):
        options = []
        for one in technology.capacitors:
            series = stacked(float(voltage) * brief.input_maximum, one.rating * technology.capacitor_derating)
            options.append((series**2 / one.density, series, one.name))
        cost, series, name = min(options)
        found.append(Part("capacitor", float(multiplier), name, series, cost))
    for switch in flow.network.switches:
        options = []
        for device in technology.switches:
            limit = device.rating * technology.switch_derating
            series = stacked(float(switch.blocking_voltage) * brief.input_maximum, limit)
            if switch.multiplier == 0:
                options.append((series * device.least_area, series, device.name))
            else:
                options.append((series**2 * device.resistance, series, device.name))
        cost, series, name = min(options)
        found.append(Part("switch", float(switch.multiplier), name, series, cost))
    return found


def stacked(volts: float, limit: float) -> int:
    """Devices in series; a voltage that is the limit but for rounding is the limit."""
    return max(1, ceil(volts / limit * (1 - 1e-9)))


def least_area(
    parts: Sequence[Part],
    frequency: float,
    most_impedance: float,
    most_capacitor_area: float = inf,
    most_silicon_area: float = inf,
) -> float:
    """Least total area [mm2] whose impedance, the blend of both limits at 50 % duty, is within a bound.

    A quasi-Newton method shares a kind's area, a search by sections decides how much each kind has.
    """
    idle = sum(part.cost for part in parts if not part.multiplier)
    slow = best_shared([p.multiplier**2 * p.cost / frequency for p in parts if p.kind == "capacitor"])
    fast = best_shared([2 * p.multiplier**2 * p.cost for p in parts if p.kind == "switch" and p.multiplier])

    def silicon(capacitor_area):
        return fast / np.sqrt(most_impedance**2 - (slow / capacitor_area) ** 2)

    least = slow / most_impedance * (1 + 1e-9)
    if most_silicon_area < inf:
        least = max(least, slow / np.sqrt(most_impedance**2 - (fast / (most_silicon_area - idle)) ** 2))
    most = min(most_capacitor_area, 1e4 * (slow + fast) / most_impedance)
    found = minimize_scalar(
        lambda x: np.exp(x) + silicon(np.exp(x)),
        bounds=(np.log(least), np.log(most)),
        method="bounded",
        options={"xatol": 1e-10, "maxiter": 2000},
    )
    return float(min(found.fun, *(a + silicon(a) for a in (least, most))) + idle)


def best_shared(terms: Sequence[float]) -> float:
    """Least ``sum term_i / A_i`` for a total area of 1, over all ways to share it."""
    terms = np.array(terms)
    scale = terms.sum()

    def logarithm(x):
        areas = np.exp(x)
        worth = terms / scale / areas
        slope = areas / areas.sum() - worth / worth.sum()
        return np.log(areas.sum()) + np.log(worth.sum()), slope

    found = minimize(logarithm, np.zeros(len(terms)), jac=True, method="BFGS", options={"gtol": 1e-9})
    return float(np.exp(found.fun) * scale)
