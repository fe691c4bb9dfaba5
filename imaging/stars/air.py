"""The air over a camera: catalogue stars are lifted toward the zenith before a camera is fitted to them.

Without it a plate has to take refraction for a distortion of the lens: its linear part goes into the plate's affine
terms, but over a wide field near the horizon what is left is tens of arcseconds, and it moves from frame to frame.
"""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass, replace
from typing import TYPE_CHECKING

import numpy as np

from imaging.stars.camera import ARCSEC_RAD, inverse_sip, monomials, project

if TYPE_CHECKING:
    from astropy.wcs import WCS

    from imaging.stars.refine import Sky
    from planner.sky.observer import Observer

LOWEST_DEG = -2.5  # below it refraction is not defined, and nothing is seen anyway
_WCS_ORDER = 7


@dataclass(frozen=True)
class Air:
    """The refracting air above an observer at one instant. `zenith`: geodetic, unit vector (3,) on ICRS axes."""

    zenith: np.ndarray
    observer: Observer

    def lifted(self, vectors: np.ndarray) -> np.ndarray:
        """Return where directions (..., 3) are seen; unit vectors in, unit vectors out."""
        from planner.sky.refraction import refraction_arcsec

        height = vectors @ self.zenith
        altitude_deg = np.degrees(np.arcsin(np.clip(height, -1.0, 1.0)))
        lift = refraction_arcsec(np.maximum(altitude_deg, LOWEST_DEG), self.observer) / ARCSEC_RAD
        toward = self.zenith - height[..., None] * vectors
        toward /= np.maximum(np.linalg.norm(toward, axis=-1), 1e-12)[..., None]
        return np.cos(lift)[..., None] * vectors + np.sin(lift)[..., None] * toward

    def unlifted(self, vectors: np.ndarray) -> np.ndarray:
        """Return where light seen in directions (..., 3) comes from: undoes `lifted` to 0.1 mas above the horizon."""
        guess = vectors
        for _ in range(8):
            guess = guess + (vectors - self.lifted(guess))
            guess = guess / np.linalg.norm(guess, axis=-1)[..., None]
        return guess

    def over(self, sky: Sky) -> Sky:
        """Return catalogue stars where they are seen."""
        return replace(sky, vectors=self.lifted(sky.vectors))


def air_over(observer: Observer | None, tt_s: float) -> Air | None:
    """Return the air over an observer at an instant; None where there is none."""
    if observer is None or observer.pressure_here_hpa == 0.0:
        return None
    from planner.sky.observer import local_axes

    return Air(local_axes(observer, np.array([tt_s]))[0, 2], observer)


def fitted_wcs(
    vectors_at: Callable[[np.ndarray, np.ndarray], np.ndarray],
    axis_px: tuple[float, float],
    size_px: tuple[int, int],
    projection: str,
) -> WCS:
    """Return a TAN-SIP (or ARC-SIP) header of any smooth map of pixels to ICRS unit vectors, fitted on a grid.

    `axis_px`: where its tangent point lies; `size_px`: (width, height). What refraction makes near the horizon is
    no polynomial: below 5 degrees of altitude a wide field is off by up to a pixel in the header alone.
    """
    from astropy.wcs import WCS, Sip

    width, height = size_px
    half = float(np.hypot(width, height) / 2)
    pole = vectors_at(np.array([axis_px[0]]), np.array([axis_px[1]]))[0]
    ra, dec = np.arctan2(pole[1], pole[0]), np.arcsin(np.clip(pole[2], -1, 1))
    east = np.array([-np.sin(ra), np.cos(ra), 0.0])
    frame = np.array([east, np.cross(pole, east), pole])
    x, y = np.meshgrid(np.linspace(0, width - 1, 41), np.linspace(0, height - 1, 41))
    u, v = (x.ravel() - axis_px[0]) / half, (y.ravel() - axis_px[1]) / half
    plane = np.array(project(vectors_at(x.ravel(), y.ravel()) @ frame.T, np.degrees(1.0), projection))
    terms = tuple((n - q, q) for n in range(1, _WCS_ORDER + 1) for q in range(n + 1))
    known = np.isfinite(plane).all(axis=0)
    found = np.linalg.lstsq(monomials(u[known], v[known], terms).T, plane[:, known].T, rcond=None)[0].T
    linear = found[:, :2]
    higher = np.linalg.solve(linear, found[:, 2:])
    forward = np.zeros((2, _WCS_ORDER + 1, _WCS_ORDER + 1))
    for (p, q), value in zip(terms[2:], higher.T, strict=True):
        forward[:, p, q] = value * half ** (1 - p - q)
    wcs = WCS(naxis=2)
    wcs.wcs.ctype = [f"RA---{projection}-SIP", f"DEC--{projection}-SIP"]
    wcs.wcs.cunit = ["deg", "deg"]
    wcs.wcs.crpix = [axis_px[0] + 1, axis_px[1] + 1]
    wcs.wcs.crval = [np.degrees(ra) % 360, np.degrees(dec)]
    wcs.wcs.cd = linear / half
    wcs.wcs.radesys = "ICRS"
    wcs.pixel_shape = size_px
    back = inverse_sip(forward, _WCS_ORDER, axis_px, half, size_px)
    wcs.sip = Sip(forward[0], forward[1], back[0], back[1], wcs.wcs.crpix)
    wcs.wcs.set()
    return wcs
