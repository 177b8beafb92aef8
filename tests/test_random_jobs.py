"""Random cycles of mixed steps keep every limit; thousands more are run by hand."""

from __future__ import annotations

import importlib.util
from pathlib import Path

import pytest

SOURCE = Path(__file__).parent / "bench" / "random_jobs.py"
SPEC = importlib.util.spec_from_file_location("random_jobs", SOURCE)
assert SPEC is not None
assert SPEC.loader is not None
random_jobs = importlib.util.module_from_spec(SPEC)
SPEC.loader.exec_module(random_jobs)

BATCH = 40


@pytest.mark.parametrize("first", range(0, 400, BATCH))
def test_no_random_cycle_breaks_a_limit(first: int) -> None:
    """Neither the plan nor the differences of its table, and nothing is raised."""
    faults = {seed: random_jobs.faults(seed) for seed in range(first, first + BATCH)}
    assert not {seed: found for seed, found in faults.items() if found}
