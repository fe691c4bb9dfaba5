"""What to expose for in a stretch of time: the bright disc, and by itself what that exposure leaves too faint."""

from __future__ import annotations

from dataclasses import dataclass, replace
from typing import Literal

import numpy as np

from planner.errors import InputError
from planner.events.family import Geometry
from planner.sequence import exposure, radiometry
from planner.sequence.motion import Motion, motion
from planner.sequence.pair import pair_aim
from planner.sequence.setting import Setting
from planner.sequence.starfield import star_frames

Rate = Literal["sidereal", "solar", "lunar", "none"]
TRACKING: dict[str, Rate] = {"sun": "solar", "moon": "lunar"}
# A target fainter than this in the exposure for the bright disc gets exposures of its own.
LEAST_SIGNAL_TO_NOISE = 20.0


@dataclass(frozen=True)
class Recipe:
    """What one kind of frame is exposed for, sampled at n times: the rates are of the brightest pixel.

    `tracked_rate_e_s`: of exposures that the mount's error blurs.
    """

    name: str
    peak_of: str
    rate_e_s: np.ndarray
    tracked_rate_e_s: np.ndarray
    wanted_s: np.ndarray
    gain: float
    tracking: Rate
    motion: Motion
    stars: int | None = None
    filter: str | None = None

    def rate_at(self, exposure_s: float) -> np.ndarray:
        """Return the rates of exposures of this length."""
        return self.tracked_rate_e_s if exposure_s > radiometry.TRACKED_FROM_S else self.rate_e_s


def aim_of(setting: Setting, geometry: Geometry) -> str:
    """Return what the middle of the frame follows at all these times.

    The reference disc where it fits the field, the middle of two planets that meet where both fit, else the target.
    """
    if geometry.reference in ("sun", "moon"):
        return geometry.reference if setting.reference_fits else geometry.target
    return pair_aim(setting, geometry) or geometry.target


def tracking_of(setting: Setting, aim: str) -> Rate:
    """Return the rate at which the mount follows this aim, or what it guides on."""
    if setting.rig.mount.kind == "fixed":
        return "none"
    if setting.rig.guiding.on == "star":
        return "sidereal"
    wanted = TRACKING.get(aim, TRACKING.get(setting.family.reference, "sidereal"))
    return wanted if wanted in setting.rig.mount.rates else "sidereal"


def recipes(setting: Setting, geometry: Geometry, aim: str, target_hidden: bool) -> list[Recipe]:
    """Return what to expose for through the setting's one filter; see `_through_one`."""
    return [
        replace(kind, filter=setting.filter_name)
        for kind in _through_one(setting, geometry, aim, target_hidden)
    ]


def _through_one(setting: Setting, geometry: Geometry, aim: str, target_hidden: bool) -> list[Recipe]:
    """Return what to expose for at these times, the kind that is measured first; raises InputError when there is none.

    Against a disc: the brightest disc, and by itself a target that this leaves too faint. Among stars: the stars, and
    the brightest disc where the star frames clip it.
    """
    tracking = tracking_of(setting, aim)
    ra_deg, dec_deg = place_of(geometry, aim)
    # the middle of two planets is nothing that could trail
    moves = place_of(geometry, aim.partition("+")[0])
    moving = motion(setting.rig, setting.observer, tracking, *moves, geometry.tt_s)
    main = _brightest_disc(setting, geometry)
    found: list[Recipe] = []
    if main is not None:
        name, rate, tracked = main
        gain = setting.gain_for_bright()
        wanted = exposure.wanted_exposure_s(setting.rig, rate, setting.wish.well_fraction, gain)
        if setting.wish.signal_to_noise is not None:
            wanted = np.minimum(wanted, _for_signal_s(setting, geometry, rate, gain))
        found.append(
            Recipe("main", name, rate, tracked, _bounded(setting, moving, wanted), gain, tracking, moving)
        )
    if geometry.reference == "stars" and not geometry.stars:
        return [_star_recipe(setting, geometry, found[0], ra_deg, dec_deg), replace(found[0], name="disc")]
    if not found or (geometry.reference != "sun" and not target_hidden):
        faint = _faint_target(setting, geometry, found[0] if found else None)
        if faint is not None:
            name, rate, tracked, wanted = faint
            gain = setting.gain_for_faint()
            wanted = _bounded(setting, moving, wanted)
            kind = "long" if found else "main"
            found.append(Recipe(kind, name, rate, tracked, wanted, gain, tracking, moving))
    if not found:
        raise InputError(f"event.family: {setting.family.name} shows neither a disc nor a star to expose for")
    return found


def _for_signal_s(setting: Setting, geometry: Geometry, rate_e_s: np.ndarray, gain: float) -> np.ndarray:
    """Return the exposures in which a pixel of this rate reaches the signal-to-noise that is wished for."""
    sensor = setting.rig.sensor
    sky = np.zeros_like(rate_e_s)
    if geometry.reference != "sun":
        sky = radiometry.sky_rate_e_s_px(
            setting.through, setting.sky_mag_arcsec2(geometry), setting.scale_arcsec_px
        )
    read_e = radiometry.at_gain(setting.rig, gain).read_noise_e
    wanted = setting.wish.signal_to_noise or LEAST_SIGNAL_TO_NOISE
    seconds = exposure.time_for_signal_to_noise_s(
        rate_e_s, sky + sensor.dark_e_s, np.full_like(rate_e_s, read_e**2), wanted
    )
    return np.clip(seconds, sensor.min_exposure_s, sensor.max_exposure_s)


def _star_recipe(
    setting: Setting, geometry: Geometry, disc: Recipe, ra_deg: np.ndarray, dec_deg: np.ndarray
) -> Recipe:
    gain = setting.gain_for_faint()
    trail = disc.motion.trail_px(setting.rig, 1.0, corner=True)
    frames = star_frames(setting, geometry, ra_deg, dec_deg, disc.rate_e_s, trail, gain)
    return Recipe(
        "main",
        disc.peak_of,
        disc.rate_e_s,
        disc.tracked_rate_e_s,
        frames.exposure_s,
        gain,
        disc.tracking,
        disc.motion,
        int(np.median(frames.stars)),
    )


def place_of(geometry: Geometry, name: str) -> tuple[np.ndarray, np.ndarray]:
    """Return (ra_deg, dec_deg) of a disc or star of the geometry."""
    from planner.sequence.frametimes import aim_place

    return aim_place(geometry, name)


def _bounded(setting: Setting, moving: Motion, wanted_s: np.ndarray) -> np.ndarray:
    """Return exposures no longer than trailing allows, or what the brief asks for."""
    if setting.wish.exposure_s is not None:
        return np.full_like(wanted_s, setting.wish.exposure_s)
    per_second = np.maximum(moving.trail_px(setting.rig, 1.0), 1e-12)
    sensor = setting.rig.sensor
    longest = np.maximum(setting.wish.trail_px / per_second, sensor.min_exposure_s)
    return np.clip(wanted_s, sensor.min_exposure_s, np.minimum(longest, sensor.max_exposure_s))


def _brightest_disc(setting: Setting, geometry: Geometry) -> tuple[str, np.ndarray, np.ndarray] | None:
    """Return (name, peak rate, peak rate when tracked) of the disc that is brightest at most of the times, or None."""
    names = ["sun"] if geometry.reference == "sun" else [n for n in geometry.discs if n != "sun"]
    if geometry.reference == "stars" and geometry.stars:
        # a small body before a star: the star is what is exposed for, unless the body outshines it
        limit = min(star[3] for star in geometry.stars)
        names = [name for name in names if np.median(geometry.discs[name].magnitude) < limit]
    rates: dict[str, list[np.ndarray]] = {}
    for name in names:
        disc = geometry.discs[name]
        if not np.isfinite(disc.magnitude).all():
            continue
        lit = exposure.eclipse_light(geometry.tt_s) if name == "moon" else 1.0
        seen = (setting.rig, setting.site, setting.through, name, disc, geometry.altitude_deg)
        rates[name] = [exposure.peak_rate_e_s(*seen, tracked) * lit for tracked in (False, True)]
    if not rates:
        return None
    brightest = max(rates, key=lambda name: float(np.median(rates[name][0])))
    still, tracked = (np.max([each[kind] for each in rates.values()], axis=0) for kind in (0, 1))
    return brightest, still, tracked


def _faint_target(
    setting: Setting, geometry: Geometry, main: Recipe | None
) -> tuple[str, np.ndarray, np.ndarray, np.ndarray] | None:
    """Return (name, peak rate, the same tracked, exposure) for a target too faint in the main exposure, or None."""
    from planner.sky.photometry import airmass

    rig, site, name = setting.rig, setting.site, geometry.target
    mass = airmass(np.maximum(geometry.altitude_deg, 0.0))
    star = next((s for s in geometry.stars if s[0] == name or not geometry.discs.get(name)), None)
    if name in geometry.discs and np.isfinite(geometry.discs[name].magnitude).all():
        magnitude = geometry.discs[name].magnitude
        seen = (rig, site, setting.through, name, geometry.discs[name], geometry.altitude_deg)
        peak, tracked = (exposure.peak_rate_e_s(*seen, tracked) for tracked in (False, True))
    elif star is not None:
        name, magnitude = star[0], np.full(len(geometry.tt_s), star[3])
        dimmed = radiometry.extinguished(magnitude, mass, site.extinction_mag)
        peak, tracked = (
            radiometry.rate_e_s(setting.through, dimmed)
            * radiometry.star_peak_fraction(radiometry.psf_fwhm_px(rig, site.seeing_arcsec, mass, error))
            for error in (0.0, None)
        )
    else:
        return None
    total = radiometry.rate_e_s(
        setting.through, radiometry.extinguished(magnitude, mass, site.extinction_mag)
    )
    fwhm_px = radiometry.psf_fwhm_px(rig, site.seeing_arcsec, mass, 0.0)
    radius_px = (
        geometry.discs[name].semidiameter_arcsec / setting.scale_arcsec_px if name in geometry.discs else 0.0
    )
    pixels = np.maximum(np.pi * (radius_px**2 + fwhm_px**2), 4.0)
    sky = radiometry.sky_rate_e_s_px(
        setting.through, setting.sky_mag_arcsec2(geometry), setting.scale_arcsec_px
    )
    noise_e = radiometry.at_gain(rig, setting.gain_for_faint()).read_noise_e
    if main is not None:
        reached = radiometry.signal_to_noise(
            total * main.wanted_s, sky * main.wanted_s, rig.sensor.dark_e_s * main.wanted_s, noise_e, pixels
        )
        if float(np.median(reached)) >= LEAST_SIGNAL_TO_NOISE:
            return None
    wanted = exposure.time_for_signal_to_noise_s(
        total,
        pixels * (sky + rig.sensor.dark_e_s),
        pixels * noise_e**2,
        setting.wish.signal_to_noise or 2 * LEAST_SIGNAL_TO_NOISE,
    )
    full = exposure.wanted_exposure_s(rig, peak, setting.wish.well_fraction, setting.gain_for_faint())
    return name, peak, tracked, np.minimum(wanted, full)
