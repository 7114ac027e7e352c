"""Objectives that count losses: against a general-purpose solver, identities, and limits known by hand."""

from __future__ import annotations

import json
from dataclasses import replace
from fractions import Fraction

import numpy as np
import pytest
from command import run
from scipy.optimize import minimize

from capmuster import catalogs
from capmuster.enumerate.converters import table_of
from capmuster.enumerate.errors import CapmusterError
from capmuster.enumerate.wiring import Converter
from capmuster.rank.design.devicechoice import choose_and_size
from capmuster.rank.design.objectives import size_candidates
from capmuster.rank.design.operation import Candidates, operation
from capmuster.rank.evaluation import choose_elements
from capmuster.rank.inputs.brief import load_brief
from capmuster.rank.inputs.conditions import LoadPoint
from capmuster.rank.pool import gather
from capmuster.rank.scores.networktable import network_table
from capmuster.rank.scores.switching import switch_network
from capmuster.rank.shortlist import shortlist
from capmuster.rank.sizing import impedance, losses

FIXED = replace(
    load_brief("greenhouse-node"), objective="least-loss", frequency_minimum=2e5, frequency=5e7,
    output_most=2.2, efficiency_floor=None, most_capacitors=2,
)  # fmt: skip
HELD = replace(
    load_brief("greenhouse-node-regulated"), objective="least-loss", frequency_minimum=2e5, frequency=5e7,
    efficiency_floor=0.5, most_capacitors=3,
)  # fmt: skip
CODES = ("O-G/I-O", "G-a/a-G O-G/b-O I-O/b-a O-a/I-a", "O-a/a-O a-G/G-b I-O/a-G I-a/O-b")


def candidates_of(code, brief):
    table = table_of([Converter.parse(code)])
    switches = network_table(table, switch_network(Converter.parse(code)))
    return Candidates(table, switches, choose_elements(table, switches, brief), brief)


class Hand:
    """One candidate in plain formulas: areas and frequency in, loss and impedance out."""

    def __init__(self, one):
        self.one, self.brief = one, one.brief
        self.n, self.m = one.table.n, one.switches.charges.shape[1]
        a_r = one.switches.charges[0] / abs(one.table.port_charges[0, 2])
        a_c = np.abs(one.table.charges[0] / one.table.port_charges[0, 2])
        classes = self.brief.technology
        self.caps = [classes.capacitors[k] for k in one.elements.capacitor_choice.index[0]]
        self.fets = [classes.switches[k] for k in one.elements.switch_choice.index[0]]
        s, t = one.elements.capacitor_choice.series[0], one.elements.switch_choice.series[0]
        self.slow = a_c**2 * s**2 / np.array([c.density for c in self.caps])
        self.esr = 4 * a_c**2 * s**2 * np.array([c.series_resistance for c in self.caps])
        self.on = 2 * a_r**2 * t**2 * np.array([f.resistance for f in self.fets])
        self.s, self.t = s, t

    def impedance(self, x):
        """Output impedance [ohm]."""
        A, S, f = self.split(x)
        return np.hypot((self.slow / A).sum() / f, (self.on / S).sum() + (self.esr / A).sum()) + (
            self.brief.technology.wiring_resistance
        )

    def split(self, x):
        """Areas [mm2] and frequency [Hz] from their logarithms."""
        return np.exp(x[: self.n]), np.exp(x[self.n : -1]), np.exp(x[-1])

    def other(self, x, volts):
        """All but conduction [W]."""
        A, S, f = self.split(x)
        table, scale = self.one.table, float(self.one.table.scale[0])
        steps = [
            abs(table.potentials[0, 0, w[0]] - table.potentials[0, 1, w[2]]) / scale * volts
            for w in table.words[0]
        ]
        plates = sum(
            f * c.plate_fraction * c.density * a * step**2
            for c, a, step in zip(self.caps, A, steps, strict=True)
        )
        held = np.abs(table.voltages[0]) / scale * volts / self.s
        leak = sum(c.leakage * v**2 / c.rating * a for c, v, a in zip(self.caps, held, A, strict=True))
        gate = sum(f * m.gate_charge * m.drive * a for m, a in zip(self.fets, S, strict=True))
        blocked = self.one.switches.blocking[0] / scale * volts / self.t
        output = sum(f * m.output_charge_at(v) * v * a for m, v, a in zip(self.fets, blocked, S, strict=True))
        return plates + leak + gate + output + self.brief.technology.controller_power


def solved(hand, objective, constraints, start):
    low, high = hand.brief.frequency_minimum, hand.brief.frequency
    bounds = [(-25, 5)] * (hand.n + hand.m) + [(np.log(low), np.log(high))]
    best = np.inf
    for shift in (0.0, 0.5):
        x0 = np.clip(start + shift * np.cos(np.arange(len(start))), *np.transpose(bounds))
        done = minimize(
            objective, x0, bounds=bounds, method="SLSQP", options={"maxiter": 2000, "ftol": 1e-12},
            constraints=[{"type": "ineq", "fun": one} for one in constraints],
        )  # fmt: skip
        if all(one(done.x) > -1e-7 for one in constraints):
            best = min(best, done.fun)
    return best


def point(found):
    design = found.design
    return np.log(np.concatenate([design.capacitors[0], design.switches[0], design.frequency[:1]]))


@pytest.mark.parametrize("code", CODES)
def test_least_loss_is_what_scipy_finds(code):
    one = candidates_of(code, FIXED)
    found, hand = size_candidates(one), Hand(one)
    x, current = point(found), FIXED.current
    limit = float(FIXED.r_max(one.table.ratios)[0])

    def loss(x):
        return (current**2 * hand.impedance(x) + hand.other(x, FIXED.input_nominal)) / found.merit[0]

    assert loss(x) == pytest.approx(1.0, rel=1e-9)
    best = solved(
        hand,
        loss,
        [
            lambda x: 1 - np.exp(x[:-1]).sum() / FIXED.area,
            lambda x: 1 - hand.impedance(x) / limit,
        ],
        x,
    )
    assert best == pytest.approx(1.0, rel=1e-6)
    assert found.proven.all()


@pytest.mark.parametrize(
    ("code", "floor"), [(CODES[0], 0.7), (CODES[0], 0.8), (CODES[1], 0.8), (CODES[2], 0.77)]
)
def test_least_area_keeps_the_floor_at_both_ends_and_is_what_scipy_finds(code, floor):
    brief = replace(FIXED, objective="least-area", efficiency_floor=floor, area=None)
    one = candidates_of(code, brief)
    one, found = choose_and_size(one)
    if not np.isfinite(found.merit[0]):
        pytest.skip("this converter cannot reach the floor")
    assert found.worst_efficiency[0] == pytest.approx(floor, abs=2e-9) or found.worst_efficiency[0] > floor
    hand, current = Hand(one), brief.current
    limit, M = float(brief.r_max(one.table.ratios)[0]), abs(float(one.table.ratios[0]))

    def slack(x, volts):
        ideal = M * volts
        lost = current**2 * hand.impedance(x) + floor * hand.other(x, volts)
        return 1 - lost / ((1 - floor) * ideal * current)

    best = solved(
        hand,
        lambda x: np.exp(x[:-1]).sum() / found.merit[0],
        [
            lambda x: slack(x, brief.input_minimum),
            lambda x: slack(x, brief.input_maximum),
            lambda x: 1 - hand.impedance(x) / limit,
        ],
        point(found),
    )
    assert best == pytest.approx(1.0, rel=1e-6)
    assert found.least[0] <= found.merit[0] * (1 + 1e-12)
    assert found.least[0] == pytest.approx(found.merit[0], rel=1e-6)


def test_the_worst_efficiency_is_at_an_end_of_the_input_range():
    one = candidates_of(CODES[1], FIXED)
    found = size_candidates(one)
    inside = [
        operation(one, found.design, volts, found.design.current).efficiency[0]
        for volts in np.linspace(FIXED.input_minimum, FIXED.input_maximum, 41)
    ]
    assert min(inside) >= found.worst_efficiency[0] * (1 - 1e-12)


def test_power_density_is_that_of_the_least_area_at_its_own_load():
    # The greatest density at the load that it chose cannot be less than what that load needs at the least.
    brief = replace(FIXED, objective="power-density", efficiency_floor=0.8, current_least=1e-4, area=None,
                    input_minimum=3.7, input_maximum=3.7)  # fmt: skip
    for code in CODES:
        one = candidates_of(code, brief)
        found = size_candidates(one)
        if not np.isfinite(found.merit[0]):
            continue
        load = float(found.design.current[0])
        there = candidates_of(code, replace(brief, objective="least-area", current=load))
        least = size_candidates(there)
        density = least.nominal.output_power[0] / least.merit[0]
        assert density <= -found.merit[0] * (1 + 1e-6)
        assert found.nominal.efficiency[0] >= 0.8 * (1 - 1e-9)


def test_an_output_held_by_frequency_takes_the_impedance_that_is_left():
    # R_out = (M V_in - V_out) / I at every input (common practice), by the blend of both limits.
    for code in CODES:
        one = candidates_of(code, HELD)
        found = size_candidates(one)
        for volts, at in ((3.0, found.minimum), (3.7, found.nominal), (4.2, found.maximum)):
            wanted = (float(one.table.ratios[0]) * volts - 1.2) / HELD.current
            z = impedance(one.model(volts), found.design.capacitors, found.design.switches, at.frequency)
            assert z.output[0] == pytest.approx(wanted, rel=1e-9)
            # What goes in and does not come out is the droop and the rest (energy balance).
            power_in = float(one.table.ratios[0]) * volts * HELD.current + at.losses.fixed[0]
            assert at.efficiency[0] == pytest.approx(1.2 * HELD.current / power_in, rel=1e-12)
        assert found.minimum.frequency[0] <= HELD.frequency * (1 + 1e-8)


def test_conductance_holds_the_output_at_one_frequency():
    brief = replace(HELD, regulation="conductance")
    found = size_candidates(candidates_of(CODES[1], brief))
    assert found.minimum.frequency[0] == found.maximum.frequency[0]
    assert found.minimum.efficiency[0] > found.maximum.efficiency[0]


def test_a_profile_of_full_load_is_full_load():
    one = size_candidates(candidates_of(CODES[0], FIXED))
    full = (LoadPoint(0.5, FIXED.current), LoadPoint(0.5, FIXED.current, FIXED.input_nominal))
    for brief in (FIXED, HELD):
        plain = size_candidates(candidates_of(CODES[0], brief))
        profiled = size_candidates(candidates_of(CODES[0], replace(brief, profile=full)))
        assert profiled.merit[0] == pytest.approx(plain.merit[0], rel=1e-8)
    assert one.mean_loss[0] == pytest.approx(one.nominal.losses.total[0], rel=1e-12)


def test_the_mean_loss_of_a_profile_by_hand():
    technology = replace(FIXED.technology, sleep_power=5e-7)
    profile = (LoadPoint(0.2, 3e-3), LoadPoint(0.3, 1e-3, 4.2), LoadPoint(0.5, 0.0))
    brief = replace(FIXED, technology=technology, profile=profile)
    one = candidates_of(CODES[0], brief)
    found = size_candidates(one)
    design = found.design
    mean = 0.0
    for share, current, volts in ((0.2, 3e-3, 3.7), (0.3, 1e-3, 4.2)):
        there = losses(
            one.model(volts),
            design.capacitors,
            design.switches,
            design.frequency,
            mean_square_current=[current**2],
        )
        mean += share * there.total[0]
    still = losses(one.model(3.7), design.capacitors, design.switches, design.frequency)
    mean += 0.5 * (still.leakage[0] + 5e-7)
    assert found.mean_loss[0] == pytest.approx(mean, rel=1e-12)
    assert found.merit[0] == pytest.approx(mean, rel=1e-12)
    assert found.proven.all()
    # Lower frequencies droop too far, higher ones lose more.
    assert found.minimum.impedance[0] == pytest.approx(float(brief.r_max(0.5)), rel=1e-9)
    for factor in (1.01, 1.2):
        other = replace(design, frequency=design.frequency * factor)
        shifted = sum(
            share * operation(one, other, volts, np.array([current])).losses.total[0]
            for share, current, volts in ((0.2, 3e-3, 3.7), (0.3, 1e-3, 4.2))
        )
        assert shifted + 0.5 * (still.leakage[0] + 5e-7) > mean


def test_light_load_takes_less_area_and_a_lower_frequency():
    # With less to carry, losses in proportion to f and to area decide (known by hand).
    heavy = size_candidates(candidates_of(CODES[0], FIXED))
    light = size_candidates(candidates_of(CODES[0], replace(FIXED, current=FIXED.current / 100)))
    assert light.capacitor_area[0] + light.switching_area[0] <= FIXED.area * (1 + 1e-12)
    assert light.nominal.frequency[0] < heavy.nominal.frequency[0]
    assert light.switching_area[0] < heavy.switching_area[0]


def test_classes_at_their_prices_are_never_worse_than_those_of_least_area():
    for brief in (FIXED, HELD, replace(FIXED, objective="least-area", efficiency_floor=0.75, area=None)):
        for code in CODES:
            one = candidates_of(code, brief)
            plain = size_candidates(one).merit[0]
            _, found = choose_and_size(one)
            assert not found.merit[0] > plain * (1 + 1e-12)
    # Here a thinner capacitor with a small plate wins by far.
    one = candidates_of(CODES[0], FIXED)
    assert choose_and_size(one)[1].merit[0] < 0.6 * size_candidates(one).merit[0]


def test_the_pool_is_sized_as_each_candidate_alone():
    brief = replace(FIXED, most_capacitors=3)
    pool = gather(brief)
    assert len(pool) > 5
    for place in range(0, len(pool), 4):
        table = table_of([pool.converter(place)])
        switches = network_table(table, switch_network(pool.converter(place)))
        alone = Candidates(table, switches, choose_elements(table, switches, brief), brief)
        assert choose_and_size(alone)[1].merit[0] == pytest.approx(pool.evaluation.merit[place], rel=1e-8)


def test_an_output_above_the_highest_acceptable_one_is_left_out():
    pool = gather(FIXED)
    assert {pool.ratio(k) for k in range(len(pool))} == {Fraction(1, 2)}
    assert pool.left_out["the output is above the highest that is acceptable"] > 0
    free = gather(replace(FIXED, output_most=None))
    assert Fraction(2, 3) in {free.ratio(k) for k in range(len(free))}


def test_the_table_shows_every_term_and_they_add_up():
    found = shortlist(FIXED, top=4)
    frame = found.frame
    terms = [name for name in frame.columns if name.startswith("loss_") and name != "loss_W"]
    assert len(terms) == 11
    np.testing.assert_allclose(frame[terms].sum(axis=1), frame["loss_W"], rtol=1e-12)
    np.testing.assert_allclose(
        frame["output_power_W"] / (frame["output_power_W"] + frame["loss_W"]),
        frame["efficiency_nominal"],
        rtol=1e-12,
    )
    assert frame["loss_W"].is_monotonic_increasing
    for k in range(len(found)):
        assert sum(e.area for e in found.elements(k)) == pytest.approx(frame["area_mm2"][k], rel=1e-6)


@pytest.mark.parametrize(
    ("changes", "said"),
    [
        ({"area": None}, "least-loss has no area budget"),
        ({"objective": "least-area"}, "least-area needs an efficiency floor"),
        ({"objective": "power-density", "efficiency_floor": 0.7}, "needs the range of the load"),
        ({"objective": "conduction-area"}, "frequency_minimum: does not belong to conduction-area"),
        ({"frequency_minimum": 6e7}, "is above the highest frequency"),
        ({"duty": 1.2}, "value 1.2 is not allowed"),
        ({"output_most": 1.0}, "closer to 0 than the least output"),
        ({"profile": (LoadPoint(0.5, 1e-3),)}, "the shares add up to 50 %"),
        ({"profile": (LoadPoint(1.0, 0.0),)}, "sleeps all the time"),
        ({"profile": (LoadPoint(1.0, 5e-3),)}, "is outside 0 to 0.003 A"),
        ({"profile": (LoadPoint(1.0, 1e-3, 5.0),)}, "5 V is outside 3 to 4.2 V"),
    ],
)
def test_what_makes_no_sense_is_refused(changes, said):
    with pytest.raises(CapmusterError, match=said.replace("(", r"\(")):
        replace(FIXED, **changes)


def test_the_command_shows_losses_and_what_is_proven(tmp_path):
    brief = tmp_path / "node.toml"
    text = catalogs.find("briefs", "greenhouse-node-losses").read_text()
    brief.write_text(text.replace("capacitors = 4", "capacitors = 3"))
    shown = run("rank", str(brief), "--top", "3").stdout
    assert "least loss within the area, all losses counted, mean over the load profile" in shown
    assert "5 % 3 mA, 15 % 400 µA, 80 % asleep" in shown
    assert "no other topology with up to 3 capacitors is better than place 3" in shown
    content = json.loads(run("rank", str(brief), "--top", "3", "--format", "json").stdout)
    assert content["search"]["certificate"]["holds"] is True
    first = content["candidates"][0]
    terms = [value for name, value in first.items() if name.startswith("loss_") and name != "loss_W"]
    assert sum(terms) == pytest.approx(first["loss_W"], rel=1e-9)
    switch = next(one for one in first["elements"] if one["kind"] == "switch")
    assert switch["supply"] in {"rails", "floating"}
    assert switch["gate"][1] == switch["source"][1]
