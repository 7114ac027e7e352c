"""The command as a user starts it: a process of its own."""

from __future__ import annotations

import os
import subprocess
import sys
from pathlib import Path

PACKAGE = Path(__file__).parents[1] / ".pkg"
START = (sys.executable, "-c", "from capmuster.rank.cli import main; main()")


def environment() -> dict[str, str]:
    """Return the surroundings in which the package is found, installed or not."""
    return {**os.environ, "PYTHONPATH": str(PACKAGE), "PYTHONIOENCODING": "utf-8", "OMP_NUM_THREADS": "1"}


def run(*arguments: str, cwd: Path | None = None) -> subprocess.CompletedProcess[str]:
    """Run ``capmuster`` with some arguments to its end."""
    return subprocess.run(
        [*START, *arguments],
        cwd=cwd,
        env=environment(),
        capture_output=True,
        encoding="utf-8",
        timeout=120,
        check=False,
    )
