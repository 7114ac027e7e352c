"""What all tests share: programs from outside, and property tests that are the same on every run."""

from __future__ import annotations

import os
import shutil
from typing import TYPE_CHECKING

import pytest
from hypothesis import HealthCheck, settings

if TYPE_CHECKING:
    from collections.abc import Iterator
    from pathlib import Path

# Derandomised: the same examples each time. No deadline: machines differ, and speed has its own tests.
settings.register_profile(
    "capmuster",
    derandomize=True,
    deadline=None,
    database=None,
    suppress_health_check=[HealthCheck.too_slow],
)
settings.load_profile("capmuster")


def find_program(names: tuple[str, ...], package: str) -> str:
    """Path of a program; without it the test is skipped, or fails where every program must be there."""
    for name in names:
        path = shutil.which(name)
        if path:
            return path
    message = f"{names[0]} is not installed; on Debian: apt-get install {package}"
    if os.environ.get("CAPMUSTER_REQUIRE_PROGRAMS") == "1":
        pytest.fail(message)
    pytest.skip(message)


@pytest.fixture(scope="session", autouse=True)
def cache_folder(tmp_path_factory: pytest.TempPathFactory) -> Iterator[Path]:
    """Keep large censuses of all tests in one folder of their own, never in the user's."""
    folder = tmp_path_factory.mktemp("cache")
    with pytest.MonkeyPatch.context() as patch:
        patch.setenv("CAPMUSTER_CACHE", str(folder))
        yield folder


@pytest.fixture(scope="session")
def ngspice() -> str:
    """Path of the circuit simulator."""
    return find_program(("ngspice",), "ngspice")


@pytest.fixture(scope="session")
def chromium() -> str:
    """Path of a browser that runs without a screen."""
    return find_program(("chromium", "chromium-browser"), "chromium")
