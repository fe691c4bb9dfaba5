"""What the Moon looks like where something passes behind it: lit or dark limb, cusp angle, phase, eclipse."""

from __future__ import annotations

from dataclasses import dataclass, replace

import numpy as np

from planner.events import cautions
from planner.events.contacts import RAD_ARCSEC
from planner.sky import bodies, discs, places
from planner.sky.moonlimb import SMOOTH_LIMB_SIGMA_KM, limb_centre_km
from planner.sky.observer import Observer

# Meeus, Astronomical Algorithms (2nd ed.), ch. 54: the shadow of the solid Earth is widened by its atmosphere by
# about 1/50 of the lunar parallax term (the rule used in almanacs since Chauvenet); radius of the Earth at 45 degrees.
_SHADOW_WIDENED = 1.02
_EARTH_MEAN_OVER_EQUATORIAL = 0.998340
# How far the limb reaches above or below the smooth circle, km, at 1 in 100 places (2.6 sigma): what decides grazes.
LIMB_RELIEF_KM = 2.6 * SMOOTH_LIMB_SIGMA_KM

SMOOTH_LIMB_TEXT = "smooth, about the centre of figure (1.2 km from the centre of mass)"


def limb_track(observer: Observer | None, tt_s: np.ndarray, here_km: np.ndarray | None = None) -> np.ndarray:
    """Return the centre of the Moon's smooth limb from the observer, (3, n) in km: 1.2 km from the centre of mass."""
    return places.direction("moon", observer, tt_s, here_km).vector_km + limb_centre_km(tt_s)


def limb_disc(observer: Observer | None, tt_s: np.ndarray, radii: str | None) -> discs.SkyDisc:
    """Return the Moon's disc about the centre of its limb, which is what frames show and fits find."""
    tt_s = np.atleast_1d(np.asarray(tt_s, dtype=float))
    ra_deg, dec_deg = places.radec_deg(limb_track(observer, tt_s))
    return replace(discs.sky_disc("moon", observer, tt_s, radii=radii), ra_deg=ra_deg, dec_deg=dec_deg)


@dataclass(frozen=True)
class MoonState:
    """The Moon at n times; arrays (n,). Position angles from ICRS north.

    `lit`: True where the limb at the angle asked for is in sunlight; `cusp_angle_deg`: from the nearer cusp along
    the limb, positive on the dark side (common practice); `cusp`: `north` or `south`.
    `eclipse`: `none`, `penumbral`, `partial` or `total` for the Moon as a whole.
    """

    lit: np.ndarray
    cusp_angle_deg: np.ndarray
    cusp: tuple[str, ...]
    illuminated_fraction: np.ndarray
    waxing: np.ndarray
    semidiameter_arcsec: np.ndarray
    elongation_deg: np.ndarray
    eclipse: tuple[str, ...]


def moon_state(observer: Observer | None, tt_s: np.ndarray, limb_pa_icrs_deg: np.ndarray) -> MoonState:
    """Return what the Moon looks like at these times and limb angles (ICRS north through east)."""
    tt_s = np.atleast_1d(np.asarray(tt_s, dtype=float))
    moon = discs.sky_disc("moon", observer, tt_s)
    sun = places.direction("sun", observer, tt_s)
    moon_km = places.direction("moon", observer, tt_s).vector_km
    elongation = places.separation_arcsec(moon_km, sun.vector_km) / 3600.0
    from_bright = (limb_pa_icrs_deg - moon.bright_limb_pa_deg + 180.0) % 360.0 - 180.0
    north = places.north_of_date_pa_deg(moon.ra_deg, moon.dec_deg, tt_s)
    # the cusps stand at +-90 degrees from the middle of the lit limb; which of them is the northern one:
    cusp_plus = (moon.bright_limb_pa_deg - north + 90.0 + 180.0) % 360.0 - 180.0
    plus_is_north = np.abs(cusp_plus) < 90.0
    near_plus = from_bright >= 0.0
    cusp = np.where(near_plus == plus_is_north, "north", "south")
    # the Moon waxes while its bright limb is its western one (position angle about 270)
    waxing = np.sin(np.radians(moon.bright_limb_pa_deg - north)) < 0.0
    return MoonState(
        lit=np.abs(from_bright) < 90.0,
        cusp_angle_deg=np.abs(from_bright) - 90.0,
        cusp=tuple(str(c) for c in cusp),
        illuminated_fraction=(1.0 + np.cos(np.radians(moon.phase_angle_deg))) / 2.0,
        waxing=waxing,
        semidiameter_arcsec=moon.semidiameter_arcsec,
        elongation_deg=elongation,
        eclipse=eclipse_state(tt_s),
    )


def eclipse_state(tt_s: np.ndarray) -> tuple[str, ...]:
    """Return whether the Moon stands in the Earth's shadow: `none`, `penumbral`, `partial` or `total`."""
    from_axis, umbra, penumbra, moon_radius = earth_shadow(tt_s)
    state = np.where(
        from_axis < umbra - moon_radius,
        "total",
        np.where(
            from_axis < umbra + moon_radius,
            "partial",
            np.where(from_axis < penumbra + moon_radius, "penumbral", "none"),
        ),
    )
    return tuple(str(s) for s in state)


def earth_shadow(tt_s: np.ndarray) -> tuple[np.ndarray, np.ndarray, np.ndarray, np.ndarray]:
    """Return the Moon's distance from the shadow's axis, and the radii of umbra, penumbra and Moon, in radians.

    Geocentric; radii of the shadow after Meeus ch. 54; the edge of the umbra is good to about 20 s of time.
    """
    tt_s = np.atleast_1d(np.asarray(tt_s, dtype=float))
    moon = places.direction("moon", None, tt_s)
    sun = places.direction("sun", None, tt_s)
    from_axis = places.separation_arcsec(moon.vector_km, -sun.vector_km) / RAD_ARCSEC
    moon_parallax = np.arcsin(bodies.EARTH_RADIUS_KM / moon.distance_km) * _EARTH_MEAN_OVER_EQUATORIAL
    sun_parallax = np.arcsin(bodies.EARTH_RADIUS_KM / sun.distance_km)
    sun_radius = np.arcsin(bodies.SUN_RADIUS_KM / sun.distance_km)
    umbra = _SHADOW_WIDENED * (moon_parallax + sun_parallax - sun_radius)
    penumbra = _SHADOW_WIDENED * (moon_parallax + sun_parallax + sun_radius)
    return from_axis, umbra, penumbra, np.arcsin(bodies.radii_km("moon", "iau")[0] / moon.distance_km)


def limb_words(state: MoonState) -> dict[str, list]:
    """Return what is worth saying of each instant, as lists by name."""
    return {
        "limb": ["lit" if lit else "dark" for lit in state.lit],
        "cusp_angle_deg": [float(v) for v in state.cusp_angle_deg],
        "cusp": list(state.cusp),
        "moon_illuminated_fraction": [float(v) for v in state.illuminated_fraction],
        "moon_eclipse": list(state.eclipse),
    }


def moon_cautions(elongation_deg: float, smooth: bool) -> tuple[str, ...]:
    """Return the cautions of an occultation by the Moon, this far from the Sun."""
    near_sun = (
        tuple(text.format(elongation_deg) for text in cautions.SUN_NEAR) if elongation_deg < 30.0 else ()
    )
    return near_sun + (cautions.ROUND_LIMB if smooth else ()) + cautions.NIGHT
