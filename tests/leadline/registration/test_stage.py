"""The register stage on a tiny invented brain with a known map."""

from __future__ import annotations

from functools import cache

import numpy as np
import pytest
from tests.leadline.registration.phantom import VOXEL_UM, Sample, make_atlas, make_sample

from leadline.base.errors import LeadlineError
from leadline.base.progress import Cancelled, Silent
from leadline.model.settings import RegisterSettings
from leadline.model.transform import Registration
from leadline.model.volume import Volume
from leadline.registration.stage import register

SETTINGS = RegisterSettings(resolution_um=VOXEL_UM, search_orientation=False)
atlas = cache(make_atlas)


def registered(sample: Sample, settings: RegisterSettings = SETTINGS) -> Registration:
    template, labels = atlas()
    return register(sample.background, template, labels, settings=settings)


def error_um(found: Registration, sample: Sample) -> np.ndarray:
    return np.linalg.norm(found.stack_to_atlas(sample.stack_um) - sample.atlas_um, axis=1)


@cache
def plain() -> tuple[Sample, Registration]:
    sample = make_sample("RAS", tilt_deg=8.0)
    return sample, registered(sample)


def test_points_are_carried_to_a_fraction_of_a_voxel() -> None:
    """Bars of the house in atlas voxels: median 0.6, 95th percentile 1.6 (held with room on this small brain)."""
    sample, found = plain()
    error = error_um(found, sample)
    assert np.median(error) < 0.3 * VOXEL_UM
    assert np.percentile(error, 95) < 0.8 * VOXEL_UM


def test_the_deformation_improves_on_the_affine_and_does_not_fold() -> None:
    sample, found = plain()
    affine = registered(sample, RegisterSettings(VOXEL_UM, deformable=False, search_orientation=False))
    assert affine.stack_to_atlas.field is None or not affine.stack_to_atlas.field.displacement_um.any()
    assert np.median(error_um(found, sample)) < 0.8 * np.median(error_um(affine, sample))
    assert found.quality["jacobian_min"] > 0  # type: ignore[operator]
    assert found.quality["local_correlation"] > found.quality["local_correlation_affine"]  # type: ignore[operator]
    assert found.quality["mask_dice"] > 0.95  # type: ignore[operator]


def test_there_and_back_again() -> None:
    """The two maps undo each other to a hundredth of a voxel or two."""
    sample, found = plain()
    back = found.atlas_to_stack(found.stack_to_atlas(sample.stack_um))
    assert np.abs(back - sample.stack_um).max() < 0.02 * VOXEL_UM


def test_the_estimated_error_is_of_the_size_of_the_true_one() -> None:
    sample, found = plain()
    true_um = float(np.sqrt(np.mean((found.stack_to_atlas(sample.stack_um) - sample.atlas_um) ** 2)))
    assert 0.5 * true_um < found.error_um < 2 * true_um


@pytest.mark.parametrize("code", ["SAL", "LPS", "IRA"])
def test_any_code_gives_the_same_points(code: str) -> None:
    """The same brain stored another way (two of these codes are mirrored) ends at the same places."""
    sample = make_sample(code, tilt_deg=8.0)
    assert np.median(error_um(registered(sample), sample)) < 0.3 * VOXEL_UM


def test_tilt_of_25_degrees_is_recovered() -> None:
    sample = make_sample("PIR", tilt_deg=25.0, seed=5)
    found = registered(sample)
    assert np.median(error_um(found, sample)) < 0.35 * VOXEL_UM
    assert found.quality["tilt_deg"] == pytest.approx(25.0, abs=3.0)
    assert found.warnings == ()


def test_lost_tissue_does_not_pull() -> None:
    """With the front of the brain cut off, the rest is still in place."""
    sample = make_sample("PIR", lost=True, seed=3)
    assert np.percentile(error_um(registered(sample), sample), 95) < VOXEL_UM


def test_a_wrong_code_is_kept_but_said() -> None:
    """A stack stored as PIR but called AIL is turned half round: kept, and the warning names PIR."""
    sample = make_sample("PIR", tilt_deg=4.0)
    called = Volume(sample.background.data, sample.background.voxel_um, "AIL")
    template, labels = atlas()
    found = register(called, template, labels, settings=RegisterSettings(VOXEL_UM, deformable=False))
    assert found.quality["orientation"] == "AIL"
    assert found.quality["codes_tried"] == 24
    assert any("AIL looks wrong" in w and "PIR fits" in w for w in found.warnings)


def test_a_right_code_is_not_doubted() -> None:
    sample, _ = plain()
    found = registered(sample, RegisterSettings(VOXEL_UM, deformable=False))
    assert found.warnings == ()


def test_the_same_input_gives_the_same_numbers() -> None:
    sample, found = plain()
    again = registered(sample)
    assert np.array_equal(again.stack_to_atlas(sample.stack_um), found.stack_to_atlas(sample.stack_um))
    assert again.quality == found.quality


def test_an_empty_stack_is_refused() -> None:
    template, labels = atlas()
    empty = Volume(np.full((60, 60, 60), 100, np.uint16), np.full(3, 150.0), "PIR")
    with pytest.raises(LeadlineError, match="shows no tissue"):
        register(empty, template, labels, settings=SETTINGS)


def test_values_that_are_not_finite_are_refused() -> None:
    template, labels = atlas()
    data = np.array(make_sample().background.data, np.float32)
    data[20, 20, 20] = np.nan
    with pytest.raises(LeadlineError, match="not finite"):
        register(Volume(data, np.full(3, 150.0), "PIR"), template, labels, settings=SETTINGS)


def test_the_user_can_stop_it() -> None:
    class Stopping(Silent):
        def step(self, amount: float = 1.0) -> None:
            raise Cancelled

    template, labels = atlas()
    with pytest.raises(Cancelled):
        register(make_sample().background, template, labels, settings=SETTINGS, progress=Stopping())
