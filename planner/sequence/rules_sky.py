"""Rules about the sky: twilight, moonlight, and how high the target stands."""

from __future__ import annotations

from collections.abc import Iterator

import numpy as np

from planner.sequence import radiometry
from planner.sequence.exposure import eclipse_light
from planner.sequence.feasibility import Case
from planner.sequence.models import Finding
from planner.sequence.skyglow import dark_nl, moonlight_nl

_SKY_WELL_FRACTION = 0.3
_HIGH_AIRMASS_DEG = 20.0


def twilight(case: Case) -> Iterator[Finding]:
    """Frames of a night subject are taken in twilight or by day."""
    if case.setting.family.reference == "sun" or not len(case.sample_rows):
        return
    light = case.sky.sun_altitude_deg > -12.0
    if light.any():
        highest = float(case.sky.sun_altitude_deg[light].max())
        kind = "by day" if highest > 0 else "in civil twilight" if highest > -6 else "in nautical twilight"
        yield Finding(
            rule="twilight",
            level="caution",
            where=case.where(light),
            sentence=f"Frames are taken {kind}: the Sun stands at {highest:.1f} degrees.",
            cure="Expect a bright background and few stars; a red or polarising filter darkens it.",
        )


def sky_fills_well(case: Case) -> Iterator[Finding]:
    """The sky alone fills a good part of the range."""
    if case.setting.family.reference == "sun" or not len(case.sample_rows):
        return
    setting = case.setting
    rows = case.sample_rows
    sky = radiometry.sky_rate_e_s_px(
        setting.through, setting.sky_mag_arcsec2(case.sky), setting.scale_arcsec_px
    )
    part = sky * case.frames[3][rows] / radiometry.saturation_e(setting.rig)
    full = part > _SKY_WELL_FRACTION
    if full.any():
        yield Finding(
            rule="sky-fills-well",
            level="caution",
            where=case.where(full),
            sentence=f"The sky alone fills {100 * min(part.max(), 9.99):.0f} % of the range.",
            cure="Shorten the exposure, or wait for a darker sky.",
        )


def moon_glare(case: Case) -> Iterator[Finding]:
    """Moonlight outshines the dark sky where stars are needed."""
    from planner.sky.discs import sky_disc
    from planner.sky.places import altaz, separation_arcsec, unit_vector

    setting = case.setting
    if setting.family.reference != "stars" or not len(case.sample_rows):
        return
    moon = sky_disc("moon", setting.observer, case.sky.tt_s)
    up, _ = altaz((moon.ra_deg, moon.dec_deg), setting.observer, case.sky.tt_s)
    apart = separation_arcsec(unit_vector(moon.ra_deg, moon.dec_deg), unit_vector(*case.target)) / 3600
    extinction = setting.site.extinction_mag
    light = moonlight_nl(case.sky.altitude_deg, up, apart, moon.phase_angle_deg, extinction)
    dark = dark_nl(setting.site.sky_brightness_mag_arcsec2, case.sky.altitude_deg, extinction)
    brighter = 2.5 * np.log10(1 + light / dark)
    glaring = brighter > 2.0
    if glaring.any():
        worst = int(np.argmax(brighter))
        lit = (1 + np.cos(np.radians(moon.phase_angle_deg))) / 2
        yield Finding(
            rule="moon-glare",
            level="caution",
            where=case.where(glaring),
            sentence=f"Moonlight brightens the sky by {brighter[worst]:.1f} magnitudes: "
            f"the Moon is {apart[worst]:.0f} degrees away, {100 * lit[worst]:.0f} % lit.",
            cure="Raise moon_distance_deg, or use the reserve night.",
        )


def target_low(case: Case) -> Iterator[Finding]:
    """Visits at which the target stays low."""
    if not case.setting.family.campaign or not len(case.sample_rows):
        return
    low = case.sky.altitude_deg < _HIGH_AIRMASS_DEG
    if low.any():
        yield Finding(
            rule="target-low",
            level="note",
            where=case.where(low),
            sentence=f"The target stands {case.sky.altitude_deg[low].min():.0f} degrees up at the least.",
            cure="Keep the horizon free in that direction; expect softer stars.",
        )


def moon_eclipsed(case: Case) -> Iterator[Finding]:
    """The Moon stands in the Earth's shadow, and how dark it will be nobody knows."""
    if "moon" not in case.sky.discs or not len(case.sample_rows):
        return
    light = eclipse_light(case.sky.tt_s)
    if light.min() < 0.9:
        yield Finding(
            rule="moon-eclipsed",
            level="caution",
            where=case.where(light < 0.9),
            sentence=f"The Earth's shadow takes {-2.5 * np.log10(light.min()):.1f} magnitudes "
            "of the Moon's brightest part.",
            cure="Total eclipses differ by some magnitudes: bracket the exposures by two stops.",
        )


RULES = (moon_eclipsed, twilight, sky_fills_well, moon_glare, target_low)
