import numpy as np
import pytest

from leadline.locating.section import sideways, straightened
from leadline.model.volume import Volume


class Counted:
    """A volume that remembers how much of it was read."""

    def __init__(self, array):
        self.array, self.read = array, 0
        self.shape, self.dtype = array.shape, array.dtype

    def __getitem__(self, key):
        block = self.array[key]
        self.read += block.size
        return block


def test_a_linear_ramp_is_read_off_exactly_along_an_oblique_line():
    at = np.stack(np.meshgrid(*(np.arange(n) for n in (40, 50, 60)), indexing="ij"), -1) * [20.0, 10.0, 10.0]
    ramp = at @ np.array([1.0, 2.0, 3.0])
    volume = Volume(ramp, np.array([20.0, 10.0, 10.0]), "PIR")
    points = np.linspace([100.0, 50.0, 100.0], [500.0, 400.0, 300.0], 200)
    side = sideways(points, "PIR", np.array([-50.0, 0.0, 50.0]))
    seen = straightened(volume, points, side)
    np.testing.assert_allclose(seen, (points[:, None] + side[None]) @ [1.0, 2.0, 3.0], rtol=1e-4)


def test_what_lies_outside_the_volume_is_not_a_number():
    volume = Volume(np.ones((10, 10, 10)), np.full(3, 10.0), "PIR")
    seen = straightened(volume, np.array([[50.0, -200.0, 50.0], [50.0, 50.0, 50.0]]), np.zeros((1, 3)))
    assert np.isnan(seen[0, 0])
    assert seen[1, 0] == 1.0


def test_a_curve_that_lies_wholly_outside_gives_nothing_and_reads_little():
    volume = Volume(np.ones((10, 10, 10)), np.full(3, 10.0), "PIR")
    assert np.isnan(straightened(volume, np.full((3, 3), 900.0), np.zeros((2, 3)))).all()


@pytest.mark.parametrize(("code", "right"), [("PIR", [0, 0, 1]), ("SAL", [0, 0, -1]), ("RIP", [1, 0, 0])])
def test_steps_go_to_the_right_of_the_animal_whatever_the_stored_order(code, right):
    axis_down = {"PIR": 1, "SAL": 0, "RIP": 1}[code]
    points = np.zeros((2, 3))
    points[1, axis_down] = 1000.0
    np.testing.assert_allclose(sideways(points, code, np.array([10.0]))[0], 10.0 * np.array(right))


def test_along_a_track_that_runs_to_the_right_steps_go_to_the_back():
    np.testing.assert_allclose(sideways(np.array([[0, 0, 0], [0, 0, 900.0]]), "PIR", np.array([5.0])), [[5.0, 0, 0]])


def test_only_the_neighbourhood_of_the_curve_is_read():
    counted = Counted(np.zeros((400, 400, 40), np.float32))
    points = np.linspace([0, 0, 200.0], [3990.0, 3990.0, 200.0], 800)
    straightened(Volume(counted, np.full(3, 10.0), "PIR"), points, sideways(points, "PIR", np.linspace(-50, 50, 11)))
    assert counted.read < 0.25 * counted.array.size
