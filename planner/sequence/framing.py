"""Where the camera points: what fits the field, and how the frame lies on the sky."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from planner.sequence.models import Rig

MARGIN = 0.12  # of the field's width and height kept clear at each edge; common practice, no source


@dataclass(frozen=True)
class Field:
    """The field of a camera on the tangent plane: half sides in arcseconds, `rotation_deg` of its up direction."""

    half_width_arcsec: float
    half_height_arcsec: float
    rotation_deg: float
    parity: int = 1

    def along(self, east_arcsec: np.ndarray, north_arcsec: np.ndarray) -> tuple[np.ndarray, np.ndarray]:
        """Return (right, up) in arcseconds of offsets on the sky."""
        sin, cos = np.sin(np.radians(self.rotation_deg)), np.cos(np.radians(self.rotation_deg))
        up = east_arcsec * sin + north_arcsec * cos
        right = (-east_arcsec * cos + north_arcsec * sin) * self.parity
        return right, up

    def on_sky(self, right_arcsec: np.ndarray, up_arcsec: np.ndarray) -> tuple[np.ndarray, np.ndarray]:
        """Return (east, north) in arcseconds of offsets in the frame: the inverse of `along`."""
        sin, cos = np.sin(np.radians(self.rotation_deg)), np.cos(np.radians(self.rotation_deg))
        right = np.asarray(right_arcsec) * self.parity
        return up_arcsec * sin - right * cos, up_arcsec * cos + right * sin

    @property
    def radius_deg(self) -> float:
        """Half the diagonal."""
        return float(np.hypot(self.half_width_arcsec, self.half_height_arcsec)) / 3600


def field_of(rig: Rig, rotation_deg: float | None = None) -> Field:
    """Return the field of a rig, at its camera angle unless another is given."""
    scale = rig.scale_arcsec_px
    return Field(
        rig.sensor.width_px * scale / 2,
        rig.sensor.height_px * scale / 2,
        rig.camera_angle_deg if rotation_deg is None else rotation_deg,
        -1 if rig.mirrored else 1,
    )


@dataclass(frozen=True)
class Framing:
    """Where the middle of the frame points for each place of a track; `whole` when one pointing holds all of it."""

    ra_deg: np.ndarray
    dec_deg: np.ndarray
    whole: bool


def frame_track(field: Field, ra_deg: np.ndarray, dec_deg: np.ndarray, margin: float = MARGIN) -> Framing:
    """Return pointings that keep a track inside the margin: one for all where it fits, else the least shifts of it."""
    from planner.sky.places import offsets_arcsec, radec_deg, radec_from_offsets, unit_vector

    middle = unit_vector(ra_deg, dec_deg).mean(axis=1, keepdims=True)
    ra0, dec0 = (float(angle[0]) for angle in radec_deg(middle))
    right, up = field.along(*offsets_arcsec(ra0, dec0, ra_deg, dec_deg))
    reach_x, reach_y = field.half_width_arcsec * (1 - 2 * margin), field.half_height_arcsec * (1 - 2 * margin)
    # places 90 degrees and more from the middle are on no tangent plane (NaN)
    flat = np.isfinite(right) & np.isfinite(up)
    if not flat.any():
        return Framing(np.array(ra_deg, float), np.array(dec_deg, float), False)
    middle_x = (right[flat].min() + right[flat].max()) / 2
    middle_y = (up[flat].min() + up[flat].max()) / 2
    whole = bool(np.ptp(right) <= 2 * reach_x and np.ptp(up) <= 2 * reach_y)
    aim_x = middle_x + _excess(right - middle_x, reach_x)
    aim_y = middle_y + _excess(up - middle_y, reach_y)
    ra_aim, dec_aim = radec_from_offsets(ra0, dec0, *field.on_sky(aim_x, aim_y))
    # far from the middle up is another direction than there, or none: frames that all but miss are centred
    held = inside(field, ra_aim, dec_aim, ra_deg, dec_deg, margin / 2)
    return Framing(
        np.where(held, ra_aim, ra_deg), np.where(held, dec_aim, dec_deg), whole and bool(held.all())
    )


def fullest_aim(
    field: Field, ra_deg: np.ndarray, dec_deg: np.ndarray, margin: float = MARGIN
) -> tuple[float, float]:
    """Return the one pointing (ra_deg, dec_deg) whose frame, less its margin, holds most of these places."""
    framing = frame_track(field, ra_deg, dec_deg, margin)
    counts = [
        int(inside(field, float(ra), float(dec), ra_deg, dec_deg, margin).sum())
        for ra, dec in zip(framing.ra_deg, framing.dec_deg, strict=True)
    ]
    best = int(np.argmax(counts))
    return float(framing.ra_deg[best]), float(framing.dec_deg[best])


def inside(
    field: Field,
    aim_ra_deg: np.ndarray | float,
    aim_dec_deg: np.ndarray | float,
    ra_deg: np.ndarray,
    dec_deg: np.ndarray,
    margin: float = 0.0,
) -> np.ndarray:
    """Return which places lie in the frame of a pointing, or each in that of its own."""
    from planner.sky.places import offsets_arcsec

    right, up = field.along(*offsets_arcsec(aim_ra_deg, aim_dec_deg, ra_deg, dec_deg))
    # the frame is a rectangle on the tangent plane, where offsets beyond 90 degrees are NaN
    return (np.abs(right) <= field.half_width_arcsec * (1 - 2 * margin) + 1) & (
        np.abs(up) <= field.half_height_arcsec * (1 - 2 * margin) + 1
    )


def _excess(offset: np.ndarray, reach: float) -> np.ndarray:
    return offset - np.clip(offset, -reach, reach)


def best_angle_deg(rig: Rig, ra_deg: np.ndarray, dec_deg: np.ndarray) -> float:
    """Return the camera angle, whole degrees in [0, 180), at which a track leaves most room in the frame."""
    from planner.sky.places import offsets_arcsec, radec_deg, unit_vector

    middle = radec_deg(unit_vector(ra_deg, dec_deg).mean(axis=1, keepdims=True))
    east, north = offsets_arcsec(float(middle[0][0]), float(middle[1][0]), ra_deg, dec_deg)
    fills = []
    for angle in range(180):
        field = field_of(rig, float(angle))
        right, up = field.along(east, north)
        fills.append(max(np.ptp(right) / field.half_width_arcsec, np.ptp(up) / field.half_height_arcsec))
    return float(np.argmin(fills))
