"""A fitted camera is written as standard WCS without loss, and its covariance is true."""

from __future__ import annotations

from dataclasses import replace

import numpy as np
import pytest
from scipy.spatial.transform import Rotation

from imaging.stars.camera import Camera, fit_camera, to_wcs, unknown_lens
from imaging.stars.catalogue import vectors_of

WIDTH, HEIGHT = 3000, 2000
HALF = float(np.hypot(WIDTH, HEIGHT) / 2)


def camera(seed=1, focal=5000.0, projection="TAN", order=3, mirrored=False):
    rng = np.random.default_rng(seed)
    axes = Rotation.random(random_state=rng).as_matrix()
    if mirrored:
        axes[0] = -axes[0]
    lens = unknown_lens(order, projection)
    coefficients = rng.multivariate_normal(np.zeros(2 * len(lens.terms)), lens.covariance).reshape(2, -1)
    return Camera(axes, focal, 1510.0, 990.0, HALF, lens.terms, coefficients, projection)


def pixels(count=400, seed=2):
    rng = np.random.default_rng(seed)
    return rng.uniform(0, WIDTH - 1, count), rng.uniform(0, HEIGHT - 1, count)


@pytest.mark.parametrize(("projection", "focal"), [("TAN", 5000.0), ("TAN", 50_000.0), ("ARC", 1200.0)])
@pytest.mark.parametrize("mirrored", [False, True])
@pytest.mark.parametrize("order", [1, 3, 5])
def test_pixels_and_directions_are_inverse(projection, focal, mirrored, order):
    one = camera(3, focal, projection, order, mirrored)
    x, y = pixels()
    back_x, back_y = one.pixels(one.vectors(x, y))
    assert np.abs(back_x - x).max() < 1e-3
    assert np.abs(back_y - y).max() < 1e-3


# astropy.wcs (wcslib and its SIP) is the reference for what was written.
@pytest.mark.parametrize(("projection", "focal"), [("TAN", 5000.0), ("TAN", 50_000.0), ("ARC", 1200.0)])
@pytest.mark.parametrize("order", [1, 3, 5])
def test_astropy_reads_the_same_sky_from_the_wcs(projection, focal, order):
    one = camera(4, focal, projection, order)
    wcs = to_wcs(one, WIDTH, HEIGHT)
    x, y = pixels()
    ra, dec = wcs.all_pix2world(x, y, 0)
    away = np.linalg.norm(vectors_of(ra, dec) - one.vectors(x, y), axis=1)
    assert np.degrees(away.max()) * 3600 < 1e-6
    back_x, back_y = wcs.all_world2pix(ra, dec, 0)
    assert np.hypot(back_x - x, back_y - y).max() < 1e-3


def test_the_written_inverse_terms_undo_the_forward_ones():
    one = camera(5, 5000.0, "TAN", 5)
    wcs = to_wcs(one, WIDTH, HEIGHT)
    x, y = pixels()
    # Shupe et al. 2005: u, v from CRPIX; focal plane = u + A(u, v); back by AP, BP
    u, v = x + 1 - wcs.wcs.crpix[0], y + 1 - wcs.wcs.crpix[1]

    def polynomial(table, u, v):
        size = len(table)
        return sum(table[p, q] * u**p * v**q for p in range(size) for q in range(size - p))

    forward_u, forward_v = u + polynomial(wcs.sip.a, u, v), v + polynomial(wcs.sip.b, u, v)
    back_u = forward_u + polynomial(wcs.sip.ap, forward_u, forward_v)
    back_v = forward_v + polynomial(wcs.sip.bp, forward_u, forward_v)
    assert np.hypot(back_u - u, back_v - v).max() < 0.01


@pytest.mark.parametrize("stars", [8, 30, 200])
def test_the_truth_lies_within_the_stated_covariance(stars):
    """Mean chi-square of the place of a target is near 2 (two coordinates), with few stars as with many."""
    chi2 = []
    for seed in range(40):
        rng = np.random.default_rng([seed, stars])
        truth = camera(seed, 20_000.0, "TAN", 3)
        x, y = pixels(stars, seed)
        sigma = rng.uniform(0.03, 0.2, stars)
        seen_x, seen_y = x + rng.normal(0, sigma), y + rng.normal(0, sigma)
        turned = Rotation.from_rotvec(rng.normal(0, 1e-4, 3)).as_matrix() @ truth.axes
        start = replace(truth, axes=turned, terms=(), coefficients=None, focal_px=20_100.0)
        fit = fit_camera(start, unknown_lens(3), seen_x, seen_y, truth.vectors(x, y), sigma, (HEIGHT, WIDTH))
        at = np.array([rng.uniform(0, WIDTH)]), np.array([rng.uniform(0, HEIGHT)])
        found_x, found_y = fit.camera.pixels(truth.vectors(*at))
        away = np.array([found_x[0] - at[0][0], found_y[0] - at[1][0]])
        chi2.append(away @ np.linalg.solve(fit.covariance_at(*at)[0], away))
    assert 1.0 < np.mean(chi2) < 4.0


def test_one_mismatch_among_many_does_not_bend_the_fit():
    truth = camera(9, 20_000.0, "TAN", 3)
    x, y = pixels(30, 9)
    rng = np.random.default_rng(9)
    seen_x, seen_y = x + rng.normal(0, 0.05, 30), y + rng.normal(0, 0.05, 30)
    seen_x[4] += 25.0
    start = replace(truth, terms=(), coefficients=None)
    fit = fit_camera(
        start, unknown_lens(3), seen_x, seen_y, truth.vectors(x, y), np.full(30, 0.05), (HEIGHT, WIDTH)
    )
    found_x, found_y = fit.camera.pixels(truth.vectors(x, y))
    assert np.median(np.hypot(found_x - x, found_y - y)) < 0.1
