"""Every sizing task against a general convex solver (see `plain_sizing`), on random candidates.

The objectives must agree within 1e-6 and the proven bounds hold; where one finds that limits cannot be met,
so must the other. Each kind has a few candidates by default and 200 in the long tests.
"""

from __future__ import annotations

import numpy as np
import pytest
from plain_sizing import PHASES, UNDECIDED, PlainSizing, random_figures

from capmuster.rank.sizing import LossModel, Objective, Status, Task, Use, size

F_LEAST, F_MOST = 1e5, 1e9
USES = {"fixed": Use.FIXED_RATIO, "frequency": Use.FREQUENCY, "conductance": Use.CONDUCTANCE}

# objective, limits, use, duty, operating points, fixed frequency
KINDS = {
    "loss": ("loss", ("area",), "fixed", 0.5, 1, False),
    "loss, droop": ("loss", ("area", "droop"), "fixed", 0.5, 1, False),
    "loss, areas apart": ("loss", ("area_c", "area_s"), "fixed", 0.5, 1, False),
    "loss, one frequency": ("loss", ("area",), "fixed", 0.5, 1, True),
    "loss, uneven duty": ("loss", ("area",), "fixed", 0.3, 1, False),
    "loss, free duty": ("loss", ("area", "droop"), "fixed", None, 1, False),
    "loss, conductance": ("loss", ("area", "droop"), "conductance", 0.5, 1, False),
    "loss, frequency": ("loss", ("area", "droop"), "frequency", 0.5, 1, False),
    "loss, frequency, profile": ("loss", ("area", "droop"), "frequency", 0.5, 3, False),
    "area": ("area", ("efficiency",), "fixed", 0.5, 1, False),
    "area, droop": ("area", ("efficiency", "droop"), "fixed", 0.5, 1, False),
    "area, areas apart": ("area", ("efficiency", "area_c", "area_s"), "fixed", 0.5, 1, False),
    "area, free duty": ("area", ("efficiency",), "fixed", None, 1, False),
    "area, one frequency": ("area", ("efficiency",), "fixed", 0.5, 1, True),
    "area, conductance": ("area", ("efficiency", "droop"), "conductance", 0.5, 1, False),
    "area, frequency": ("area", ("efficiency", "droop"), "frequency", 0.5, 1, False),
    "area, frequency, free duty": ("area", ("efficiency", "droop"), "frequency", None, 2, False),
    "density": ("density", ("efficiency",), "fixed", 0.5, 1, False),
    "density, droop": ("density", ("efficiency", "droop"), "fixed", 0.5, 1, False),
    "density, area": ("density", ("efficiency", "area"), "fixed", 0.5, 1, False),
    "density, free duty": ("density", ("efficiency",), "fixed", None, 1, False),
    "density, one frequency": ("density", ("efficiency",), "fixed", 0.5, 1, True),
    "density, conductance": ("density", ("efficiency", "droop"), "conductance", 0.5, 1, False),
    "density, frequency": ("density", ("efficiency", "droop"), "frequency", 0.5, 1, False),
}


def model_of(figures):
    return LossModel.build(
        figures["alpha"],
        figures["beta"],
        np.array(PHASES),
        series=figures["series"],
        plate=figures["cycle_c"],
        leakage_c=figures["leak_c"],
        gate=figures["gate"],
        output_charge=figures["output_charge"],
        leakage_s=figures["leak_s"],
        controller=figures["controller"],
        cycle=figures["cycle"],
        loop=figures["loop"],
        lead=figures["lead"],
    )


def with_limits(rng, figures, points):
    """Add limits near what a first sizing comes to, so that they bind, do not, and cannot be met."""
    count = len(figures["controller"])
    current, area = 10.0 ** rng.uniform(-3, 0, count), 10.0 ** rng.uniform(-1, 1, count)
    first = size(
        model_of(figures),
        Task(objective=Objective.LOSS, frequency=(F_LEAST, F_MOST), current=current, most_area=area),
    )
    eta = rng.uniform(0.6, 0.9, count)
    ideal = first.value / current * eta / (1.0 - eta) * 10.0 ** rng.uniform(-0.05, 0.4, count)
    droop = current * first.impedance.output * 10.0 ** rng.uniform(-0.1, 0.3, count)
    output = ideal - droop * rng.uniform(1.0, 2.0, count)
    spare = first.losses.fixed / current * 10.0 ** rng.uniform(-0.3, 0.5, count)
    per_point = droop / current * np.cumsum(rng.uniform(0.0, 2.0, (points, count)), axis=0) + droop / current
    return figures | {
        "current": current,
        "area": area,
        "area_c": first.capacitors.sum(axis=1) * 10.0 ** rng.uniform(-0.5, 0.3, count),
        "area_s": first.switches.sum(axis=1) * 10.0 ** rng.uniform(-0.5, 0.3, count),
        "I_least": 0.3 * current,
        "I_most": 3.0 * current,
        "eta": eta,
        "one_less_eta": 1.0 - eta,
        "ideal": ideal,
        "droop": droop,
        "output": np.maximum(output, 0.2 * ideal),
        "spare": spare,
        "wanted": per_point.T,
        "share": np.full((count, points), 0.9 / points),
    }


def task_of(figures, kind):
    """Return the same task in the project's terms."""
    objective, limits, use, duty, _, one_frequency = kind
    free, holds = objective == "density", use != "fixed"
    given = (
        {"current_range": (figures["I_least"], figures["I_most"])}
        if free
        else {"current": figures["current"]}
    )
    if "droop" in limits:
        name = "most_droop" if free else "most_impedance"
        given[name] = figures["droop"] / (1.0 if free else figures["current"])
    for limit, name in (
        ("area", "most_area"),
        ("area_c", "most_capacitor_area"),
        ("area_s", "most_silicon_area"),
    ):
        if limit in limits:
            given[name] = figures[limit]
    if holds:
        given["output"] = figures["output"]
        # Q <= (V_out / eta - V_ideal) I
        given["efficiency"] = figures["output"] / (figures["spare"] + figures["ideal"])
    else:
        given["efficiency"] = figures["eta"]
    if use == "frequency":
        given["held_impedance"] = figures["wanted"].T
        given["held_share"] = figures["share"].T
    most = figures["f_most"]
    return Task(
        objective=Objective(objective),
        use=USES[use],
        frequency=(most if one_frequency else F_LEAST, most),
        duty=duty,
        ideal_output=figures["ideal"],
        **given,
    )


def compare(kind, count, seed):
    objective, limits, use, duty, points, one_frequency = KINDS[kind]
    rng = np.random.default_rng(seed)
    figures = with_limits(rng, random_figures(rng, count), points)
    figures["f_most"] = 10.0 ** rng.uniform(6, 8, count) if one_frequency else np.full(count, F_MOST)
    figures["f_least"] = figures["f_most"] if one_frequency else np.full(count, F_LEAST)
    if objective == "density":
        figures["wanted"] = figures["wanted"] * figures["current"][:, None]  # volts where the load is free
    ours = size(model_of(figures), task_of(figures, KINDS[kind]))
    plain = PlainSizing(objective, limits, use, duty, points)
    met = undecided = 0
    for k in range(count):
        best = plain.solve({name: value[k] for name, value in figures.items()})
        if best == UNDECIDED:
            undecided += 1
            continue
        if best is None:
            assert ours.status[k] == Status.INFEASIBLE
            continue
        met += 1
        assert ours.status[k] == Status.OPTIMAL
        assert ours.gap[k] <= 1e-9
        assert ours.value[k] == pytest.approx(best, rel=1e-6)
        assert ours.least[k] * (1 - 1e-6) <= best <= ours.greatest[k] * (1 + 1e-6)
    assert met >= count // 2
    assert undecided <= count // 100


@pytest.mark.parametrize("kind", KINDS)
def test_a_few(kind):
    compare(kind, 12, seed=1)


@pytest.mark.long
@pytest.mark.parametrize("kind", KINDS)
def test_two_hundred(kind):
    compare(kind, 200, seed=2)
