"""Switches of many converters at once against those of one."""

from __future__ import annotations

from collections import Counter

import numpy as np
import pytest
from hypothesis import given
from strategies import census_converters, family_converters

from capmuster.enumerate.converters import converters, table_of
from capmuster.rank.scores.switching import switch_network
from capmuster.rank.scores.switchtable import score, switch_table
from capmuster.rank.scores.utilisation import charge_flow


def held_against_the_network(converter):
    table = table_of([converter])
    batch, network = switch_table(table), switch_network(converter)
    output, scale = abs(int(table.port_charges[0, 2])), int(table.scale[0])
    count = int(batch.count[0])
    assert count == len(network.switches)
    assert bool(batch.clean[0]) == network.clean
    assert not batch.phase[0, count:].any()
    # Equipotential clusters leave the order of a chain open: there only the number of switches is defined.
    theirs = Counter((s.phase, s.multiplier, s.blocking_voltage) for s in network.switches)
    ours = Counter(
        (int(batch.phase[0, k]), abs(int(batch.charges[0, k])), int(batch.blocking[0, k]))
        for k in range(count)
    )
    if all(s.blocking_voltage for s in network.switches):
        assert ours == Counter({(p, a * output, v * scale): c for (p, a, v), c in theirs.items()})
    flow, scores = charge_flow(converter), score(table)
    assert scores.capacitor_utilisation[0] == float(flow.capacitor_utilisation)
    assert scores.switch_utilisation[0] == float(flow.switch_utilisation)
    assert scores.switches[0] == count


@given(census_converters())
def test_census_converters(converter):
    held_against_the_network(converter)


@given(family_converters(most=20))
def test_family_members(converter):
    held_against_the_network(converter)


@pytest.mark.parametrize("n", [1, 2, 3])
def test_rows_do_not_depend_on_their_company(n):
    table = converters(n)
    whole = switch_table(table)
    for row in range(0, len(table), 37):
        alone = switch_table(table.take(np.array([row])))
        for name in alone.__slots__:
            assert np.array_equal(getattr(alone, name)[0], getattr(whole, name)[row])
    nothing = switch_table(table.take(slice(0, 0)))
    assert len(nothing.count) == 0
