"""Time from the board brief to proven parts."""

from __future__ import annotations

import sys
import time

import pytest

from capmuster.rank.discrete.choose import choose_parts
from capmuster.rank.inputs.brief import load_brief

pytestmark = pytest.mark.benchmark


def test_parts_of_the_board_brief_in_a_few_seconds():
    brief = load_brief("pump-shelf")
    start = time.process_time()
    found = choose_parts(brief, brief.parts, top=3)
    spent = time.process_time() - start
    sys.stdout.write(f"{found.candidates} candidates, {found.searched} searched, {spent:.2f} s of one core\n")
    assert all(one.proven for one in found.finalists)
    assert spent < 5.0
