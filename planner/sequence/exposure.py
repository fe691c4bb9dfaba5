"""How long to expose: from the brightness of what is in the field to seconds, and what that promises."""

from __future__ import annotations

from itertools import pairwise

import numpy as np

from planner.sequence import radiometry
from planner.sequence.models import Rig, Site
from planner.sequence.radiometry import Band
from planner.sky.bodies import SATURN_RINGS_KM, radii_km
from planner.sky.discs import SkyDisc, ring_share, ring_sine

# An exposure is stepped where the brightness has changed by this factor: a third of a stop, common practice, no source.
STEP = 2 ** (1 / 3)
ECLIPSED_LIGHT = 1e-4


def peak_rate_e_s(
    rig: Rig,
    site: Site,
    through: Band,
    body: str,
    disc: SkyDisc,
    altitude_deg: np.ndarray,
    tracked: bool = False,
) -> np.ndarray:
    """Return electrons a second in the brightest pixel of a disc: extinction, seeing and blur included, on the axis.

    `tracked`: of exposures so long that the mount's error blurs them (`radiometry.TRACKED_FROM_S`).

    Saturn's brightest place is the middle of its globe, which must not be reckoned from the light of globe and rings.
    """
    from planner.sky.photometry import airmass

    mass = airmass(np.maximum(altitude_deg, 0.0))
    magnitude = radiometry.extinguished(disc.magnitude, mass, site.extinction_mag)
    globe = disc.magnitude if disc.globe_magnitude is None else disc.globe_magnitude
    globe = radiometry.extinguished(globe, mass, site.extinction_mag)
    scale = rig.scale_arcsec_px
    radius_px = disc.semidiameter_arcsec / scale
    fwhm_px = radiometry.psf_fwhm_px(rig, site.seeing_arcsec, mass, None if tracked else 0.0)
    shape = (disc.semidiameter_arcsec, disc.flattening, disc.phase_angle_deg)
    # a pixel blurs by the variance of its square, 1/12; seeing is a sum of Gaussians, as for stars
    resolved = np.zeros_like(radius_px)
    for weight, sigma in zip(radiometry.SEEING_WEIGHT, radiometry.SEEING_SIGMA, strict=True):
        part_px = np.sqrt((sigma * fwhm_px) ** 2 + 1 / 12)
        resolved = resolved + weight * radiometry.disc_rate_e_s_px(
            through, body, globe, *shape, scale, part_px
        )
    blur_px = np.sqrt((fwhm_px / radiometry.FWHM_OF_SIGMA) ** 2 + 1 / 12)
    # a disc lost in the blur peaks like a star, a little wider: a uniform disc has a variance of r^2 / 4 an axis
    own_px = radiometry.FWHM_OF_SIGMA * _spread_px(disc, radius_px)
    star_like = radiometry.rate_e_s(through, magnitude) * radiometry.star_peak_fraction(
        np.hypot(fwhm_px, own_px)
    )
    # between the two, where neither is quite right, the one passes into the other
    lost = np.clip((blur_px / radius_px - 0.3) / 0.5, 0.0, 1.0)
    return resolved ** (1 - lost) * star_like**lost


def _spread_px(disc: SkyDisc, radius_px: np.ndarray) -> np.ndarray:
    """Return the standard deviation of a body's light along an axis, rings included."""
    variance = radius_px**2 / 4
    share = ring_share(disc)
    if np.any(share > 0):
        # an annulus has (r1^2 + r2^2) / 4 along the rings, and across them sin^2 of their opening times that
        inner, outer = (SATURN_RINGS_KM[edge] / radii_km("saturn")[0] for edge in ("b_inner", "a_outer"))
        rings = (inner**2 + outer**2) / 4 * (1 + ring_sine(disc) ** 2) / 2
        variance = radius_px**2 * ((1 - share) / 4 + share * rings)
    return np.sqrt(variance)


def eclipse_light(tt_s: np.ndarray) -> np.ndarray:
    """Return the part of its light that the brightest place of the Moon keeps in the Earth's shadow; 1 outside it.

    Straight from the penumbra's edge to the umbra's, and 10 magnitudes down inside. Common practice, no source: total
    eclipses differ by some magnitudes from one to the next, so a bracket of exposures is wise.
    """
    from planner.events.moon import earth_shadow

    from_axis, umbra, penumbra, moon_radius = earth_shadow(tt_s)
    brightest = from_axis + moon_radius
    return np.maximum(np.clip((brightest - umbra) / (penumbra - umbra), 0.0, 1.0), ECLIPSED_LIGHT)


def rounded_down(exposure_s: float) -> float:
    """Return an exposure as people set it: two significant digits, never longer."""
    if exposure_s <= 0:
        return 0.0
    unit = 10.0 ** (np.floor(np.log10(exposure_s)) - 1)
    return float(f"{np.floor(exposure_s / unit * (1 + 1e-12)) * unit:.3g}")


def wanted_exposure_s(rig: Rig, rate_e_s: np.ndarray, well_fraction: float, gain: float = 0.0) -> np.ndarray:
    """Return the exposure that fills this part of the range of the brightest pixel, within what the camera can do."""
    wanted = well_fraction * radiometry.saturation_e(rig, gain) / np.asarray(rate_e_s, float)
    return np.clip(wanted, rig.sensor.min_exposure_s, rig.sensor.max_exposure_s)


def steps(wanted_s: np.ndarray) -> list[slice]:
    """Return stretches within each of which the wanted exposure stays in one step of a third of a stop."""
    if not len(wanted_s):
        return []
    rung = np.floor(np.log(wanted_s) / np.log(STEP))
    edges = [0, *(np.flatnonzero(np.diff(rung)) + 1), len(wanted_s)]
    return [slice(int(first), int(end)) for first, end in pairwise(edges)]


def rounded_up(exposure_s: float) -> float:
    """Return an exposure as people set it: two significant digits, never shorter."""
    unit = 10.0 ** (np.floor(np.log10(exposure_s)) - 1)
    return float(f"{np.ceil(exposure_s / unit * (1 - 1e-12)) * unit:.3g}")


def time_for_signal_to_noise_s(
    rate_e_s: np.ndarray, background_e_s: np.ndarray, read_variance_e2: np.ndarray, wanted: float
) -> np.ndarray:
    """Return the exposure in which a source over a background reaches a signal-to-noise.

    The CCD equation S t / sqrt((S + B) t + R) = wanted, solved for t (Howell 2006, Handbook of CCD Astronomy, 4.4).
    """
    rate = np.asarray(rate_e_s, float)
    half = wanted**2 * (rate + background_e_s) / (2 * rate**2)
    return half + np.sqrt(half**2 + wanted**2 * np.asarray(read_variance_e2) / rate**2)
