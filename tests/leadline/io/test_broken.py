import shutil

import pytest
from tests.good_brain import write_good_brain
from tests.leadline.io.broken_cases import BROKEN

from leadline.base.errors import LeadlineError
from leadline.io.brainfile import read_brain
from leadline.pipeline.bench import Bench
from leadline.pipeline.check import check


@pytest.fixture(scope="module")
def good(tmp_path_factory):
    folder = tmp_path_factory.mktemp("good")
    write_good_brain(folder)
    return folder


def complaint(folder):
    """What is said of a brain: at the first look, or, where only the voxels are wrong, when they are read."""
    try:
        brain = read_brain(folder)
        bench = Bench(brain)
        faults = check(brain, bench).faults
        if not faults:
            bench.reduced(bench.background, 200.0)
    except LeadlineError as error:
        return str(error)
    return "\n".join(map(str, faults))


def test_the_good_brain_is_good(good):
    assert complaint(good) == ""


@pytest.mark.parametrize("case", BROKEN, ids=lambda case: case.name)
def test_a_broken_brain_is_told_what_is_wrong(good, tmp_path, case):
    folder = tmp_path / "brain"
    shutil.copytree(good, folder)
    case.make(folder)
    said = complaint(folder)
    for word in case.words:
        assert word in said
    assert len(said) < 2000


def test_cases_have_names_of_their_own():
    names = [case.name for case in BROKEN]
    assert len(names) == len(set(names)) >= 40
