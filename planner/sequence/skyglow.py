"""How bright the sky is: dark, in twilight, in moonlight and by day, in V magnitudes a square arcsecond.

Dark sky and moonlight: Krisciunas & Schaefer 1991, PASP 103, 1033, good to about 20 % away from the Moon.
Twilight: Patat, Ugolnikov & Postylyakov 2006, A&A 455, 385, table 2 (V, zenith), 5 to 15 degrees of solar depression.
By day: from measured luminances (sky at the zenith 3.9, horizon Sun 7.0 mag; common practice, no source).
Towards and away from the Sun: the clear sky of CIE S 011/E:2003 (ISO 15469:2004), type 12, relative to the zenith, with
the Sun held on the horizon once it has set. Against light scattered once (docs/notes/twilight_direction.py) it is
within 1.1 magnitudes to 6 degrees of depression on the Sun's side. Later, the glow low over the Sun may be brighter by
some magnitudes, and the sky opposite to it darker by as much. Haze and cloud are left out.
"""

from __future__ import annotations

import numpy as np

# V = (20.7233 - ln(B / 34.08)) / 0.92104 with B in nanolamberts: equation 1 of the 1991 paper
_NL_A, _NL_B, _NL_C = 34.08, 20.7233, 0.92104
# a0 + a1 (zeta - 95) + a2 (zeta - 95)^2, zeta the Sun's zenith distance; coefficients from memory
_TWILIGHT_V = (11.84, 1.518, -0.057)
# gradation a, b and indicatrix c, d, e of the CIE standard general sky, type 12: clear, low luminance turbidity
_CIE_A, _CIE_B, _CIE_C, _CIE_D, _CIE_E = -1.0, -0.32, 10.0, -3.0, 0.45
_DAY_ALTITUDE_DEG = (-5.0, 0.0, 10.0, 30.0)
_DAY_V = (11.84, 7.0, 4.6, 3.9)


def nanolamberts(v_mag_arcsec2: np.ndarray | float) -> np.ndarray:
    """Return the surface brightness in nanolamberts."""
    return _NL_A * np.exp(_NL_B - _NL_C * np.asarray(v_mag_arcsec2, float))


def v_mag_arcsec2(nanolambert: np.ndarray) -> np.ndarray:
    """Return the surface brightness in V magnitudes a square arcsecond."""
    return (_NL_B - np.log(np.asarray(nanolambert, float) / _NL_A)) / _NL_C


def scattering_airmass(altitude_deg: np.ndarray | float) -> np.ndarray:
    """Return X = (1 - 0.96 sin^2 z)^-1/2, equation 3 of the 1991 paper: 5 at the horizon."""
    return 1 / np.sqrt(1 - 0.96 * np.cos(np.radians(np.clip(altitude_deg, 0, 90))) ** 2)


def dark_nl(
    zenith_v_mag_arcsec2: float, altitude_deg: np.ndarray | float, extinction_mag: float
) -> np.ndarray:
    """Return the dark sky at an altitude, equation 2: brighter airglow, dimmed by extinction."""
    mass = scattering_airmass(altitude_deg)
    return nanolamberts(zenith_v_mag_arcsec2) * 10 ** (-0.4 * extinction_mag * (mass - 1)) * mass


def moonlight_nl(
    altitude_deg: np.ndarray | float,
    moon_altitude_deg: np.ndarray,
    moon_distance_deg: np.ndarray,
    moon_phase_angle_deg: np.ndarray,
    extinction_mag: float,
) -> np.ndarray:
    """Return what the Moon adds, equations 15 to 21; nothing while it is down."""
    phase = np.abs(moon_phase_angle_deg)
    light = 10 ** (-0.4 * (3.84 + 0.026 * phase + 4e-9 * phase**4))
    apart = np.maximum(np.asarray(moon_distance_deg, float), 0.25)
    rayleigh = 10**5.36 * (1.06 + np.cos(np.radians(apart)) ** 2)
    aerosol = np.where(apart < 10, 6.2e7 / apart**2, 10 ** (6.15 - apart / 40))
    through = 10 ** (-0.4 * extinction_mag * scattering_airmass(moon_altitude_deg))
    scattered = 1 - 10 ** (-0.4 * extinction_mag * scattering_airmass(altitude_deg))
    return np.where(
        np.asarray(moon_altitude_deg) > 0, (rayleigh + aerosol) * light * through * scattered, 0.0
    )


def sunlight_nl(sun_altitude_deg: np.ndarray | float) -> np.ndarray:
    """Return what the Sun adds, above and below the horizon; nothing from 18 degrees down."""
    altitude = np.asarray(sun_altitude_deg, float)
    zeta = np.clip(-altitude - 5, 0, 10)
    magnitude = _TWILIGHT_V[0] + _TWILIGHT_V[1] * zeta + _TWILIGHT_V[2] * zeta**2
    magnitude = np.where(altitude > -5, np.interp(altitude, _DAY_ALTITUDE_DEG, _DAY_V), magnitude)
    fading = np.clip((altitude + 18) / 3, 0, 1)
    return nanolamberts(magnitude) * fading


def towards_sun(
    altitude_deg: np.ndarray | float,
    sun_altitude_deg: np.ndarray | float,
    azimuth_from_sun_deg: np.ndarray | float,
) -> np.ndarray:
    """Return how many times as bright as the zenith a clear sunlit sky is in a direction: CIE S 011/E:2003, type 12.

    A Sun below the horizon counts as standing on it.
    """
    high = np.radians(np.clip(altitude_deg, 0.5, 90.0))
    sun = np.radians(np.clip(sun_altitude_deg, 0.0, 90.0))
    apart = np.radians(np.asarray(azimuth_from_sun_deg, float))
    cos_apart = np.sin(high) * np.sin(sun) + np.cos(high) * np.cos(sun) * np.cos(apart)

    def indicatrix(angle: np.ndarray | float) -> np.ndarray:
        far = np.exp(_CIE_D * np.pi / 2)
        return 1 + _CIE_C * (np.exp(_CIE_D * np.asarray(angle)) - far) + _CIE_E * np.cos(angle) ** 2

    gradation = (1 + _CIE_A * np.exp(_CIE_B / np.sin(high))) / (1 + _CIE_A * np.exp(_CIE_B))
    return gradation * indicatrix(np.arccos(np.clip(cos_apart, -1, 1))) / indicatrix(np.pi / 2 - sun)


def sky_v_mag_arcsec2(
    dark_v_mag_arcsec2: float,
    extinction_mag: float,
    altitude_deg: np.ndarray | float,
    sun_altitude_deg: np.ndarray | float,
    moon_altitude_deg: np.ndarray | float = -90.0,
    moon_distance_deg: np.ndarray | float = 90.0,
    moon_phase_angle_deg: np.ndarray | float = 180.0,
    azimuth_from_sun_deg: np.ndarray | float | None = None,
) -> np.ndarray:
    """Return the brightness of the sky as seen at an altitude, all sources added; arrays broadcast.

    `azimuth_from_sun_deg`: of the direction; sunlight is as at the zenith when None.
    """
    sunlight = sunlight_nl(sun_altitude_deg)
    if azimuth_from_sun_deg is not None:
        sunlight = sunlight * towards_sun(altitude_deg, sun_altitude_deg, azimuth_from_sun_deg)
    total = (
        dark_nl(dark_v_mag_arcsec2, altitude_deg, extinction_mag)
        + sunlight
        + moonlight_nl(
            altitude_deg,
            np.asarray(moon_altitude_deg, float),
            np.asarray(moon_distance_deg, float),
            np.asarray(moon_phase_angle_deg, float),
            extinction_mag,
        )
    )
    return v_mag_arcsec2(total)
