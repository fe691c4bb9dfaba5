"""Exposing for stars: enough of them for a plate solution, while the bright body among them can still be measured."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from planner.events.family import Geometry
from planner.sequence import exposure, radiometry
from planner.sequence.framing import field_of
from planner.sequence.setting import Setting

# Enough stars for a plate solution with outliers to spare, each with signal for a centroid of a tenth of a pixel.
STARS_WANTED, STAR_SIGNAL_TO_NOISE = 60, 20.0
SOLVABLE_SIGNAL_TO_NOISE = 10.0
# A body clipped so many times over can still be measured by its outline (see imaging/discs).
SATURATION_BORNE = 200.0
LONGEST_S = 60.0
_SKY_WELL_FRACTION = 0.2
_WIDE = ((20.0, 7.0), (10.0, 8.5))  # radius of the field in degrees, faintest magnitude looked up in it


@dataclass(frozen=True)
class StarFrames:
    """What frames of a star field need at n times; arrays of shape (n,).

    `exposure_s`: for the stars; `longest_s`: before trailing or the sky spoils them; `stars`: how many reach a
    signal-to-noise of 10; `clips_too_much`: where the bright body is clipped more than can be borne.
    """

    exposure_s: np.ndarray
    longest_s: np.ndarray
    stars: np.ndarray
    clips_too_much: np.ndarray


def star_frames(
    setting: Setting,
    geometry: Geometry,
    aim_ra_deg: np.ndarray,
    aim_dec_deg: np.ndarray,
    peak_e_s: np.ndarray,
    trail_px_s: np.ndarray,
    gain: float,
    exposure_s: np.ndarray | None = None,
) -> StarFrames:
    """Return the exposures at these times and pointings; `peak_e_s` is the brightest body's, 0 where there is none.

    `exposure_s`: what is exposed, where that is settled already; only the rest is reckoned then.
    """
    from planner.sky.photometry import airmass

    rig, site, through, wish = setting.rig, setting.site, setting.through, setting.wish
    sensor, count = rig.sensor, len(geometry.tt_s)
    saturation = radiometry.saturation_e(rig, gain)
    mass = airmass(np.maximum(geometry.altitude_deg, 0.0))
    sky = radiometry.sky_rate_e_s_px(through, setting.sky_mag_arcsec2(geometry), setting.scale_arcsec_px)
    fwhm_px = radiometry.psf_fwhm_px(rig, site.seeing_arcsec, mass)
    pixels = np.maximum(2.0 * fwhm_px**2, 4.0)
    read_e = radiometry.at_gain(rig, gain).read_noise_e
    fields = _fields(setting, aim_ra_deg, aim_dec_deg, geometry.tt_s)

    def rate_e_s(magnitude: np.ndarray | float, row: int) -> np.ndarray:
        dimmed = radiometry.extinguished(np.asarray(magnitude), mass[row], site.extinction_mag)
        return radiometry.rate_e_s(through, dimmed)

    faintest = np.array([m[min(STARS_WANTED, len(m)) - 1] if len(m) else 10.0 for m in fields])
    enough_s = exposure.time_for_signal_to_noise_s(
        radiometry.rate_e_s(through, radiometry.extinguished(faintest, mass, site.extinction_mag)),
        pixels * (sky + sensor.dark_e_s),
        pixels * read_e**2,
        wish.signal_to_noise or STAR_SIGNAL_TO_NOISE,
    )
    longest_s = np.minimum.reduce(
        [
            np.full(count, min(LONGEST_S, sensor.max_exposure_s)),
            _SKY_WELL_FRACTION * saturation / np.maximum(sky, 1e-12),
            wish.trail_px / np.maximum(trail_px_s, 1e-12),
        ]
    )
    longest_s = np.maximum(longest_s, sensor.min_exposure_s)
    bearable_s = SATURATION_BORNE * saturation / np.maximum(peak_e_s, 1e-12)
    chosen_s = np.clip(
        np.maximum(enough_s, np.minimum(bearable_s, longest_s)), sensor.min_exposure_s, longest_s
    )
    if exposure_s is not None:
        chosen_s = exposure_s
    elif wish.exposure_s is not None:
        chosen_s = np.full(count, wish.exposure_s)
    stars = np.empty(count, int)
    for row, magnitudes in enumerate(fields):
        t = chosen_s[row]
        ratio = radiometry.signal_to_noise(
            rate_e_s(magnitudes, row) * t, sky[row] * t, sensor.dark_e_s * t, read_e, pixels[row]
        )
        stars[row] = int((ratio >= SOLVABLE_SIGNAL_TO_NOISE).sum())
    return StarFrames(chosen_s, longest_s, stars, chosen_s > 1.2 * bearable_s)


def _fields(setting: Setting, ra_deg: np.ndarray, dec_deg: np.ndarray, tt_s: np.ndarray) -> list[np.ndarray]:
    """Return the magnitudes of the catalogue stars in each frame, brightest first; near pointings share theirs."""
    from planner.sky.places import offsets_arcsec
    from planner.sky.stars import stars_in_field

    field = field_of(setting.rig)
    step_deg = min(field.half_width_arcsec, field.half_height_arcsec) / 3600 / 10
    # in a wide field the bright stars are more than enough, and all others a thousand times as many
    limit = next((magnitude for radius_deg, magnitude in _WIDE if field.radius_deg > radius_deg), None)
    known: dict[tuple[int, int], np.ndarray] = {}
    found = []
    for ra, dec, moment in zip(ra_deg, dec_deg, tt_s, strict=True):
        key = (round(float(ra) * np.cos(np.radians(dec)) / step_deg), round(float(dec) / step_deg))
        if key not in known:
            stars = stars_in_field(float(ra) % 360.0, float(dec), field.radius_deg, float(moment), limit)
            right, up = field.along(*offsets_arcsec(ra, dec, stars.ra_deg, stars.dec_deg))
            inside = (np.abs(right) < field.half_width_arcsec) & (np.abs(up) < field.half_height_arcsec)
            known[key] = np.sort(stars.magnitude[inside])
        found.append(known[key])
    return found
