"""The geometry of families whose target stands among the stars: what it looks like, and where the site sees it."""

from __future__ import annotations

from collections.abc import Mapping

import numpy as np

from planner.events.family import Geometry
from planner.events.instants import zenith_pa_deg
from planner.events.visibility import sun_altitude_deg, view
from planner.sky import discs, places
from planner.sky.discs import SkyDisc
from planner.sky.observer import Observer


def geometry_among_stars(
    target: str,
    vector: np.ndarray,
    shown: Mapping[str, SkyDisc],
    observer: Observer | None,
    tt_s: np.ndarray,
    stars: tuple[tuple[str, np.ndarray, np.ndarray, float], ...] = (),
) -> Geometry:
    """Return the geometry of `shown` discs and stars at times (n,), the target in the direction `vector` (3, n)."""
    seen = view(vector, observer, tt_s)
    return Geometry(
        tt_s=tt_s,
        discs=dict(shown),
        target=target,
        reference="stars",
        altitude_deg=seen.altitude_deg,
        azimuth_deg=seen.azimuth_deg,
        zenith_pa_deg=zenith_pa_deg(vector, observer, tt_s),
        sun_altitude_deg=sun_altitude_deg(observer, tt_s),
        stars=stars,
    )


def planet_among_stars(body: str, observer: Observer | None, tt_s: np.ndarray) -> Geometry:
    """Return the geometry of one planet among the stars at times (n,)."""
    tt_s = np.atleast_1d(np.asarray(tt_s, dtype=float))
    vector_km = places.direction(body, observer, tt_s).vector_km
    shown = {body: discs.sky_disc(body, observer, tt_s)}
    return geometry_among_stars(body, vector_km, shown, observer, tt_s)
