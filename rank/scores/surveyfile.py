"""What a survey found, whole or in part, and its files: JSON behind a line with its own checksum."""

from __future__ import annotations

import hashlib
import json
from dataclasses import dataclass, fields
from typing import TYPE_CHECKING, Any

import numpy as np

from capmuster.enumerate.store import write_whole
from capmuster.enumerate.tally import Tally
from capmuster.rank.scores.cellscores import CellScores
from capmuster.rank.scores.keeping import Kept

if TYPE_CHECKING:
    from pathlib import Path

    from capmuster.enumerate.tally import Triple

_VERSION = 1
_COLUMNS = tuple(field.name for field in fields(CellScores) if field.name != "clean")


@dataclass(frozen=True, slots=True)
class Numbers:
    """How many non-degenerate cells a triple has.

    Attributes
    ----------
    cells, clean
        All of them, and those without an idle or an equipotential switch.
    mirrored, mirrored_clean
        Those of them whose symmetries exchange two ports: two roles of such a cell are one converter.
    """

    cells: int
    clean: int
    mirrored: int
    mirrored_clean: int

    def __add__(self, other: Numbers) -> Numbers:
        """Add up."""
        return Numbers(*(getattr(self, name) + getattr(other, name) for name in self.__slots__))


@dataclass(frozen=True, slots=True)
class Part:
    """What one shard, or several, found.

    Attributes
    ----------
    tally
        All cells, counted.
    numbers
        Non-degenerate cells per triple.
    kept
        The cells worth keeping per triple.
    """

    tally: Tally
    numbers: dict[Triple, Numbers]
    kept: dict[Triple, Kept]


def write_part(path: Path, part: Part) -> None:
    """Write a part to a file: completely, or not at all.

    Raises
    ------
    OSError
        When the file cannot be written.
    """
    tally = part.tally
    used = np.flatnonzero(tally.held | tally.degenerate | tally.labelled)
    content = {
        "version": _VERSION,
        "n": tally.n,
        "tally": np.stack([used, tally.held[used], tally.degenerate[used], tally.labelled[used]]).tolist(),
        "numbers": [
            [*triple, *(getattr(one, name) for name in Numbers.__slots__)]
            for triple, one in part.numbers.items()
        ],
        "columns": [*_COLUMNS, "unit", "best", "unbeaten"],
        "kept": [[list(triple), _rows(kept)] for triple, kept in part.kept.items()],
    }
    text = json.dumps(content, separators=(",", ":")).encode()
    write_whole(path, [_checksum(text), b"\n", text])


def read_part(path: Path, n: int) -> Part | None:
    """Read a part of a survey of ``n`` capacitors; None without such a file, or if it is not sound."""
    try:
        checksum, _, text = path.read_bytes().partition(b"\n")
        if checksum != _checksum(text):
            return None
        content: Any = json.loads(text)
        if (content["version"], content["n"]) != (_VERSION, n):
            return None
        tally = Tally.empty(n)
        used, held, degenerate, labelled = np.array(content["tally"], dtype=np.int64)
        tally.held[used], tally.degenerate[used], tally.labelled[used] = held, degenerate, labelled
        return Part(
            tally,
            {(a, b, c): Numbers(*counts) for a, b, c, *counts in content["numbers"]},
            {(a, b, c): _kept(rows) for (a, b, c), rows in content["kept"]},
        )
    except (OSError, ValueError, KeyError, TypeError):
        return None


def remove_parts(folder: Path) -> None:
    """Remove a folder of parts, as far as that can be done."""
    for path in sorted(folder.glob("*.json")):
        path.unlink(missing_ok=True)
    folder.rmdir()


def _rows(kept: Kept) -> list[list[int]]:
    columns = [getattr(kept.cells, name) for name in _COLUMNS]
    columns += [kept.unit, kept.best, kept.unbeaten]
    rows: list[list[int]] = np.stack([column.astype(np.int64) for column in columns], axis=1).tolist()
    return rows


def _kept(rows: list[list[int]]) -> Kept:
    values = np.array(rows, dtype=np.int64).reshape(len(rows), len(_COLUMNS) + 3)
    cells = CellScores.of(dict(zip(_COLUMNS, values.T, strict=False)), clean=np.ones(len(rows), dtype=bool))
    return Kept(cells, values[:, -3], values[:, -2] > 0, values[:, -1] > 0)


def _checksum(text: bytes) -> bytes:
    return hashlib.blake2b(text, digest_size=16).hexdigest().encode()
