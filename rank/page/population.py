"""How all converters that hold a brief's output use their capacitors and switches."""

from __future__ import annotations

from fractions import Fraction
from typing import TYPE_CHECKING

import numpy as np

from capmuster.enumerate.converters import converters, table_of
from capmuster.enumerate.families import members
from capmuster.rank.page.data import BINS, Population
from capmuster.rank.switchtable import score

if TYPE_CHECKING:
    from collections.abc import Iterator

    from capmuster.enumerate.converters import ConverterTable
    from capmuster.rank.brief import Brief


def population_of(brief: Brief, complete_up_to: int) -> Population:
    """Count all converters that hold the output of a brief by their two utilisations.

    Parameters
    ----------
    brief
        Decides which ratios hold the output.
    complete_up_to
        Flying capacitors up to which the census is taken; above it, family members up to the brief's most.
    """
    counts = np.zeros((BINS, BINS), dtype=np.int64)
    for table in _tables(brief, complete_up_to):
        scores = score(table)
        # A utilisation is above 0 and at most 1: bin k holds (k / BINS, (k + 1) / BINS].
        places = [
            np.clip(np.ceil(values * BINS * (1 - 1e-12)).astype(np.int64) - 1, 0, BINS - 1)
            for values in (scores.capacitor_utilisation, scores.switch_utilisation)
        ]
        np.add.at(counts, (places[0], places[1]), 1)
    description = f"All {int(counts.sum())} converters that hold the output"
    description += f", complete up to {complete_up_to} flying capacitors"
    if brief.most_capacitors > complete_up_to:
        description += f", members of families up to {brief.most_capacitors}"
    if brief.holds(Fraction(1)) and (brief.ratios is None or Fraction(1) in brief.ratios):
        description += "; those of ratio 1 lift no energy and stand at 0"
    return Population(counts, f"{description}.")


def _tables(brief: Brief, complete_up_to: int) -> Iterator[ConverterTable]:
    """Yield the converters whose ratio holds the output, each once."""
    for n in range(1, complete_up_to + 1):
        for ratio in brief.ratios or (None,):
            table = converters(n, ratio)
            pairs, row_of = np.unique(table.port_charges[:, 1:], axis=0, return_inverse=True)
            holds = np.array([brief.holds(Fraction(-int(i), int(o))) for i, o in pairs.tolist()], dtype=bool)
            if len(pairs):
                yield table.take(holds[row_of.reshape(-1)])
    beyond = {
        member.converter.id: member.converter
        for member in members(brief.most_capacitors)
        if member.converter.n > complete_up_to
        and brief.holds(member.converter.ratio)
        and (brief.ratios is None or member.converter.ratio in brief.ratios)
    }
    for n in range(complete_up_to + 1, brief.most_capacitors + 1):
        same_size = [one for one in beyond.values() if one.n == n]
        if same_size:
            yield table_of(same_size)
