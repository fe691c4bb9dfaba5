"""The single place of photon rates: electrons a second in a pixel from Sun, Moon, planets, stars and sky.

All magnitudes are V, and all functions take and give arrays.
A rate is `V_ZERO_PHOTONS` x collecting area x bandwidth x efficiency x 10**(-0.4 V): the spectrum is taken as flat
over the band, good to about 10 % in V and 20 % unfiltered for bodies of solar colour.
"""

from __future__ import annotations

from dataclasses import dataclass
from functools import lru_cache

import numpy as np
from scipy.special import erf

from planner.errors import InputError
from planner.sequence.models import GainSetting, Rig

# photons / (s m2 nm) of V = 0: 3.631e-11 W m-2 nm-1 (Bessell, Castelli & Plez 1998, table A2) over h c / lambda
V_ZERO_PHOTONS = 3.631e-11 / (6.62607015e-34 * 299792458.0 / 545e-9)
EFFECTIVE_NM = 545.0
UNFILTERED_NM = 300.0  # 400-700 nm; common practice, no source
BAYER_NM = 90.0  # the green passband of a colour mosaic; common practice, no source
# I(mu) / I(1) = 1 - u - v + u mu + v mu^2 at 550 nm (Cox 2000, Allen's Astrophysical Quantities, 14.7; from memory)
SUN_LIMB_U, SUN_LIMB_V = 0.93, -0.23
FWHM_OF_SIGMA = 2.0 * np.sqrt(2.0 * np.log(2.0))
# Three Gaussians for a Moffat profile with exponent 4.765, which Kolmogorov seeing has (Trujillo et al. 2001,
# MNRAS 328, 977): least squares, within 0.5 % of the peak; sigmas in units of the FWHM.
SEEING_WEIGHT = np.array([0.3667, 0.5370, 0.0963])
SEEING_SIGMA = np.array([0.36388, 0.54576, 0.89341])
TRACKED_FROM_S = 1.0  # longer exposures are blurred by the mount's error, shorter ones only moved
OPTICS_FWHM_PX = 0.8  # a good lens or telescope focused on its sensor; common practice, no source
SEEING_AIRMASS_POWER = 0.6  # Kolmogorov turbulence: r0 falls as airmass**-0.6 (Fried 1966)

# How each surface scatters: Lommel-Seeliger for airless rock, Lambert for clouds and dust. Common practice, no source.
DISC_LAWS = {"moon": "lommel-seeliger", "mercury": "lommel-seeliger", "sun": "sun"}


@dataclass(frozen=True)
class Band:
    """What is between the sky and the electrons: all that does not depend on the source."""

    name: str
    bandwidth_nm: float
    efficiency: float
    area_m2: float

    @property
    def zero_rate_e_s(self) -> float:
        """Electrons a second from V = 0 above an atmosphere that takes nothing."""
        return V_ZERO_PHOTONS * self.area_m2 * self.bandwidth_nm * self.efficiency


def band(rig: Rig, filter_name: str | None = None, behind_solar_filter: bool = False) -> Band:
    """Return the band of a rig through one of its filters (None: what the bare sensor sees).

    Raises InputError when the rig has no such filter, or no solar filter and one is asked for.
    """
    transmission = 1.0
    if filter_name is None:
        bandwidth_nm = BAYER_NM if rig.sensor.bayer else UNFILTERED_NM
    else:
        chosen = next((each for each in rig.filters if each.name == filter_name), None)
        if chosen is None:
            names = ", ".join(each.name for each in rig.filters) or "none"
            raise InputError(f"filter: found {filter_name!r}; the filters of {rig.name} are: {names}")
        bandwidth_nm = chosen.bandwidth_nm
        transmission = chosen.transmission * 10.0**-chosen.optical_density
    efficiency = transmission * rig.optics.transmission * rig.sensor.quantum_efficiency
    if behind_solar_filter:
        if rig.solar_filter is None:
            raise InputError(
                f"rig.solar_filter: {rig.name} has none, and the Sun is not pointed at without one"
            )
        efficiency *= 10.0**-rig.solar_filter.optical_density
    area_m2 = np.pi / 4 * (rig.optics.aperture_mm * 1e-3) ** 2 * (1 - rig.optics.obstruction**2)
    return Band(filter_name or "none", bandwidth_nm, efficiency, float(area_m2))


def rate_e_s(through: Band, magnitude: np.ndarray | float) -> np.ndarray:
    """Return electrons a second in all pixels from a source of this magnitude (extinction already added to it)."""
    return through.zero_rate_e_s * 10.0 ** (-0.4 * np.asarray(magnitude, float))


def extinguished(
    magnitude: np.ndarray | float, airmass: np.ndarray | float, extinction_mag: float
) -> np.ndarray:
    """Return the magnitude under the atmosphere: Bouguer's law."""
    return np.asarray(magnitude, float) + extinction_mag * np.asarray(airmass, float)


def sky_rate_e_s_px(through: Band, sky_mag_arcsec2: np.ndarray | float, scale_arcsec_px: float) -> np.ndarray:
    """Return electrons a second in a pixel from the sky; its brightness is as seen, extinction included."""
    return rate_e_s(through, sky_mag_arcsec2) * scale_arcsec_px**2


def sun_limb_darkening(mu: np.ndarray) -> np.ndarray:
    """Return the Sun's intensity at mu = cos(heliocentric angle), relative to the middle of the disc."""
    mu = np.asarray(mu, float)
    return 1 - SUN_LIMB_U - SUN_LIMB_V + SUN_LIMB_U * mu + SUN_LIMB_V * mu**2


def disc_law(body: str) -> str:
    """Return how a body's surface scatters: `sun`, `lommel-seeliger` or `lambert`."""
    return DISC_LAWS.get(body, "lambert")


def surface_law(law: str, mu0: np.ndarray, mu: np.ndarray) -> np.ndarray:
    """Return the surface brightness, in any unit, where the Sun stands at cos mu0 and the observer at cos mu.

    Zero where either does not see the surface. Lambert: mu0; Lommel-Seeliger: mu0 / (mu0 + mu); `sun`: limb
    darkening, without mu0. Normalise so that the whole disc has the body's magnitude.
    """
    mu0, mu = np.asarray(mu0, float), np.asarray(mu, float)
    if law == "sun":
        return np.where(mu >= 0, sun_limb_darkening(np.clip(mu, 0, 1)), 0.0)
    seen = (mu0 > 0) & (mu > 0)
    if law == "lambert":
        return np.where(seen, mu0, 0.0)
    if law == "lommel-seeliger":
        return np.where(seen, mu0 / np.where(seen, mu0 + mu, 1.0), 0.0)
    raise InputError(f"surface law: found {law!r}; allowed are sun, lambert, lommel-seeliger")


_PHASES_DEG = np.array([0.0, 20.0, 40.0, 60.0, 80.0, 100.0, 120.0, 140.0, 160.0, 175.0])
_BLURS = np.array([0.0, 0.03, 0.06, 0.12, 0.25, 0.5, 1.0])
_RADIUS_CELLS = 40


@lru_cache(maxsize=8)
def _peak_table(law: str) -> np.ndarray:
    """Return the peak of a drawn disc over the mean of the whole disc, for each phase and blur of the grids."""
    from scipy.ndimage import gaussian_filter

    reach = 2 * _RADIUS_CELLS
    y, x = np.mgrid[-reach : reach + 1, -reach : reach + 1] / _RADIUS_CELLS
    inside = x**2 + y**2 < 1
    mu = np.where(inside, np.sqrt(np.clip(1 - x**2 - y**2, 0, None)), -1.0)
    table = np.empty((len(_PHASES_DEG), len(_BLURS)))
    for row, angle in enumerate(np.radians(_PHASES_DEG)):
        mu0 = np.where(inside, mu * np.cos(angle) + x * np.sin(angle), -1.0)
        drawn = surface_law(law, mu0, mu)
        mean = drawn.sum() / inside.sum()
        for column, blur in enumerate(_BLURS):
            table[row, column] = gaussian_filter(drawn, blur * _RADIUS_CELLS, mode="constant").max() / mean
    return table


def peak_over_mean(
    law: str, phase_angle_deg: np.ndarray, blur_over_radius: np.ndarray | float = 0.0
) -> np.ndarray:
    """Return a disc's brightest place over the mean of the whole disc, its dark part included, at a phase angle.

    `blur_over_radius`: sigma of a Gaussian blur in radii of the disc, up to 1. Interpolated from drawn discs, 3 %.
    """
    from scipy.ndimage import map_coordinates

    phase, blur = np.broadcast_arrays(np.asarray(phase_angle_deg, float), np.asarray(blur_over_radius, float))
    row = np.interp(phase, _PHASES_DEG, np.arange(len(_PHASES_DEG)))
    column = np.interp(blur, _BLURS, np.arange(len(_BLURS)))
    return map_coordinates(_peak_table(law), [row.ravel(), column.ravel()], order=1).reshape(phase.shape)


def disc_rate_e_s_px(
    through: Band,
    body: str,
    magnitude: np.ndarray | float,
    semidiameter_arcsec: np.ndarray | float,
    flattening: np.ndarray | float,
    phase_angle_deg: np.ndarray | float,
    scale_arcsec_px: float,
    blur_px: np.ndarray | float = 0.0,
) -> np.ndarray:
    """Return electrons a second in the brightest pixel of a disc, blurred by a Gaussian of this sigma.

    Good while the blur is smaller than the disc; what is smaller peaks like a star.
    """
    radius_px = np.asarray(semidiameter_arcsec, float) / scale_arcsec_px
    area_px = np.pi * radius_px**2 * (1 - np.asarray(flattening))
    phase = np.zeros_like(radius_px) if body == "sun" else np.asarray(phase_angle_deg, float)
    peak = peak_over_mean(disc_law(body), phase, np.asarray(blur_px) / radius_px)
    return rate_e_s(through, magnitude) / area_px * peak


def psf_fwhm_arcsec(
    rig: Rig, seeing_arcsec: float, airmass: np.ndarray | float, tracking_error_arcsec: float | None = None
) -> np.ndarray:
    """Return the FWHM of seeing, diffraction and tracking together, before pixels integrate it.

    `tracking_error_arcsec` is an rms; the rig's is taken when None.
    """
    seeing = seeing_arcsec * np.asarray(airmass, float) ** SEEING_AIRMASS_POWER
    diffraction = 1.029 * np.degrees(EFFECTIVE_NM * 1e-6 / rig.optics.aperture_mm) * 3600
    error = tracking_error_of(rig) if tracking_error_arcsec is None else tracking_error_arcsec
    return np.sqrt(seeing**2 + diffraction**2 + (FWHM_OF_SIGMA * error) ** 2)


def psf_fwhm_px(
    rig: Rig, seeing_arcsec: float, airmass: np.ndarray, tracking_error_arcsec: float | None = None
) -> np.ndarray:
    """Return the FWHM in pixels of all that blurs a star, the lens or telescope's own spot included."""
    sky_px = psf_fwhm_arcsec(rig, seeing_arcsec, airmass, tracking_error_arcsec) / rig.scale_arcsec_px
    return np.hypot(sky_px, OPTICS_FWHM_PX)


def tracking_error_of(rig: Rig) -> float:
    """Return the rms of tracking over an exposure of some seconds: guided, unguided, or none on a tripod."""
    if rig.mount.kind == "fixed":
        return 0.0
    return rig.guiding.error_arcsec if rig.guiding.on != "none" else rig.mount.tracking_error_arcsec


def star_peak_fraction(fwhm_px: np.ndarray, trail_px: np.ndarray | float = 0.0) -> np.ndarray:
    """Return the part of a star's light in its brightest pixel, on average over where in the pixel it falls.

    The star has the profile that Kolmogorov seeing gives, as a sum of Gaussians; `trail_px` widens it along one axis.
    """
    fwhm = np.maximum(np.asarray(fwhm_px, float), 1e-3)[..., None]
    sigma = SEEING_SIGMA * fwhm
    along_sigma = np.sqrt(sigma**2 + np.asarray(trail_px, float)[..., None] ** 2 / 12)
    across = _mean_share(sigma)
    return (SEEING_WEIGHT * across * _mean_share(along_sigma)).sum(axis=-1)


def _mean_share(sigma_px: np.ndarray) -> np.ndarray:
    """Return the part of a Gaussian's line that the pixel nearest to it holds, averaged over its place in the pixel."""
    place = (np.arange(8) + 0.5) / 8 - 0.5
    scale = np.sqrt(2) * sigma_px[..., None]
    return (0.5 * (erf((0.5 - place) / scale) + erf((0.5 + place) / scale))).mean(axis=-1)


def vignetting_factor(rig: Rig, radius_over_corner: np.ndarray) -> np.ndarray:
    """Return what part of the light arrives at a distance from the middle of the field, in half diagonals."""
    return 1 - rig.optics.vignetting * np.asarray(radius_over_corner, float) ** 2


def at_gain(rig: Rig, gain: float = 0.0) -> GainSetting:
    """Return what the sensor does at a gain setting: as listed, else steps of 0.1 dB (common practice, no source)."""
    for listed in rig.sensor.gains:
        if listed.gain == gain:
            return listed
    sensor = rig.sensor
    return GainSetting(
        gain=gain,
        e_adu=sensor.gain_e_adu / 10 ** (gain / 200.0),
        read_noise_e=sensor.read_noise_e,
        full_well_e=sensor.full_well_e,
    )


def saturation_e(rig: Rig, gain: float = 0.0) -> float:
    """Return the electrons at which a pixel saturates: the well, or the end of the converter's range."""
    setting = at_gain(rig, gain)
    converter = (2**rig.sensor.bit_depth - 1 - rig.sensor.bias_adu) * setting.e_adu
    return float(min(setting.full_well_e, converter))


def signal_to_noise(
    signal_e: np.ndarray, sky_e_px: np.ndarray, dark_e_px: np.ndarray, read_noise_e: float, pixels: np.ndarray
) -> np.ndarray:
    """Return the signal-to-noise of a source spread over so many pixels (Poisson and read noise)."""
    noise2 = signal_e + pixels * (np.asarray(sky_e_px) + dark_e_px + read_noise_e**2)
    return np.asarray(signal_e) / np.sqrt(noise2)
