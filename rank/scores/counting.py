"""The cells of exactly n capacitors in numbers, with both routes of the certificate."""

from __future__ import annotations

from dataclasses import dataclass
from typing import TYPE_CHECKING

from capmuster.enumerate.census import CENSUS_REACH, check_reach
from capmuster.enumerate.certificate import COUNT_REACH, certificate_of
from capmuster.enumerate.tally import Tally
from capmuster.rank.scores.cellscores import score_cells
from capmuster.rank.scores.scoredcensus import silent
from capmuster.rank.scores.shards import run_shards

if TYPE_CHECKING:
    from collections.abc import Callable

    import pandas as pd

    from capmuster.enumerate.certificate import Certificate
    from capmuster.rank.scores.scoredcensus import Note
    from capmuster.rank.scores.shards import Shard


@dataclass(frozen=True, slots=True)
class CensusCount:
    """How many cells there are, and whether two independent counts agree.

    Attributes
    ----------
    n
        Number of flying capacitors, exactly.
    cells
        Cells with three non-zero port charges, degenerate ones included.
    degenerate, clean
        Those of them with a capacitor that holds no voltage; those without one and without an idle or
        equipotential switch.
    unity
        Non-degenerate cells with one zero port charge.
    certificate
        Cells per triple, and labelled cells and skeletons by both routes.
    """

    n: int
    cells: int
    degenerate: int
    clean: int
    unity: int
    certificate: Certificate

    @property
    def labelled_listed(self) -> int:
        """Labelled cells from the orbits of the listed ones."""
        return sum(self.certificate.labelled_listed.values())

    @property
    def labelled_counted(self) -> int:
        """Labelled cells from the convolution."""
        return sum(self.certificate.labelled_counted.values())


def count_census(n: int, *, jobs: int | None = None, say: Callable[[Note], None] = silent) -> CensusCount:
    """List and score the cells of exactly ``n`` capacitors, keep none of them, and count both ways.

    Parameters
    ----------
    n
        Number of flying capacitors, 1 to `COUNT_REACH`.
    jobs
        Processes for six capacitors; fewer take one.
    say
        Is told how far it is.

    Raises
    ------
    CapmusterError
        When ``n`` is beyond the reach of the count.
    """
    check_reach(n, COUNT_REACH)
    tally, clean = Tally.empty(n), 0
    text = f"listing, scoring and counting all cells of {n} flying capacitors"
    if n <= CENSUS_REACH:
        jobs, say = 1, silent  # a second or less
    for _, (part, clean_part) in run_shards(n, _count_shard, text, jobs=jobs, say=say):
        tally.merge(part)
        clean += clean_part
    held, degenerate = tally.per_triple(tally.held), tally.per_triple(tally.degenerate)
    three_ports = {
        triple: (held.get(triple, 0), degenerate.get(triple, 0))
        for triple in {*held, *degenerate}
        if triple[0]
    }
    return CensusCount(
        n=n,
        cells=sum(map(sum, three_ports.values())),
        degenerate=sum(lost for _, lost in three_ports.values()),
        clean=clean,
        unity=sum(count for triple, count in held.items() if not triple[0]),
        certificate=certificate_of(tally),
    )


def _count_shard(shard: Shard) -> tuple[Tally, int]:
    """Tally a shard's cells; also the clean ones with three port charges."""
    tally = Tally.empty(shard.table.n)
    clean = 0
    for cells in score_cells(shard.table, shard.first, tally):
        unity = (cells.charge_b == 0) | (cells.charge_c == 0) | (cells.charge_b == -cells.charge_c)
        clean += int((cells.clean & ~unity).sum())
    return tally, clean


def census_counts(n: int, *, jobs: int | None = None) -> pd.DataFrame:
    """Count the cells of exactly ``n`` capacitors both ways, per triple.

    Returns
    -------
    pandas.DataFrame
        One row per triple of port charges, with the columns ``triple``, ``cells``, ``labelled_listed`` and
        ``labelled_counted`` (all plain numbers).

    Raises
    ------
    CapmusterError
        When ``n`` is beyond the reach of the count.
    """
    import pandas as pd  # noqa: PLC0415 -- slow to import

    certificate = count_census(n, jobs=jobs).certificate
    triples = sorted({*certificate.labelled_listed, *certificate.labelled_counted})
    return pd.DataFrame(
        {
            "triple": [",".join(map(str, triple)) for triple in triples],
            "cells": [certificate.cells.get(triple, 0) for triple in triples],
            "labelled_listed": [certificate.labelled_listed.get(triple, 0) for triple in triples],
            "labelled_counted": [certificate.labelled_counted.get(triple, 0) for triple in triples],
        }
    )
