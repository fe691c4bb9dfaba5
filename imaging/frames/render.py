"""A plan rehearsed: every frame drawn as the rig would record it, with faults put in on purpose.

What is drawn: catalogue stars, Sun, Moon and planets of the event's geometry, refracted point by point, blurred by
seeing and optics, dimmed by the air and in the corners, with photon and read noise. What is not: aberration
(it moves everything in a field alike), the Moon's relief and maria, lens distortion.
"""

from __future__ import annotations

from dataclasses import dataclass, field, replace

import numpy as np

from imaging.frames.render_camera import Readout, binned, record, vignetting
from imaging.frames.render_discs import Ball, draw_ball, draw_moon, draw_sun
from imaging.frames.render_faults import Faults, with_stand_in
from imaging.frames.render_light import PointSpread
from imaging.frames.render_pointing import Air, Pointing, moved, ra_dec_deg, unit_vector
from imaging.frames.render_seeing import LimbMotion, image_motion_arcsec
from imaging.frames.render_stars import draw_points
from planner.errors import InputError
from planner.events import catalogue
from planner.events.family import Geometry
from planner.sequence import radiometry
from planner.sequence.documents import observer_of
from planner.sequence.frametimes import PlannedFrames, planned_event, planned_frames
from planner.sequence.models import Plan, Rig, Shot, Site
from planner.sequence.skyglow import sky_v_mag_arcsec2
from planner.sky.discs import SkyDisc, sky_disc
from planner.sky.observer import local_axes
from planner.sky.photometry import airmass
from planner.sky.places import altaz, direction
from planner.sky.refraction import refraction_arcsec

SIDEREAL_ARCSEC_S = 15.041
# Earthlight on a thin crescent, relative to the full Moon's surface (from memory: 1e-4 in V).
EARTHSHINE = 1e-4
# Blur of good optics, in pixels (assumed).
OPTICS_FWHM_PX = 0.8


@dataclass(frozen=True)
class Cut:
    """How frames are cut down: pixels summed `binning` x `binning`, then the middle `crop_px` (width, height)."""

    binning: int = 1
    crop_px: tuple[int, int] | None = None


@dataclass(frozen=True)
class Truth:
    """What was drawn, in the renderer's own pixels; see DEVELOPERS.md. Bodies that are not there are NaN."""

    true_tt_s: float
    stamped_tt_s: float
    target_x_px: float
    target_y_px: float
    reference_x_px: float
    reference_y_px: float
    reference_radius_px: float
    center_ra_deg: float
    center_dec_deg: float
    rotation_deg: float
    parity: int
    scale_arcsec_px: float


@dataclass(frozen=True)
class Picture:
    """One rehearsed frame."""

    index: int
    readout: Readout
    truth: Truth
    shot: Shot
    passage: str
    rig: Rig
    pointing: Pointing


@dataclass
class Scene:
    """A plan ready to be drawn: times, pointings and the geometry of the chosen frames."""

    plan: Plan
    faults: Faults
    cut: Cut
    seed: int
    frames: PlannedFrames
    chosen: np.ndarray
    rig: Rig
    geometry: Geometry
    zenith: np.ndarray
    moon: SkyDisc
    moon_altitude_deg: np.ndarray
    sun_azimuth_deg: np.ndarray
    delay_s: np.ndarray
    _stars: dict[tuple[float, ...], object] = field(default_factory=dict)

    @classmethod
    def of(
        cls,
        plan: Plan,
        chosen: np.ndarray | None = None,
        faults: Faults | None = None,
        cut: Cut | None = None,
        seed: int = 1,
    ) -> Scene:
        """Prepare the frames `chosen` (indices in time order; all by default)."""
        faults, cut = faults or Faults(), cut or Cut()
        frames = planned_frames(plan)
        if len(frames) == 0:
            raise InputError(f"the plan {plan.title!r} has no frames to rehearse")
        chosen = np.arange(len(frames)) if chosen is None else np.asarray(chosen, int)
        rig = binned(faults.real_rig(plan.rig), cut.binning)
        if min(rig.sensor.width_px, rig.sensor.height_px) < 16:
            raise InputError(
                f"binning {cut.binning} leaves {rig.sensor.width_px} x {rig.sensor.height_px} pixels"
            )
        observer = observer_of(faults.site or plan.site)
        middle = frames.middle_tt_s[chosen]
        family, event = catalogue.family(plan.event.family), planned_event(plan)

        def geometry_at(tt_s: np.ndarray) -> Geometry:
            whole = family.geometry(event, observer, tt_s)
            if not faults.stand_in:
                return whole
            # the same for all frames, whichever are drawn
            return with_stand_in(
                whole, family.geometry(event, observer, frames.middle_tt_s[len(frames) // 2, None])
            )

        geometry = geometry_at(middle)
        zenith = local_axes(observer, middle)[:, 2, :]
        moon = sky_disc("moon", observer, middle)
        moon_altitude, _ = altaz((moon.ra_deg, moon.dec_deg), observer, middle)
        _, sun_azimuth = altaz(direction("sun", observer, middle).vector_km, observer, middle)
        scene = cls(
            plan, faults, cut, seed, frames, chosen, rig, geometry, zenith, moon, moon_altitude, sun_azimuth,
            np.zeros(chosen.size),
        )  # fmt: skip
        if rig.sensor.shutter == "rolling":  # the frame is drawn as it was when the target's row was exposed
            scene.delay_s = scene._row_delay_s()
            scene.geometry = geometry_at(middle + scene.delay_s)
        return scene

    def __len__(self) -> int:
        """Give the number of frames chosen."""
        return self.chosen.size

    def size_px(self) -> tuple[int, int]:
        """Return (width, height) of the frames."""
        sensor = self.rig.sensor
        if self.cut.crop_px is None:
            return sensor.width_px, sensor.height_px
        return min(self.cut.crop_px[0], sensor.width_px), min(self.cut.crop_px[1], sensor.height_px)

    def pointing(self, position: int) -> Pointing:
        """Return where the camera really points at the frame at this position of `chosen`."""
        index = self.chosen[position]
        frames, faults, mount = self.frames, self.faults, self.plan.rig.mount
        passage = int(frames.passage[index])
        slew = np.random.default_rng([self.seed, 7, passage])
        shake = np.random.default_rng([self.seed, 11, int(index)])
        error = (
            mount.pointing_error_arcsec
            if faults.pointing_error_arcsec is None
            else faults.pointing_error_arcsec
        )
        jitter = mount.tracking_error_arcsec if faults.jitter_arcsec is None else faults.jitter_arcsec
        east, north = slew.normal(0, error, 2) + shake.normal(0, jitter, 2)
        start = frames.start_tt_s[frames.passage == passage][0]
        drift = faults.drift_arcsec_h * (frames.start_tt_s[index] - start) / 3600
        east += drift * np.sin(np.radians(faults.drift_pa_deg))
        north += drift * np.cos(np.radians(faults.drift_pa_deg))
        aim = moved(
            float(frames.ra_deg[index]),
            float(frames.dec_deg[index]),
            float(np.hypot(east, north)),
            float(np.degrees(np.arctan2(east, north))),
        )
        air = self.air(position)
        width, height = self.size_px()
        return Pointing(
            axis=aim if air is None else air.refracted(aim),
            rotation_deg=float(frames.rotation_deg[index]) + faults.rotation_deg,
            parity=-frames.parity if faults.mirrored else frames.parity,
            scale_arcsec_px=self.rig.scale_arcsec_px,
            width_px=width,
            height_px=height,
            air=air,
        )

    def air(self, position: int) -> Air | None:
        """Return the refracting air at a frame's time; None when the site has none."""
        observer = observer_of(self.faults.site or self.plan.site)
        if observer.pressure_hpa == 0:
            return None
        return Air(self.zenith[position], lambda altitude: refraction_arcsec(altitude, observer))

    def shot(self, position: int) -> Shot:
        """Return the recipe of a frame."""
        index = self.chosen[position]
        return self.plan.passages[self.frames.passage[index]].shots[self.frames.shot[index]]

    def stars(self, pointing: Pointing, tt_s: float):  # type: ignore[no-untyped-def]
        """Return the catalogue stars of a field, looked up once for fields that nearly coincide."""
        from planner.sky.stars import stars_in_field

        ra, dec = ra_dec_deg(pointing.axis)
        half = np.hypot(pointing.width_px, pointing.height_px) / 2 * pointing.scale_arcsec_px / 3600
        half = np.degrees(np.arctan(np.radians(half))) + 0.1
        key = (round(float(ra), 1), round(float(dec), 1), round(tt_s / 86400))
        if key not in self._stars:
            self._stars[key] = stars_in_field(float(ra), float(dec), min(half + 0.2, 90.0), tt_s)
        return self._stars[key]

    def draw(self, position: int) -> Picture:
        """Draw the frame at this position of `chosen`."""
        index = int(self.chosen[position])
        shot, plan, rig = self.shot(position), self.plan, self.rig
        generator = np.random.default_rng([self.seed, 3, index])
        pointing = self.pointing(position)
        middle = float(self.frames.middle_tt_s[index])
        balls = {name: Ball.of(disc, position) for name, disc in self.geometry.discs.items()}
        rate = self._light(position, pointing, balls, shot, generator)
        rate *= vignetting(rig, rate.shape)
        electrons = rate * np.float32(shot.exposure_s)
        electrons += np.float32(rig.sensor.dark_e_s * shot.exposure_s)
        readout = record(electrons, rig, shot.gain, generator, self.faults.bleed)
        truth = self._truth(position, pointing, balls, middle)
        return Picture(
            index, readout, truth, shot, plan.passages[self.frames.passage[index]].name, rig, pointing
        )

    def _light(
        self,
        position: int,
        pointing: Pointing,
        balls: dict[str, Ball],
        shot: Shot,
        generator: np.random.Generator,
    ) -> np.ndarray:
        """Return expected electrons a second in each pixel, before vignetting and dark current."""
        rig, site, geometry = self.rig, self.faults.site or self.plan.site, self.geometry
        tt_s = float(geometry.tt_s[position])
        sun_in_front = geometry.reference == "sun"
        through = radiometry.band(rig, shot.filter, behind_solar_filter=sun_in_front)
        air_mass = float(airmass(max(float(geometry.altitude_deg[position]), 0.5)))

        def rate_of(magnitude: float) -> float:
            dimmed = radiometry.extinguished(magnitude, air_mass, site.extinction_mag)
            return float(radiometry.rate_e_s(through, dimmed))

        motion = self._motion(pointing, shot, site, generator)
        spread = self._spread(shot, site, air_mass, motion)
        width, height = pointing.width_px, pointing.height_px
        rate = np.zeros((height, width), np.float32)
        if sun_in_front:
            sun = balls["sun"]
            planets = [ball for name, ball in balls.items() if name != "sun"]
            draw_sun(rate, pointing, sun, rate_of(sun.magnitude), spread, motion, planets)
        else:
            sky = self._sky_mag(position, site)
            rate += np.float32(radiometry.sky_rate_e_s_px(through, sky, rig.scale_arcsec_px))
            moon = balls.get("moon")
            for name, ball in balls.items():
                if name not in ("sun", "moon"):
                    draw_ball(rate, pointing, ball, rate_of(ball.magnitude), spread, motion, moon)
            covers = [ball for name, ball in balls.items() if name != "sun"]
            self._draw_stars(rate, pointing, tt_s, rate_of, spread, shot, covers, position)
            if moon is not None:
                lit = (1 + np.cos(np.radians(moon.phase_angle_deg))) / 2
                shine = EARTHSHINE * (1 - lit) * rate_of(-12.7)
                draw_moon(rate, pointing, moon, rate_of(moon.magnitude), spread, motion, shine)
        trail = self._trail_px(pointing, shot)
        return _trailed(rate, trail) if np.hypot(*trail) > 0.1 else rate

    def _draw_stars(self, rate, pointing, tt_s, rate_of, spread, shot, covers, position) -> None:  # type: ignore[no-untyped-def]
        stars = self.stars(pointing, tt_s)
        ra, dec = np.asarray(stars.ra_deg), np.asarray(stars.dec_deg)
        magnitude = np.asarray(stars.magnitude)
        for _, star_ra, star_dec, star_magnitude in self.geometry.stars:
            # the event's own star takes the place of the same star in the catalogue
            own_ra, own_dec = float(star_ra[position]), float(star_dec[position])
            near = np.hypot((ra - own_ra) * np.cos(np.radians(own_dec)), dec - own_dec) < 3 / 3600
            ra, dec, magnitude = ra[~near], dec[~near], magnitude[~near]
            ra, dec = np.append(ra, own_ra), np.append(dec, own_dec)
            magnitude = np.append(magnitude, star_magnitude)
        vector = unit_vector(ra, dec)
        for ball in covers:
            # the chord, not the cosine, which cannot tell milliarcseconds apart: minor planets are as small
            chord = np.sqrt(((vector - np.reshape(ball.vector, (3, 1))) ** 2).sum(axis=0))
            seen = chord > 2 * np.sin(np.arctan(ball.radius_arcsec * np.pi / 648000) / 2)
            vector, magnitude = vector[:, seen], magnitude[seen]
        x, y = pointing.project(vector)
        margin = 60
        inside = (x > -margin) & (x < rate.shape[1] + margin) & (y > -margin) & (y < rate.shape[0] + margin)
        light = np.array([rate_of(one) for one in magnitude[inside]])
        draw_points(rate, x[inside], y[inside], light, spread, faintest_e_s=0.3 / shot.exposure_s)

    def _motion(
        self, pointing: Pointing, shot: Shot, site: Site, generator: np.random.Generator
    ) -> LimbMotion | None:
        rms = self.faults.limb_motion_arcsec
        if rms is None:
            rms = image_motion_arcsec(site.seeing_arcsec, self.rig.optics.aperture_mm, shot.exposure_s)
        if rms < 0.02 * pointing.scale_arcsec_px:
            return None
        return LimbMotion.random(pointing, rms, self.faults.limb_correlation_arcsec, generator)

    def _spread(self, shot: Shot, site: Site, air_mass: float, motion: LimbMotion | None) -> PointSpread:
        """Return the blur: seeing, diffraction, optics, and tracking over an exposure longer than a second."""
        tracking = (
            radiometry.tracking_error_of(self.plan.rig)
            if shot.exposure_s > radiometry.TRACKED_FROM_S
            else 0.0
        )
        width = float(radiometry.psf_fwhm_arcsec(self.rig, site.seeing_arcsec, air_mass, tracking))
        return PointSpread.seeing(float(np.hypot(width / self.rig.scale_arcsec_px, OPTICS_FWHM_PX)))

    def _sky_mag(self, position: int, site: Site) -> float:
        """Return the sky's V magnitude a square arcsecond: dark sky, twilight and moonlight together."""
        moon = self.moon
        altitude = float(self.geometry.altitude_deg[position])
        here = self.frames.ra_deg[self.chosen[position]], self.frames.dec_deg[self.chosen[position]]
        there = unit_vector(float(moon.ra_deg[position]), float(moon.dec_deg[position]))
        away = np.degrees(np.arccos(np.clip(unit_vector(*here) @ there, -1, 1)))
        return float(
            sky_v_mag_arcsec2(
                site.sky_brightness_mag_arcsec2,
                site.extinction_mag,
                max(altitude, 1.0),
                float(self.geometry.sun_altitude_deg[position]),
                float(self.moon_altitude_deg[position]),
                # the law of scattering diverges at the Moon itself
                max(float(away), 1.0),
                float(moon.phase_angle_deg[position]),
                float(self.geometry.azimuth_deg[position] - self.sun_azimuth_deg[position]),
            )
        )

    def _trail_px(self, pointing: Pointing, shot: Shot) -> tuple[float, float]:
        """Return the motion (x, y) of the sky over an exposure without tracking: to the west."""
        if shot.tracking != "none":
            return 0.0, 0.0
        _, dec = ra_dec_deg(pointing.axis)
        length = SIDEREAL_ARCSEC_S * np.cos(np.radians(dec)) * shot.exposure_s / pointing.scale_arcsec_px
        right, up = pointing.pixel_steps()
        return float(-length * right[0]), float(-length * up[0])

    def _row_delay_s(self) -> np.ndarray:
        """Return how much later than the first row read the target's row is exposed, for each frame.

        Row 0 is the bottom of the picture; a part cut out is read as if there were nothing else.
        """
        sensor, rows = self.rig.sensor, self.size_px()[1]
        y = np.array([self._target_px(i, self.pointing(i))[1] for i in range(len(self))])
        y = np.clip(y, 0, rows - 1)
        lines = y if sensor.rolling_from == "bottom" else rows - 1 - y
        return sensor.rolling_readout_s * lines / (sensor.height_px - 1)

    def _target_px(self, position: int, pointing: Pointing) -> tuple[float, float]:
        """Return the target's place (x, y) in the frame."""
        geometry = self.geometry
        if geometry.target in geometry.discs:
            target = Ball.of(geometry.discs[geometry.target], position).vector
        else:
            star = next(
                star for star in geometry.stars if star[0] == geometry.target or geometry.target == "star"
            )
            target = unit_vector(float(star[1][position]), float(star[2][position]))
        x, y = pointing.project(target)
        return float(x), float(y)

    def _truth(self, position: int, pointing: Pointing, balls: dict[str, Ball], middle: float) -> Truth:
        geometry = self.geometry
        faults = self.faults
        stamp = middle + faults.clock_offset_s
        stamp += faults.clock_drift_s_day * (middle - float(self.frames.start_tt_s[0])) / 86400
        stamp += faults.stamped_half * self.shot(position).exposure_s / 2
        x, y = self._target_px(position, pointing)
        reference = balls.get(geometry.reference)
        rx, ry = pointing.project(reference.vector) if reference is not None else (np.nan, np.nan)
        radius = reference.radius_arcsec / pointing.scale_arcsec_px if reference is not None else np.nan
        ra, dec, rotation, scale = pointing.measured_at_middle()
        return Truth(
            middle + float(self.delay_s[position]), stamp, x, y, float(rx), float(ry), float(radius),
            ra, dec, rotation % 360.0, pointing.parity, scale,
        )  # fmt: skip


def _trailed(rate: np.ndarray, trail_px: tuple[float, float]) -> np.ndarray:
    """Smear a picture along a straight line."""
    import cv2

    # sharing light between the pixels next to a point spreads it: the line is shortened until its variance is right
    trail_px = tuple(_shortened(each) for each in trail_px)  # type: ignore[assignment]
    length = float(np.hypot(*trail_px))
    half = int(np.ceil(length / 2)) + 1
    steps = max(int(length * 4), 2)
    kernel = np.zeros((2 * half + 1, 2 * half + 1))
    for part in (np.arange(steps) + 0.5) / steps - 0.5:
        x, y = half + part * trail_px[0], half + part * trail_px[1]
        x0, y0 = int(np.floor(x)), int(np.floor(y))
        for dy, wy in ((0, 1 - (y - y0)), (1, y - y0)):
            for dx, wx in ((0, 1 - (x - x0)), (1, x - x0)):
                kernel[y0 + dy, x0 + dx] += wx * wy / steps
    # filter2D correlates: turn the kernel round
    return cv2.filter2D(rate, -1, kernel[::-1, ::-1].copy(), borderType=cv2.BORDER_REPLICATE)


def _shortened(length_px: float) -> float:
    """Return the length whose linear interpolation has the variance of a line of this length, which is L^2 / 12.

    Points spread over L < 2 pixels and shared linearly have a variance of L / 4, over more of L^2 / 12 + 1/6.
    """
    short = length_px**2 / 3 if abs(length_px) < np.sqrt(6) else np.sqrt(length_px**2 - 2)
    return float(np.copysign(short, length_px))


def choose(total: int, thin: int | None = None, count: int | None = None) -> np.ndarray:
    """Return which frames to draw: every `thin`-th, or `count` spread evenly from first to last."""
    if count is not None:
        return np.unique(np.linspace(0, total - 1, min(max(count, 1), total)).round().astype(int))
    return np.arange(0, total, thin or 1)


def without_noise(scene: Scene, position: int) -> np.ndarray:
    """Return the expected electrons of a frame, before the camera adds noise: for tests of the drawing itself."""
    quiet = replace(scene, faults=replace(scene.faults, limb_motion_arcsec=0.0))
    pointing = quiet.pointing(position)
    balls = {name: Ball.of(disc, position) for name, disc in quiet.geometry.discs.items()}
    shot = quiet.shot(position)
    return quiet._light(position, pointing, balls, shot, np.random.default_rng(0)) * shot.exposure_s
