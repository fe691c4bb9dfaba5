"""Refraction over a wide field: stars are lifted before a camera is fitted, and what is told is without air again."""

from __future__ import annotations

import numpy as np
import pytest

from imaging.stars.air import air_over, fitted_wcs
from imaging.stars.camera import ARCSEC_RAD, Camera
from imaging.stars.catalogue import stars_near, vectors_of
from imaging.stars.detection import Detections
from imaging.stars.solve import Hint, solve_detections
from planner.sky.observer import Observer
from planner.sky.places import altaz

SITE = Observer("invented", 34.93, 32.87, 1420.0)
NOON = 8.55e8


def below_zenith(air, altitude_deg):
    """A direction at an altitude, toward the north of the sky or the south of it, whichever it is."""
    aside = np.cross(air.zenith, [0.0, 0.0, 1.0])
    aside = np.cross(aside / np.linalg.norm(aside), air.zenith)
    angle = np.radians(altitude_deg)
    return np.sin(angle) * air.zenith - np.cos(angle) * aside


def radec(vectors):
    x, y, z = np.moveaxis(vectors, -1, 0)
    return np.degrees(np.arctan2(y, x)) % 360, np.degrees(np.arctan2(z, np.hypot(x, y)))


@pytest.mark.parametrize("altitude_deg", [1.0, 5.0, 20.0, 60.0, 89.0])
def test_air_lifts_by_the_refraction_of_the_altitude_and_back(altitude_deg):
    air = air_over(SITE, NOON)
    here = below_zenith(air, altitude_deg)[None]
    lifted = air.lifted(here)
    seen = np.degrees(np.arcsin(lifted @ air.zenith))
    # altaz gives altitudes as seen, by another route: apparent places, polar motion, its own rotation
    refracted, _ = altaz(radec(here), SITE, np.array([NOON]))
    airless, _ = altaz(radec(here), Observer("", 34.93, 32.87, 1420.0, pressure_hpa=0.0), np.array([NOON]))
    assert (seen - altitude_deg) * 3600 == pytest.approx((refracted - airless) * 3600, abs=0.5)
    assert np.degrees(np.linalg.norm(air.unlifted(lifted) - here)) * 3.6e6 < 0.1  # mas


def test_no_air_is_no_air():
    assert air_over(None, NOON) is None
    assert air_over(Observer("", 34.93, 32.87, 1420.0, pressure_hpa=0.0), NOON) is None


def low_frame(rng, focal_mm, altitude_deg):
    """Stars over a frame of 36 x 24 mm (6 micrometre pixels) whose middle stands at an altitude."""
    air = air_over(SITE, NOON)
    width, height, focal = 6000, 4000, focal_mm / 6e-3
    axis = air.lifted(below_zenith(air, altitude_deg))
    up = air.zenith - (air.zenith @ axis) * axis
    up /= np.linalg.norm(up)
    camera = Camera(
        np.array([np.cross(axis, up), up, axis]),
        focal,
        (width - 1) / 2,
        (height - 1) / 2,
        np.hypot(width, height) / 2,
    )
    half = np.arctan(np.hypot(width, height) / 2 / focal)
    sky = stars_near(axis, half * 1.1, NOON)
    sky = sky.take(np.flatnonzero(sky.magnitude < (5.5 if focal_mm < 50 else 8.0)))
    x, y = camera.pixels(air.lifted(sky.vectors))
    seen = (x > 0) & (x < width) & (y > 0) & (y < height) & (sky.vectors @ air.zenith > 0.01)
    x, y, magnitude = x[seen], y[seen], sky.magnitude[seen]
    order = np.argsort(magnitude)
    n = order.size
    sigma = np.full(n, 0.05)
    detections = Detections(
        x_px=x[order] + rng.normal(0, 0.05, n),
        y_px=y[order] + rng.normal(0, 0.05, n),
        flux_adu=10 ** (0.4 * (18 - magnitude[order])),
        snr=np.full(n, 50.0),
        sigma_x_px=sigma,
        sigma_y_px=sigma,
        covariance_xy_px2=np.zeros(n),
        fwhm_px=np.full(n, 2.5),
        elongation=np.ones(n),
        saturated=np.zeros(n, bool),
        width_px=width,
        height_px=height,
        psf_fwhm_px=2.5,
        noise_adu=5.0,
    )
    return air, camera, detections


@pytest.mark.parametrize(("focal_mm", "altitude_deg"), [(35, 12.0), (135, 6.0)])
def test_a_wide_field_near_the_horizon_is_solved_to_its_centroids(focal_mm, altitude_deg):
    air, camera, found = low_frame(np.random.default_rng(1), focal_mm, altitude_deg)
    near = radec(air.unlifted(camera.axes[2]))
    hint = Hint((float(near[0]), float(near[1])), ARCSEC_RAD / camera.focal_px)
    lifted = solve_detections(found, NOON, "bottom", hint, air=air)
    assert lifted.rms_px < 0.1  # 0.05 px an axis
    # directions away from the stars themselves, low ones included
    x, y = np.meshgrid(np.linspace(0, 5999, 7), np.linspace(1500, 3999, 6))
    true = air.unlifted(camera.vectors(x.ravel(), y.ravel()))
    back = np.column_stack(lifted.sky_to_pixel(*radec(true)))
    assert np.abs(back - np.column_stack([x.ravel(), y.ravel()])).max() < 0.5
    ra, dec = lifted.pixel_to_sky(x.ravel(), y.ravel())
    assert np.linalg.norm(vectors_of(ra, dec) - true, axis=1).max() * camera.focal_px < 0.5


def test_the_header_holds_the_same_map_as_the_solution():
    air, camera, _ = low_frame(np.random.default_rng(2), 135, 12.0)
    wcs = fitted_wcs(
        lambda x, y: air.unlifted(camera.vectors(x, y)),
        (camera.axis_x_px, camera.axis_y_px),
        (6000, 4000),
        "TAN",
    )
    x, y = (axis.ravel() for axis in np.meshgrid(np.linspace(0, 5999, 9), np.linspace(0, 3999, 9)))
    ra, dec = wcs.all_pix2world(x, y, 0)
    away = np.linalg.norm(vectors_of(ra, dec) - air.unlifted(camera.vectors(x, y)), axis=1) * camera.focal_px
    assert away.max() < 0.1
    back = np.column_stack(wcs.all_world2pix(ra, dec, 0))
    assert np.abs(back - np.column_stack([x, y])).max() < 0.01
