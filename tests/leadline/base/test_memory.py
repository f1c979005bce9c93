import sys
from pathlib import Path

import numpy as np
import pytest

from leadline.base.memory import give_back


def resident_mb():
    return next(int(x.split()[1]) for x in Path("/proc/self/status").read_text().splitlines() if "VmRSS" in x) / 1024


@pytest.mark.skipif(sys.platform != "linux", reason="the memory held is read from /proc")
def test_what_was_freed_goes_back():
    # small blocks, every other one kept until the end: the heap cannot shrink by itself
    blocks = [np.ones(2000) for _ in range(20_000)]
    kept = blocks[-1]
    before = resident_mb()
    del blocks
    give_back()
    assert resident_mb() < before - 200
    assert kept[0] == 1.0
