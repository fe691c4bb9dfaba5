"""A frame from a tripod that stood still points where it pointed in the middle of its exposure."""

from __future__ import annotations

import numpy as np
import pytest
from astropy.wcs import WCS
from scipy.special import erf

from imaging.stars.detection import detect
from imaging.stars.solve import Hint, solve_detections
from planner.sky.stars import stars_in_field

SHAPE, SCALE, TT_S = (800, 1200), 60.0, 27 * 365.25 * 86400.0
SIDEREAL_ARCSEC_S = 15.041


def tripod_frame(ra_deg, dec_deg, exposure_s, seed=1, fwhm=2.4):
    """A frame whose camera pointed at (ra, dec) at mid-exposure while the sky turned: own projection, 7 points a px."""
    wcs = WCS(naxis=2)
    wcs.wcs.ctype, wcs.wcs.crval = ["RA---TAN", "DEC--TAN"], [ra_deg, dec_deg]
    wcs.wcs.crpix = [(SHAPE[1] + 1) / 2, (SHAPE[0] + 1) / 2]
    turn = np.radians(25.0)
    wcs.wcs.cd = SCALE / 3600 * np.array([[-np.cos(turn), np.sin(turn)], [np.sin(turn), np.cos(turn)]])
    stars = stars_in_field(ra_deg, dec_deg, 14.0, TT_S, 8.0)
    sky_turn = SIDEREAL_ARCSEC_S * exposure_s / 3600  # degrees of right ascension
    image, sigma = np.full(SHAPE, 300.0), fwhm / 2.3548
    steps = int(7 * SIDEREAL_ARCSEC_S * exposure_s / SCALE) + 7
    # the sky moves west over a camera that stands still: a star's right ascension falls
    along = 0.5 - (np.arange(steps) + 0.5) / steps
    for ra, dec, magnitude in zip(stars.ra_deg, stars.dec_deg, stars.magnitude, strict=True):
        x, y = wcs.all_world2pix(ra + along * sky_turn, np.full(steps, dec), 0)
        if not (-50 < x.mean() < SHAPE[1] + 50 and -50 < y.mean() < SHAPE[0] + 50):
            continue
        light = 10 ** (-0.4 * (magnitude - 19.5))
        rows = np.arange(max(int(y.min()) - 8, 0), min(int(y.max()) + 10, SHAPE[0]))
        columns = np.arange(max(int(x.min()) - 8, 0), min(int(x.max()) + 10, SHAPE[1]))
        if not len(rows) or not len(columns):
            continue
        fx, fy = (
            (
                erf((span + 0.5 - at[:, None]) / sigma / 2**0.5)
                - erf((span - 0.5 - at[:, None]) / sigma / 2**0.5)
            )
            / 2
            for span, at in ((columns, x), (rows, y))
        )
        image[rows[0] : rows[-1] + 1, columns[0] : columns[-1] + 1] += light / steps * fy.T @ fx
    rng = np.random.default_rng(seed)
    frame = (rng.poisson(image) + rng.normal(0, 4, SHAPE)).astype("float32")
    return np.minimum(frame, 60_000), wcs


@pytest.mark.parametrize(
    ("dec_deg", "exposure_s"), [(5.0, 30.0), pytest.param(62.0, 60.0, marks=pytest.mark.slow)]
)
def test_it_is_solved_for_the_middle_of_the_exposure(dec_deg, exposure_s):
    ra_deg = 95.0
    frame, wcs = tripod_frame(ra_deg, dec_deg, exposure_s)
    found = detect(frame, saturation_adu=60_000.0, gain_e_adu=1.0)
    assert found.trailed
    middle = SIDEREAL_ARCSEC_S * exposure_s * np.cos(np.radians(dec_deg)) / SCALE
    assert np.median(found.trail_length_px) == pytest.approx(middle, rel=0.1)
    solution = solve_detections(found, TT_S, "bottom", Hint((ra_deg + 2, dec_deg - 1), SCALE * 1.03))
    assert len(solution.matched.x_px) > 60
    assert solution.rms_px < 0.4
    x, y = np.meshgrid(np.linspace(100, SHAPE[1] - 100, 7), np.linspace(100, SHAPE[0] - 100, 5))
    back = np.array(solution.sky_to_pixel(*wcs.all_pix2world(x.ravel(), y.ravel(), 0)))
    away = np.hypot(back[0] - x.ravel(), back[1] - y.ravel())
    # 0.1 px is 0.4 s of the sky's motion here; an end taken for the middle would be off by half a trail
    assert np.median(away) < 0.1
    assert away.max() < 0.4
