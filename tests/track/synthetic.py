"""A chord across a disc and a path among stars, made of straight lines: no ephemeris, so that a fit is tested alone."""

from __future__ import annotations

import numpy as np

from imaging.track.path import PredictedPath
from imaging.track.sightings import Sightings, among_stars
from planner.events.family import Geometry
from planner.sky.discs import SkyDisc

T0 = 1.0e9
SUN_RADIUS_ARCSEC = 970.0


def disc(name, ra_deg, dec_deg, semidiameter):
    n = np.size(ra_deg)
    fill = np.ones(n)
    return SkyDisc(
        name, ra_deg, dec_deg, 1.5e8 * fill, semidiameter * fill, 0 * fill, 0 * fill, 0 * fill, 0 * fill, fill
    )


def chord_path(speed_arcsec_s=0.098, pa_deg=290.0, least_arcsec=570.0, bend_arcsec_s2=2e-8):
    """Mercury over the Sun: least distance, speed, and a little curvature as parallax gives it."""
    pa = np.radians(pa_deg)
    along = np.array([np.sin(pa), np.cos(pa)])
    aside = np.array([np.cos(pa), -np.sin(pa)])

    def geometry(tt_s):
        t = tt_s - T0
        place = least_arcsec * aside + np.outer(t * speed_arcsec_s, along)
        place = place + np.outer(bend_arcsec_s2 * t**2, aside)
        sun = disc("sun", np.full_like(t, 0.0), np.full_like(t, 0.0), SUN_RADIUS_ARCSEC)
        x, y = np.tan(place[:, 0] / 206264.80624709636), np.tan(place[:, 1] / 206264.80624709636)
        ra, dec = np.degrees(np.arctan(x)), np.degrees(np.arctan(y * np.cos(np.arctan(x))))
        mercury = disc("mercury", ra, dec, 5.0)
        nothing = np.full_like(t, np.nan)
        return Geometry(
            tt_s, {"sun": sun, "mercury": mercury}, "mercury", "sun", nothing, nothing, 0 * t, 0 * t + 30
        )

    return PredictedPath(geometry, None)


def stars_path(speed_arcsec_s=0.014):
    """A planet going round a small loop among the stars."""

    def geometry(tt_s):
        t = tt_s - T0
        ra = 150.0 - t * speed_arcsec_s / 3600.0
        dec = 12.0 + 0.3 * np.sin(t / 30 / 86400.0)
        mars = disc("mars", ra, dec, 7.0)
        nothing = np.full_like(t, np.nan)
        return Geometry(tt_s, {"mars": mars}, "mars", "stars", nothing, nothing, 0 * t, 0 * t - 30)

    return PredictedPath(geometry, None)


def disc_sightings(
    path,
    true_tt_s,
    rng,
    clock_s=0.0,
    rotation_deg=0.0,
    scale=1.0,
    sigma_arcsec=0.05,
    jitter_arcsec=0.0,
    exposure_s=0.001,
    scale_sigma=2e-5,
    drift=0.0,
    mirrored=False,
):
    """Frames as a camera turned by `rotation_deg` and of a scale `scale` times the nominal would give them."""
    from imaging.track.fit import turn

    n = len(true_tt_s)
    expected = path.at(true_tt_s)
    place = turn(np.column_stack([expected.east_arcsec, expected.north_arcsec]), -np.radians(rotation_deg))
    place = place / scale + rng.normal(0, np.hypot(sigma_arcsec, jitter_arcsec), (n, 2))
    if mirrored:
        place[:, 0] *= -1
    covariance = np.tile(np.eye(2) * sigma_arcsec**2, (n, 1, 1))
    stamped = true_tt_s + clock_s + drift * (true_tt_s - true_tt_s.mean())
    return Sightings(
        stamped,
        np.full(n, exposure_s),
        place[:, 0],
        place[:, 1],
        covariance,
        np.log(scale) + rng.normal(0, scale_sigma, n),
        np.full(n, scale_sigma),
    )


def star_sightings(path, true_tt_s, rng, clock_s=0.0, sigma_arcsec=0.5, exposure_s=30.0):
    n = len(true_tt_s)
    expected = path.at(true_tt_s)
    error = rng.normal(0, sigma_arcsec, (n, 2)) / 3600.0
    dec = expected.dec_deg + error[:, 1]
    ra = expected.ra_deg + error[:, 0] / np.cos(np.radians(dec))
    covariance = np.tile(np.eye(2) * sigma_arcsec**2, (n, 1, 1))
    return among_stars(true_tt_s + clock_s, np.full(n, exposure_s), ra, dec, covariance)
