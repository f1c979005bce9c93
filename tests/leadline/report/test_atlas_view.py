"""A value in atlas space."""

import numpy as np
import pandas as pd
import pytest
from matplotlib.colors import to_rgb
from tests.good_brain import write_good_brain

from leadline.io.atlases import read_atlas
from leadline.report import style
from leadline.report.atlas_view import draw_value, shades
from leadline.report.sections import PLANES, anchor_point, coarse_labels, labels_in, outlines


@pytest.fixture(scope="module")
def atlas(tmp_path_factory):
    folder = tmp_path_factory.mktemp("atlas")
    write_good_brain(folder)
    return read_atlas(folder / "atlas")


def test_a_disc_has_an_outline_of_its_radius():
    row, column = np.mgrid[:80, :80]
    curves = outlines(np.where(np.hypot(row - 40, column - 38) < 20, 7, 0))
    (curve,) = curves[7]
    radius = np.hypot(curve[:, 0] - 40, curve[:, 1] - 38)
    assert abs(radius.mean() - 20) < 0.35
    assert radius.std() < 0.4


def test_a_straight_border_stays_where_it_is():
    labels = np.ones((40, 40), int)
    labels[:, 20:] = 2
    (curve,) = outlines(labels)[1]
    inner = curve[(curve[:, 0] > 5) & (curve[:, 0] < 34) & (curve[:, 1] > 10)]
    assert np.allclose(inner[:, 1], 19.5, atol=0.01)


def test_a_section_shows_the_labels_at_its_points(atlas):
    for plane in PLANES:
        at = 2700.0
        seen = labels_in(plane, atlas, at)
        index = [slice(None)] * 3
        index[plane.axis] = 27
        stored = atlas.labels.array()[tuple(index)]
        expected = stored if plane.rows < plane.columns else stored.T
        assert np.array_equal(seen, expected)
    assert set(np.unique(coarse_labels(labels_in(PLANES[0], atlas, 3000.0), atlas))) <= {0, 10, 20, 30, 40, 50}


def test_a_name_is_put_where_there_is_most_room():
    mask = np.zeros((30, 30), bool)
    mask[5:26, 5:26] = True
    assert anchor_point(mask) == (15.0, 15.0, 11.0)


def test_words_take_seven_colours_and_the_rest_are_grey():
    assert shades(pd.Series(["", "5"])).entries[1][0] == "none (1)"
    values = pd.Series([f"k{min(i, 9)}" for i in range(40)])
    found = shades(values)
    assert len(found.entries) == 8
    assert found.entries[-1][0] == "3 others (3)"
    assert np.allclose(found.rgba[0, :3], to_rgb(found.entries[1][1]))
    assert np.allclose(found.rgba[values == "k9"][:, :3], to_rgb(style.CATEGORIES[0]))


def test_numbers_run_dark_to_bright_and_angles_close_on_themselves():
    lightness = shades(pd.Series(np.linspace(0, 1, 50))).rgba[:, :3] @ [0.2126, 0.7152, 0.0722]
    assert (np.diff(lightness) >= -1e-6).all()
    ring = shades(pd.Series([0.0, 90.0, 179.99, 180.0]), 180.0).rgba
    assert np.allclose(ring[0], ring[3])
    assert np.allclose(ring[0], ring[2], atol=0.02)
    assert not np.allclose(ring[0], ring[1], atol=0.2)


def test_the_picture_says_how_many_units_it_shows(atlas, tmp_path):
    units = pd.DataFrame(
        {
            "brain": ["a", "a", "b"],
            "ap_um": [3000.0, 3100.0, np.nan],
            "dv_um": [1500.0, 1600.0, np.nan],
            "ml_um": [3000.0, 3000.0, np.nan],
            "cell <type>": ["wide & slow", "narrow", "narrow"],
        }
    )
    figure = draw_value(units, "cell <type>", atlas)
    assert figure.get_suptitle().startswith("cell <type> of 2 units in 1 brain, Tiny atlas; 1 without")
    style.save(figure, tmp_path / "a.svg")
    style.save(draw_value(units, "cell <type>", atlas), tmp_path / "b.svg")
    text = (tmp_path / "a.svg").read_text()
    assert "<text" in text  # text that can be edited, not drawn shapes
    assert ">wide &amp; slow (1)<" in text
    assert text == (tmp_path / "b.svg").read_text()


@pytest.mark.parametrize("colour", [*style.CATEGORIES, "#ffffff", "#000000"])
def test_text_on_a_colour_has_contrast(colour):
    def luminance(code):
        c = np.array(to_rgb(code))
        return np.where(c <= 0.04045, c / 12.92, ((c + 0.055) / 1.055) ** 2.4) @ [0.2126, 0.7152, 0.0722]

    pair = sorted([luminance(colour), luminance(style.readable_on(colour))])
    assert (pair[1] + 0.05) / (pair[0] + 0.05) >= 3.0  # WCAG 2.2, 1.4.3, for large or bold text


def test_a_dollar_in_a_name_is_a_letter(atlas, tmp_path):
    units = pd.DataFrame(
        {"brain": "a$b", "ap_um": [3000.0, 3100.0], "dv_um": 1000.0, "ml_um": 1500.0, r"$\frac{": ["$x$", "$_{"]}
    )
    style.save(draw_value(units, r"$\frac{", atlas), tmp_path / "a.svg")
    assert r"$\frac{" in (tmp_path / "a.svg").read_text()
