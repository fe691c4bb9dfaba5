"""When each frame of a plan begins, and where the camera is meant to point then."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from planner.errors import InputError
from planner.events import catalogue
from planner.events.family import Event, Geometry
from planner.sequence.documents import event_spec, observer_of
from planner.sequence.models import Passage, Plan


@dataclass(frozen=True)
class PlannedFrames:
    """The frames of a plan in time order; every array has shape (n,), times are TT seconds from J2000.0.

    `ra_deg`, `dec_deg`: where the middle of the frame is meant to point at mid-exposure, un-aberrated topocentric ICRS
    axes (the places of `Geometry`, without refraction). `rotation_deg`: position angle of the frame's up direction,
    from ICRS north through east; `parity`: +1 sky as seen, -1 mirrored.
    """

    passage: np.ndarray
    shot: np.ndarray
    start_tt_s: np.ndarray
    exposure_s: np.ndarray
    ra_deg: np.ndarray
    dec_deg: np.ndarray
    rotation_deg: np.ndarray
    parity: int

    @property
    def middle_tt_s(self) -> np.ndarray:
        """Mid-exposure."""
        return self.start_tt_s + self.exposure_s / 2

    def __len__(self) -> int:
        """Give the number of frames."""
        return self.start_tt_s.size


def frame_starts(plan: Plan) -> tuple[np.ndarray, np.ndarray, np.ndarray, np.ndarray]:
    """Return (passage index, shot index, start_tt_s, exposure_s) of every frame in time order."""
    from planner.sky.timescale import tt_s_from_datetime

    rows = [(p, s, shot) for p, passage in enumerate(plan.passages) for s, shot in enumerate(passage.shots)]
    if not rows:
        empty = np.zeros(0)
        return empty.astype(int), empty.astype(int), empty, empty
    counts = np.array([shot.count for _, _, shot in rows])
    starts = np.asarray(tt_s_from_datetime([shot.start_utc for _, _, shot in rows]), float)
    step = np.arange(counts.sum()) - np.repeat(np.cumsum(counts) - counts, counts)
    start_tt_s = np.repeat(starts, counts) + step * np.repeat([shot.cadence_s for _, _, shot in rows], counts)
    order = np.argsort(start_tt_s, kind="stable")
    passage, shot_index, exposure = (
        np.repeat(column, counts)[order]
        for column in (
            [p for p, _, _ in rows],
            [s for _, s, _ in rows],
            [shot.exposure_s for _, _, shot in rows],
        )
    )
    return passage, shot_index, start_tt_s[order], exposure


def planned_event(plan: Plan) -> Event:
    """Return the event that a plan is for."""
    return catalogue.family(plan.event.family).nearest(event_spec(plan.event))


def planned_frames(plan: Plan) -> PlannedFrames:
    """Return every frame of a plan with its time and its intended pointing; raises InputError for an unknown aim."""
    passage, shot, start_tt_s, exposure_s = frame_starts(plan)
    middle_tt_s = start_tt_s + exposure_s / 2
    ra_deg, dec_deg = np.full(len(start_tt_s), np.nan), np.full(len(start_tt_s), np.nan)
    rotation_deg = np.full(len(start_tt_s), plan.rig.camera_angle_deg)
    observer = observer_of(plan.site)
    event = None
    for index, each in enumerate(plan.passages):
        chosen = passage == index
        if not chosen.any():
            continue
        tt_s = middle_tt_s[chosen]
        if each.aim in ("field", "ground"):
            pass
        elif event is None:
            event = planned_event(plan)
        ra_deg[chosen], dec_deg[chosen] = _aim(plan, each, event, tt_s)
        rotation_deg[chosen] = camera_rotation_deg(
            plan, each, observer, ra_deg[chosen], dec_deg[chosen], tt_s
        )
    parity = -1 if plan.rig.mirrored else 1
    return PlannedFrames(passage, shot, start_tt_s, exposure_s, ra_deg, dec_deg, rotation_deg, parity)


def camera_rotation_deg(plan: Plan, passage: Passage, observer, ra_deg, dec_deg, tt_s) -> np.ndarray:  # type: ignore[no-untyped-def]
    """Return the position angle of the frame's up direction at these times.

    An equatorial mount keeps it, turned by 180 degrees past the meridian flip; an alt-azimuth mount and a tripod
    keep the angle to the zenith, so the field turns (Meeus 1998, chapter 14).
    """
    angle_deg = plan.rig.camera_angle_deg + (180.0 if passage.flipped else 0.0)
    if plan.rig.mount.kind == "equatorial" or not len(tt_s):
        return np.full(len(tt_s), angle_deg % 360.0)
    from planner.sky.places import zenith_pa_deg

    return (angle_deg + zenith_pa_deg(ra_deg, dec_deg, observer, tt_s)) % 360.0


def _aim(
    plan: Plan, passage: Passage, event: Event | None, tt_s: np.ndarray
) -> tuple[np.ndarray, np.ndarray]:
    if passage.aim == "field":
        if passage.aim_ra_deg is None or passage.aim_dec_deg is None:
            raise InputError(f"passage {passage.name!r}: aim 'field' needs aim_ra_deg and aim_dec_deg")
        return np.full(len(tt_s), passage.aim_ra_deg), np.full(len(tt_s), passage.aim_dec_deg)
    if passage.aim == "ground":
        return _ground_place(plan, passage, tt_s)
    assert event is not None
    geometry = catalogue.family(plan.event.family).geometry(event, observer_of(plan.site), tt_s)
    return aim_place(geometry, passage.aim)


def _ground_place(plan: Plan, passage: Passage, tt_s: np.ndarray) -> tuple[np.ndarray, np.ndarray]:
    """Return what passes behind a fixed direction over the ground; aberration (20 arcsec) is left out."""
    from planner.sky.observer import local_axes
    from planner.sky.places import radec_deg
    from planner.sky.refraction import true_altitude_deg

    if passage.aim_altitude_deg is None or passage.aim_azimuth_deg is None:
        raise InputError(f"passage {passage.name!r}: aim 'ground' needs aim_altitude_deg and aim_azimuth_deg")
    observer = observer_of(plan.site)
    altitude = np.radians(true_altitude_deg(np.array([passage.aim_altitude_deg]), observer)[0])
    azimuth = np.radians(passage.aim_azimuth_deg)
    horizontal = np.array(
        [np.cos(altitude) * np.sin(azimuth), np.cos(altitude) * np.cos(azimuth), np.sin(altitude)]
    )
    return radec_deg(np.einsum("nij,i->jn", local_axes(observer, tt_s), horizontal))


def aim_place(geometry: Geometry, aim: str) -> tuple[np.ndarray, np.ndarray]:
    """Return (ra_deg, dec_deg) of a disc, of the middle of two (`venus+jupiter`), or of a star of the geometry.

    Raises InputError when the geometry does not have it.
    """
    one, plus, two = aim.partition("+")
    if plus and one in geometry.discs and two in geometry.discs:
        from planner.sky.places import radec_deg, unit_vector

        first, second = geometry.discs[one], geometry.discs[two]
        return radec_deg(
            unit_vector(first.ra_deg, first.dec_deg) + unit_vector(second.ra_deg, second.dec_deg)
        )
    if aim in geometry.discs:
        return geometry.discs[aim].ra_deg, geometry.discs[aim].dec_deg
    for name, ra_deg, dec_deg, _ in geometry.stars:
        if name == aim:
            return ra_deg, dec_deg
    known = ", ".join([*geometry.discs, *(name for name, *_ in geometry.stars), "field", "ground"])
    raise InputError(f"aim: found {aim!r}; allowed are {known}")
