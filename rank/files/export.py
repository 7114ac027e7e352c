"""A shortlist as a file: CSV, HTML, XLSX, Markdown, JSON or Parquet, by suffix.

Every file carries the program's version and the fingerprints of technology and brief, and holds the same
bytes for the same input. All files of a call are rendered before the first one appears.
"""

from __future__ import annotations

import os
import tempfile
from importlib import import_module
from pathlib import Path
from typing import TYPE_CHECKING

from capmuster.enumerate.errors import CapmusterError

if TYPE_CHECKING:
    from collections.abc import Callable, Sequence

    from capmuster.rank.shortlist import Shortlist

_RENDERERS = {
    ".csv": "capmuster.rank.files.export_text:to_csv",
    ".html": "capmuster.rank.page.shortlisted:to_page",
    ".json": "capmuster.rank.files.export_text:to_json",
    ".md": "capmuster.rank.files.export_text:to_markdown",
    ".parquet": "capmuster.rank.files.export_parquet:to_parquet",
    ".xlsx": "capmuster.rank.files.export_workbook:to_workbook",
}
SUFFIXES = tuple(_RENDERERS)
"""Kinds of file that a shortlist can be written to."""


def export(shortlist: Shortlist, paths: Sequence[str | Path]) -> None:
    """Write a shortlist to files, each in the format of its suffix.

    Raises
    ------
    CapmusterError
        When a suffix is unknown, a path is named twice or cannot be written, or a format's package is
        missing. Then no file is touched.
    """
    renderers = check_targets(paths)
    contents = [render(shortlist) for render in renderers]
    write_all([Path(path) for path in paths], contents)


def check_targets(paths: Sequence[str | Path]) -> list[Callable[[Shortlist], bytes]]:
    """Find the renderer of every path, before any work is done.

    Raises
    ------
    CapmusterError
        As in `export`.
    """
    renderers = []
    seen: set[Path] = set()
    for path in map(Path, paths):
        suffix = path.suffix.lower()
        if suffix not in _RENDERERS:
            has = f"the unknown suffix '{path.suffix}'" if suffix else "no suffix"
            raise CapmusterError(f"to: '{path}' has {has}", accepted=", ".join(SUFFIXES))
        if path.resolve() in seen:
            raise CapmusterError(f"to: '{path}' is named twice", accepted="each file once")
        seen.add(path.resolve())
        check_writable(path)
        module, name = _RENDERERS[suffix].split(":")
        renderers.append(getattr(import_module(module), name))
    return renderers


def check_writable(path: Path) -> None:
    """Refuse a path that no file can be written to.

    Raises
    ------
    CapmusterError
        When its folder does not exist or cannot be written, or it is a folder or write-protected.
    """
    if path.is_dir():
        raise CapmusterError(f"to: '{path}' is a folder", accepted="a file name")
    if not path.parent.is_dir():
        raise CapmusterError(
            f"to: folder '{path.parent}' does not exist", accepted="a file in a folder that exists"
        )
    if not os.access(path.parent, os.W_OK):
        raise CapmusterError(
            f"to: folder '{path.parent}' cannot be written", accepted="a folder that can be written"
        )
    if path.exists() and not os.access(path, os.W_OK):
        raise CapmusterError(f"to: '{path}' is write-protected", accepted="a file that may be replaced")


def write_all(paths: Sequence[Path], contents: Sequence[bytes]) -> None:
    """Write files so that each is either all there or untouched, and none changes before all are on the disk.

    Raises
    ------
    CapmusterError
        When the disk is full or a folder has gone.
    """
    staged: list[tuple[Path, Path]] = []
    try:
        for path, content in zip(paths, contents, strict=True):
            staged.append((_staged(path, content), path.resolve()))
        for temporary, target in staged:
            temporary.replace(target)
    except OSError as error:
        raise CapmusterError(f"to: {error.strerror}", accepted="a place with room to write") from None
    finally:
        for temporary, _ in staged:
            temporary.unlink(missing_ok=True)


def _staged(path: Path, content: bytes) -> Path:
    """Write a file beside its target, under a name of its own."""
    handle, name = tempfile.mkstemp(dir=path.resolve().parent, prefix=f".{path.name}.")
    temporary = Path(name)
    try:
        with os.fdopen(handle, "wb") as file:
            file.write(content)
            file.flush()
            os.fsync(file.fileno())
        mask = os.umask(0)
        os.umask(mask)
        temporary.chmod(0o666 & ~mask)
    except BaseException:
        temporary.unlink(missing_ok=True)
        raise
    return temporary
