"""What a rehearsed camera, clock, mount or photographer gets wrong on purpose."""

from __future__ import annotations

from dataclasses import dataclass, replace
from typing import Literal

import numpy as np

from planner.errors import InputError
from planner.events.family import Geometry
from planner.sequence.models import Rig, Site

# How far from the planet a star stands that is taken for it beside the Moon.
_BESIDE_DEG = 300 / 3600


@dataclass(frozen=True)
class Faults:
    """What goes wrong on purpose. Everything is off by default but the mount's own errors.

    `clock_offset_s`: frame stamps minus true UTC; `clock_drift_s_day` adds to it from the first frame on.
    `pointing_error_arcsec`: rms an axis, drawn anew for each passage; None takes the mount's.
    `jitter_arcsec`: rms an axis, drawn for each frame; None takes the mount's tracking error.
    `drift_arcsec_h` toward `drift_pa_deg` from the start of each passage. `rotation_deg` is added to the roll.
    `mirrored`: the picture is flipped left to right. `site`: where the rig really stands.
    `middle_stamp`: which instant of the exposure the stamps take for its middle. `scale_error`: relative, of the real
    focal length against the rig's. `stand_in`: a spot or a star is there in the target's stead. `headers_tell_site`:
    of where the rig really stands. `names_backwards`: files are numbered from the last frame to the first.
    `limb_motion_arcsec`: rms of the seeing's displacements; None computes it, 0 turns it off.
    """

    clock_offset_s: float = 0.0
    clock_drift_s_day: float = 0.0
    pointing_error_arcsec: float | None = None
    jitter_arcsec: float | None = None
    drift_arcsec_h: float = 0.0
    drift_pa_deg: float = 90.0
    rotation_deg: float = 0.0
    mirrored: bool = False
    site: Site | None = None
    limb_motion_arcsec: float | None = 0.0
    limb_correlation_arcsec: float = 8.0
    bleed: bool = False
    middle_stamp: Literal["middle", "start", "end"] = "middle"
    scale_error: float = 0.0
    stand_in: bool = False
    headers_tell_site: bool = False
    names_backwards: bool = False

    @property
    def stamped_half(self) -> float:
        """Return the instant that the stamps take for the middle, in halves of the exposure after it."""
        return {"start": -1.0, "middle": 0.0, "end": 1.0}[self.middle_stamp]

    def real_rig(self, rig: Rig) -> Rig:
        """Return the rig that really takes the frames."""
        if self.scale_error == 0:
            return rig
        focal_mm = rig.optics.focal_length_mm / (1 + self.scale_error)
        return rig.model_copy(update={"optics": rig.optics.model_copy(update={"focal_length_mm": focal_mm})})


def with_stand_in(geometry: Geometry, at_middle: Geometry) -> Geometry:
    """Return a geometry in which the target stands still: on the Sun as a spot does, else among the stars.

    `at_middle`: the geometry of one instant, whose place it keeps; beside the Moon, 5' north of it. Raises InputError
    when the target is a star.
    """
    name = geometry.target
    if name not in geometry.discs:
        raise InputError("--stand-in: found a plan that times a star; allowed are plans with a planet")
    disc, then = geometry.discs[name], at_middle.discs[name]
    if geometry.reference == "sun":
        sun, sun_then = geometry.discs["sun"], at_middle.discs["sun"]
        ra_deg, dec_deg = (
            sun.ra_deg + (then.ra_deg - sun_then.ra_deg),
            sun.dec_deg + (then.dec_deg - sun_then.dec_deg),
        )
    else:
        away = _BESIDE_DEG if geometry.reference == "moon" else 0.0
        ra_deg, dec_deg = (
            then.ra_deg + np.zeros_like(disc.ra_deg),
            then.dec_deg + away + np.zeros_like(disc.dec_deg),
        )
    still = replace(disc, ra_deg=ra_deg, dec_deg=dec_deg)
    return replace(geometry, discs={**geometry.discs, name: still})
