"""How all converters that hold a brief's output use their capacitors and switches."""

from __future__ import annotations

from fractions import Fraction
from typing import TYPE_CHECKING

import numpy as np

from capmuster.enumerate.converters import ratios_of_triple, table_of
from capmuster.enumerate.families import members
from capmuster.rank.page.data import BINS, Population
from capmuster.rank.scores.candidates import census_candidates
from capmuster.rank.scores.scoredcensus import scored_census
from capmuster.rank.scores.switchtable import score

if TYPE_CHECKING:
    from collections.abc import Iterator

    from numpy.typing import NDArray

    from capmuster.rank.inputs.brief import Brief

    _Shares = NDArray[np.float64]


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
    for utilisations in _utilisations(brief, complete_up_to):
        # A utilisation is above 0 and at most 1: bin k holds (k / BINS, (k + 1) / BINS].
        places = [
            np.clip(np.ceil(values * BINS * (1 - 1e-12)).astype(np.int64) - 1, 0, BINS - 1)
            for values in utilisations
        ]
        np.add.at(counts, (places[0], places[1]), 1)
    description = f"All {int(counts.sum())} converters that hold the output"
    description += f", complete up to {complete_up_to} flying capacitors"
    if brief.most_capacitors > complete_up_to:
        description += f", members of families up to {brief.most_capacitors}"
    if brief.holds(Fraction(1)) and (brief.ratios is None or Fraction(1) in brief.ratios):
        description += "; those of ratio 1 lift no energy and stand at 0"
    return Population(counts, f"{description}.")


def _utilisations(brief: Brief, complete_up_to: int) -> Iterator[tuple[_Shares, _Shares]]:
    """Yield both utilisations of the converters whose ratio holds the output, each converter once."""

    def wanted(ratio: Fraction) -> bool:
        return brief.holds(ratio) and (brief.ratios is None or ratio in brief.ratios)

    for n in range(1, complete_up_to + 1):
        ratios = {ratio for triple in scored_census(n).triples for ratio in ratios_of_triple(triple)}
        for ratio in sorted(filter(wanted, ratios)):
            measures = census_candidates(n, ratio).measures
            yield measures.capacitor_utilisation, measures.switch_utilisation
    beyond = {
        member.converter.id: member.converter
        for member in members(brief.most_capacitors)
        if member.converter.n > complete_up_to and wanted(member.converter.ratio)
    }
    for n in range(complete_up_to + 1, brief.most_capacitors + 1):
        same_size = [one for one in beyond.values() if one.n == n]
        if same_size:
            scores = score(table_of(same_size))
            yield scores.capacitor_utilisation, scores.switch_utilisation
