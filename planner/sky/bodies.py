"""Sizes, poles and constants of bodies, each with its source on its line.

The radii of the Sun, the Moon and the planets that cross the Sun are conventions, and contact times follow them:
`radii_km` takes the name of one, and every prediction names the one it used.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from planner.errors import InputError

AU_KM = 149597870.7  # exact: IAU 2012 Resolution B2
C_KM_S = 299792.458  # exact: SI
ARCSEC = np.pi / 648000.0
SUN_GM_KM3_S2 = 132712440041.279419  # DE440: Park et al. 2021, AJ 161, 105, table 2
SUN_RADIUS_KM = 695700.0  # nominal: IAU 2015 Resolution B3
EARTH_RADIUS_KM = 6378.137  # WGS 84: NIMA TR8350.2, third edition, table 3.1
PLANETS = ("mercury", "venus", "mars", "jupiter", "saturn", "uranus", "neptune")

# Equatorial and polar radius in km: IAU WGCCRE, Archinal et al. 2011, Celest. Mech. Dyn. Astr. 109, 101, tables 4, 5
_WGCCRE = {
    "mercury": (2439.7, 2439.7),
    "venus": (6051.8, 6051.8),
    "earth": (6378.1366, 6356.7519),
    "mars": (3396.19, 3376.20),
    "jupiter": (71492.0, 66854.0),
    "saturn": (60268.0, 54364.0),
    "uranus": (25559.0, 24973.0),
    "neptune": (24764.0, 24341.0),
    "pluto": (1195.0, 1195.0),
    "moon": (1737.4, 1737.4),
}


def _at_1_au(arcsec: float) -> tuple[float, float]:
    radius = float(AU_KM * np.sin(arcsec * ARCSEC))
    return radius, radius


_K_MOON = (
    0.2725076 * EARTH_RADIUS_KM
)  # IAU 1982 k, as in almanacs: NASA/GSFC, "Solar eclipses: radius of the Moon"


@dataclass(frozen=True)
class RadiiConvention:
    """A named set of radii: (equatorial, polar) in km by body; `text` says what it is, in one line."""

    name: str
    text: str
    radius_km: dict[str, tuple[float, float]]


CONVENTIONS = {
    convention.name: convention
    for convention in (
        RadiiConvention(
            "tables",
            'Sun 959.63" at 1 au, Mercury 3.36", Venus 8.41" (cloud tops), Moon k = 0.2725076: '
            "the radii of most published transit and occultation tables",
            # semidiameters at 1 au: Meeus, Astronomical Algorithms, ch. 55; Auwers 1891 for the Sun
            _WGCCRE
            | {
                "sun": _at_1_au(959.63),
                "mercury": _at_1_au(3.36),
                "venus": _at_1_au(8.41),
                "moon": (_K_MOON, _K_MOON),
            },
        ),
        RadiiConvention(
            "surface",
            'Sun 959.63" at 1 au, Mercury 2439.7 km, Venus 6051.8 km (surface), Moon k = 0.2725076',
            # Venus 8.34" = 6051.8 km: the radii behind the tables of the Paris almanac office
            _WGCCRE | {"sun": _at_1_au(959.63), "moon": (_K_MOON, _K_MOON)},
        ),
        RadiiConvention(
            "iau",
            "nominal Sun 695700 km (IAU 2015 B3); planets and Moon (1737.4 km) of IAU WGCCRE 2009",
            _WGCCRE | {"sun": (SUN_RADIUS_KM, SUN_RADIUS_KM)},
        ),
        RadiiConvention(
            "measured",
            'Sun 959.57" at 1 au (Emilio et al. 2015, from the Venus transit of 2012), WGCCRE planets, '
            "Venus 6051.8 + 65 km (cloud tops), Moon 1737.4 km",
            # cloud-top height 65 km: from memory (Ignatiev et al. 2009, 74 +- 1 km at 1.5 micron; 60-70 in the visible)
            _WGCCRE | {"sun": _at_1_au(959.57), "venus": (6116.8, 6116.8)},
        ),
    )
}
DEFAULT_CONVENTION = "tables"

# Saturn's rings, radii in km: outer edge of A, inner edge of A, outer and inner edge of B, inner edge of C.
# French et al. 1993, Icarus 103, 163 (rounded to 1 km)
SATURN_RINGS_KM = {
    "a_outer": 136774.0,
    "a_inner": 122050.0,
    "b_outer": 117570.0,
    "b_inner": 91975.0,
    "c_inner": 74490.0,
}


def convention(name: str | None) -> RadiiConvention:
    """Return a convention of radii by name (None: the default); raises InputError with the names allowed."""
    key = DEFAULT_CONVENTION if name is None else name
    if key not in CONVENTIONS:
        raise InputError(f"event.radii: found {name!r}; allowed are {', '.join(CONVENTIONS)}")
    return CONVENTIONS[key]


def radii_km(body: str, radii: str | None = None) -> tuple[float, float]:
    """Return the (equatorial, polar) radius of a body in km under a named convention."""
    table = convention(radii).radius_km
    if body not in table:
        raise InputError(f"body: found {body!r}; allowed are {', '.join(table)}")
    return table[body]


def pole_radec_deg(body: str, tt_s: np.ndarray) -> tuple[np.ndarray, np.ndarray]:
    """Return the ICRS direction (ra_deg, dec_deg) of the north pole of a body.

    Archinal et al. 2011 (WGCCRE 2009), tables 1 and 2; Jupiter without its periodic terms (0.001 degrees).
    The Moon's is the mean-Earth pole of its series, good to 0.01 degrees.
    """
    day = np.atleast_1d(np.asarray(tt_s, float)) / 86400.0
    century = day / 36525.0
    one = np.ones_like(day)
    if body == "moon":
        return moon_orientation_deg(tt_s)[:2]
    if body == "neptune":
        n = np.radians(357.85 + 52.316 * century)
        return 299.36 + 0.70 * np.sin(n), 43.46 - 0.51 * np.cos(n)
    try:
        ra, ra_rate, dec, dec_rate = {
            "sun": (286.13, 0.0, 63.87, 0.0),
            "mercury": (281.0097, -0.0328, 61.4143, -0.0049),
            "venus": (272.76, 0.0, 67.16, 0.0),
            "mars": (317.68143, -0.1061, 52.88650, -0.0609),
            "jupiter": (268.056595, -0.006499, 64.495303, 0.002413),
            "saturn": (40.589, -0.036, 83.537, -0.004),
            "uranus": (257.311, 0.0, -15.175, 0.0),
            "pluto": (132.993, 0.0, -6.163, 0.0),
        }[body]
    except KeyError:
        raise InputError(f"body: found {body!r}; allowed is a body with a published pole") from None
    return ra * one + ra_rate * century, dec * one + dec_rate * century


# WGCCRE 2009, table 2: arguments E1..E13 (degrees, degrees a day) and amplitudes in pole and prime meridian
_MOON_E = np.array(
    [
        (125.045, -0.0529921),
        (250.089, -0.1059842),
        (260.008, 13.0120009),
        (176.625, 13.3407154),
        (357.529, 0.9856003),
        (311.589, 26.4057084),
        (134.963, 13.0649930),
        (276.617, 0.3287146),
        (34.226, 1.7484877),
        (15.134, -0.1589763),
        (119.743, 0.0036096),
        (239.961, 0.1643573),
        (25.053, 12.9590088),
    ]
)
_MOON_RA = np.array([-3.8787, -0.1204, 0.0700, -0.0172, 0, 0.0072, 0, 0, 0, -0.0052, 0, 0, 0.0043])
_MOON_DEC = np.array([1.5419, 0.0239, -0.0278, 0.0068, 0, -0.0029, 0.0009, 0, 0, 0.0008, 0, 0, -0.0009])
_MOON_W = np.array(
    [
        3.5610, 0.1208, -0.0642, 0.0158, 0.0252, -0.0066, -0.0047, -0.0046, 0.0028, 0.0052, 0.0040, 0.0019, -0.0044
    ]
)  # fmt: skip


def moon_orientation_deg(tt_s: np.ndarray) -> tuple[np.ndarray, np.ndarray, np.ndarray]:
    """Return the Moon's north pole (ra_deg, dec_deg) and prime meridian w_deg, mean-Earth axes, ICRS.

    The analytic libration of Archinal et al. 2011, table 2: within 0.01 degrees (150 m on the surface) of a numerical
    orientation kernel over 1900-2050.
    """
    day = np.atleast_1d(np.asarray(tt_s, float)) / 86400.0
    century = day / 36525.0
    e = np.radians(_MOON_E[:, :1] + _MOON_E[:, 1:] * day)
    sin, cos = np.sin(e), np.cos(e)
    return (
        269.9949 + 0.0031 * century + _MOON_RA @ sin,
        66.5392 + 0.0130 * century + _MOON_DEC @ cos,
        38.3213 + 13.17635815 * day - 1.4e-12 * day**2 + _MOON_W @ sin,
    )
