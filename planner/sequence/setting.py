"""Everything a builder needs to know of one brief, worked out once."""

from __future__ import annotations

from dataclasses import dataclass, replace
from functools import cached_property

import numpy as np

from planner.errors import InputError
from planner.events import catalogue
from planner.events.family import Circumstances, Event, Family, Geometry
from planner.sequence import radiometry
from planner.sequence.documents import event_spec, observer_of
from planner.sequence.models import Brief, Rig, Site, Wish
from planner.sequence.radiometry import Band
from planner.sequence.skyglow import sky_v_mag_arcsec2
from planner.sky.observer import Observer


@dataclass(frozen=True)
class Setting:
    """One brief, one rig: the event at the site, and the band it is seen through.

    `mount_mates`: the other rigs of the brief that sit on the same mount. `cycle`: the bands stepped through in turn
    away from contacts, beginning with `through` where that is one of them; empty when there is only `through`.
    """

    brief: Brief
    site: Site
    rig: Rig
    wish: Wish
    family: Family
    event: Event
    observer: Observer
    circumstances: Circumstances
    through: Band
    mount_mates: tuple[Rig, ...] = ()
    cycle: tuple[Band, ...] = ()

    @property
    def scale_arcsec_px(self) -> float:
        """Scale in the middle of the field."""
        return self.rig.scale_arcsec_px

    @property
    def filter_name(self) -> str | None:
        """Name of the filter used, None for none."""
        return None if self.through.name == "none" else self.through.name

    def in_turn(self) -> tuple[Setting, ...]:
        """Return this setting once for each filter that is stepped through."""
        return tuple(replace(self, through=band, cycle=()) for band in self.cycle) or (self,)

    @cached_property
    def reference_fits(self) -> bool:
        """Whether the reference disc fits the fields of all cameras on the mount, with a pointing error to spare."""
        reference = self.family.reference
        if reference not in ("sun", "moon"):
            return True
        disc = self.geometry(np.array([self.event.middle_tt_s])).discs[reference]
        needed = 2 * (float(disc.semidiameter_arcsec[0]) + self.rig.mount.pointing_error_arcsec)
        return all(
            needed <= min(rig.sensor.width_px, rig.sensor.height_px) * rig.scale_arcsec_px
            for rig in (self.rig, *self.mount_mates)
        )

    def geometry(self, tt_s: np.ndarray) -> Geometry:
        """Return the discs on the sky at these times."""
        return self.family.geometry(self.event, self.observer, np.asarray(tt_s, float))

    def least_altitude_deg(self, azimuth_deg: np.ndarray) -> np.ndarray:
        """Return the altitude below which the mount or the horizon line hides the sky."""
        from planner.sky.observer import horizon_altitude_deg

        return np.maximum(self.rig.mount.min_altitude_deg, horizon_altitude_deg(self.observer, azimuth_deg))

    def reachable(self, geometry: Geometry) -> np.ndarray:
        """Return where the target stands above the horizon line and within the mount's limits, (n,) of bool."""
        altitude = geometry.altitude_deg
        return (altitude >= self.least_altitude_deg(geometry.azimuth_deg)) & (
            altitude <= self.rig.mount.max_altitude_deg
        )

    def sky_mag_arcsec2(self, geometry: Geometry) -> np.ndarray:
        """Return the brightness of the sky at the target: dark, twilight and moonlight."""
        from planner.sky.discs import sky_disc
        from planner.sky.places import altaz, direction, separation_arcsec, unit_vector

        moon = geometry.discs.get("moon") or sky_disc("moon", self.observer, geometry.tt_s)
        target_ra, target_dec = _target_place(geometry)
        moon_altitude, _ = altaz((moon.ra_deg, moon.dec_deg), self.observer, geometry.tt_s)
        apart = (
            separation_arcsec(unit_vector(moon.ra_deg, moon.dec_deg), unit_vector(target_ra, target_dec))
            / 3600
        )
        sun = direction("sun", self.observer, geometry.tt_s)
        _, sun_azimuth = altaz(sun.vector_km, self.observer, geometry.tt_s)
        return sky_v_mag_arcsec2(
            self.site.sky_brightness_mag_arcsec2,
            self.site.extinction_mag,
            geometry.altitude_deg,
            geometry.sun_altitude_deg,
            moon_altitude,
            apart,
            moon.phase_angle_deg,
            geometry.azimuth_deg - sun_azimuth,
        )

    def gain_for_bright(self) -> float:
        """Return the gain setting with the deepest range, for what has light to spare."""
        return self._gain(lambda gain: -radiometry.saturation_e(self.rig, gain))

    def gain_for_faint(self) -> float:
        """Return the gain setting with the least read noise, for what is faint."""
        return self._gain(lambda gain: radiometry.at_gain(self.rig, gain).read_noise_e)

    def _gain(self, cost) -> float:  # type: ignore[no-untyped-def]
        if self.wish.gain is not None:
            return self.wish.gain
        return min([0.0, *(listed.gain for listed in self.rig.sensor.gains)], key=cost)


def _target_place(geometry: Geometry) -> tuple[np.ndarray, np.ndarray]:
    if geometry.target in geometry.discs:
        disc = geometry.discs[geometry.target]
        return disc.ra_deg, disc.dec_deg
    star = next((s for s in geometry.stars if s[0] == geometry.target), geometry.stars[0])
    return star[1], star[2]


def settings_of(brief: Brief) -> list[Setting]:
    """Return the settings of a brief, one a rig, the brief's own rig first.

    Raises InputError when the event cannot be planned: the Sun without a solar filter, no event, an unknown filter,
    two rigs of one name, or one mount described in two ways.
    """
    site = brief.site
    rigs = [each for each in (brief.rig, *brief.other_rigs) if isinstance(each, Rig)]
    if isinstance(site, str) or len(rigs) < 1 + len(brief.other_rigs):
        raise InputError("brief: site and rig are still paths; read the brief with load_brief")
    names = [each.name for each in rigs]
    if len(set(names)) < len(names):
        raise InputError(
            f"other_rigs: found two rigs named {max(names, key=names.count)!r}; give each its own name"
        )
    mounts: dict[str, Rig] = {}
    for each in rigs:
        first = mounts.setdefault(each.mount.name, each)
        if first.mount != each.mount:
            raise InputError(
                f"mount.name: {first.name} and {each.name} both sit on {each.mount.name!r} but describe it "
                "differently; give each mount a name of its own"
            )
    family = catalogue.family(brief.event.family)
    solar = family.reference == "sun"
    for each in rigs:
        if solar and each.solar_filter is None:
            raise InputError(
                f"rig.solar_filter: found nothing; a plan that points {each.name} at the Sun needs a filter over "
                "the front of the aperture (solar_filter: {optical_density: 5.0})"
            )
    event = family.nearest(event_spec(brief.event))
    observer = observer_of(site)
    circumstances = family.predict(event, observer)
    settings = []
    for each in rigs:
        through, cycle = _bands(each, brief.wish, solar, own=each is rigs[0])
        mates = tuple(other for other in rigs if other is not each and other.mount.name == each.mount.name)
        settings.append(
            Setting(
                brief, site, each, brief.wish, family, event, observer, circumstances, through, mates, cycle
            )
        )
    return settings


def _bands(rig: Rig, wish: Wish, solar: bool, own: bool) -> tuple[Band, tuple[Band, ...]]:
    """Return the band of contacts, and the bands stepped through elsewhere (none where there is but one).

    A wish for filters holds for the rigs that have them, and at least for the brief's own.
    """
    known = [one.name for one in rig.filters]
    turns = [name for name in wish.filters if own or name in known]
    single = wish.filter if own or wish.filter in known else None
    single = single or (turns[0] if turns else known[0] if known else None)
    if single in turns:
        first = turns.index(single)
        turns = turns[first:] + turns[:first]
    through = radiometry.band(rig, single, behind_solar_filter=solar)
    bands = tuple(radiometry.band(rig, name, behind_solar_filter=solar) for name in turns)
    return through, bands if len(turns) > 1 else ()
