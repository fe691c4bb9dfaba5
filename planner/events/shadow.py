"""The shadow that a small body casts in the light of a star: where its axis and edges touch the Earth.

Light from the star arrives along parallel lines; the shadow is a cylinder as wide as the body. Its axis is computed
from un-aberrated directions with light-time, the light-time to the place on the ground included (0.6 km otherwise).
"""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass
from typing import Any

import numpy as np

from planner.sky import places, timescale
from planner.sky.bodies import C_KM_S, EARTH_RADIUS_KM
from planner.sky.observer import EARTH_FLATTENING, EARTH_RATE_RAD_S
from planner.sky.pole import celestial_to_terrestrial
from planner.sky.stars import Star

# TDB seconds to barycentric position (3, n) in km and velocity (3, n) in km/s
StateOf = Callable[[np.ndarray], tuple[np.ndarray, np.ndarray]]


@dataclass(frozen=True)
class Axis:
    """The axis of the shadow at n times, ICRS axes about the geocentre.

    `star`: unit vectors (3, n) to the star; `offset_km` (3, n): from the geocentre to the axis, across the star's
    direction; `drift` (3, n): how the axis leans by light-time, km across a km towards the star; `distance_km` (n,).
    """

    tt_s: np.ndarray
    star: np.ndarray
    offset_km: np.ndarray
    drift: np.ndarray
    distance_km: np.ndarray


def axis_of(state: StateOf, star: Star, tt_s: np.ndarray) -> Axis:
    """Return the axis of the shadow of a body in the light of a star."""
    tt_s = np.atleast_1d(np.asarray(tt_s, float))
    earth = places.observer_position_km(None, tt_s)
    vector, velocity = seen_from(state, earth, tt_s)
    toward = star.vector(None, tt_s, earth)
    along = (vector * toward).sum(axis=0)
    return Axis(
        tt_s,
        toward,
        vector - along * toward,
        (velocity - (velocity * toward).sum(axis=0) * toward) / C_KM_S,
        along,
    )


def seen_from(state: StateOf, here_km: np.ndarray, tt_s: np.ndarray) -> tuple[np.ndarray, np.ndarray]:
    """Return vectors (3, n) to a body as light shows it from barycentric places (3, n), and its velocity then."""
    moment = timescale.tdb_s(tt_s)
    late = np.sqrt(((state(moment)[0] - here_km) ** 2).sum(axis=0)) / C_KM_S
    there, velocity = state(moment - late)
    vector = there - here_km
    for _ in range(2):
        more = np.sqrt((vector**2).sum(axis=0)) / C_KM_S - late
        vector = there - velocity * more - here_km
    return vector, velocity


@dataclass(frozen=True)
class Ground:
    """Where a line of the shadow meets the ellipsoid at n times; NaN where it passes the Earth by.

    `speed_km_s` and `across` (3, n, unit vector): of the shadow over the ground, in the plane across the star.
    """

    tt_s: np.ndarray
    latitude_deg: np.ndarray
    longitude_deg: np.ndarray
    star_altitude_deg: np.ndarray
    speed_km_s: np.ndarray
    across: np.ndarray


def ground_of(axis: Axis, shift_km: np.ndarray | float = 0.0, across: np.ndarray | None = None) -> Ground:
    """Return where the axis, or a line beside it, meets the ground.

    The line lies `shift_km` (n,) from the axis along `across` (3, n): take that of the axis itself. Speeds are by
    differences over the times given, at least three.
    """
    offset = axis.offset_km if across is None else axis.offset_km + shift_km * across
    turn = celestial_to_terrestrial(axis.tt_s)
    star = np.einsum("nij,jn->in", turn, axis.star)
    lean = np.einsum("nij,jn->in", turn, axis.drift)
    start = np.einsum("nij,jn->in", turn, offset)
    point = np.full_like(start, np.nan)
    height = np.zeros(len(axis.tt_s))
    for _ in range(3):
        point, height = _meet(start + lean * np.nan_to_num(height), star)
    latitude, longitude, up = _geodetic(point)
    ground = np.einsum("nji,jn->in", turn, np.cross(np.array([0.0, 0.0, EARTH_RATE_RAD_S]), point, axis=0))
    relative = np.gradient(axis.offset_km, axis.tt_s, axis=1, edge_order=2) - ground
    relative = relative - (relative * axis.star).sum(axis=0) * axis.star
    speed = np.sqrt((relative**2).sum(axis=0))
    sideways = np.cross(axis.star, relative / speed, axis=0)
    altitude = np.degrees(np.arcsin(np.clip((up * star).sum(axis=0), -1.0, 1.0)))
    return Ground(axis.tt_s, latitude, longitude, altitude, speed, sideways)


def _meet(start: np.ndarray, direction: np.ndarray) -> tuple[np.ndarray, np.ndarray]:
    """Return where lines meet the ellipsoid on the side they point to (3, n), and how far along they do (n,)."""
    squeeze = np.array([[1.0], [1.0], [1.0 / (1.0 - EARTH_FLATTENING)]])
    p, d = start * squeeze, direction * squeeze
    a, b = (d * d).sum(axis=0), (p * d).sum(axis=0)
    c = (p * p).sum(axis=0) - EARTH_RADIUS_KM**2
    root = b * b - a * c
    height = np.where(root >= 0.0, (-b + np.sqrt(np.maximum(root, 0.0))) / a, np.nan)
    return start + direction * height, height


def _geodetic(point: np.ndarray) -> tuple[np.ndarray, np.ndarray, np.ndarray]:
    """Return latitude and longitude in degrees of points on the ellipsoid, and their zenith (3, n)."""
    ring = np.hypot(point[0], point[1])
    latitude = np.arctan2(point[2], (1.0 - EARTH_FLATTENING) ** 2 * ring)
    longitude = np.arctan2(point[1], point[0])
    up = np.stack(
        [np.cos(latitude) * np.cos(longitude), np.cos(latitude) * np.sin(longitude), np.sin(latitude)]
    )
    return np.degrees(latitude), np.degrees(longitude), up


@dataclass(frozen=True)
class ShadowPath:
    """The path of a shadow over the Earth: the axis, the body's edges, and the edges widened by 1-sigma.

    `name` of lines: `centre`, `limit_1`, `limit_2`, `sigma_1`, `sigma_2` (1 lies to the left of the motion).
    """

    title: str
    width_km: float
    sigma_across_km: float
    sigma_along_s: float
    lines: dict[str, Ground]
    sun_altitude_deg: np.ndarray
    facts: dict[str, Any]

    def as_geojson(self) -> dict[str, Any]:
        """Return a GeoJSON FeatureCollection (RFC 7946): lines cut where they leave the Earth or cross 180 degrees."""
        features = [
            {
                "type": "Feature",
                "properties": {"line": name, "title": self.title},
                "geometry": {"type": "MultiLineString", "coordinates": _pieces(ground)},
            }
            for name, ground in self.lines.items()
        ]
        centre = self.lines["centre"]
        seen = np.flatnonzero(np.isfinite(centre.latitude_deg))
        every = max(1, round(60.0 / max(1e-6, float(np.median(np.diff(centre.tt_s))))))
        for k in seen[:: max(every, len(seen) // 60)]:
            features.append(
                {
                    "type": "Feature",
                    "properties": {
                        "utc": timescale.utc_iso(float(centre.tt_s[k]), 1),
                        "longest_s": round(self.width_km / float(centre.speed_km_s[k]), 2),
                        "speed_km_s": round(float(centre.speed_km_s[k]), 3),
                        "star_altitude_deg": round(float(centre.star_altitude_deg[k]), 1),
                        "sun_altitude_deg": round(float(self.sun_altitude_deg[k]), 1),
                    },
                    "geometry": {
                        "type": "Point",
                        "coordinates": [
                            round(float(centre.longitude_deg[k]), 5),
                            round(float(centre.latitude_deg[k]), 5),
                        ],
                    },
                }
            )
        return {
            "type": "FeatureCollection",
            "properties": {
                "title": self.title,
                "width_km": self.width_km,
                "sigma_across_km": self.sigma_across_km,
                "sigma_along_s": self.sigma_along_s,
                **self.facts,
            },
            "features": features,
        }


def _pieces(ground: Ground) -> list[list[list[float]]]:
    """Return runs of [longitude, latitude] on the Earth, cut at the antimeridian on both sides of it."""
    pieces: list[list[list[float]]] = []
    run: list[list[float]] = []
    for longitude, latitude in zip(ground.longitude_deg, ground.latitude_deg, strict=True):
        if not np.isfinite(latitude):
            if len(run) > 1:
                pieces.append(run)
            run = []
            continue
        here = [round(float(longitude), 5), round(float(latitude), 5)]
        if run and abs(here[0] - run[-1][0]) > 180.0:
            edge = 180.0 if run[-1][0] > 0 else -180.0
            ahead = here[0] + 2 * edge
            share = (edge - run[-1][0]) / (ahead - run[-1][0]) if ahead != run[-1][0] else 0.0
            crossing = round(run[-1][1] + share * (here[1] - run[-1][1]), 5)
            run.append([edge, crossing])
            pieces.append(run)
            run = [[-edge, crossing]]
        run.append(here)
    if len(run) > 1:
        pieces.append(run)
    return pieces


def shadow_path(
    title: str,
    state: StateOf,
    star: Star,
    middle_tt_s: float,
    radius_km: float,
    sigma_across_km: float,
    sigma_along_s: float,
    facts: dict[str, Any] | None = None,
) -> ShadowPath | None:
    """Return the path over the Earth about the geocentric middle, None when even the 1-sigma edges pass it by.

    Sampled in about 400 steps from first to last touch of the widest line.
    """
    reach = EARTH_RADIUS_KM + radius_km + sigma_across_km
    middle = axis_of(state, star, middle_tt_s + np.arange(-2, 3) * 30.0)
    velocity = np.gradient(middle.offset_km, middle.tt_s, axis=1)[:, 2]
    speed = float(np.sqrt((velocity**2).sum()))
    closest = float(np.sqrt((middle.offset_km[:, 2] ** 2).sum()))
    if closest > reach:
        return None
    # the Earth turns by up to 0.5 km/s, and the axis bends a little: a tenth more
    half = 1.1 * np.sqrt(reach**2 - closest**2) / speed + 10.0
    times = middle_tt_s + np.linspace(-half, half, 401)
    axis = axis_of(state, star, times)
    centre = ground_of(axis)
    # beside the Earth the axis has no ground of its own: the direction across comes from the axis's course alone
    course = np.gradient(axis.offset_km, times, axis=1)
    across = np.cross(axis.star, course / np.sqrt((course**2).sum(axis=0)), axis=0)
    across = np.where(np.isfinite(centre.across), centre.across, across)
    lines = {"centre": centre}
    wide = radius_km + sigma_across_km
    for name, shift in (("limit", radius_km), ("sigma", wide)):
        lines[f"{name}_1"] = ground_of(axis, shift, across)
        lines[f"{name}_2"] = ground_of(axis, -shift, across)
    sun = places.direction("sun", None, times).vector_km
    turn = celestial_to_terrestrial(times)
    sun_itrs = np.einsum("nij,jn->in", turn, sun / np.sqrt((sun**2).sum(axis=0)))
    latitude, longitude = np.radians(centre.latitude_deg), np.radians(centre.longitude_deg)
    up = np.stack(
        [np.cos(latitude) * np.cos(longitude), np.cos(latitude) * np.sin(longitude), np.sin(latitude)]
    )
    sun_altitude = np.degrees(np.arcsin(np.clip((up * sun_itrs).sum(axis=0), -1.0, 1.0)))
    return ShadowPath(
        title, 2.0 * radius_km, sigma_across_km, sigma_along_s, lines, sun_altitude, facts or {}
    )
