"""The tangent plane: gnomonic offsets east and north of a direction, in arcseconds, and back.

Gnomonic projection as in Calabretta & Greisen 2002, section 5.1.3 (TAN), written with ICRS axes.
"""

from __future__ import annotations

import numpy as np

Values = np.ndarray | float
ARCSEC_PER_RADIAN = 206264.80624709636


def sky_to_plane(
    anchor_ra_deg: float, anchor_dec_deg: float, ra_deg: Values, dec_deg: Values
) -> tuple[np.ndarray, np.ndarray]:
    """Return offsets (east_arcsec, north_arcsec) of directions from an anchor; NaN beyond 90 degrees."""
    ra, dec = np.radians(np.asarray(ra_deg) - anchor_ra_deg), np.radians(dec_deg)
    sin0, cos0 = np.sin(np.radians(anchor_dec_deg)), np.cos(np.radians(anchor_dec_deg))
    depth = sin0 * np.sin(dec) + cos0 * np.cos(dec) * np.cos(ra)
    depth = np.where(depth > 1e-9, depth, np.nan)
    east = np.cos(dec) * np.sin(ra) / depth
    north = (cos0 * np.sin(dec) - sin0 * np.cos(dec) * np.cos(ra)) / depth
    return east * ARCSEC_PER_RADIAN, north * ARCSEC_PER_RADIAN


def plane_to_sky(
    anchor_ra_deg: float, anchor_dec_deg: float, east_arcsec: Values, north_arcsec: Values
) -> tuple[np.ndarray, np.ndarray]:
    """Return ICRS (ra_deg in 0..360, dec_deg) of offsets from an anchor."""
    east, north = np.asarray(east_arcsec) / ARCSEC_PER_RADIAN, np.asarray(north_arcsec) / ARCSEC_PER_RADIAN
    sin0, cos0 = np.sin(np.radians(anchor_dec_deg)), np.cos(np.radians(anchor_dec_deg))
    toward = cos0 - north * sin0
    ra_deg = (anchor_ra_deg + np.degrees(np.arctan2(east, toward))) % 360.0
    dec_deg = np.degrees(np.arctan2(sin0 + north * cos0, np.hypot(east, toward)))
    return ra_deg, dec_deg
