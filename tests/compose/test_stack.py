"""What is blended is what the sky sent: outliers go, means stay, and memory does not grow with the frames."""

from __future__ import annotations

import numpy as np
import pytest

from imaging.compose import stack
from imaging.compose.patch import feather, lay_patch
from planner.errors import InputError


def blended(blend, cube, **options):
    pile = stack.new_stack(blend, cube.shape[1:], len(cube), **options)
    for image in cube:
        pile.add(image)
    return pile.result()


@pytest.fixture
def cube():
    rng = np.random.default_rng(3)
    values = rng.normal(100, 4, (9, 30, 41)).astype(np.float32)
    values[2, 4:9, 5:8] = np.nan
    values[:, 20, 20] = np.nan
    return values


@pytest.mark.parametrize(
    ("blend", "oracle"),
    [("mean", np.nanmean), ("min", np.nanmin), ("max", np.nanmax), ("median", np.nanmedian)],
)
@pytest.mark.filterwarnings("ignore::RuntimeWarning")
def test_blends_are_numpys(blend, oracle, cube):
    image, count = blended(blend, cube)
    np.testing.assert_allclose(image, oracle(cube, axis=0), rtol=1e-6)
    assert count[5, 6] == 8
    assert count[20, 20] == 0
    assert np.isnan(image[20, 20])


@pytest.mark.parametrize("blend", ["median", "clipped"])
def test_a_scratch_file_changes_nothing(blend, cube, tmp_path, monkeypatch):
    monkeypatch.setattr(stack, "BAND_BYTES", 4 * 9 * 41 * 7)
    in_memory = blended(blend, cube)
    on_disk = blended(blend, cube, memory_bytes=0, scratch=tmp_path)
    np.testing.assert_array_equal(in_memory[0], on_disk[0])
    assert list(tmp_path.iterdir()) == []


def test_colour_frames_blend_as_each_of_their_planes():
    rng = np.random.default_rng(8)
    cube = rng.normal(10, 1, (5, 12, 14, 3)).astype(np.float32)
    image, _ = blended("median", cube)
    plane, _ = blended("median", cube[..., 1])
    assert image.shape == (12, 14, 3)
    np.testing.assert_array_equal(image[..., 1], plane)


@pytest.mark.parametrize("frames", [4, 6, 10, 30])
def test_a_satellite_an_aircraft_and_a_hot_pixel_vanish(frames):
    rng = np.random.default_rng(11)
    cube = rng.normal(50, 3, (frames, 60, 60)).astype(np.float32)
    cube[1, 30, :] += 400
    cube[2, np.arange(60), np.arange(60)] += 90
    cube[3, 7, 9] = 60000
    image, _ = blended("clipped", cube)
    assert image[30].mean() == pytest.approx(50, abs=5 * 3 / np.sqrt(frames * 60))
    alone = [i for i in range(60) if i not in (7, 30)]  # where two cross, four frames cannot tell
    assert np.diag(image)[alone].mean() == pytest.approx(50, abs=5 * 3 / np.sqrt(frames * 58))
    assert image[7, 9] < 60


@pytest.mark.parametrize(("frames", "efficiency"), [(4, 0.85), (10, 0.93), (40, 0.97)])
def test_clipping_clean_noise_costs_little_and_biases_nothing(frames, efficiency):
    """The variance of the clipped mean against sigma squared over n, on pure Gaussian noise."""
    rng = np.random.default_rng(5)
    cube = rng.normal(1000, 10, (frames, 200, 200)).astype(np.float32)
    image, _ = blended("clipped", cube)
    assert image.mean() == pytest.approx(1000, abs=4 * 10 / np.sqrt(frames * 40000))
    assert (100 / frames) / image.var() > efficiency


def test_a_disk_too_small_is_told_before_the_start(tmp_path, monkeypatch):
    monkeypatch.setattr(stack.shutil, "disk_usage", lambda folder: type("Usage", (), {"free": 10_000}))
    with pytest.raises(InputError, match=r"needs .* GB of disk"):
        stack.new_stack("median", (1000, 1000), 50, scratch=tmp_path, memory_bytes=1000)


def test_an_unknown_blend_names_those_allowed():
    with pytest.raises(InputError, match="mean, median, clipped, min, max"):
        stack.new_stack("multiply", (3, 3), 2)


def test_a_patch_lies_at_its_place_with_a_soft_edge():
    picture, piece = np.full((60, 70), 10.0), np.full((60, 70), 30.0)
    lay_patch(picture, piece, 30.0, 20.0, 6.0, 4.0)
    assert picture[20, 30] == 30
    assert picture[20, 35] == 30
    assert 10 < picture[20, 38] < 30
    assert picture[20, 41] == 10
    assert picture[50, 60] == 10


def test_a_patch_at_the_edge_or_outside_is_cut_not_an_error():
    picture, piece = np.zeros((20, 20)), np.ones((20, 20))
    lay_patch(picture, piece, 0.0, 19.0, 3.0, 2.0)
    assert picture[19, 0] == 1
    before = picture.copy()
    lay_patch(picture, piece, -100.0, 5.0, 3.0, 2.0)
    assert np.array_equal(before, picture)


def test_the_feather_is_smooth_and_monotonic():
    weight = feather(np.linspace(0, 20, 500), 5, 6)
    assert (np.diff(weight) <= 1e-12).all()
    assert np.abs(np.diff(weight, 2)).max() < 1e-3
