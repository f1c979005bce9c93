"""Colours, seen with other eyes."""

from itertools import combinations

import numpy as np
import pytest

from leadline_napari.style import DARK, LIGHT, TIES, ink_on, lookup, rgb_of, stretch_rgb

# Machado, Oliveira & Fernandes (2009), IEEE TVCG 15, 1291: matrices of severity 1 on linear RGB; values from memory.
EYES = {
    name: np.array(rows).reshape(3, 3)
    for name, rows in {
        "usual": [1, 0, 0, 0, 1, 0, 0, 0, 1],
        "protan": [0.152286, 1.052583, -0.204868, 0.114503, 0.786281, 0.099216, -0.003882, -0.048116, 1.051998],
        "deutan": [0.367322, 0.860646, -0.227968, 0.280085, 0.672501, 0.047413, -0.011820, 0.042940, 0.968881],
        "tritan": [1.255528, -0.076749, -0.178779, -0.078411, 0.930809, 0.147602, 0.004733, 0.691367, 0.303900],
    }.items()
}
TO_XYZ = np.array([[0.4124, 0.3576, 0.1805], [0.2126, 0.7152, 0.0722], [0.0193, 0.1192, 0.9505]])  # IEC 61966-2-1
TELL_APART = 20.0  # common practice, no source: a difference of 10 is seen at a glance, symbols need more


def linear(rgb):
    c = np.asarray(rgb, float) / 255
    return np.where(c <= 0.04045, c / 12.92, ((c + 0.055) / 1.055) ** 2.4)


def lab(rgb, eye):
    xyz = TO_XYZ @ np.clip(EYES[eye] @ linear(rgb), 0, 1) / np.array([0.9505, 1.0, 1.089])
    f = np.where(xyz > (6 / 29) ** 3, np.cbrt(xyz), xyz / (3 * (6 / 29) ** 2) + 4 / 29)
    return np.array([116 * f[1] - 16, 500 * (f[0] - f[1]), 200 * (f[1] - f[2])])


def contrast(a, b):
    light = sorted((np.array([0.2126, 0.7152, 0.0722]) @ linear(rgb_of(c)) for c in (a, b)), reverse=True)
    return (light[0] + 0.05) / (light[1] + 0.05)


@pytest.mark.parametrize("eye", EYES)
@pytest.mark.parametrize("theme", [DARK, LIGHT], ids=["dark", "light"])
def test_kinds_of_anchor_are_told_apart_by_colour_or_by_their_dashes(theme, eye):
    drawn_solid = [k for k in TIES if k not in ("suggested", "second")]
    for group in (drawn_solid, ["suggested", "second"]):
        for a, b in combinations(group, 2):
            away = np.linalg.norm(lab(rgb_of(theme.tie(a)), eye) - lab(rgb_of(theme.tie(b)), eye))
            assert away > TELL_APART, (a, b, away)


@pytest.mark.parametrize("theme", [DARK, LIGHT], ids=["dark", "light"])
def test_text_and_lines_stand_out_from_the_paper(theme):
    assert contrast(theme.ink, theme.paper) > 7.0  # WCAG 2.2, level AAA
    assert contrast(theme.soft, theme.paper) > 4.5  # level AA
    assert contrast(theme.warning, theme.paper) > 4.5
    for kind in TIES:
        assert contrast(theme.tie(kind), theme.paper) > 3.0  # graphical objects


def test_names_in_the_strata_are_legible_on_every_colour():
    rng = np.random.default_rng(0)
    for rgb in rng.integers(0, 256, (300, 3)):
        colour = "#{:02x}{:02x}{:02x}".format(*rgb)
        assert contrast(ink_on(tuple(int(v) for v in rgb)), colour) >= 4.5


@pytest.mark.parametrize("eye", EYES)
def test_drawn_out_and_pressed_together_are_told_apart(eye):
    for dark in (True, False):
        tint = stretch_rgb(np.array([0.75, 1.0, 1.35]), dark)
        for a, b in combinations(range(3), 2):
            assert np.linalg.norm(lab(tint[a], eye) - lab(tint[b], eye)) > 15.0


@pytest.mark.parametrize("eye", EYES)
def test_the_sequential_palette_grows_steadily_lighter_for_every_eye(eye):
    light = np.array([lab(rgb, eye)[0] for rgb in lookup("sequential")[::16]])
    assert (np.diff(light) > 0).all()


@pytest.mark.parametrize("eye", EYES)
def test_sinks_and_sources_are_told_apart(eye):
    table = lookup("diverging")
    assert np.linalg.norm(lab(table[20], eye) - lab(table[235], eye)) > 30.0
