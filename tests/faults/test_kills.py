"""A small share of the kills that ``make faults`` does: nothing half, nothing lost, the same tables to the byte."""

import pytest
from tests.faults.__main__ import kill
from tests.faults.scenes import SCENES

SHARE = {"run": 2, "rerun": 3, "accept": 6, "edits": 6}


@pytest.mark.slow
@pytest.mark.parametrize("name", SHARE)
def test_a_kill_at_any_moment_leaves_nothing_half_and_loses_nothing(tmp_path, name):
    SCENES[name].prepare(tmp_path)
    assert kill(SCENES[name], SHARE[name], seed=2) == []
