"""A planet that trailed is placed in the middle of its trail, burnt out or not, and says how well."""

from __future__ import annotations

import numpy as np
import pytest

from imaging.discs.lit import Body
from imaging.discs.on_trail import planet_on_trail
from imaging.stars.detection import detect
from planner.errors import NoSolutionError
from tests.stars.test_trails import SHAPE, trail_stamp, tripod

LENGTH, ANGLE = 12.0, 0.0
FULL = 20_000.0


def with_planet(flux, x, y, seed=3):
    """Trailed stars, all along x, and a planet among them at (x, y), its light cut at the full well."""
    frame, *_ = tripod(LENGTH, pole=(700.0, 1e7), seed=seed)
    frame = frame.astype(float)
    column, row, reach = round(x), round(y), 40
    light = trail_stamp(x - column, y - row, flux, LENGTH, ANGLE, reach)
    frame[row - reach : row + reach + 1, column - reach : column + reach + 1] += light + np.sqrt(
        light
    ) * np.random.default_rng(seed).normal(size=light.shape)
    return np.minimum(frame, FULL).astype("float32")


@pytest.mark.parametrize("flux", [2e5, 3e6])
def test_it_is_in_the_middle_of_its_trail_to_its_stated_error(flux):
    pulls = []
    for seed in range(3):
        x, y = 702.3 + 0.21 * seed, 498.6 + 0.37 * seed
        found = detect(with_planet(flux, x, y, seed), saturation_adu=FULL, gain_e_adu=1.0)
        place = planet_on_trail(found, x + 2, y - 2, search_px=10.0)
        pulls += [
            (place.x_px - x) / place.covariance[0, 0] ** 0.5,
            (place.y_px - y) / place.covariance[1, 1] ** 0.5,
        ]
        assert np.hypot(place.x_px - x, place.y_px - y) < 0.1
        assert any("trail" in note for note in place.notes)
    assert np.sqrt(np.mean(np.square(pulls))) < 2.5


def test_the_centre_of_figure_is_not_the_centre_of_light():
    found = detect(with_planet(2e5, 700.0, 500.0), saturation_adu=FULL, gain_e_adu=1.0)
    body = Body("venus", radius_px=1.5, phase_angle_deg=90.0, lit_angle_deg=0.0)
    place = planet_on_trail(found, 700.0, 500.0, body)
    assert place.light_x_px - place.x_px == pytest.approx(body.light_offset_px()[0])
    assert place.light_x_px == pytest.approx(700.0, abs=0.1)


def test_what_has_no_place_in_trails_says_so():
    found = detect(with_planet(2e5, 700.0, 500.0), saturation_adu=FULL, gain_e_adu=1.0)
    with pytest.raises(NoSolutionError, match="no trail within"):
        planet_on_trail(found, 5.0, SHAPE[0] - 5.0, search_px=4.0)
    with pytest.raises(NoSolutionError, match="radius has no place"):
        planet_on_trail(found, 700.0, 500.0, Body("jupiter", radius_px=20.0))
