"""What is blended is what the sky sent: outliers go, means stay, and memory does not grow with the frames."""

from __future__ import annotations

import numpy as np
import pytest

from imaging.compose import stack
from imaging.compose.matching import Matching, edge_weight
from imaging.compose.patch import feather, lay_patch
from imaging.compose.reductions import clipped_mean, median
from planner.errors import InputError


def blended(blend, cube, weights=None, **options):
    pile = stack.new_stack(blend, cube.shape[1:], len(cube), **options)
    for turn in pile.turns():
        for index in turn:
            pile.add(cube[index], None if weights is None else weights[index])
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


@pytest.mark.parametrize(("blend", "exact"), [("median", median), ("clipped", clipped_mean)])
@pytest.mark.parametrize("planes", [(), (3,)])
def test_frames_that_come_round_again_give_nearly_the_same(blend, exact, planes, monkeypatch):
    """200 frames, of which 12 fit in memory; a satellite, a planet that lingers in a quarter of them, a mosaic's edge.

    Within a tenth of the error of the mean (rms), a third of what the median itself costs.
    """
    monkeypatch.setattr(stack, "SCRATCH_BYTES", 0)
    rng = np.random.default_rng(1)
    cube = rng.normal(100, 4, (200, 60, 70, *planes)).astype(np.float32)
    cube[3, 30] += 300
    cube[:50, 50:56, 50:60] += 50
    cube[:40, 40:45] = np.nan
    cube[10:, 20] = np.nan
    cube[:, 10:13, 10:13] = np.nan
    image, count = blended(blend, cube, memory_bytes=4 * 12 * cube[0].size, again=True)
    wanted, number = exact(cube)
    error = 4 / np.sqrt(200)
    clean = np.ones((60, 70), bool)
    clean[20] = clean[30] = clean[50:56, 50:60] = False
    assert np.nanstd((image - wanted)[clean]) < 0.1 * error
    assert np.array_equal(np.isnan(image), np.isnan(wanted))
    assert np.abs((image - wanted)[30]).mean() < 0.2 * error
    assert np.nanmean(image[50:56, 50:60]) < 100 + (
        1 if blend == "clipped" else 3
    )  # an exact median is 1.7 off
    apart = np.abs(count.astype(int) - number)
    assert np.mean(apart > 6) < 0.001  # now and then a few frames give too large a spread


def test_memory_of_rounds_does_not_grow_with_the_frames(monkeypatch):
    monkeypatch.setattr(stack, "SCRATCH_BYTES", 0)
    few, many = (
        stack.new_stack("clipped", (100, 120), n, memory_bytes=4 * 12 * 12000, again=True)
        for n in (400, 100_000)
    )
    assert "read twice" in few.how
    assert len(next(few.turns())) == len(next(many.turns())) == 12


def test_weights_count_in_means_but_not_in_what_is_kept(tmp_path):
    """A step of 10 between two overlapping frames becomes a slope, and an outlier of full weight still goes."""
    ramp = np.broadcast_to(np.linspace(0, 1, 50, dtype=np.float32), (40, 50))
    cube = np.stack([np.zeros((40, 50)), np.full((40, 50), 10.0)]).astype(np.float32)
    image, _ = blended("mean", cube, [1 - ramp, ramp])
    np.testing.assert_allclose(image, 10 * ramp, atol=1e-4)
    rng = np.random.default_rng(2)
    cube = rng.normal(20, 1, (12, 40, 50)).astype(np.float32)
    cube[4] += 500
    weights = [np.full((40, 50), 1.0 if i == 4 else 0.5, np.float32) for i in range(12)]
    for options in ({}, {"memory_bytes": 0, "scratch": tmp_path}, {"memory_bytes": 0, "again": True}):
        image, count = blended("clipped", cube, weights, **options)
        assert image.mean() == pytest.approx(20, abs=0.05)
        assert count.max() <= 11


def test_weights_rise_smoothly_from_the_edge_of_what_is_covered():
    image = np.full((200, 300), np.nan, np.float32)
    image[:, 60:250] = 1.0
    weight = edge_weight(image)
    assert weight[100, 59] == weight.min()
    assert weight[100, 155] == 1.0
    assert np.abs(np.diff(weight[100, 61:249])).max() < 0.06
    assert (edge_weight(np.ones((20, 30), np.float32)) == 1).all()


def test_a_mosaic_of_hazy_and_clear_visits_has_no_seams():
    """The second visit has 0.7 of the light and a tilted sky of 5 sigma: factor to 2 %, step below a tenth of sigma."""
    rng = np.random.default_rng(6)
    shape = (400, 600)
    stars = np.zeros(shape)
    y, x = np.mgrid[-4:5, -4:5]
    for row, column, light in zip(
        rng.integers(8, 392, 400), rng.integers(8, 592, 400), rng.uniform(200, 3000, 400), strict=True
    ):
        stars[row - 4 : row + 5, column - 4 : column + 5] += light * np.exp(-(x**2 + y**2) / 4)
    first = (stars + rng.normal(0, 2, shape)).astype(np.float32)
    first[:, 400:] = np.nan
    tilt = 10 * np.linspace(-1, 1, 600)
    second = (0.7 * stars + rng.normal(0, 2, shape) + tilt).astype(np.float32)
    second[:, :200] = np.nan
    matching = Matching()
    matching.matched(first)
    changed, gain = matching.matched(second)
    assert gain == pytest.approx(1 / 0.7, rel=0.02)
    edge = np.nanmedian(changed[:, 380:420] - stars[:, 380:420])
    assert abs(edge) < 0.2
    assert abs(np.nanmedian(changed[:, 205:260] - first[:, 205:260])) < 0.2


def test_visits_that_do_not_meet_are_left_as_they_are():
    first, second = np.full((2, 200, 300), np.nan, np.float32)
    first[:, :100], second[:, 200:] = 1.0, 2.0
    matching = Matching()
    matching.matched(first)
    changed, gain = matching.matched(second)
    assert gain == 1.0
    np.testing.assert_array_equal(changed, second)


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
