"""Close pairs are two stars where the light says so, and one star is never made two."""

from __future__ import annotations

import numpy as np
import pytest
from scipy.spatial import cKDTree

from imaging.stars.detection import detect
from tests.stars.test_detection import render, star_stamp

FWHM, SKY, READ, FLUX = 2.8, 200.0, 3.0, 20_000.0


def bounds_px(apart, ratio):
    """Cramer-Rao bounds of both places along the pair, all six parameters free."""
    sigma = FWHM / 2.3548
    truth = np.array([FLUX, -apart / 2, 0.1, FLUX * ratio, apart / 2, 0.1])

    def model(p):
        return star_stamp(p[1], p[2], p[0], sigma, 14) + star_stamp(p[4], p[5], p[3], sigma, 14)

    slopes = []
    for i in range(6):
        step = np.zeros(6)
        step[i] = 1e-3 * (truth[i] if i in (0, 3) else 1.0)
        slopes.append(((model(truth + step) - model(truth - step)) / (2 * step[i])).ravel())
    rows = np.array(slopes)
    information = (rows / (model(truth) + SKY + READ**2).ravel()) @ rows.T
    return np.sqrt(np.diag(np.linalg.inv(information)))[[1, 4]]


def pairs(apart, ratio, doubles=60, singles=500, seed=2):
    rng = np.random.default_rng(seed)
    gy, gx = np.mgrid[40:1170:50, 40:1370:50]
    place = np.column_stack([gx.ravel(), gy.ravel()])[: doubles + singles] + rng.uniform(
        -5, 5, (doubles + singles, 2)
    )
    turn = rng.uniform(0, 2 * np.pi, doubles)
    way = np.column_stack([np.cos(turn), np.sin(turn)])
    second = place[:doubles] + apart * way
    x, y = np.concatenate([place, second]).T
    flux = np.concatenate([np.full(len(place), FLUX), np.full(doubles, FLUX * ratio)])
    return render((1200, 1400), x, y, flux, FWHM, SKY, READ), place, second, way


# in units of FWHM, and of the brighter star's light; below, the two are one star with a flag
@pytest.mark.parametrize(
    ("separation", "ratio"), [(0.8, 1.0), (1.1, 1.0), (1.8, 1.0), (1.1, 0.3), (1.6, 0.3), (1.6, 0.1)]
)
def test_a_close_pair_is_told_apart_and_placed_near_the_bound(separation, ratio):
    frame, place, second, way = pairs(separation * FWHM, ratio)
    found = detect(frame, gain_e_adu=1.0)
    tree = cKDTree(np.column_stack([found.x_px, found.y_px]))
    one_away, one = tree.query(place[: len(second)])
    two_away, two = tree.query(second)
    split = (one != two) & (one_away < 1.5) & (two_away < 1.5)
    assert split.mean() > 0.9
    # close ones say so: their places hang on each other
    assert found.blended[one[split]].mean() > 0.9
    bound = bounds_px(separation * FWHM, ratio)
    for index, truth, best in ((one, place[: len(second)], bound[0]), (two, second, bound[1])):
        error = np.column_stack([found.x_px[index] - truth[:, 0], found.y_px[index] - truth[:, 1]])[split]
        along = (error * way[split]).sum(axis=1)
        # the width of the frame's stars is learned with the pairs in it, and is a little too wide
        assert np.sqrt(np.mean(along**2)) < 2.5 * best
    assert len(found) == len(place) + split.sum()


def test_lone_stars_are_not_split():
    rng = np.random.default_rng(3)
    gy, gx = np.mgrid[40:1170:40, 40:1370:40]
    x, y = gx.ravel() + rng.uniform(-5, 5, gx.size), gy.ravel() + rng.uniform(-5, 5, gx.size)
    flux = 10 ** rng.uniform(3.0, 6.0, gx.size)
    found = detect(render((1200, 1400), x, y, flux, FWHM), gain_e_adu=1.0)
    assert not found.blended.any()
    assert len(found) <= gx.size


@pytest.mark.parametrize("beta", [2.5, 3.5])
def test_stars_with_wings_are_not_split(beta):
    """Moffat profiles (Moffat 1969, A&A 3, 455), as the atmosphere makes them."""
    rng = np.random.default_rng(4)
    frame = np.full((900, 1200), SKY)
    gy, gx = np.mgrid[40:870:60, 40:1170:60]
    alpha = FWHM / 2 / np.sqrt(2 ** (1 / beta) - 1)
    yy, xx = np.mgrid[-25:26, -25:26]
    for row, column in zip(gy.ravel(), gx.ravel(), strict=True):
        a, b = rng.uniform(-0.5, 0.5, 2)
        flux = 10 ** rng.uniform(3.5, 5.5)
        shape = (1 + ((xx - a) ** 2 + (yy - b) ** 2) / alpha**2) ** -beta * (beta - 1) / np.pi / alpha**2
        frame[row - 25 : row + 26, column - 25 : column + 26] += flux * shape
    frame = (rng.poisson(frame) + rng.normal(0, READ, frame.shape)).astype("float32")
    found = detect(frame, gain_e_adu=1.0)
    assert len(found) <= gx.size * 1.01
    assert found.blended.mean() < 0.02
