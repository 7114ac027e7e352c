"""Drawings as files."""

from __future__ import annotations

import os
from pathlib import Path
from tempfile import NamedTemporaryFile
from typing import TYPE_CHECKING

from capmuster.enumerate.errors import CapmusterError
from capmuster.rank.drawing.printed import printed
from capmuster.rank.drawing.svg import svg

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


def write_drawings(drawing: Drawing, targets: Sequence[str | Path]) -> None:
    """Write a drawing to files, in the format of each one's suffix: all of them or none.

    Raises
    ------
    CapmusterError
        A suffix is unknown, or a file cannot be written.
    """
    contents = [drawing_bytes(drawing, suffix) for suffix in [check_suffix(target) for target in targets]]
    written: list[tuple[Path, Path]] = []
    try:
        for target, content in zip(map(Path, targets), contents, strict=True):
            with NamedTemporaryFile(dir=target.parent, prefix=".capmuster-", delete=False) as file:
                written.append((Path(file.name), target))
                file.write(content)
        for temporary, target in written:
            _share(temporary)
            temporary.replace(target)
    except OSError as error:
        raise CapmusterError(
            f"drawing: cannot write '{error.filename}': {error.strerror}",
            accepted="a path that can be written",
        ) from None
    finally:
        for temporary, _ in written:
            temporary.unlink(missing_ok=True)


def _share(path: Path) -> None:
    """Give a temporary file, which only its owner may read, the permissions of a new file."""
    mask = os.umask(0)
    os.umask(mask)
    path.chmod(0o666 & ~mask)
