import numpy as np
import pandas as pd
import pytest

from leadline.base.errors import LeadlineError
from leadline.io.profile_picture import draw_profiles
from leadline.io.profiles import read_profile, read_spectra, write_profile, write_spectra
from leadline.model.profile import Profile
from leadline.model.spectra import Spectra


@pytest.fixture
def profile():
    rng = np.random.default_rng(1)
    tip = np.concatenate([np.arange(20) * 20.0, 1000 + np.arange(20) * 20.0])
    features = {
        "theta_power_db": rng.normal(size=40),
        "theta_phase_rad": rng.uniform(-3, 3, 40),
        "neighbour_correlation": rng.uniform(0, 1, 40),
        "unit_density_per_100um": np.where(np.arange(40) < 5, np.nan, 1.0),
    }
    return Profile("Ä 1", np.repeat([0, 2], 20), tip, features, ("dead", *[""] * 38, "outside"), ("half was read", "x"))


@pytest.fixture
def spectra(profile):
    rng = np.random.default_rng(2)
    return Spectra(
        profile.penetration,
        profile.shank,
        profile.tip_distance_um,
        2.0 ** np.arange(10),
        rng.uniform(1, 2, (40, 10)),
        np.linspace(-0.1, 0.3, 30),
        rng.normal(size=(40, 30)),
        rng.normal(size=(40, 30)),
        r"$\frac{flash",  # no formula
    )


def test_a_profile_comes_back_as_it_was(tmp_path, profile):
    path = tmp_path / "profiles" / "A.parquet"
    write_profile(path, profile)
    back = read_profile(path)
    assert (back.penetration, back.flags, back.warnings) == (profile.penetration, profile.flags, profile.warnings)
    assert list(back.features) == list(profile.features)
    for name, values in profile.features.items():
        assert np.array_equal(values, back.features[name], equal_nan=True)
    assert np.array_equal(back.shank, profile.shank)
    assert np.array_equal(back.tip_distance_um, profile.tip_distance_um)


def test_the_file_is_a_plain_table_with_the_contract_columns(tmp_path, profile):
    write_profile(tmp_path / "A.parquet", profile)
    table = pd.read_parquet(tmp_path / "A.parquet")
    assert list(table.columns) == ["shank", "tip_distance_um", *profile.features, "flag"]
    assert table["flag"].tolist() == list(profile.flags)


def test_the_same_profile_gives_the_same_bytes(tmp_path, profile, spectra):
    for name in ("a", "b"):
        write_profile(tmp_path / f"{name}.parquet", profile)
        write_spectra(tmp_path / f"{name}.npz", spectra)
    assert (tmp_path / "a.parquet").read_bytes() == (tmp_path / "b.parquet").read_bytes()
    assert (tmp_path / "a.npz").read_bytes() == (tmp_path / "b.npz").read_bytes()


def test_spectra_come_back_as_they_were(tmp_path, spectra):
    write_spectra(tmp_path / "A.npz", spectra)
    back = read_spectra(tmp_path / "A.npz")
    assert (back.penetration, back.event_kind) == (spectra.penetration, spectra.event_kind)
    for name in ("shank", "frequency_hz", "power_uv2_per_hz", "time_s", "csd_ua_per_mm3"):
        assert np.array_equal(getattr(back, name), getattr(spectra, name))


def test_files_that_are_something_else_are_refused(tmp_path):
    for reader, name, words in ((read_profile, "p.parquet", "no Parquet file"), (read_spectra, "s.npz", "no spectra")):
        with pytest.raises(LeadlineError, match="Run 'leadline profile' first"):
            reader(tmp_path / name)
        (tmp_path / name).write_bytes(b"something else")
        with pytest.raises(LeadlineError, match=words):
            reader(tmp_path / name)


def test_a_table_of_other_columns_is_refused(tmp_path):
    path = tmp_path / "p.parquet"
    pd.DataFrame({"shank": [0], "tip_distance_um": [1.0]}).to_parquet(path)
    with pytest.raises(LeadlineError, match="column 'flag' is missing"):
        read_profile(path)
    pd.DataFrame({"shank": [0], "tip_distance_um": [1.0], "theta_powr_db": [1.0], "flag": [""]}).to_parquet(path)
    with pytest.raises(LeadlineError, match=r"'theta_powr_db' is no feature. Did you mean 'theta_power_db'"):
        read_profile(path)


def test_pickled_content_is_not_opened(tmp_path):
    path = tmp_path / "s.npz"
    np.savez(path, shank=np.array([{"a": 1}], dtype=object))
    with pytest.raises(LeadlineError, match="holds no spectra"):
        read_spectra(path)


def test_the_picture_shows_every_shank_and_border(tmp_path, profile, spectra):
    from skimage.io import imread

    path = tmp_path / "A.png"
    draw_profiles(path, profile, spectra)
    plain = imread(path)
    draw_profiles(path, profile, spectra, [(0, 200.0, "above"), (2, 1200.0, "$_{below")])
    with_borders = imread(path)
    assert plain.shape[0] > 900  # two shanks, one above the other
    assert plain[..., :3].std() > 10
    assert plain.shape != with_borders.shape or (plain != with_borders).any()


def test_a_profile_of_hardly_anything_still_gives_a_picture(tmp_path):
    tip = np.array([100.0])
    nothing = np.zeros((1, 0), np.float32)
    spectra = Spectra(
        "A", np.zeros(1), tip, np.array([1.0, 2.0]), np.full((1, 2), np.nan), np.zeros(0), nothing, nothing
    )
    draw_profiles(tmp_path / "A.png", Profile("A", np.zeros(1), tip, {}), spectra)
    assert (tmp_path / "A.png").stat().st_size > 1000
