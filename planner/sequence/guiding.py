"""What to guide on: the limb of the Sun or the Moon, or the brightest star within the guide camera's reach."""

from __future__ import annotations

from functools import lru_cache

import numpy as np

from planner.sequence.models import Passage
from planner.sequence.setting import Setting

_NOT_THE_TARGET_ARCSEC = 60.0


def with_guides(setting: Setting, passages: list[Passage]) -> list[Passage]:
    """Return the passages, each with what to guide on; None where the rig does not guide or finds nothing."""
    if setting.rig.guiding.on == "none":
        return passages
    return [
        passage if passage.done else passage.model_copy(update={"guide": _guide(setting, passage)})
        for passage in passages
    ]


def _guide(setting: Setting, passage: Passage) -> str | None:
    from planner.sequence.frametimes import aim_place
    from planner.sky.timescale import tt_s_from_datetime

    guiding, reference = setting.rig.guiding, setting.family.reference
    if guiding.on != "star":
        return f"the {guiding.on.capitalize()}'s limb" if guiding.on == reference else None
    if reference == "sun" or passage.aim == "ground":
        return None
    tt_s = float(tt_s_from_datetime(min(shot.start_utc for shot in passage.shots)))
    geometry = setting.geometry(np.array([tt_s]))
    target = tuple(float(each[0]) for each in aim_place(geometry, geometry.target))
    if passage.aim == "field":
        aim = (passage.aim_ra_deg or 0.0, passage.aim_dec_deg or 0.0)
    else:
        aim = tuple(float(each[0]) for each in aim_place(geometry, passage.aim))  # type: ignore[assignment]
    return guide_star(aim, target, guiding.reach_deg, guiding.faintest_mag, tt_s)  # type: ignore[arg-type]


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
