"""Stars of a camera on a tripod are measured along their trails, as well as the light allows."""

from __future__ import annotations

import numpy as np
import pytest
from scipy.spatial import cKDTree
from scipy.special import erf

from imaging.stars.detection import detect

SKY, READ, FWHM = 200.0, 3.0, 2.6
SHAPE = (1000, 1400)


def trail_stamp(x, y, flux, length, angle, reach, radius=np.inf):
    """Light of a trail in each pixel, as 5 stars a pixel of length side by side: not the profile that is fitted.

    An arc of `radius` about a centre to the left of its direction.
    """
    number = max(3, int(5 * length))
    along = ((np.arange(number) + 0.5) / number - 0.5) * length
    turned = along / radius
    ahead, left = along * np.sinc(turned / np.pi), along * np.sinc(turned / 2 / np.pi) * np.sin(turned / 2)
    c, s = np.cos(angle), np.sin(angle)
    at = np.array([x + ahead * c - left * s, y + ahead * s + left * c])
    span = np.arange(-reach, reach + 1)
    sigma = FWHM / 2.3548
    fx, fy = (
        (
            erf((span + 0.5 - one[:, None]) / sigma / 2**0.5)
            - erf((span - 0.5 - one[:, None]) / sigma / 2**0.5)
        )
        / 2
        for one in at
    )
    return flux / number * fy.T @ fx


def tripod(length_px, pole=(700.0, 2500.0), count=110, seed=5, noise=True):
    """A frame of a sky that turned about a pole, in electrons, and its truth: middles, light, length, angle."""
    rng = np.random.default_rng(seed)
    # on a jittered grid, so that completeness speaks of detection and not of chance overlaps
    gy, gx = np.mgrid[0:10, 0:11]
    margin = length_px * 0.75 + 12
    x = margin + (gx.ravel()[:count] + rng.uniform(0.2, 0.8, count)) * (SHAPE[1] - 2 * margin) / 11
    y = margin + (gy.ravel()[:count] + rng.uniform(0.2, 0.8, count)) * (SHAPE[0] - 2 * margin) / 10
    flux = 10 ** rng.uniform(3.6, 5.2, count) * np.sqrt(1 + length_px / 6)
    east, up = x - pole[0], y - pole[1]
    length = length_px * np.hypot(east, up) / np.hypot(700 - pole[0], 500 - pole[1])
    angle = np.arctan2(east, -up)
    frame = np.full(SHAPE, SKY)
    for a, b, light, long, turn in zip(x, y, flux, length, angle, strict=True):
        reach = int(long / 2 + 7)
        column, row = round(a), round(b)
        rows, columns = (
            slice(max(row - reach, 0), row + reach + 1),
            slice(max(column - reach, 0), column + reach + 1),
        )
        stamp = trail_stamp(a - column, b - row, light, long, turn, reach, np.hypot(a - pole[0], b - pole[1]))
        part = frame[rows, columns]
        part += stamp[max(reach - row, 0) :, max(reach - column, 0) :][: part.shape[0], : part.shape[1]]
    if noise:
        frame = rng.poisson(frame) + rng.normal(0, READ, SHAPE)
    return frame.astype("float32"), x, y, flux, length, angle


def bounds_px(flux, length):
    """Cramer-Rao bounds along and across a trail (Winick 1986, J. Opt. Soc. Am. A 3, 1809), light and place free."""
    step, reach = 1e-3, int(length / 2 + 9)
    angle = 0.3
    model = trail_stamp(0.1, 0.2, flux, length, angle, reach)
    c, s = step * np.cos(angle), step * np.sin(angle)
    slopes = [
        model / flux,
        (trail_stamp(0.1 + c, 0.2 + s, flux, length, angle, reach)
         - trail_stamp(0.1 - c, 0.2 - s, flux, length, angle, reach)) / (2 * step),
        (trail_stamp(0.1 - s, 0.2 + c, flux, length, angle, reach)
         - trail_stamp(0.1 + s, 0.2 - c, flux, length, angle, reach)) / (2 * step),
    ]  # fmt: skip
    rows = np.array([one.ravel() for one in slopes])
    information = (rows / (model + SKY + READ**2).ravel()) @ rows.T
    return np.sqrt(np.diag(np.linalg.inv(information)))[1:]


def bounds_of(flux, length):
    """Bounds (n, 2) along and across, interpolated in light: lengths differ by a few percent over the frame."""
    light = np.geomspace(flux.min(), flux.max(), 6)
    grid = np.array([bounds_px(one, float(np.median(length))) for one in light])
    return np.column_stack(
        [np.exp(np.interp(np.log(flux), np.log(light), np.log(grid[:, i]))) for i in (0, 1)]
    )


def matched(found, x, y, within=3.0):
    distance, index = cKDTree(np.column_stack([found.x_px, found.y_px])).query(np.column_stack([x, y]))
    return distance < within, index


@pytest.mark.parametrize("length_px", [6.0, 15.0, pytest.param(40.0, marks=pytest.mark.slow)])
def test_the_middle_of_a_trail_is_found_to_the_cramer_rao_bound(length_px):
    frame, x, y, flux, length, angle = tripod(length_px)
    found = detect(frame, gain_e_adu=1.0)
    assert found.trailed
    ok, index = matched(found, x, y)
    assert ok.mean() > 0.97
    east, up = found.x_px[index] - x, found.y_px[index] - y
    along, across = east * np.cos(angle) + up * np.sin(angle), up * np.cos(angle) - east * np.sin(angle)
    bound = bounds_of(flux, length)
    for error, best in ((along, bound[:, 0]), (across, bound[:, 1])):
        # the robust scatter of 110 stars is itself known to 9 %
        assert 1.4826 * np.median(np.abs(error[ok] / best[ok])) < 1.3
        assert abs(np.median(error[ok])) < 0.01
    assert np.median(np.abs(found.trail_length_px[index[ok]] - length[ok])) < 0.1
    turned = (np.radians(found.trail_angle_deg[index[ok]]) - angle[ok] + np.pi / 2) % np.pi - np.pi / 2
    assert np.abs(turned).max() < 0.02


@pytest.mark.parametrize(("length_px", "pole"), [(30.0, (700.0, 1150.0)), (40.0, (-300.0, 500.0))])
def test_a_trail_that_bends_about_a_near_pole_keeps_its_middle(length_px, pole):
    """Straight lines fitted to these arcs lie 0.05 to 0.5 px towards the pole."""
    frame, x, y, _, length, _ = tripod(length_px, pole)
    found = detect(frame, gain_e_adu=1.0)
    ok, index = matched(found, x, y)
    away = np.hypot(x - pole[0], y - pole[1])
    inward = ((found.x_px[index] - x) * (pole[0] - x) + (found.y_px[index] - y) * (pole[1] - y)) / away
    bent = ok & (length**2 / 24 / away > 0.04)
    assert bent.sum() > 30
    bend = length**2 / 24 / away
    slope = (inward * bend)[bent].sum() / (bend**2)[bent].sum()  # 1 where the bend is left in
    assert abs(slope) < 0.15
    assert abs(np.median(inward[bent])) < 0.01


def test_the_covariance_says_along_from_across():
    frame, x, y, flux, length, angle = tripod(25.0)
    found = detect(frame, gain_e_adu=1.0)
    ok, index = matched(found, x, y)
    c, s = np.cos(angle), np.sin(angle)
    xx, yy, xy = found.sigma_x_px[index] ** 2, found.sigma_y_px[index] ** 2, found.covariance_xy_px2[index]
    along = np.sqrt(c * c * xx + 2 * c * s * xy + s * s * yy)
    across = np.sqrt(s * s * xx - 2 * c * s * xy + c * c * yy)
    bound = bounds_of(flux, length)
    assert np.median(along[ok] / bound[ok, 0]) == pytest.approx(1, abs=0.1)
    assert np.median(across[ok] / bound[ok, 1]) == pytest.approx(1, abs=0.1)
    assert np.median(along[ok] / across[ok]) > 2.5


def test_a_pole_in_the_frame_does_not_break_it():
    frame, x, y, _, length, _ = tripod(8.0, pole=(300.0, 300.0))
    found = detect(frame, gain_e_adu=1.0)
    assert found.trailed
    ok, _ = matched(found, x, y, 1.0)
    assert ok[length > 2].mean() > 0.95


def test_stars_that_did_not_trail_are_not_called_trailed():
    frame, *_ = tripod(0.05)
    found = detect(frame, gain_e_adu=1.0)
    assert not found.trailed
    assert (found.trail_length_px == 0).all()


def test_a_satellite_across_trails_is_no_row_of_stars():
    import cv2

    frame, x, y, *_ = tripod(15.0)
    line = np.zeros(SHAPE, np.float32)
    cv2.line(line, (0, 120), (1399, 800), 3000, 2, cv2.LINE_AA)
    found = detect(frame + line, gain_e_adu=1.0)
    assert found.trailed
    distance, _ = cKDTree(np.column_stack([x, y])).query(np.column_stack([found.x_px, found.y_px]))
    assert (distance > 3).sum() <= 5
    ok, _ = matched(found, x, y)
    assert ok.mean() > 0.9


def test_a_trail_cut_by_the_edge_has_no_middle_and_is_left_out():
    frame, *_ = tripod(40.0, pole=(700.0, 1e7))
    frame = frame.copy()
    stamp = trail_stamp(0.0, 0.0, 50_000, 40.0, 0.0, 27)
    frame[400:455, 0:38] += stamp[:, 17:].astype("float32")  # middle at x = 10: half of it is off the frame
    found = detect(frame, gain_e_adu=1.0)
    assert np.hypot(found.x_px - 10, found.y_px - 427).min() > 8
