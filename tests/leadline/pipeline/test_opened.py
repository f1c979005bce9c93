"""The Python door."""

import subprocess
import sys

import pandas as pd
import pytest
from tests.finished_brain import track, write_finished_brain

import leadline
from leadline.base.errors import LeadlineError


@pytest.fixture(scope="module")
def brain(tmp_path_factory):
    return write_finished_brain(tmp_path_factory.mktemp("opened"))


def test_results_are_the_tables_and_frozen_values(brain):
    found = leadline.open_brain(brain.folder).run()
    pd.testing.assert_frame_equal(found.channels, pd.read_parquet(brain.out / "channels.parquet"))
    assert set(found.posterior) == {"penetration", "channel", "region_id", "region", "probability"}
    assert found.tracks[0].length_um == pytest.approx(track().length_um, abs=0.1)
    assert found.depth_maps[0].depth_um.shape == (100, 32)
    assert found.registration.error_um == 30.0
    assert list(found.profiles) == ["A"]
    assert [a.note for a in found.anchors] == ["white matter, upper edge"]
    assert [s.anchor.landmark for s in found.suggestions] == ["CA1 pyramidal layer"]
    with pytest.raises(AttributeError):
        found.warnings = ()


def test_units_and_atlas_are_at_hand(brain):
    opened = leadline.open_brain(str(brain.file))
    assert len(opened.units()) == 12
    assert opened.atlas.name == "Tiny atlas"


def test_check_tells_all_that_is_wrong(tmp_path):
    brain = write_finished_brain(tmp_path)
    (tmp_path / "a_lfp.bin").write_bytes(b"")
    (tmp_path / "a_spikes.csv").write_text("time_s\n1\n")
    (tmp_path / "a_units.csv").write_text("unit,tag\n1,a\n")
    with pytest.raises(LeadlineError, match="is empty") as told:
        leadline.open_brain(brain.file).check()
    assert "column 'unit_id' is missing" in str(told.value)


def test_importing_leadline_is_light():
    code = "import sys, leadline; print([m for m in ('numpy', 'pandas', 'scipy', 'matplotlib') if m in sys.modules])"
    said = subprocess.run([sys.executable, "-c", code], capture_output=True, text=True, check=True).stdout
    assert said.strip() == "[]"
