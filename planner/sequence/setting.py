"""Everything a builder needs to know of one brief, worked out once."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from planner.errors import InputError
from planner.events import catalogue
from planner.events.family import Circumstances, Event, Family, Geometry
from planner.sequence import radiometry
from planner.sequence.documents import event_spec, observer_of
from planner.sequence.models import Brief, Rig, Site, Wish
from planner.sequence.radiometry import Band
from planner.sky.observer import Observer


@dataclass(frozen=True)
class Setting:
    """One brief, one rig: the event at the site, and the band it is seen through."""

    brief: Brief
    site: Site
    rig: Rig
    wish: Wish
    family: Family
    event: Event
    observer: Observer
    circumstances: Circumstances
    through: Band

    @property
    def scale_arcsec_px(self) -> float:
        """Scale in the middle of the field."""
        return self.rig.scale_arcsec_px

    @property
    def filter_name(self) -> str | None:
        """Name of the filter used, None for none."""
        return None if self.through.name == "none" else self.through.name

    def geometry(self, tt_s: np.ndarray) -> Geometry:
        """Return the discs on the sky at these times."""
        return self.family.geometry(self.event, self.observer, np.asarray(tt_s, float))

    def least_altitude_deg(self, azimuth_deg: np.ndarray) -> np.ndarray:
        """Return the altitude below which the mount or the horizon line hides the sky."""
        from planner.sky.observer import horizon_altitude_deg

        return np.maximum(self.rig.mount.min_altitude_deg, horizon_altitude_deg(self.observer, azimuth_deg))

    def reachable(self, geometry: Geometry) -> np.ndarray:
        """Return where the target stands above the horizon line and the mount's limit, (n,) of bool."""
        return geometry.altitude_deg >= self.least_altitude_deg(geometry.azimuth_deg)


def setting_of(brief: Brief) -> Setting:
    """Return the setting of a brief whose site and rig are in place.

    Raises InputError when the event cannot be planned: the Sun without a solar filter, no event, an unknown filter.
    """
    site, rig, wish = brief.site, brief.rig, brief.wish
    if isinstance(site, str) or isinstance(rig, str):
        raise InputError("brief: site and rig are still paths; read the brief with load_brief")
    family = catalogue.family(brief.event.family)
    solar = family.reference == "sun"
    if solar and rig.solar_filter is None:
        raise InputError(
            f"rig.solar_filter: found nothing; a plan that points {rig.name} at the Sun needs a filter over "
            "the front of the aperture (solar_filter: {optical_density: 5.0})"
        )
    names = [each.name for each in rig.filters]
    through = radiometry.band(rig, wish.filter or (names[0] if names else None), behind_solar_filter=solar)
    event = family.nearest(event_spec(brief.event))
    observer = observer_of(site)
    circumstances = family.predict(event, observer)
    return Setting(brief, site, rig, wish, family, event, observer, circumstances, through)
