"""Short forms of the kill test and of the soak; ``python -m tests.faults`` has the long ones."""

from __future__ import annotations

from pathlib import Path

import numpy as np
import pytest

from tests.faults.kills import kill_many
from tests.faults.soak import Soak, has_grown, soak


@pytest.mark.slow
def test_a_killed_hunt_harms_nothing(tmp_path: Path):
    tally = kill_many(tmp_path, 16)
    assert tally.faults == []
    assert tally.kills == 16
    assert tally.outcomes["finished before the kill"] < 8


@pytest.mark.slow
def test_thirty_hunts_in_one_process_leave_no_more_than_the_first(tmp_path: Path):
    found = soak(tmp_path, 30)
    assert not has_grown(found), found


def test_the_soak_sees_what_grows():
    steady = np.full(40, 500_000_000)
    level, leak = np.full(40, 9), np.arange(40)
    assert not has_grown(Soak(steady, level, level))
    assert has_grown(Soak(steady + 200_000 * leak, level, level))
    assert has_grown(Soak(steady, level + leak, level))
    assert has_grown(Soak(steady, level, level + leak))
