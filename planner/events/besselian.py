"""The Moon in front of many targets, as short polynomials: one table serves any number of sites.

As with Besselian elements, everything that does not depend on the site is written once for each passing, here as
geocentric vectors of Moon and target over seven hours instead of a shadow plane, because that keeps topocentric
light-time and parallax exact. A site then costs some array operations for all passings together. Contacts agree
with direct evaluation to 1 ms (planets' discs: 2 ms).
"""

from __future__ import annotations

from dataclasses import dataclass, replace

import numpy as np

from planner.events.contacts import RAD_ARCSEC, STAR_DISTANCE_KM
from planner.events.roots import minima_near, roots_between
from planner.sky import ephemeris, observer, places, pole, timescale
from planner.sky.bodies import C_KM_S, EARTH_RADIUS_KM
from planner.sky.moonlimb import limb_centre_km
from planner.sky.observer import Observer
from planner.sky.rotation import polar_motion_arcsec

# Topocentric passings are within 2 h of the geocentric ones and last under 2 h: contacts lie within 3.2 h.
_HALF_SPAN_S = 3.5 * 3600.0
_MOON_TERMS = 6
_TARGET_TERMS = 4
# Contacts of a passing are within 1.3 h of its middle, however slow.
_CONTACT_REACH_S = 1.3 * 3600.0
_CLOSEST_REACH_S = _HALF_SPAN_S - _CONTACT_REACH_S
# Rates are differences over this; the mean of two chords then stands for the one between, to 0.01 ms.
_HALF_STEP_S = 0.1
# After two steps closest approaches are known to some 10 arcsec: passings beyond half a degree are left there.
_WORTH_A_LOOK_RAD = np.radians(0.5)


@dataclass(frozen=True)
class Outline:
    """Size of n targets: equatorial radius in km and 1 - (polar/equatorial)^2, (n,); pole as unit vectors (3, n)."""

    radius_km: np.ndarray
    squeezed: np.ndarray
    pole: np.ndarray


@dataclass(frozen=True)
class SiteContacts:
    """What n passings look like from a site; instants in TT seconds, NaN where limbs do not meet.

    `outer`, `inner`: (n, 2), before and after `closest`; `gap_arcsec`: least separation minus both radii.
    """

    closest: np.ndarray
    outer: np.ndarray
    inner: np.ndarray
    gap_arcsec: np.ndarray


@dataclass(frozen=True)
class MoonPassings:
    """n passings of the Moon over targets; build it with `moon_passings`."""

    middle_tt_s: np.ndarray
    moon_km: np.ndarray  # (terms, 3, n) powers of u = (t - middle) / half span
    target_km: np.ndarray
    moon_velocity_km_s: np.ndarray  # (2, 3, n) barycentric: at the middle, and its change per u
    target_velocity_km_s: np.ndarray  # (3, n)
    to_celestial: np.ndarray  # (3, 3, n): from the turning frame (CIRS) to ICRS axes, at the middle
    axis_drift: (
        np.ndarray
    )  # (3, n): rotation vector of that frame per u (precession and nutation, 0.5 m of the site)
    angle_rad: np.ndarray  # Earth rotation angle at the middle
    pole_rad: np.ndarray  # (2, n) polar motion
    moon_radius_km: float
    outline: Outline

    def __len__(self) -> int:
        """Return the number of passings."""
        return len(self.middle_tt_s)

    def select(self, keep: np.ndarray) -> MoonPassings:
        """Return the passings that an array of indices keeps."""
        along_last = {
            name: getattr(self, name)[..., keep]
            for name in (
                "middle_tt_s",
                "moon_km",
                "target_km",
                "moon_velocity_km_s",
                "target_velocity_km_s",
                "to_celestial",
                "axis_drift",
                "angle_rad",
                "pole_rad",
            )
        }
        outline = Outline(
            self.outline.radius_km[keep], self.outline.squeezed[keep], self.outline.pole[:, keep]
        )
        return MoonPassings(**along_last, moon_radius_km=self.moon_radius_km, outline=outline)

    def of_points(self) -> MoonPassings:
        """Return the same passings with every target taken as a point: contacts are then of centres."""
        outline = replace(self.outline, radius_km=np.zeros_like(self.outline.radius_km))
        return replace(self, outline=outline)

    def geocentric(self) -> tuple[np.ndarray, np.ndarray, np.ndarray]:
        """Return the geocentric closest approach (TT s), its gap between limbs, and the Moon's parallax, arcsec."""
        which = np.arange(len(self))
        closest = minima_near(
            lambda tt_s, index: _separation(*self.vectors(tt_s, index, None)) ** 2,
            self.middle_tt_s,
            1200.0,
            _HALF_SPAN_S,
            1e-2,
        )
        at = np.where(np.isfinite(closest), closest, self.middle_tt_s)
        moon, target = self.vectors(at, which, None)
        near, far = self._radii(moon, target, which)
        gap = (_separation(moon, target) - near - far) * RAD_ARCSEC
        parallax = np.arcsin(EARTH_RADIUS_KM / np.sqrt((moon**2).sum(axis=0))) * RAD_ARCSEC
        return closest, gap, parallax

    def vectors(
        self, tt_s: np.ndarray, which: np.ndarray, site_km: np.ndarray | None
    ) -> tuple[np.ndarray, np.ndarray]:
        """Return Moon and target (3, m) from a site (terrestrial vector; None: the geocentre), at time and passing."""
        u = (tt_s - self.middle_tt_s[which]) / _HALF_SPAN_S
        moon, target = _power_sum(self.moon_km, which, u), _power_sum(self.target_km, which, u)
        if site_km is None:
            return moon, target
        site = self._site(tt_s, which, site_km)
        late_moon, late_target = _delay_s(moon, site), _delay_s(target, site)
        velocity = self.moon_velocity_km_s[0][:, which] + self.moon_velocity_km_s[1][:, which] * u
        moon = moon - site - velocity * late_moon
        target = target - site - self.target_velocity_km_s[:, which] * late_target
        return moon, target

    def _site(self, tt_s: np.ndarray, which: np.ndarray, site_km: np.ndarray) -> np.ndarray:
        turned = observer.EARTH_RATE_RAD_S * (tt_s - self.middle_tt_s[which]) + self.angle_rad[which]
        x, y = self.pole_rad[:, which]
        a, b = site_km[0] - x * site_km[2], site_km[1] + y * site_km[2]
        c = site_km[2] + x * site_km[0] - y * site_km[1]
        cos, sin = np.cos(turned), np.sin(turned)
        x, y = a * cos - b * sin, a * sin + b * cos
        matrix = self.to_celestial[:, :, which]
        at = matrix[:, 0] * x + matrix[:, 1] * y + matrix[:, 2] * c
        p, q, r = self.axis_drift[:, which] * ((tt_s - self.middle_tt_s[which]) / _HALF_SPAN_S)
        drift = np.stack([q * at[2] - r * at[1], r * at[0] - p * at[2], p * at[1] - q * at[0]])
        return at + drift

    def contacts(self, where: Observer | None, inner: bool = True) -> SiteContacts:
        """Return closest approach and contacts at a site, for all passings at once.

        Newton steps on the relative motion, which is nearly straight; what has not settled (grazes) is bracketed.
        """
        site_km = None if where is None else observer.itrs_position_km(where)
        everything = np.arange(len(self))
        closest, gap = np.full(len(self), np.nan), np.full(len(self), np.nan)
        t = self.middle_tt_s.copy()
        for _ in range(2):
            offset, motion = self._relative(t, everything, site_km)
            move = -_dot(offset, motion) / _dot(motion, motion)
            t = np.clip(t + move, self.middle_tt_s - _CLOSEST_REACH_S, self.middle_tt_s + _CLOSEST_REACH_S)
        near_enough = np.sqrt(_dot(offset + motion * move, offset + motion * move)) < _WORTH_A_LOOK_RAD
        which = np.flatnonzero(near_enough)
        t = t[which]
        for _ in range(3):
            offset, motion = self._relative(t, which, site_km)
            t = t - _dot(offset, motion) / _dot(motion, motion)
        moon, target = self.vectors(t, which, site_km)
        near, far = self._radii(moon, target, which)
        apart = _separation(moon, target)
        closest[which], gap[which] = t, (apart - near - far) * RAD_ARCSEC
        speed = np.sqrt(_dot(motion, motion))
        outer, within = np.full((len(self), 2), np.nan), np.full((len(self), 2), np.nan)
        for found, sign, wanted in ((outer, 1.0, True), (within, -1.0, inner)):
            limit = near + sign * far
            touch = np.flatnonzero((apart < limit) & (wanted if sign > 0 else wanted & (far > 0)))
            half = np.sqrt(limit[touch] ** 2 - apart[touch] ** 2) / speed[touch]
            found[which[touch]] = self._touching(site_km, t[touch], half, which[touch], sign)
        return SiteContacts(closest, outer, within, gap)

    def _relative(
        self, tt_s: np.ndarray, which: np.ndarray, site_km: np.ndarray | None
    ) -> tuple[np.ndarray, np.ndarray]:
        """Return the unit vector of the Moon minus the target's, and its rate per second."""
        both = np.concatenate([which, which])
        moon, target = self.vectors(np.concatenate([tt_s - _HALF_STEP_S, tt_s + _HALF_STEP_S]), both, site_km)
        relative = moon / np.sqrt(_dot(moon, moon)) - target / np.sqrt(_dot(target, target))
        before, after = relative[:, : len(tt_s)], relative[:, len(tt_s) :]
        return (before + after) / 2.0, (after - before) / (2.0 * _HALF_STEP_S)

    def _touching(
        self,
        site_km: np.ndarray | None,
        middle: np.ndarray,
        half_s: np.ndarray,
        which: np.ndarray,
        sign: float,
    ) -> np.ndarray:
        """Return (n, 2) contacts about closest approaches whose chords last about 2 `half_s`."""
        count = len(which)
        both = np.tile(which, 2)
        t = np.concatenate([middle - half_s, middle + half_s])
        move = np.full(2 * count, np.inf)
        for _ in range(3):
            ends = np.concatenate([t - _HALF_STEP_S, t + _HALF_STEP_S])
            before, after = self._chord(ends, np.tile(both, 2), site_km, sign).reshape(2, -1)
            with np.errstate(divide="ignore", invalid="ignore"):
                move = -((before + after) / 2.0) / (after - before) * 2.0 * _HALF_STEP_S
            t = t + np.clip(np.nan_to_num(move), -600.0, 600.0)
        bad = np.flatnonzero(
            (np.abs(move) > 1e-2) | (np.sign(t - np.tile(middle, 2)) != np.repeat([-1, 1], count))
        )
        if len(bad):
            start = np.tile(middle, 2)[bad]
            reach = np.where(bad < count, -_CONTACT_REACH_S, _CONTACT_REACH_S)
            t[bad] = roots_between(
                lambda tt_s, index: self._chord(tt_s, both[bad][index], site_km, sign),
                np.minimum(start, start + reach),
                np.maximum(start, start + reach),
                tolerance_s=2e-4,
            )
        return t.reshape(2, -1).T

    def _chord(
        self, tt_s: np.ndarray, which: np.ndarray, site_km: np.ndarray | None, sign: float
    ) -> np.ndarray:
        moon, target = self.vectors(tt_s, which, site_km)
        near, far = self._radii(moon, target, which)
        return _separation(moon, target) ** 2 - (near + sign * far) ** 2

    def _radii(
        self, moon: np.ndarray, target: np.ndarray, which: np.ndarray
    ) -> tuple[np.ndarray, np.ndarray]:
        distance = np.sqrt(_dot(moon, moon))
        near = np.arcsin(self.moon_radius_km / distance)
        radius = self.outline.radius_km[which]
        if not radius.any():
            return near, np.zeros_like(near)
        far_distance = np.sqrt(_dot(target, target))
        across = moon / distance - target / far_distance
        along_pole = _dot(self.outline.pole[:, which], across)
        square = _dot(across, across)
        share = along_pole**2 / np.where(square > 0, square, 1.0)
        reach = radius * np.sqrt(1.0 - self.outline.squeezed[which] * share)
        return near, reach / far_distance

    def target_altitude_deg(self, where: Observer, tt_s: np.ndarray) -> np.ndarray:
        """Return the geometric altitude of the target of each passing, without aberration: to 0.01 degrees."""
        which = np.arange(len(self))
        site_km = observer.itrs_position_km(where)
        target = self.vectors(tt_s, which, site_km)[1]
        latitude, longitude = np.radians([where.latitude_deg, where.longitude_deg])
        up = np.array(
            [np.cos(latitude) * np.cos(longitude), np.cos(latitude) * np.sin(longitude), np.sin(latitude)]
        )
        zenith = self._site(tt_s, which, up)
        return np.degrees(np.arcsin((zenith * target).sum(axis=0) / np.sqrt((target**2).sum(axis=0))))


def moon_passings(
    middle_tt_s: np.ndarray,
    planets: tuple[str, ...],
    which_planet: np.ndarray,
    star_vectors: np.ndarray,
    moon_radius_km: float,
    outline: Outline,
    of_figure: bool = True,
) -> MoonPassings:
    """Return the table of n passings about these middles (TT seconds), to be evaluated at any site.

    The Moon's limb is a circle about its centre of figure, or of mass where not `of_figure`.

    `which_planet` (n,) is an index into `planets`, -1 for a star, whose geocentric direction (with motion and
    parallax) is the column of `star_vectors` (3, n).
    """
    nodes = np.cos(np.pi * (np.arange(_MOON_TERMS) + 0.5) / _MOON_TERMS)
    times = (middle_tt_s + _HALF_SPAN_S * nodes[:, None]).ravel()
    earth_km = ephemeris.position_km("earth", timescale.tdb_s(times))
    moon = places.direction("moon", None, times, earth_km).vector_km
    if of_figure:
        moon = moon + limb_centre_km(times)
    moon = moon.reshape(3, _MOON_TERMS, -1)
    target = np.broadcast_to(star_vectors[:, None, :] * STAR_DISTANCE_KM, moon.shape).copy()
    target_velocity = np.zeros((3, len(middle_tt_s)))
    earth_km = earth_km.reshape(3, _MOON_TERMS, -1)
    for index, body in enumerate(planets):
        of = np.flatnonzero(which_planet == index)
        if len(of):
            at = times.reshape(_MOON_TERMS, -1)[:, of].ravel()
            place = places.direction(body, None, at, earth_km[:, :, of].reshape(3, -1)).vector_km
            target[:, :, of] = place.reshape(3, _MOON_TERMS, -1)
            target_velocity[:, of] = ephemeris.velocity_km_s(body, timescale.tdb_s(middle_tt_s[of]))
    ends = timescale.tdb_s(np.concatenate([middle_tt_s - _HALF_SPAN_S, middle_tt_s + _HALF_SPAN_S]))
    before, after = ephemeris.velocity_km_s("moon", ends).reshape(3, 2, -1).transpose(1, 0, 2)
    matrix = pole.celestial_to_intermediate(pole.pole_columns(middle_tt_s))
    x, y = polar_motion_arcsec(middle_tt_s)
    return MoonPassings(
        middle_tt_s=middle_tt_s,
        moon_km=_powers(nodes, moon, _MOON_TERMS),
        target_km=_powers(nodes, target, _TARGET_TERMS),
        moon_velocity_km_s=np.stack([(before + after) / 2.0, (after - before) / 2.0]),
        target_velocity_km_s=target_velocity,
        to_celestial=np.ascontiguousarray(matrix.transpose(2, 1, 0)),
        axis_drift=_drift(middle_tt_s),
        angle_rad=pole.earth_rotation_angle(middle_tt_s),
        pole_rad=np.stack([x, y]) / RAD_ARCSEC,
        moon_radius_km=moon_radius_km,
        outline=outline,
    )


def _drift(middle_tt_s: np.ndarray) -> np.ndarray:
    """Return the rotation vector (3, n) by which the intermediate frame turns in half a span, in radians."""
    before = pole.celestial_to_intermediate(pole.pole_columns(middle_tt_s - _HALF_SPAN_S))
    after = pole.celestial_to_intermediate(pole.pole_columns(middle_tt_s + _HALF_SPAN_S))
    # columns of the transposed matrices are the frame's axes on ICRS axes
    turn = np.einsum("nji,njk->nik", after, before)
    return 0.25 * np.stack(
        [turn[:, 2, 1] - turn[:, 1, 2], turn[:, 0, 2] - turn[:, 2, 0], turn[:, 1, 0] - turn[:, 0, 1]]
    )


def _powers(nodes: np.ndarray, values: np.ndarray, terms: int) -> np.ndarray:
    """Return coefficients (terms, 3, n) of powers of u that fit values (3, nodes, n) at Chebyshev nodes."""
    from numpy.polynomial import chebyshev

    fit = np.linalg.pinv(chebyshev.chebvander(nodes, terms - 1))
    to_powers = np.zeros((terms, terms))
    for k in range(terms):
        to_powers[: k + 1, k] = chebyshev.cheb2poly(np.eye(terms)[k])[: k + 1]
    return np.einsum("pk,jkn->pjn", to_powers @ fit, values)


def _power_sum(coefficients: np.ndarray, which: np.ndarray, u: np.ndarray) -> np.ndarray:
    total = coefficients[-1][:, which]
    for k in range(len(coefficients) - 2, -1, -1):
        total = total * u + coefficients[k][:, which]
    return total


def _delay_s(vector_km: np.ndarray, site_km: np.ndarray) -> np.ndarray:
    """Return how much later the light of a body leaves it for the site than for the geocentre, with sign changed.

    The body is seen where it was; a site nearer to it by x km sees it x/c later on its way.
    """
    distance = np.sqrt(_dot(vector_km, vector_km))
    from_site = vector_km - site_km
    return (np.sqrt(_dot(from_site, from_site)) - distance) / C_KM_S


def _dot(a: np.ndarray, b: np.ndarray) -> np.ndarray:
    return a[0] * b[0] + a[1] * b[1] + a[2] * b[2]


def _separation(a: np.ndarray, b: np.ndarray) -> np.ndarray:
    x = a[1] * b[2] - a[2] * b[1]
    y = a[2] * b[0] - a[0] * b[2]
    z = a[0] * b[1] - a[1] * b[0]
    return np.arctan2(np.sqrt(x * x + y * y + z * z), a[0] * b[0] + a[1] * b[1] + a[2] * b[2])
