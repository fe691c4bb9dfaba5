"""What to guide on: the limb of the Sun or the Moon, or the brightest star within the guide camera's reach."""

from __future__ import annotations

from functools import lru_cache

import numpy as np

from planner.sequence.models import Passage
from planner.sequence.setting import Setting

_NOT_THE_TARGET_ARCSEC = 60.0


def with_guides(setting: Setting, passages: list[Passage]) -> list[Passage]:
    """Return the passages, each with what to guide on; None where the rig does not guide or finds nothing."""
    guiding, reference = setting.rig.guiding, setting.family.reference
    waiting = [passage for passage in passages if not passage.done]
    if guiding.on == "none" or not waiting:
        return passages
    if guiding.on != "star":
        found: list[str | None] = [
            f"the {guiding.on.capitalize()}'s limb" if guiding.on == reference else None
        ] * len(waiting)
    elif reference == "sun":
        found = [None] * len(waiting)
    else:
        found = _stars(setting, waiting)
    guides = iter(found)
    return [
        passage if passage.done else passage.model_copy(update={"guide": next(guides)})
        for passage in passages
    ]


def _stars(setting: Setting, passages: list[Passage]) -> list[str | None]:
    """Return a guide star for each passage, None where there is none in reach or nothing is followed."""
    from planner.sequence.frametimes import aim_place
    from planner.sky.timescale import tt_s_from_datetime

    tt_s = np.atleast_1d(
        tt_s_from_datetime([min(shot.start_utc for shot in passage.shots) for passage in passages])
    )
    geometry = setting.geometry(tt_s)
    target = aim_place(geometry, geometry.target)
    found: list[str | None] = []
    for row, passage in enumerate(passages):
        if passage.aim == "ground":
            found.append(None)
            continue
        if passage.aim == "field":
            aim = (passage.aim_ra_deg or 0.0, passage.aim_dec_deg or 0.0)
        else:
            ra_deg, dec_deg = aim_place(geometry, passage.aim)
            aim = (float(ra_deg[row]), float(dec_deg[row]))
        here = (float(target[0][row]), float(target[1][row]))
        guiding = setting.rig.guiding
        found.append(guide_star(aim, here, guiding.reach_deg, guiding.faintest_mag, float(tt_s[row])))
    return found


@lru_cache(maxsize=512)
def guide_star(
    aim_deg: tuple[float, float],
    target_deg: tuple[float, float],
    reach_deg: float,
    faintest_mag: float,
    tt_s: float,
) -> str | None:
    """Return the brightest star within reach of a pointing, with its V magnitude and where it stands; None if none is.

    The target itself and what stands within a minute of arc of it are left out.
    """
    from planner.sky.places import position_angle_deg, separation_arcsec, unit_vector
    from planner.sky.stars import stars_in_field

    stars = stars_in_field(aim_deg[0] % 360.0, aim_deg[1], reach_deg, tt_s, faintest_mag)
    place = unit_vector(stars.ra_deg, stars.dec_deg)
    target = np.broadcast_to(unit_vector(*target_deg)[:, None], place.shape)
    free = np.flatnonzero(separation_arcsec(place, target) > _NOT_THE_TARGET_ARCSEC)
    if not len(free):
        return None
    row = int(free[np.argmin(stars.magnitude[free])])
    origin = unit_vector(*aim_deg)[:, None]
    apart_deg = float(separation_arcsec(origin, place[:, row : row + 1])[0]) / 3600
    angle_deg = float(position_angle_deg(origin, place[:, row : row + 1])[0])
    return (
        f"{stars.name[row]} (V {float(stars.magnitude[row]):.1f}), {apart_deg * 60:.0f} arcmin "
        f"from the middle at position angle {angle_deg:.0f}"
    )
