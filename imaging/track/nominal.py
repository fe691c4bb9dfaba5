"""What plan and rig promise of a frame before it is measured: its passage, scale, orientation and aim."""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass

import numpy as np

from imaging.discs.planet import Body
from imaging.frames.frame import Frame
from imaging.track.path import PredictedPath
from planner.events.family import Geometry
from planner.sequence.frametimes import PlannedFrames, planned_frames
from planner.sequence.models import Plan, Rig
from planner.sky.discs import ring_sine

NEAR_ARCSEC = 15.0  # an ordinary clock, site and camera leave the target this near to where it is expected
POINT_PX = 0.05  # radius of a star as the disc rooms take it: far below any blur


@dataclass(frozen=True)
class Nominal:
    """The promise for one frame, in the axes of its array: see DEVELOPERS.md, conventions.

    `exposure_share`: of the longest exposure that the plan has in this passage. `holds_target`: whether the target is
    in the field, which it is not in panels of a mosaic beside it.
    """

    passage: str
    scale_arcsec_px: float
    rotation_deg: float
    parity: int
    aim_ra_deg: float
    aim_dec_deg: float
    exposure_share: float = 1.0
    holds_target: bool = True

    def to_sky(self, dx_px: np.ndarray, dy_px: np.ndarray) -> tuple[np.ndarray, np.ndarray]:
        """Return (east, north) in arcseconds of pixel offsets."""
        x_axis, y_axis = self.axes()
        sky = np.multiply.outer(dx_px, x_axis) + np.multiply.outer(dy_px, y_axis)
        return sky[..., 0], sky[..., 1]

    def to_pixels(self, east_arcsec: float, north_arcsec: float) -> tuple[float, float]:
        """Return the pixel offset of an offset on the sky."""
        matrix = np.column_stack(self.axes())
        dx, dy = np.linalg.solve(matrix, np.array([east_arcsec, north_arcsec]))
        return float(dx), float(dy)

    def axes(self) -> tuple[np.ndarray, np.ndarray]:
        """Return what one pixel along +x and along +y is on the sky, (east, north) in arcseconds."""
        y_pa = np.radians(self.rotation_deg)
        x_pa = np.radians(self.rotation_deg - 90.0 * self.parity)
        scale = self.scale_arcsec_px
        return scale * np.array([np.sin(x_pa), np.cos(x_pa)]), scale * np.array([np.sin(y_pa), np.cos(y_pa)])

    def covariance_to_sky(self, covariance_px2: np.ndarray) -> np.ndarray:
        """Return a pixel covariance (2, 2) as (east, north) in square arcseconds."""
        matrix = np.column_stack(self.axes())
        return matrix @ covariance_px2 @ matrix.T


def array_orientation(up_pa_deg: float, mirrored: bool, row_zero: str) -> tuple[float, int]:
    """Return (rotation_deg of the array's +y, parity) from the picture's up direction and mirroring."""
    parity = -1 if mirrored else 1
    if row_zero == "top":
        return (up_pa_deg + 180.0) % 360.0, -parity
    return up_pa_deg % 360.0, parity


class Promise:
    """Plan, path and planned frames of one check."""

    def __init__(self, plan: Plan, rig: Rig | None = None):
        self.plan = plan
        self.rig = rig or plan.rig
        self.path = PredictedPath.of_plan(plan)
        self.planned: PlannedFrames = planned_frames(plan)

    @property
    def times_a_star(self) -> bool:
        """True when the event is a star that goes out and comes back: its light is measured in every frame."""
        return self.plan.event.family in ("moon-occults-star", "asteroid-occults-star")

    @property
    def middle_tt_s(self) -> float:
        """Middle of the frames that were planned."""
        return float(np.median(self.planned.middle_tt_s))

    def roll_deg(self, tt_s: np.ndarray) -> np.ndarray:
        """Return the planned roll at instants (...,): that of the nearest planned frame."""
        middle = self.planned.middle_tt_s
        after = np.clip(np.searchsorted(middle, tt_s), 1, max(len(middle) - 1, 1))
        before = after - 1
        after = np.minimum(after, len(middle) - 1)
        nearest = np.where(np.abs(middle[before] - tt_s) <= np.abs(middle[after] - tt_s), before, after)
        return self.planned.rotation_deg[nearest]

    def of_frame(self, frame: Frame) -> Nominal:
        """Return what is promised of a frame; outside the plan's hours the nearest planned frame speaks."""
        assert frame.time is not None
        planned = self.planned
        at = int(np.argmin(np.abs(planned.middle_tt_s - frame.time.middle_tt_s)))
        late_s = abs(planned.middle_tt_s[at] - frame.time.middle_tt_s)
        near = late_s < max(3600.0, 2 * planned.exposure_s[at])
        longest = planned.exposure_s[planned.passage == planned.passage[at]].max()
        exposure = planned.exposure_s[at] if frame.exposure_s is None else frame.exposure_s
        rotation, parity = array_orientation(
            float(planned.rotation_deg[at]), planned.parity < 0, frame.row_zero
        )
        passage = self.plan.passages[int(planned.passage[at])]
        return Nominal(
            passage=passage.name if near else "",
            scale_arcsec_px=self.rig.scale_arcsec_px * frame.binning,
            rotation_deg=rotation,
            parity=parity,
            aim_ra_deg=float(planned.ra_deg[at]),
            aim_dec_deg=float(planned.dec_deg[at]),
            exposure_share=float(exposure / longest) if near and longest > 0 else 1.0,
            holds_target=passage.holds_target or not near,
        )


def body_of(geometry: Geometry, radius_px: float, pixel_angle: Callable[[float], float]) -> Body:
    """Return what is known of the target's disc, turned to the frame; a star is a point."""
    if geometry.target not in geometry.discs:
        return Body(geometry.target, POINT_PX)
    disc = geometry.discs[geometry.target]
    return Body(
        name=geometry.target,
        radius_px=radius_px,
        phase_angle_deg=float(disc.phase_angle_deg[0]),
        lit_angle_deg=pixel_angle(float(disc.bright_limb_pa_deg[0])),
        flattening=float(disc.flattening[0]),
        pole_angle_deg=pixel_angle(float(disc.pole_pa_deg[0])),
        ring_sine=float(ring_sine(disc)[0]) if geometry.target == "saturn" else 0.0,
    )
