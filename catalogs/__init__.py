"""Shipped data: technologies and example briefs, found by name."""

from __future__ import annotations

from pathlib import Path
from typing import Literal

Shelf = Literal["technologies", "briefs"]
"""A folder of shipped TOML files."""

_ROOM = Path(__file__).parent


def names(shelf: Shelf) -> tuple[str, ...]:
    """Names of the files on a shelf, without suffix, sorted."""
    return tuple(sorted(path.stem for path in (_ROOM / shelf).glob("*.toml")))


def find(shelf: Shelf, name: str) -> Path | None:
    """Path of the shipped file with this name, or None if there is none."""
    return _ROOM / shelf / f"{name}.toml" if name in names(shelf) else None
