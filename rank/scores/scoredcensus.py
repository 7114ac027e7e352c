"""The census with all its scores: shipped for few capacitors, else kept in the user's cache folder.

The file is built once, under a lock, and reused. Whatever is wrong with it, it is built again; where the
folder cannot be written, the census is kept in memory.
"""

from __future__ import annotations

import os
from dataclasses import dataclass, fields
from pathlib import Path
from typing import TYPE_CHECKING, Protocol

import numpy as np

from capmuster.catalogs import census_file
from capmuster.enumerate.census import check_reach
from capmuster.enumerate.skeletons import skeletons
from capmuster.enumerate.store import StoreError, open_census, write_census
from capmuster.enumerate.tally import Tally, triple_numbers
from capmuster.enumerate.threads import one_thread
from capmuster.rank.scores.cellscores import CellScores, concatenate, score_cells

if TYPE_CHECKING:
    from collections.abc import Callable

    from numpy.typing import NDArray

    from capmuster.enumerate.skeletons import SkeletonTable
    from capmuster.enumerate.store import CensusFile
    from capmuster.enumerate.tally import Triple

SHIPPED_REACH = 4
"""Most flying capacitors whose census comes with the package."""
CACHE_VARIABLE = "CAPMUSTER_CACHE"
"""Environment variable that names another cache folder."""
_STORED = tuple(field.name for field in fields(CellScores) if field.name != "clean")
_SKELETONS_AT_ONCE = 64


@dataclass(frozen=True, slots=True)
class Note:
    """What there is to say while a census is got ready.

    Attributes
    ----------
    text
        One line for people.
    done, total
        Skeletons done, and all of them; 0 and 0 where nothing is counted.
    """

    text: str
    done: int = 0
    total: int = 0


def silent(note: Note) -> None:
    """Say nothing."""
    del note


class _Source(Protocol):
    """Where the cells of a census come from."""

    @property
    def skeletons(self) -> SkeletonTable: ...

    @property
    def triples(self) -> tuple[Triple, ...]: ...

    def read(self, triple: Triple, *, clean_only: bool) -> CellScores: ...


class ScoredCensus:
    """Non-degenerate cells of exactly ``n`` capacitors, by triple, clean ones first."""

    def __init__(self, n: int, say: Callable[[Note], None]) -> None:
        self.n = n
        self._say = say
        self._source = _opened(n, say)

    @property
    def skeletons(self) -> SkeletonTable:
        """The skeletons that the cells refer to."""
        return self._source.skeletons

    @property
    def triples(self) -> tuple[Triple, ...]:
        """Triples that have cells, in order; (0, 1, 1) stands for unity cells."""
        return self._source.triples

    def cells(self, triple: Triple, *, clean_only: bool = False) -> CellScores:
        """Return the cells of a triple, clean ones first."""
        try:
            return self._source.read(triple, clean_only=clean_only)
        except StoreError as error:
            self._source = _rebuilt(self.n, error, self._say)
        return self._source.read(triple, clean_only=clean_only)


_CENSUSES: dict[tuple[int, Path], ScoredCensus] = {}


def scored_census(n: int, say: Callable[[Note], None] = silent) -> ScoredCensus:
    """Get the scored census of exactly ``n`` capacitors, building it if it must be.

    Parameters
    ----------
    n
        Number of flying capacitors, 1 to `CENSUS_REACH`.
    say
        Is told when the census is built, how far that is, and why a file is not used.

    Raises
    ------
    CapmusterError
        When ``n`` is beyond the reach of the census.
    """
    check_reach(n)
    key = (n, census_path(n))
    if key not in _CENSUSES:
        _CENSUSES[key] = ScoredCensus(n, say)
    return _CENSUSES[key]


def cache_folder() -> Path:
    """Folder in which large censuses are kept."""
    chosen = os.environ.get(CACHE_VARIABLE)
    if chosen:
        return Path(chosen)
    from platformdirs import user_cache_path  # noqa: PLC0415 -- only where a file is needed

    return user_cache_path("capmuster", appauthor=False)


def census_path(n: int) -> Path:
    """Where the census of ``n`` capacitors is kept."""
    return census_file(n) if n <= SHIPPED_REACH else cache_folder() / f"n{n}.census"


def write_scored_census(n: int, path: Path, say: Callable[[Note], None] = silent) -> None:
    """Build the scored census of ``n`` capacitors and write it to a file.

    The shipped files are written by this function, to `census_path`.

    Raises
    ------
    OSError
        When the file cannot be written.
    """
    _write(path, _in_memory(n, say))


def _opened(n: int, say: Callable[[Note], None]) -> _Source:
    path = census_path(n)
    try:
        return _FileSource(n, path)
    except StoreError as error:
        return _rebuilt(n, error if path.exists() else None, say)


def _rebuilt(n: int, reason: StoreError | None, say: Callable[[Note], None]) -> _Source:
    path = census_path(n)
    if reason is not None:
        say(Note(f"census file {path} is not used: {reason}"))
    if n <= SHIPPED_REACH:
        return _in_memory(n, silent)  # a blink
    from filelock import FileLock  # noqa: PLC0415 -- only where a file is written

    try:
        path.parent.mkdir(parents=True, exist_ok=True)
        with FileLock(path.with_suffix(".lock")):
            try:
                return _checked(n, path)  # someone else has built it meanwhile
            except StoreError:
                made = _in_memory(n, say)
            _write(path, made)
            return _FileSource(n, path)
    except (OSError, StoreError) as error:
        why = error.strerror if isinstance(error, OSError) and error.strerror else str(error)
        say(Note(f"census file {path} cannot be kept: {why}"))
        return _in_memory(n, say)


class _FileSource:
    """Cells in a census file."""

    def __init__(self, n: int, path: Path) -> None:
        self.file: CensusFile = open_census(path)
        self.skeletons = self.file.skeletons
        if self.file.n != n or tuple(name for name, _ in self.file.columns) != _STORED:
            raise StoreError("it holds another census")

    @property
    def triples(self) -> tuple[Triple, ...]:
        return tuple(self.file.blocks)

    def read(self, triple: Triple, *, clean_only: bool) -> CellScores:
        block = self.file.blocks.get(triple)
        if block is None:
            return CellScores.empty()
        columns = self.file.read(block, first_only=clean_only)
        count = block.first if clean_only else block.rows
        return CellScores.of(columns, clean=np.arange(count) < block.first)


def _checked(n: int, path: Path) -> _FileSource:
    """Open a census file and read all of it."""
    source = _FileSource(n, path)
    for triple in source.triples:
        source.read(triple, clean_only=False)
    return source


@dataclass(frozen=True, slots=True)
class _Group:
    triple: Triple
    rows: NDArray[np.intp]
    clean: int


@dataclass(frozen=True, slots=True)
class _MemorySource:
    """Cells in memory."""

    skeletons: SkeletonTable
    all_cells: CellScores
    groups: tuple[_Group, ...]

    @property
    def triples(self) -> tuple[Triple, ...]:
        return tuple(group.triple for group in self.groups)

    def read(self, triple: Triple, *, clean_only: bool) -> CellScores:
        for group in self.groups:
            if group.triple == triple:
                return self.all_cells.take(group.rows[: group.clean] if clean_only else group.rows)
        return CellScores.empty()


def _in_memory(n: int, say: Callable[[Note], None]) -> _MemorySource:
    table = skeletons(n)
    tally = Tally.empty(n)
    parts: list[CellScores] = []
    text = f"listing and scoring all cells of {n} flying capacitors"
    with one_thread():
        for start in range(0, len(table), _SKELETONS_AT_ONCE):
            say(Note(text, start, len(table)))
            parts += score_cells(table.take(slice(start, start + _SKELETONS_AT_ONCE)), start, tally)
    say(Note(text, len(table), len(table)))
    cells = concatenate(parts)
    return _MemorySource(table, cells, tuple(_grouped(cells)))


def _grouped(cells: CellScores) -> list[_Group]:
    """Group cells by triple, clean ones in front, else in their order."""
    triples, place = triple_numbers(cells.charge_b, cells.charge_c)
    order = np.argsort((2 * place + ~cells.clean).astype(np.int16), kind="stable")
    ends = np.cumsum(np.bincount(place, minlength=len(triples)))
    clean = np.bincount(place[cells.clean], minlength=len(triples))
    return [
        _Group(triple, rows, int(front))
        for triple, rows, front in zip(triples, np.split(order, ends[:-1]), clean, strict=True)
    ]


def _write(path: Path, made: _MemorySource) -> None:
    write_census(
        path,
        made.skeletons,
        {name: getattr(made.all_cells, name) for name in _STORED},
        [(group.triple, group.rows, group.clean) for group in made.groups],
        {"program": "capmuster"},
    )
