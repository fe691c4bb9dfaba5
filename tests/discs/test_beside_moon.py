"""A planet beside the Moon's bright limb: placed as soon as its light is clear of it; nothing when there is none."""

from __future__ import annotations

import numpy as np
import pytest

from imaging.discs.limb import fit_limb
from imaging.discs.planet import Body, planet_beside_moon
from imaging.frames.render_discs import Ball, draw_ball, draw_moon
from imaging.frames.render_light import PointSpread
from imaging.frames.render_pointing import Pointing, unit_vector
from planner.errors import NoSolutionError
from tests.discs.simulated import recorded

SCALE, RADIUS, LIT_PA = 1.6, 930.0, 260.0


@pytest.fixture(scope="module")
def bright_limb():
    """The Moon at 60 degrees of phase, its bright limb in the frame, and the fit of it."""
    pointing = Pointing(unit_vector(80.0, 20.0), 0.0, 1, SCALE, 700, 900)
    turn = np.radians(LIT_PA)
    east, north = -0.75 * RADIUS * np.sin(turn) / 3600, -0.75 * RADIUS * np.cos(turn) / 3600
    ball = Ball(
        "moon", unit_vector(80.0 + east / np.cos(np.radians(20.0)), 20.0 + north),
        RADIUS, 0.0, 0.0, 60.0, LIT_PA, -10.0,
    )  # fmt: skip
    spread = PointSpread.seeing(2.6 / SCALE)
    rate = np.full((900, 700), 40.0, np.float32)
    draw_moon(rate, pointing, ball, 3e10, spread, None)
    return pointing, ball, spread, rate


def framed(bright_limb, gap_arcsec, electrons, seed):
    """A frame with a planet of 1.9" in radius this far off the bright limb, its place, and the limb fitted."""
    pointing, moon, spread, rate = bright_limb
    turn = np.radians(LIT_PA + 25 * (seed - 1))
    away = (RADIUS + gap_arcsec) / 3600
    ra, dec = np.degrees(np.arctan2(moon.vector[1], moon.vector[0])), np.degrees(np.arcsin(moon.vector[2]))
    ra, dec = ra + away * np.sin(turn) / np.cos(np.radians(dec)), dec + away * np.cos(turn)
    planet = Ball("uranus", unit_vector(ra, dec), 1.9, 0.02, 0.0, 2.0, LIT_PA, 5.7)
    light = rate.copy()
    if electrons:
        draw_ball(light, pointing, planet, electrons, spread, None, moon)
    image = recorded(light, np.random.default_rng(seed))
    x, y = (float(v) for v in pointing.project(planet.vector))
    limb = fit_limb(
        image, RADIUS / SCALE, 0.3, lit_angle_deg=90.0 + LIT_PA, lit_half_deg=80.0, phase_angle_deg=60.0
    )
    return image, (x, y), limb


@pytest.mark.parametrize("gap_arcsec", [7.0, 15.0, 60.0])
def test_planet_is_placed_as_soon_as_it_is_clear_of_the_bright_limb(bright_limb, gap_arcsec):
    for seed in range(3):
        image, (x, y), limb = framed(bright_limb, gap_arcsec, 4000.0, seed)
        body = Body("uranus", 1.9 / SCALE, 2.0, 90.0 + LIT_PA)
        place = planet_beside_moon(image, x + 1.5, y - 1, body, limb, search_px=9.0, gain_e_adu=1.0)
        away = np.hypot(place.x_px - x, place.y_px - y)
        assert away < 0.25
        assert away < 4 * np.hypot(*place.sigma_px)


@pytest.mark.parametrize("gap_arcsec", [3.0, 7.0, 15.0, 60.0])
def test_nothing_is_placed_beside_the_limb_when_no_planet_is_there(bright_limb, gap_arcsec):
    for seed in range(3):
        image, (x, y), limb = framed(bright_limb, gap_arcsec, 0.0, seed)
        with pytest.raises(NoSolutionError):
            planet_beside_moon(image, x, y, Body("uranus", 1.9 / SCALE), limb, search_px=9.0, gain_e_adu=1.0)
