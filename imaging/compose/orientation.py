"""Which way is up in a picture."""

from __future__ import annotations

from typing import TYPE_CHECKING

import numpy as np

from imaging.compose.choices import ORIENTATIONS
from imaging.compose.plane import sky_to_plane
from planner.errors import InputError

if TYPE_CHECKING:
    from imaging.compose.material import Material

# Mean obliquity of the ecliptic at J2000.0: IAU 2006, Capitaine et al. 2003, A&A 412, 567
_OBLIQUITY_DEG = 84381.406 / 3600.0
ECLIPTIC_POLE_RA_DEG, ECLIPTIC_POLE_DEC_DEG = 270.0, 90.0 - _OBLIQUITY_DEG


def position_angle_deg(ra_deg: float, dec_deg: float, to_ra_deg: float, to_dec_deg: float) -> float:
    """Return the position angle in 0..360, ICRS north through east, of the great circle to another direction."""
    ra = np.radians(to_ra_deg - ra_deg)
    here, there = np.radians(dec_deg), np.radians(to_dec_deg)
    east = np.sin(ra) * np.cos(there)
    north = np.cos(here) * np.sin(there) - np.sin(here) * np.cos(there) * np.cos(ra)
    return float(np.degrees(np.arctan2(east, north)) % 360.0)


def up_pa_deg(
    material: Material, orientation: str, anchor_deg: tuple[float, float], tt_s: float, on_disc: bool
) -> float:
    """Return the position angle of the picture's up direction.

    `north`: ICRS north up. `zenith`: the zenith at `tt_s` up. `ecliptic`: the ecliptic level, its north up.
    `track`: the target moves level, to the right unless that would put north down. Raises InputError.
    """
    if orientation == "north":
        return 0.0
    if orientation == "ecliptic":
        return position_angle_deg(*anchor_deg, ECLIPTIC_POLE_RA_DEG, ECLIPTIC_POLE_DEC_DEG)
    if orientation == "zenith":
        zenith = float(material.geometry_at(np.array([tt_s])).zenith_pa_deg[0])
        if not np.isfinite(zenith):
            raise InputError("--up zenith: the plan has no site that a zenith could belong to")
        return zenith % 360.0
    if orientation == "track":
        return _level_track_pa_deg(material, anchor_deg, on_disc)
    raise InputError(f"--up: found {orientation!r}; allowed are {', '.join(ORIENTATIONS)}")


def _level_track_pa_deg(material: Material, anchor_deg: tuple[float, float], on_disc: bool) -> float:
    east, north = [], []
    for frame in material.frames:
        anchor = (frame.reference_ra_deg, frame.reference_dec_deg) if on_disc else anchor_deg
        e, n = sky_to_plane(*anchor, frame.predicted_ra_deg, frame.predicted_dec_deg)
        east.append(float(e))
        north.append(float(n))
    if len(east) < 2:
        return 0.0
    # the long axis of the path: for a straight track its direction, for a loop its length
    offsets = np.column_stack([east, north])
    _, _, axes = np.linalg.svd(offsets - offsets.mean(axis=0), full_matrices=False)
    along = np.degrees(np.arctan2(axes[0, 0], axes[0, 1]))
    up = (along + 90.0) % 180.0  # of the two directions across the path ...
    return float(up if up < 90.0 else up + 180.0)  # ... the one nearer to north
