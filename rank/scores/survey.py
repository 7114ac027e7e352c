"""A streamed pass over every cell of n capacitors: counts, the best and the frontier of each ratio.

Nothing but what is kept of each triple is ever held. Finished shards are filed, so that an interrupted
survey goes on where it stopped, and the finished survey answers at once.
"""

from __future__ import annotations

from dataclasses import dataclass
from functools import partial
from typing import TYPE_CHECKING

import numpy as np

from capmuster.enumerate.census import check_reach
from capmuster.enumerate.certificate import COUNT_REACH, certificate_of
from capmuster.enumerate.converters import ratios_of_triple, triple_of_ratio
from capmuster.enumerate.errors import CapmusterError
from capmuster.enumerate.laws import laws
from capmuster.enumerate.skeletons import skeletons
from capmuster.enumerate.tally import Tally, triple_numbers
from capmuster.rank.scores.candidates import candidates_of
from capmuster.rank.scores.cellscores import CellScores, score_cells
from capmuster.rank.scores.keeping import Keeper
from capmuster.rank.scores.scoredcensus import Note, cache_folder, silent
from capmuster.rank.scores.shards import run_shards
from capmuster.rank.scores.surveyfile import Numbers, Part, read_part, remove_parts, write_part

if TYPE_CHECKING:
    from collections.abc import Callable, Mapping
    from fractions import Fraction
    from pathlib import Path

    from capmuster.enumerate.certificate import Certificate
    from capmuster.enumerate.tally import Triple
    from capmuster.rank.scores.candidates import CensusCandidates
    from capmuster.rank.scores.keeping import Kept, Score
    from capmuster.rank.scores.shards import Shard

MOST_KEPT = 1000
"""Most of the best that a survey keeps per triple."""


@dataclass(frozen=True, slots=True)
class Survey:
    """All converters of exactly ``n`` flying capacitors, in numbers, and the best of each ratio.

    Attributes
    ----------
    n
        Number of flying capacitors.
    keep, by
        How many of the best cells are kept per triple, and what they are best in.
    numbers
        How many cells each triple has.
    kept
        What is kept of each triple.
    certificate
        The listed cells held against the counts that list nothing.
    """

    n: int
    keep: int
    by: Score
    numbers: Mapping[Triple, Numbers]
    kept: Mapping[Triple, Kept]
    certificate: Certificate

    @property
    def ratios(self) -> tuple[Fraction, ...]:
        """Every ratio that some cell reaches, ascending."""
        return tuple(sorted(ratio for triple in self.numbers for ratio in ratios_of_triple(triple)))

    def counts(self, ratio: Fraction) -> tuple[int, int]:
        """Count the clean, and all non-degenerate, converters of a ratio."""
        triple = triple_of_ratio(ratio)
        if triple not in self.numbers:
            return 0, 0
        one = self.numbers[triple]
        if triple[0] != triple[1] and triple[0]:
            return one.clean, one.cells
        # Two of the port charges are alike, so either port can take either role.
        return 2 * one.clean - one.mirrored_clean, 2 * one.cells - one.mirrored

    def best(self, ratio: Fraction) -> CensusCandidates:
        """Return the converters of a ratio that are among the best."""
        return self._candidates(ratio, "best")

    def frontier(self, ratio: Fraction) -> CensusCandidates:
        """Return the converters of a ratio that no other of as many capacitors beats."""
        return self._candidates(ratio, "unbeaten")

    def _candidates(self, ratio: Fraction, which: str) -> CensusCandidates:
        kept = self.kept.get(triple_of_ratio(ratio))
        cells = kept.cells.take(getattr(kept, which)) if kept is not None else CellScores.empty()
        table = skeletons(self.n)
        used, row = np.unique(cells.skeleton, return_inverse=True)
        return candidates_of(cells.renumbered(row.reshape(-1)), table.take(used.astype(np.intp)), ratio)


def survey(
    n: int,
    *,
    keep: int = 10,
    by: Score = "product",
    jobs: int | None = None,
    say: Callable[[Note], None] = silent,
) -> Survey:
    """Go through every cell of exactly ``n`` flying capacitors.

    Work is split over ``jobs`` processes of the active joblib backend (``joblib.parallel_config``). Finished
    shards are kept in the cache folder until the survey is complete, and the survey after that.

    Parameters
    ----------
    n
        Number of flying capacitors, 1 to 6.
    keep
        How many of the best cells to keep per triple of port charges.
    by
        What the best are best in: "product" of both utilisations, "capacitor" or "switch" utilisation.
    jobs
        Processes; None for the backend's own number.
    say
        Is told how far it is.

    Raises
    ------
    CapmusterError
        When ``n`` is beyond reach or ``keep`` out of range.
    """
    check_reach(n, COUNT_REACH)
    if not 0 <= keep <= MOST_KEPT:
        raise CapmusterError(f"keep: {keep} is out of range", accepted=f"0 to {MOST_KEPT}")
    if by not in ("product", "capacitor", "switch"):
        raise CapmusterError(f"by: '{by}' is unknown", accepted="product, capacitor, switch")
    return _finished(n, keep, by, _whole(n, keep, by, jobs=jobs, say=say))


def _finished(n: int, keep: int, by: Score, part: Part) -> Survey:
    return Survey(n, keep, by, part.numbers, part.kept, certificate_of(part.tally))


def _whole(n: int, keep: int, by: Score, *, jobs: int | None, say: Callable[[Note], None]) -> Part:
    from filelock import FileLock  # noqa: PLC0415 -- only where files are written

    folder = cache_folder()
    name = f"survey-n{n}-{by}-{keep}"
    complete = folder / f"{name}.json"
    filed = read_part(complete, n)
    if filed is not None:
        return filed
    try:
        folder.mkdir(parents=True, exist_ok=True)
        with FileLock(folder / f"{name}.lock"):
            filed = read_part(complete, n)
            if filed is None:
                filed = _collected(n, keep, by, jobs=jobs, say=say, folder=folder / name)
                write_part(complete, filed)
                remove_parts(folder / name)
            return filed
    except OSError as error:
        say(Note(f"nothing can be kept in {folder}: {error.strerror or error}"))
        return _collected(n, keep, by, jobs=jobs, say=say, folder=None)


def _collected(
    n: int, keep: int, by: Score, *, jobs: int | None, say: Callable[[Note], None], folder: Path | None
) -> Part:
    """Collect all shards, those that are filed and those that still have to run."""
    tally, keeper = Tally.empty(n), Keeper(keep, by)
    numbers: dict[Triple, Numbers] = {}

    def take(part: Part) -> None:
        tally.merge(part.tally)
        for triple, one in part.numbers.items():
            numbers[triple] = numbers[triple] + one if triple in numbers else one
        keeper.merge(part.kept.items())

    filed: set[int] = set()
    for path in sorted(folder.glob("*.json")) if folder is not None else ():
        part = read_part(path, n)
        if part is not None and path.stem.isdecimal():
            filed.add(int(path.stem))
            take(part)
    text = f"surveying all cells of {n} flying capacitors"
    task = partial(_survey_shard, keep=keep, by=by)
    for number, part in run_shards(n, task, text, jobs=jobs, say=say, skip=filed):
        if folder is not None:
            write_part(folder / f"{number:04d}.json", part)
        take(part)
    return Part(tally, dict(sorted(numbers.items())), keeper.result())


def _survey_shard(shard: Shard, *, keep: int, by: Score) -> Part:
    tally, keeper = Tally.empty(shard.table.n), Keeper(keep, by)
    unit = laws(shard.table).determinant.astype(np.int64)
    numbers: dict[Triple, Numbers] = {}
    for cells in score_cells(shard.table, shard.first, tally):
        triples, place = triple_numbers(cells.charge_b, cells.charge_c)
        mirrored = cells.mirror > 0
        counted = [
            np.bincount(place[rows], minlength=len(triples)).tolist()
            for rows in (slice(None), cells.clean, mirrored, mirrored & cells.clean)
        ]
        for triple, *found in zip(triples, *counted, strict=True):
            one = Numbers(*found)
            numbers[triple] = numbers[triple] + one if triple in numbers else one
        clean = cells.take(cells.clean)
        keeper.add(clean, unit[clean.skeleton - shard.first])
    return Part(tally, numbers, keeper.result())
