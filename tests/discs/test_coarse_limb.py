"""A star at the Moon's bright limb on coarse pixels: in its place with a true error, or not placed."""

from __future__ import annotations

import numpy as np
import pytest

from imaging.discs.limb import fit_limb
from imaging.discs.planet import Body, planet_beside_moon
from imaging.frames.render_discs import Ball, draw_moon
from imaging.frames.render_light import PointSpread
from imaging.frames.render_pointing import Pointing, unit_vector
from imaging.frames.render_stars import draw_points
from planner.errors import NoSolutionError

SCALE, RADIUS, LIT_PA, PHASE = 0.785, 930.0, 260.0, 60.0
GAIN_E_ADU = 12.8


@pytest.fixture(scope="module")
def bright_limb():
    """The Moon's bright limb on pixels of 0.785" (electrons), where its middle is, and the point spread."""
    pointing = Pointing(unit_vector(80.0, 20.0), 0.0, 1, SCALE, 1200, 1560)
    turn = np.radians(LIT_PA)
    east, north = -0.78 * RADIUS * np.sin(turn) / 3600, -0.78 * RADIUS * np.cos(turn) / 3600
    vector = unit_vector(80.0 + east / np.cos(np.radians(20.0)), 20.0 + north)
    moon = Ball("moon", vector, RADIUS, 0.0, 0.0, PHASE, LIT_PA, -10.0)
    spread = PointSpread.seeing(2.6 / SCALE)
    rate = np.full((1560, 1200), 2.0, np.float32)
    draw_moon(rate, pointing, moon, 6e10, spread, None)
    return rate, tuple(float(v) for v in pointing.project(vector)), spread


def placed(bright_limb, binning, gap_arcsec, electrons, seed):
    """Return where the star is and where it is found (None: not placed), pixels summed `binning` x `binning`."""
    rate, middle, spread = bright_limb
    generator = np.random.default_rng(seed)
    turn = np.radians(90.0 + LIT_PA + generator.uniform(-40, 40))
    away = (RADIUS + gap_arcsec) / SCALE
    x, y = middle[0] + away * np.cos(turn), middle[1] + away * np.sin(turn)
    light = rate.copy()
    if electrons:
        draw_points(light, np.array([x]), np.array([y]), np.array([electrons]), spread, 1e-3)
    rows, columns = light.shape[0] // binning, light.shape[1] // binning
    summed = light[: rows * binning, : columns * binning].reshape(rows, binning, columns, binning).sum((1, 3))
    electrons_seen = generator.poisson(summed) + generator.normal(0, 2.5, summed.shape)
    image = np.floor(electrons_seen / GAIN_E_ADU + 200).astype(np.float32)
    x, y = (x + 0.5) / binning - 0.5, (y + 0.5) / binning - 0.5
    radius = RADIUS / SCALE / binning
    limb = fit_limb(
        image,
        radius,
        0.005 * radius,
        lit_angle_deg=90 + LIT_PA,
        lit_half_deg=80.0,
        phase_angle_deg=PHASE,
    )
    body = Body("star", 0.05)
    try:
        return (x, y), planet_beside_moon(
            image, x + 1.5, y - 1, body, limb, 8.0, saturation=62700.0, gain_e_adu=GAIN_E_ADU
        )
    except NoSolutionError:
        return (x, y), None


def pull(place, truth):
    """Return the error in its stated sigmas, one coordinate."""
    off = np.array([place.x_px - truth[0], place.y_px - truth[1]])
    return float(np.sqrt(off @ np.linalg.solve(place.covariance, off) / 2))


@pytest.mark.parametrize("binning", [2, 3, 4])
@pytest.mark.parametrize("gap_arcsec", [0.5, 1.5, 3.0, 6.0, 15.0])
def test_star_at_the_bright_limb_is_placed_to_a_tenth_of_a_pixel(bright_limb, binning, gap_arcsec):
    truth, place = placed(bright_limb, binning, gap_arcsec, 1.5e5, 7)
    assert place is not None
    assert np.hypot(place.x_px - truth[0], place.y_px - truth[1]) < 0.1
    assert pull(place, truth) < 4


@pytest.mark.parametrize("binning", [2, 3, 4])
def test_star_behind_the_bright_limb_is_not_placed(bright_limb, binning):
    for seed in range(3):
        assert placed(bright_limb, binning, 1.0, 0.0, seed)[1] is None


@pytest.mark.slow
@pytest.mark.parametrize("binning", [2, 3, 4])
def test_no_place_beside_the_limb_is_far_off_and_pulls_are_one(bright_limb, binning):
    pulls = []
    # the faintest are lost within 3" of the limb, and some of the next within 1"
    for electrons, least, least_near in ((4e3, 7, 0), (2e4, 10, 7), (1.5e5, 10, 10)):
        for gap_arcsec in (0.5, 1.5, 3.0, 5.0, 8.0, 30.0):
            found = [placed(bright_limb, binning, gap_arcsec, electrons, seed) for seed in range(10)]
            here = [pull(place, truth) for truth, place in found if place is not None]
            assert len(here) >= (least if gap_arcsec >= 3 else least_near)
            pulls += here
    assert max(pulls) < 5
    assert np.sqrt(np.mean(np.square(pulls))) < 1.2
