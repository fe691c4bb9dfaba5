"""Both planets of a meeting in one frame: whether they fit, and where the camera points to hold them."""

from __future__ import annotations

import numpy as np

from planner.events.family import Geometry
from planner.sequence.framing import MARGIN, field_of
from planner.sequence.models import Rig
from planner.sequence.setting import Setting


def other_body(setting: Setting, geometry: Geometry) -> str | None:
    """Return the name of the planet that the target meets, None where the event is no meeting."""
    if geometry.target not in geometry.discs:  # a star that a body covers: the body comes to it
        return None
    others = {setting.event.spec.body, setting.event.spec.other_body} - {geometry.target}
    return next((name for name in geometry.discs if name in others and geometry.reference == "stars"), None)


def pair_aim(setting: Setting, geometry: Geometry) -> str | None:
    """Return the aim midway between both planets where all cameras on the mount hold them so, else None."""
    other = other_body(setting, geometry)
    if other is None:
        return None
    rigs = (setting.rig, *setting.mount_mates)
    return f"{geometry.target}+{other}" if all(pair_room(rig, geometry, other) >= 1 for rig in rigs) else None


def pair_room(rig: Rig, geometry: Geometry, other: str) -> float:
    """Return how many times larger a rig's field is than one that holds both planets at all these times.

    Midway between them; with the margin of all framing, or the mount's pointing error where that is more.
    """
    from planner.sequence.frametimes import aim_place
    from planner.sky.places import offsets_arcsec

    target = geometry.discs[geometry.target]
    middle = aim_place(geometry, f"{geometry.target}+{other}")
    east, north = offsets_arcsec(*middle, target.ra_deg, target.dec_deg)
    if rig.mount.kind != "equatorial":
        # the camera keeps its angle to the zenith, so the pair turns in the frame
        turn = np.radians(geometry.zenith_pa_deg)
        east, north = (
            east * np.cos(turn) - north * np.sin(turn),
            north * np.cos(turn) + east * np.sin(turn),
        )
    field = field_of(rig)
    disc = max(float(geometry.discs[name].semidiameter_arcsec.max()) for name in (geometry.target, other))
    rooms = []
    for half, offset in zip(
        (field.half_width_arcsec, field.half_height_arcsec), field.along(east, north), strict=True
    ):
        reach = float(np.abs(offset).max()) + disc
        rooms.append(half / max(reach / (1 - 2 * MARGIN), reach + rig.mount.pointing_error_arcsec))
    return min(rooms)


def middle_told(geometry: Geometry, aim: str) -> str:
    """Return in words where between two planets the frame is centred: there is nothing there to centre on."""
    from planner.sequence.frametimes import aim_place

    ra_deg, dec_deg = (float(angle[len(geometry.tt_s) // 2]) for angle in aim_place(geometry, aim))
    both = " and ".join(name.capitalize() for name in aim.split("+"))
    return f"centred between {both} (RA {ra_deg % 360:.3f}, Dec {dec_deg:+.3f} degrees)"
