"""What spreads of parts, temperature and load do to sized candidates: corners and seeded random trials.

Every trial is the same draw for all candidates as far as it is common to them (process, temperature, load),
so that their order in a trial is theirs and not the draw's. What is each element's own is drawn from a seed
that the converter's id is part of: a candidate's figures do not depend on which others are listed.
"""

from __future__ import annotations

import hashlib
from dataclasses import dataclass, replace
from itertools import product
from typing import TYPE_CHECKING

import numpy as np

from capmuster.rank.design.operation import Candidates, Design, operation
from capmuster.rank.inputs.conditions import ROOM, Tolerance
from capmuster.rank.sizing import LossModel, impedance, losses
from capmuster.rank.structs import rows_of

if TYPE_CHECKING:
    from collections.abc import Sequence

    from numpy.typing import NDArray

    from capmuster.rank.design.objectives import Sized

    Floats = NDArray[np.float64]

_SIGMAS = 3.0
_SHARE = 0.05
_HELD = 1e-9


@dataclass(frozen=True, slots=True)
class Draw:
    """T trials of what is common to all candidates; arrays of shape (T,), factors on the nominal figure.

    Attributes
    ----------
    resistance, density, charge, load
        Of on-resistance, of capacitance, of gate and output charge, of the load current [1].
    leakage
        Of leakage [1].
    """

    resistance: Floats
    density: Floats
    charge: Floats
    load: Floats
    leakage: Floats


@dataclass(frozen=True, slots=True)
class Spread:
    """What spreads do to one candidate.

    Attributes
    ----------
    efficiency
        Efficiency at the worst input that 95 % of the trials reach [1].
    droop
        Droop at the lowest input that 95 % of the trials keep within [V]: below the ideal output in
        fixed-ratio use, below the held one in regulated use.
    corner_efficiency, corner_droop
        The worst of all corners.
    holds
        Share of the trials in which the output is what the brief requires at the lowest input [1].
    first
        Share of the trials in which it has the highest efficiency at the worst input of all listed candidates
        [1].
    """

    efficiency: float
    droop: float
    corner_efficiency: float
    corner_droop: float
    holds: float
    first: float


def random_draw(tolerance: Tolerance) -> Draw:
    """Draw the trials."""
    random = np.random.default_rng(tolerance.seed)
    count = tolerance.trials
    factors = [
        1 + spread * _cut_normal(random, count)
        for spread in (tolerance.resistance, tolerance.density, tolerance.charge, tolerance.load)
    ]
    degrees = random.uniform(tolerance.temperature_low, tolerance.temperature_high, count)
    return _at(tolerance, np.stack(factors), degrees)


def corner_draw(tolerance: Tolerance) -> Draw:
    """List all corners: every spread at either end, elements all alike."""
    ends = [
        sorted({-spread, spread})
        for spread in (
            tolerance.resistance + tolerance.mismatch,
            tolerance.density + tolerance.capacitance,
            tolerance.charge,
            tolerance.load,
        )
    ]
    degrees = sorted({tolerance.temperature_low, tolerance.temperature_high})
    rows = np.array(list(product(*ends, degrees)))
    return _at(tolerance, 1 + rows[:, :4].T, rows[:, 4])


def _at(tolerance: Tolerance, factors: Floats, degrees: Floats) -> Draw:
    """Make a draw: factors on resistance, density, charge, load, shape (4, T), and temperatures [degC]."""
    above = degrees - ROOM
    return Draw(
        resistance=factors[0] * (1 + tolerance.resistance_drift * above),
        density=factors[1],
        charge=factors[2],
        load=factors[3],
        leakage=2 ** (above / tolerance.leakage_doubling),
    )


def _cut_normal(random: np.random.Generator, shape: int | tuple[int, int]) -> Floats:
    """Draw normal numbers of which `_SIGMAS` standard deviations are 1, cut off there."""
    from scipy.special import ndtr, ndtri  # noqa: PLC0415 -- slow to import

    low, high = ndtr(-_SIGMAS), ndtr(_SIGMAS)
    return np.asarray(ndtri(low + (high - low) * random.random(shape)) / _SIGMAS)


def spreads(rows: Sequence[tuple[str, Candidates, Sized]], tolerance: Tolerance) -> tuple[Spread, ...]:
    """Work out what spreads do to candidates.

    Parameters
    ----------
    rows
        Id, classes and sizes of each candidate, one row each.
    tolerance
        The spreads.
    """
    draw, corners = random_draw(tolerance), corner_draw(tolerance)
    trials = [_tried(one, draw, _own_factors(one, tolerance)) for one in rows]
    if not trials:
        return ()
    best = np.argmax(np.stack([efficiency for efficiency, _, _ in trials]), axis=0)
    found = []
    for k, (one, (efficiency, droop, holds)) in enumerate(zip(rows, trials, strict=True)):
        at_corner, droop_at_corner, _ = _tried(one, corners, None)
        found.append(
            Spread(
                efficiency=float(np.quantile(efficiency, _SHARE)),
                droop=float(np.quantile(droop, 1 - _SHARE)),
                corner_efficiency=float(at_corner.min()),
                corner_droop=float(droop_at_corner.max()),
                holds=float(holds.mean()),
                first=float((best == k).mean()),
            )
        )
    return tuple(found)


def _own_factors(row: tuple[str, Candidates, Sized], tolerance: Tolerance) -> tuple[Floats, Floats]:
    """Factors on each capacitor and on each switch's resistance, shapes (T, n) and (T, m)."""
    name, candidate, _ = row
    word = int.from_bytes(hashlib.sha256(name.encode()).digest()[:8], "big")
    random = np.random.default_rng([tolerance.seed, word])
    n, m = candidate.table.n, candidate.switches.charges.shape[1]
    return (
        1 + tolerance.capacitance * _cut_normal(random, (tolerance.trials, n)),
        1 + tolerance.mismatch * _cut_normal(random, (tolerance.trials, m)),
    )


def _tried(
    row: tuple[str, Candidates, Sized], draw: Draw, own: tuple[Floats, Floats] | None
) -> tuple[Floats, Floats, NDArray[np.bool_]]:
    """Efficiency at the worst input, droop at the lowest one, whether the output holds; shape (T,) each."""
    _, one, sized = row
    brief, count = one.brief, len(draw.load)
    same = np.zeros(count, dtype=np.intp)
    candidates = replace(
        one,
        table=one.table.take(same),
        switches=one.switches.take(same),
        elements=rows_of(one.elements, same),
    )
    design = rows_of(sized.design, same)
    current = design.current * draw.load
    at = []
    for volts in (brief.input_minimum, brief.input_maximum):
        model = _shifted(one.model(volts).take(same), draw, own)
        at.append(_output(candidates, design, model, volts, current))
    (low, efficiency), (_, other) = at
    aim = candidates.ideal(brief.input_minimum) if brief.use == "fixed-ratio" else abs(brief.required)
    holds = low >= abs(brief.required) * (1 - _HELD)
    return np.minimum(efficiency, other), np.maximum(aim - low, 0.0), holds


def _output(
    candidates: Candidates, design: Design, model: LossModel, volts: float, current: Floats
) -> tuple[Floats, Floats]:
    """Output voltage and efficiency; an output that cannot be held droops at the highest frequency."""
    brief = candidates.brief
    found = operation(candidates, design, volts, current, model)
    output, efficiency = found.output, found.efficiency
    if brief.use == "regulated":
        sizes = (design.capacitors, design.switches)
        highest = (
            np.full(len(current), brief.frequency) if brief.regulation == "frequency" else design.frequency
        )
        ideal = candidates.ideal(volts)
        reached = ideal - current * impedance(model, *sizes, highest, design.duty).output
        short = ~(reached >= output * (1 - _HELD))
        wasted = losses(model, *sizes, highest, design.duty).fixed
        output = np.where(short, np.maximum(reached, 0.0), output)
        efficiency = np.where(short, output * current / (ideal * current + wasted), efficiency)
    return output, efficiency


def _shifted(model: LossModel, draw: Draw, own: tuple[Floats, Floats] | None) -> LossModel:
    """Apply a draw to the coefficients of one candidate, repeated for every trial."""
    capacitance, resistance = (1.0, 1.0) if own is None else own
    density = draw.density[:, None] * capacitance
    on = draw.resistance[:, None] * resistance
    leakage = draw.leakage[:, None]
    return replace(
        model,
        alpha=model.alpha / density,
        beta=model.beta * on,
        plate=model.plate * density,
        leakage_c=model.leakage_c * leakage,
        gate=model.gate * draw.charge[:, None],
        output_charge=model.output_charge * draw.charge[:, None],
        leakage_s=model.leakage_s * leakage,
        cycle=model.cycle * draw.charge,
    )
