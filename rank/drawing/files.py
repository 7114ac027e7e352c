"""Drawings as files."""

from __future__ import annotations

from pathlib import Path
from typing import TYPE_CHECKING

from capmuster.enumerate.errors import CapmusterError
from capmuster.rank.drawing.printed import printed
from capmuster.rank.drawing.svg import svg
from capmuster.rank.files.export import check_writable, write_all

if TYPE_CHECKING:
    from collections.abc import Sequence

    from capmuster.rank.drawing.shapes import Drawing

SUFFIXES = (".svg", ".png", ".pdf")
"""Suffixes of the files that a drawing can be written to."""


def check_suffix(path: str | Path) -> str:
    """Return the path's suffix in lower case.

    Raises
    ------
    CapmusterError
        The suffix is none of `SUFFIXES`.
    """
    suffix = Path(path).suffix.lower()
    if suffix not in SUFFIXES:
        raise CapmusterError(
            f"drawing: '{path}' has {f'the suffix {suffix!r}' if suffix else 'no suffix'}",
            accepted=", ".join(SUFFIXES),
        )
    return suffix


def drawing_bytes(drawing: Drawing, suffix: str) -> bytes:
    """Return the content of a drawing's file.

    Parameters
    ----------
    drawing
        The drawing.
    suffix
        One of `SUFFIXES`.
    """
    if suffix == ".svg":
        return svg(drawing).encode()
    return printed(drawing, "png" if suffix == ".png" else "pdf")


def check_targets(targets: Sequence[str | Path]) -> None:
    """Refuse files that a drawing cannot be written to, before any work is done.

    Raises
    ------
    CapmusterError
        A suffix is unknown, a file is named twice, or its folder cannot be written.
    """
    for target in targets:
        check_suffix(target)
        check_writable(Path(target))
    places = [Path(target).resolve() for target in targets]
    for target, place in zip(targets, places, strict=True):
        if places.count(place) > 1:
            raise CapmusterError(f"drawing: '{target}' is named twice", accepted="each file once")


def write_drawings(drawing: Drawing, targets: Sequence[str | Path]) -> None:
    """Write a drawing to files, each in the format of its suffix: all of them or none.

    Raises
    ------
    CapmusterError
        As in `check_targets`.
    """
    check_targets(targets)
    contents = [drawing_bytes(drawing, check_suffix(target)) for target in targets]
    write_all([Path(target) for target in targets], contents)
