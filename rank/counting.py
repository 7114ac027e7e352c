"""The census of exactly n capacitors in numbers, with both routes of its certificate."""

from __future__ import annotations

from dataclasses import dataclass
from typing import TYPE_CHECKING

from capmuster.enumerate.census import census
from capmuster.enumerate.certificate import certify
from capmuster.rank.switchtable import score

if TYPE_CHECKING:
    import pandas as pd

    from capmuster.enumerate.certificate import Certificate


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


def count_census(n: int) -> CensusCount:
    """Count the census of exactly ``n`` capacitors both ways.

    Raises
    ------
    CapmusterError
        When ``n`` is beyond the reach of the census.
    """
    certificate = certify(n)
    table = census(n)
    unity, degenerate = table.unity, table.degenerate
    return CensusCount(
        n=n,
        cells=int((~unity).sum()),
        degenerate=int((~unity & degenerate).sum()),
        clean=int(score(table.take(~unity & ~degenerate)).clean.sum()),
        unity=int((unity & ~degenerate).sum()),
        certificate=certificate,
    )


def census_counts(n: int) -> pd.DataFrame:
    """Count the census of exactly ``n`` capacitors, per triple.

    Returns
    -------
    pandas.DataFrame
        One row per triple of port charges, with the columns ``triple``, ``cells``, ``labelled_listed`` and
        ``labelled_counted`` (all plain numbers).

    Raises
    ------
    CapmusterError
        When ``n`` is beyond the reach of the census.
    """
    import pandas as pd  # noqa: PLC0415 -- slow to import

    certificate = certify(n)
    triples = sorted({*certificate.labelled_listed, *certificate.labelled_counted})
    return pd.DataFrame(
        {
            "triple": [",".join(map(str, triple)) for triple in triples],
            "cells": [certificate.cells.get(triple, 0) for triple in triples],
            "labelled_listed": [certificate.labelled_listed.get(triple, 0) for triple in triples],
            "labelled_counted": [certificate.labelled_counted.get(triple, 0) for triple in triples],
        }
    )
