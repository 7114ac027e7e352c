"""Shipped data: technologies, catalogs of parts, example briefs and small censuses."""

from __future__ import annotations

from pathlib import Path
from typing import Literal

Shelf = Literal["technologies", "parts", "briefs"]
"""A folder of shipped files: CSV for parts, TOML for the others."""

_ROOM = Path(__file__).parent


def names(shelf: Shelf) -> tuple[str, ...]:
    """Names of the files on a shelf, without suffix, sorted."""
    return tuple(sorted(path.stem for path in (_ROOM / shelf).glob(f"*{_suffix(shelf)}")))


def find(shelf: Shelf, name: str) -> Path | None:
    """Path of the shipped file with this name, or None if there is none."""
    return _ROOM / shelf / f"{name}{_suffix(shelf)}" if name in names(shelf) else None


def census_file(n: int) -> Path:
    """Path of the shipped census of ``n`` flying capacitors."""
    return _ROOM / "census" / f"n{n}.census"


def _suffix(shelf: Shelf) -> str:
    return ".csv" if shelf == "parts" else ".toml"
