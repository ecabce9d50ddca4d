"""Whatever goes in, a run ends in a result that passes the checks or in a sentence: no crash, traceback or hang.

`DOWNWARP_FUZZ_CASES` sets the number of cases (2000), `DOWNWARP_FUZZ_SEED` the seed.
"""

import importlib.util
import os

import pytest

if importlib.util.find_spec("qgis") is None:
    pytest.skip("needs QGIS", allow_module_level=True)

from campaign import LIMIT_S, SEED, campaign
from kills import kills

CASES = int(os.environ.get("DOWNWARP_FUZZ_CASES", "2000"))
KILLS = int(os.environ.get("DOWNWARP_FUZZ_KILLS", "20"))


def test_every_run_ends_in_a_result_or_a_sentence():
    """Two thousand seeded cases; a good part of them is meant to give results, and the checks see these."""
    seed = int(os.environ.get("DOWNWARP_FUZZ_SEED", SEED))
    summary = campaign(CASES, seed, processes=max(1, os.cpu_count() or 1))
    assert not summary.faults, summary.words()
    assert sum(summary.outcomes.values()) == CASES
    assert summary.slowest < LIMIT_S
    assert summary.outcomes["result"] > 0.2 * CASES, summary.words()
    assert summary.outcomes["refused"] > 0.2 * CASES, summary.words()


def test_killed_runs_leave_the_files_of_the_run_before():
    """After each kill every file holds the rows that it held, or all of those that the run was to write."""
    died, writing, faults = kills(KILLS, seed=int(os.environ.get("DOWNWARP_FUZZ_SEED", "1")))
    assert not faults, faults
    assert died >= 0.5 * KILLS
    assert writing > 0, "not one was killed as it wrote"
