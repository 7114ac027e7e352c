"""Census converters of one ratio, sorted out by what their cells tell before any wiring is worked out.

Five capacitors alone make some eight million converters. Their ratios, switches and cleanness are in the
scored census, so that only converters which pass all that can be asked of these ever become tables.
"""

from __future__ import annotations

from collections import Counter
from dataclasses import dataclass
from typing import TYPE_CHECKING

import numpy as np

from capmuster.rank.scores.candidates import census_candidates

if TYPE_CHECKING:
    from collections.abc import Callable, Iterable
    from fractions import Fraction

    from numpy.typing import NDArray

    from capmuster.enumerate.converters import ConverterTable
    from capmuster.rank.scores.candidates import Measures


@dataclass(frozen=True, slots=True)
class Source:
    """Converters that a search goes on with, and why it does not with others.

    Attributes
    ----------
    table
        The converters.
    chosen
        Whether the user named them.
    left_out
        How many others failed first for which reason.
    """

    table: ConverterTable
    chosen: bool
    left_out: Counter[str]


def screened(
    n: int,
    ratio: Fraction,
    of_ratio: Iterable[tuple[str, bool]],
    of_rows: Iterable[tuple[str, Callable[[Measures], NDArray[np.bool_]]]],
) -> Source:
    """Sort out the census converters of one ratio with exactly ``n`` flying capacitors.

    Parameters
    ----------
    n, ratio
        Which converters.
    of_ratio
        Reasons, and whether the ratio passes them; asked before the others.
    of_rows
        Reasons, and where converters pass them.
    """
    candidates = census_candidates(n, ratio)
    passing = np.ones(len(candidates.measures), dtype=bool)
    left_out: Counter[str] = Counter()
    tests = [(reason, np.full(len(passing), passes)) for reason, passes in of_ratio]
    tests += [(reason, passes(candidates.measures)) for reason, passes in of_rows]
    for reason, passes in tests:
        failing = int(np.count_nonzero(passing & ~passes))
        if failing:
            left_out[reason] += failing
        passing &= passes
    return Source(candidates.table(np.flatnonzero(passing)), chosen=False, left_out=left_out)
