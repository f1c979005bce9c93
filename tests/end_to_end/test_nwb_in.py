"""A recording inside NWB gives the same channel table as the same recording in flat files, to the last byte."""

from pathlib import Path

import pytest
from tests.good_brain import write_good_brain
from tests.made_nwb import write_nwb

from leadline.io.brainfile import read_brain
from leadline.pipeline.run import run


def channels_of(folder: Path, *, in_nwb: bool) -> bytes:
    toml = write_good_brain(folder)
    if in_nwb:
        write_nwb(folder)
        text = toml.read_text()
        start, stop = text.index("  lfp ="), text.index("[[anchor]]")
        session = 'lfp = "session.nwb"\nspikes = "a_spikes.csv"\nevents = "session.nwb"\nexclude = "session.nwb"\n\n'
        toml.write_text(text[:start] + session + text[stop:])
    brain = read_brain(toml)
    run(brain)
    return (brain.out / "channels.csv").read_bytes()


@pytest.mark.slow
def test_nwb_and_flat_files_give_the_same_table(tmp_path):
    assert channels_of(tmp_path / "nwb", in_nwb=True) == channels_of(tmp_path / "flat", in_nwb=False)
