"""A stack whose channels were exchanged, and stacks that show no track in either."""

from __future__ import annotations

import re
from dataclasses import replace

import phantom
import pytest

from leadline.tracing.channels import doubts
from leadline.tracing.find import trace

SMALL = phantom.Conditions(size_um=(3600.0, 3800.0, 3600.0), singles=2, vessels=8, pools=2, bubbles=2)


@pytest.mark.parametrize("seed", [61, 62])
def test_exchanged_channels_are_said_with_what_was_seen(seed):
    made = phantom.make(seed, SMALL)
    dye, background = made.background, made.dye
    assert trace(dye, background) == ()
    (sentence,) = doubts(dye, background)
    assert re.search(r"the background channel 2 \(the longest \d{4} um\): are dye and background exchanged\?", sentence)


def test_a_stack_without_dye_is_not_taken_for_an_exchanged_one():
    made = phantom.make(63, replace(SMALL, singles=0))
    assert trace(made.dye, made.background) == ()
    assert doubts(made.dye, made.background) == ()
