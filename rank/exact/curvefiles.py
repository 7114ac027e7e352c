"""A curve as files, by suffix."""

from __future__ import annotations

from typing import TYPE_CHECKING

from capmuster.enumerate.errors import CapmusterError
from capmuster.rank.exact.curve import HEADER
from capmuster.rank.exact.curvepicture import SUFFIXES as PICTURES
from capmuster.rank.exact.curvepicture import picture
from capmuster.rank.files.export import check_writable, write_all
from capmuster.rank.files.rows import csv_text

if TYPE_CHECKING:
    from collections.abc import Sequence
    from pathlib import Path

    from capmuster.rank.exact.curve import Curve

SUFFIXES = (".csv", *PICTURES)


def check_targets(paths: Sequence[Path]) -> None:
    """Refuse files that cannot be written, before any work.

    Parameters
    ----------
    paths
        The files.

    Raises
    ------
    CapmusterError
        A suffix is unknown, or a folder does not exist.
    """
    for path in paths:
        if path.suffix.lower() not in SUFFIXES:
            raise CapmusterError(f"to: '{path}' has the suffix '{path.suffix}'", accepted=", ".join(SUFFIXES))
        check_writable(path)


def write(curve: Curve, paths: Sequence[Path]) -> None:
    """Write a curve to files, each in the format of its suffix; all are rendered before the first appears.

    Parameters
    ----------
    curve
        The curve.
    paths
        The files.
    """
    contents = [
        to_csv(curve) if path.suffix.lower() == ".csv" else picture(curve, path.suffix.lower())
        for path in paths
    ]
    write_all(paths, contents)


def to_csv(curve: Curve) -> bytes:
    """Write both sweeps as comma-separated values.

    Parameters
    ----------
    curve
        The curve.

    Returns
    -------
    bytes
        UTF-8.
    """
    return csv_text(HEADER, curve.rows()).encode()
