"""How far the picture moves during an exposure: the body's own motion, the mount's rate, the turning of the field."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from planner.sequence.models import Rig
from planner.sky.observer import Observer

# What each tracking rate moves eastward among the stars at the equator, arcseconds a second: the mean Sun's
# 360 degrees in 365.2422 days, the mean Moon's in 27.32158 days, and a tripod's sidereal turn (86164.0905 s).
MOUNT_RATE_ARCSEC_S = {
    "sidereal": 0.0,
    "solar": 1296000 / (365.2422 * 86400),
    "lunar": 1296000 / (27.32158 * 86400),
    "none": 1296000 / 86164.0905,
}


@dataclass(frozen=True)
class Motion:
    """Motion of the picture at n times, arrays of shape (n,): of the target in the frame, and of the field's turn."""

    target_arcsec_s: np.ndarray
    rotation_deg_s: np.ndarray

    def trail_px(self, rig: Rig, exposure_s: np.ndarray | float, corner: bool = False) -> np.ndarray:
        """Return the trail in one exposure, in pixels; in the corner of the frame the field's turn adds to it."""
        scale = rig.scale_arcsec_px
        half_diagonal_px = np.hypot(rig.sensor.width_px, rig.sensor.height_px) / 2
        turn_px = np.radians(np.abs(self.rotation_deg_s)) * half_diagonal_px if corner else 0.0
        return (self.target_arcsec_s / scale + turn_px) * exposure_s


def motion(
    rig: Rig, observer: Observer, tracking: str, ra_deg: np.ndarray, dec_deg: np.ndarray, tt_s: np.ndarray
) -> Motion:
    """Return the motion of a moving place under a tracking rate; needs at least two times."""
    rates = place_rate_arcsec_s(ra_deg, dec_deg, tt_s)
    return motion_at_rates(rig, observer, tracking, (ra_deg, dec_deg), rates, tt_s)


def motion_at_rates(
    rig: Rig,
    observer: Observer,
    tracking: str,
    place_deg: tuple[np.ndarray, np.ndarray],
    rate_arcsec_s: tuple[np.ndarray, np.ndarray],
    tt_s: np.ndarray,
) -> Motion:
    """Return the motion of a place (ra, dec) that moves at a rate (east, north) among the stars, under a tracking rate.

    A periodic error that nothing guides out adds the steepest slope of its sine. An alt-azimuth mount is taken to
    follow its target and lets the field turn at the rate of the zenith's position angle.
    """
    (ra_deg, dec_deg), (east, north) = place_deg, rate_arcsec_s
    cos_dec = np.cos(np.radians(dec_deg))
    mount = rig.mount
    if mount.kind == "altazimuth":
        east, north = np.zeros_like(east), np.zeros_like(north)
    else:
        east = east - MOUNT_RATE_ARCSEC_S[tracking] * cos_dec
    guided = rig.guiding.on != "none" or mount.kind == "fixed"
    slope = 0.0 if guided else np.pi * mount.periodic_error_arcsec / mount.periodic_error_period_s
    speed = np.hypot(np.abs(east) + slope * cos_dec, north)
    turn = np.zeros_like(speed)
    if mount.kind == "altazimuth":
        turn = field_rotation_deg_s(observer, ra_deg, dec_deg, tt_s)
    return Motion(speed, turn)


def place_rate_arcsec_s(
    ra_deg: np.ndarray, dec_deg: np.ndarray, tt_s: np.ndarray
) -> tuple[np.ndarray, np.ndarray]:
    """Return the motion (east, north) of a place among the stars, by differences of the times given."""
    ra = np.unwrap(np.radians(ra_deg))
    east = np.gradient(ra, tt_s) * np.cos(np.radians(dec_deg))
    north = np.gradient(np.radians(dec_deg), tt_s)
    return np.degrees(east) * 3600, np.degrees(north) * 3600


def field_rotation_deg_s(
    observer: Observer, ra_deg: np.ndarray, dec_deg: np.ndarray, tt_s: np.ndarray, step_s: float = 10.0
) -> np.ndarray:
    """Return how fast the field turns in a frame that keeps its angle to the zenith, degrees a second."""
    from planner.sky.places import zenith_pa_deg

    before = zenith_pa_deg(ra_deg, dec_deg, observer, np.asarray(tt_s) - step_s)
    after = zenith_pa_deg(ra_deg, dec_deg, observer, np.asarray(tt_s) + step_s)
    return ((after - before + 180.0) % 360.0 - 180.0) / (2 * step_s)


def hour_angle_deg(
    observer: Observer, ra_deg: np.ndarray, dec_deg: np.ndarray, tt_s: np.ndarray
) -> np.ndarray:
    """Return the hour angle, negative east of the meridian, in (-180, 180]."""
    from planner.sky.observer import local_axes
    from planner.sky.places import unit_vector

    axes = local_axes(observer, np.atleast_1d(tt_s))
    east, north, up = np.einsum("nij,jn->in", axes, unit_vector(ra_deg, dec_deg))
    latitude = np.radians(observer.latitude_deg)
    return np.degrees(np.arctan2(-east, up * np.cos(latitude) - north * np.sin(latitude)))
