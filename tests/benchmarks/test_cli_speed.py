"""How long a user waits: processor time of the command, which on an idle machine is the time on the clock."""

from __future__ import annotations

import resource

import pytest
from command import run

pytestmark = pytest.mark.benchmark


def taken(*arguments):
    """Processor time of one run [s], and what it printed."""
    before = resource.getrusage(resource.RUSAGE_CHILDREN)
    ended = run(*arguments)
    after = resource.getrusage(resource.RUSAGE_CHILDREN)
    assert ended.returncode == 0, ended.stderr
    return after.ru_utime - before.ru_utime + after.ru_stime - before.ru_stime, ended.stdout


def test_help_takes_less_than_0_3_s():
    assert min(taken("--help")[0] for _ in range(5)) < 0.3


@pytest.mark.parametrize("brief", ["greenhouse-node", "greenhouse-node-regulated", "pump-shelf"])
def test_a_shipped_brief_takes_less_than_5_s_from_command_to_shortlist(brief):
    runs = [taken("rank", brief) for _ in range(2)]
    assert min(seconds for seconds, _ in runs) < 5.0
    assert all("place" in out for _, out in runs)
