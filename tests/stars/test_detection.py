"""Stars are found where they are, as precisely as the light allows, and hot pixels are not stars."""

from __future__ import annotations

import numpy as np
import pytest
from scipy.spatial import cKDTree
from scipy.special import erf

from imaging.stars.background import background
from imaging.stars.detection import detect


def star_stamp(x, y, flux, sigma, reach):
    """Light of a round Gaussian star in each pixel (integrated), at offsets from the pixel of the star."""
    span = np.arange(-reach, reach + 1)
    fx = erf((span + 0.5 - x) / sigma / 2**0.5) - erf((span - 0.5 - x) / sigma / 2**0.5)
    fy = erf((span + 0.5 - y) / sigma / 2**0.5) - erf((span - 0.5 - y) / sigma / 2**0.5)
    return flux * np.outer(fy, fx) / 4


def render(shape, x, y, flux, fwhm, sky=200.0, read=3.0, seed=1):
    """Frame in electrons: sky, stars, Poisson and read noise."""
    image = np.full(shape, sky)
    sigma, reach = fwhm / 2.3548, int(np.ceil(3 * fwhm)) + 2
    padded = np.pad(image, reach)
    for a, b, f in zip(x, y, flux, strict=True):
        column, row = round(a), round(b)
        padded[row : row + 2 * reach + 1, column : column + 2 * reach + 1] += star_stamp(
            a - column, b - row, f, sigma, reach
        )
    image = padded[reach:-reach, reach:-reach]
    rng = np.random.default_rng(seed)
    return (rng.poisson(image) + rng.normal(0, read, shape)).astype("float32")


def bound_px(flux, fwhm, sky=200.0, read=3.0):
    """Cramer-Rao bound of one coordinate (Winick 1986, J. Opt. Soc. Am. A 3, 1809), mean over places in a pixel."""
    sigma, step, bounds = fwhm / 2.3548, 1e-3, []
    for x, y in ((0.0, 0.0), (0.25, 0.4), (0.5, 0.1), (0.35, 0.35)):
        model = star_stamp(x, y, flux, sigma, 12)
        slope = (star_stamp(x + step, y, flux, sigma, 12) - star_stamp(x - step, y, flux, sigma, 12)) / (
            2 * step
        )
        bounds.append(1 / np.sqrt((slope**2 / (model + sky + read**2)).sum()))
    return float(np.mean(bounds))


def matched(found, x, y, within=1.5):
    distance, index = cKDTree(np.column_stack([found.x_px, found.y_px])).query(np.column_stack([x, y]))
    return distance < within, index


@pytest.mark.parametrize("fwhm", [2.0, 3.0, 5.0])
def test_faint_and_bright_centroids_reach_the_bound(fwhm):
    rng = np.random.default_rng(7)
    grid_y, grid_x = np.mgrid[30:1170:60, 30:1770:60]
    x = grid_x.ravel() + rng.uniform(-5, 5, grid_x.size)
    y = grid_y.ravel() + rng.uniform(-5, 5, grid_y.size)
    for flux in (2000.0, 10_000.0, 100_000.0):
        bound = bound_px(flux, fwhm)
        if bound > 0.25:
            continue
        found = detect(render((1200, 1800), x, y, np.full(len(x), flux), fwhm), gain_e_adu=1.0)
        ok, index = matched(found, x, y)
        assert ok.mean() > 0.99
        error = np.concatenate([found.x_px[index[ok]] - x[ok], found.y_px[index[ok]] - y[ok]])
        ratio = 1.4826 * np.median(np.abs(error)) / bound
        assert ratio < (1.2 if bound > 0.02 else 1.55), (
            f"flux {flux}: {ratio:.2f} of the bound {bound:.4f} px"
        )
        assert np.abs(np.median(error)) < 3 * bound / np.sqrt(len(error)) + 0.002
        stated = np.median(found.sigma_x_px[index[ok]])
        assert stated == pytest.approx(1.4826 * np.median(np.abs(error)), rel=0.3)


def test_noise_alone_holds_no_stars():
    frame = np.random.default_rng(3).normal(500, 12, (1500, 2000)).astype("float32")
    assert len(detect(frame)) <= 2


def test_hot_pixels_and_cold_columns_are_not_stars():
    rng = np.random.default_rng(4)
    frame = rng.normal(500, 12, (800, 1000)).astype("float32")
    y, x = rng.integers(5, 795, 200), rng.integers(5, 995, 200)
    frame[y, x] += rng.uniform(300, 20000, 200)
    frame[:, 300] = 100
    assert len(detect(frame)) <= 4


def test_a_gradient_and_vignetting_lose_no_stars():
    rng = np.random.default_rng(5)
    x, y = rng.uniform(20, 1980, 300), rng.uniform(20, 1480, 300)
    frame = render((1500, 2000), x, y, np.full(300, 6000.0), 3.0)
    yy, xx = np.mgrid[0:1500, 0:2000]
    shade = 1 - 0.4 * (((xx - 1000) / 1250) ** 2 + ((yy - 750) / 1250) ** 2)
    found = detect((frame * shade + 0.3 * xx).astype("float32"), gain_e_adu=1.0)
    ok, _ = matched(found, x, y)
    assert ok.mean() > 0.96  # a few of 300 fall onto each other
    assert len(found) < 310


def test_blank_parts_of_a_frame_are_passed_over():
    x, y = np.array([100.0, 300.0]), np.array([100.0, 120.0])
    frame = render((250, 400), x, y, np.array([20000.0, 20000.0]), 3.0)
    frame[:, 200:260] = np.nan
    found = detect(frame)
    ok, _ = matched(found, x, y)
    assert ok.all()
    assert len(found) == 2


def test_a_saturated_star_is_one_detection_and_says_so():
    frame = render((300, 300), np.array([150.3]), np.array([140.6]), np.array([5e6]), 4.0)
    found = detect(np.minimum(frame, 60000), saturation_adu=60000.0)
    near = np.hypot(found.x_px - 150.3, found.y_px - 140.6) < 12
    assert near.sum() == 1
    assert found.saturated[near].all()
    assert np.hypot(found.x_px[near] - 150.3, found.y_px[near] - 140.6) < 0.2


@pytest.mark.parametrize("shape", [(8, 8), (9, 500), (64, 64), (65, 129)])
def test_small_and_narrow_frames_do_not_break_it(shape):
    detect(np.random.default_rng(1).normal(0, 1, shape).astype("float32"))


def test_background_is_the_sky_between_the_stars():
    rng = np.random.default_rng(6)
    x, y = rng.uniform(10, 790, 400), rng.uniform(10, 590, 400)
    sky = background(render((600, 800), x, y, np.full(400, 30000.0), 3.0))
    assert np.abs(sky.level(0, 600) - 200).max() < 8
    assert np.median(sky.sigma_grid) == pytest.approx(np.sqrt(200 + 9), rel=0.1)


def scattered(count, shape, seed):
    rng = np.random.default_rng(seed)
    return (
        rng.uniform(20, shape[1] - 20, count),
        rng.uniform(20, shape[0] - 20, count),
        10 ** rng.uniform(3.6, 5.2, count),
    )


def strangers(found, x, y, within=3.0):
    """How many detections are none of the stars put in."""
    distance, _ = cKDTree(np.column_stack([x, y])).query(np.column_stack([found.x_px, found.y_px]))
    return distance > within


@pytest.mark.parametrize("lit", ["burnt out", "a crescent"])
def test_the_moons_glare_hides_only_what_is_near_it(lit):
    shape = (1500, 2000)
    x, y, flux = scattered(300, shape, 4)
    yy, xx = np.mgrid[0 : shape[0], 0 : shape[1]]
    away = np.hypot(xx - 900, yy - 700)
    glare = 15_000 / np.maximum(away / 160, 1) ** 2
    disc = away < 160 if lit == "burnt out" else (away < 160) & (np.hypot(xx - 960, yy - 700) > 170)
    rough = 1 + 0.3 * np.random.default_rng(1).normal(size=shape)  # ground that is not smooth
    light = np.where(disc, 1e6 if lit == "burnt out" else 20_000 * np.abs(rough), glare)
    frame = render(shape, x, y, flux, 2.8) + np.random.default_rng(2).poisson(light)
    found = detect(np.minimum(frame, 60_000), saturation_adu=60_000.0, gain_e_adu=1.0)
    far = np.hypot(x - 900, y - 700) > 2 * 160
    ok, _ = matched(found, x[far], y[far])
    assert ok.mean() > 0.97
    false = strangers(found, x, y)
    # its limb and its ground are many things that no catalogue knows, but only there
    assert (np.hypot(found.x_px[false] - 900, found.y_px[false] - 700) > 2 * 160).sum() <= 3
    assert not found.trailed


def test_a_planet_is_one_detection_and_its_light_hides_nothing_far():
    shape = (1000, 1400)
    x, y, flux = scattered(150, shape, 8)
    frame = render(shape, np.append(x, 700.3), np.append(y, 500.2), np.append(flux, 5e7), 2.8)
    found = detect(np.minimum(frame, 60_000), saturation_adu=60_000.0, gain_e_adu=1.0)
    here = np.hypot(found.x_px - 700.3, found.y_px - 500.2)
    assert (here < 15).sum() == 1
    assert found.saturated[here < 15].all()
    far = np.hypot(x - 700, y - 500) > 30
    assert matched(found, x[far], y[far])[0].mean() > 0.97


def test_a_satellite_is_no_row_of_stars():
    import cv2

    shape = (1000, 1400)
    x, y, flux = scattered(150, shape, 9)
    line = np.zeros(shape, np.float32)
    cv2.line(line, (0, 120), (1399, 800), 2000, 2, cv2.LINE_AA)
    found = detect(render(shape, x, y, flux, 2.8) + cv2.GaussianBlur(line, (0, 0), 1.0), gain_e_adu=1.0)
    assert strangers(found, x, y).sum() <= 3
    assert not found.trailed
    distance = np.abs(y - 120 - x * 680 / 1399)
    assert matched(found, x[distance > 20], y[distance > 20])[0].mean() > 0.97


@pytest.mark.parametrize("noise_adu", [0.3, 0.45, 0.7, 1.5])
@pytest.mark.parametrize("slope_adu", [0.0, 2.0])
def test_counts_coarser_than_the_noise_make_no_stars(noise_adu, slope_adu):
    """8-bit video, or frames averaged and rounded: a sky of one count and its neighbour holds no stars."""
    rng = np.random.default_rng(5)
    shape = (600, 800)
    grid_y, grid_x = np.mgrid[30:570:60, 30:770:60]
    x, y = grid_x.ravel() + rng.uniform(-5, 5, grid_x.size), grid_y.ravel() + rng.uniform(-5, 5, grid_y.size)
    sky_adu = 40.0 + slope_adu * np.linspace(0, 1, shape[1])
    light = sky_adu + rng.normal(0, noise_adu, shape)
    for a, b in zip(x, y, strict=True):
        stamp = star_stamp(a - round(a), b - round(b), 60 * noise_adu, 2.5 / 2.3548, 8)
        light[round(b) - 8 : round(b) + 9, round(a) - 8 : round(a) + 9] += stamp
    found = detect(np.rint(light).astype("float32"))
    hit, _ = matched(found, x, y)
    assert hit.mean() > 0.97
    assert len(found) - hit.sum() <= 12  # thousands where the sky's level is a whole count
    sky = background(np.rint(light).astype("float32"))
    level = sky.level(0, shape[0])
    assert np.abs(level - sky_adu).max() < max(0.2, 0.2 * noise_adu)


def test_the_noise_of_rounded_counts_is_that_of_the_counts():
    rng = np.random.default_rng(6)
    for noise_adu in (0.5, 1.0, 3.0):
        counts = np.rint(rng.normal(20.3, noise_adu, (512, 512))).astype("float32")
        assert np.median(background(counts).sigma_grid) == pytest.approx(counts.std(), rel=0.12)
