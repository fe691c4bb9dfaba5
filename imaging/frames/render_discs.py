"""Drawing the Sun, the Moon and the planets, each on its own finely sampled stamp where edges are sharp."""

from __future__ import annotations

from dataclasses import dataclass, replace

import numpy as np

from imaging.frames.render_light import (
    PointSpread,
    blurred_sun,
    limb_darkening,
    mean_over_centre,
    mean_sphere_brightness,
    sphere_brightness,
)
from imaging.frames.render_pointing import ARCSEC, PlaneMap, Pointing, unit_vector
from imaging.frames.render_seeing import LimbMotion
from imaging.frames.render_stars import draw_points
from planner.sky.bodies import SATURN_RINGS_KM, radii_km
from planner.sky.discs import SkyDisc, ring_share, ring_sine

# Discs smaller than this radius are drawn as so many points each way.
_SMALL_PX, _SMALL_POINTS = 2.0, 13
# Inner and outer edge of Saturn's bright rings in radii of its globe.
_RINGS = tuple(SATURN_RINGS_KM[edge] / radii_km("saturn")[0] for edge in ("b_inner", "a_outer"))


@dataclass(frozen=True)
class Ball:
    """One body at one instant: numbers of a `SkyDisc`, and its direction as a unit vector."""

    name: str
    vector: np.ndarray
    radius_arcsec: float
    flattening: float
    pole_pa_deg: float
    phase_angle_deg: float
    bright_limb_pa_deg: float
    magnitude: float
    ring_share: float = 0.0
    ring_sine: float = 0.0

    @classmethod
    def of(cls, disc: SkyDisc, index: int) -> Ball:
        """Take the body at one of the disc's times; the radius is that of its outline on a tangent plane."""
        pick = [
            float(np.asarray(array)[index])
            for array in (
                disc.ra_deg,
                disc.dec_deg,
                disc.semidiameter_arcsec,
                disc.flattening,
                disc.pole_pa_deg,
                disc.phase_angle_deg,
                disc.bright_limb_pa_deg,
                disc.magnitude,
            )
        ]
        radius = np.tan(pick[2] * ARCSEC) / ARCSEC
        ball = cls(disc.name, unit_vector(pick[0], pick[1]), radius, *pick[3:])
        if disc.name != "saturn":
            return ball
        return replace(
            ball, ring_share=float(ring_share(disc)[index]), ring_sine=float(ring_sine(disc)[index])
        )

    @property
    def reach_arcsec(self) -> float:
        """Radius of all that shines, rings included."""
        return self.radius_arcsec * (_RINGS[1] if self.ring_share > 0 else 1.0)


def _coordinates(low: int, high: int, finer: int) -> np.ndarray:
    """Middles of `finer` sub-pixels a pixel, for whole pixels low..high-1."""
    return low - 0.5 + (np.arange((high - low) * finer) + 0.5) / finer


def _shrink(fine: np.ndarray, finer: int) -> np.ndarray:
    rows, columns = fine.shape
    return fine.reshape(rows // finer, finer, columns // finer, finer).mean(axis=(1, 3))


def _add(image: np.ndarray, stamp: np.ndarray, x_low: int, y_low: int, factor: float) -> None:
    rows, columns = image.shape
    y0, x0 = max(y_low, 0), max(x_low, 0)
    y1, x1 = min(y_low + stamp.shape[0], rows), min(x_low + stamp.shape[1], columns)
    if y1 > y0 and x1 > x0:
        image[y0:y1, x0:x1] += factor * stamp[y0 - y_low : y1 - y_low, x0 - x_low : x1 - x_low]


def _inside_outline(ball: Ball, east: np.ndarray, north: np.ndarray) -> np.ndarray:
    """Squared distance from the middle in units of the outline (1 on the outline), flattening included."""
    pole = np.radians(ball.pole_pa_deg)
    along_pole = east * np.sin(pole) + north * np.cos(pole)
    across = east * np.cos(pole) - north * np.sin(pole)
    polar = ball.radius_arcsec * (1 - ball.flattening)
    return (across / ball.radius_arcsec) ** 2 + (along_pole / polar) ** 2


def _lit(ball: Ball, east: np.ndarray, north: np.ndarray) -> np.ndarray:
    """Brightness over a body, the ellipse stretched to a circle before the law of scattering is applied."""
    pole = np.radians(ball.pole_pa_deg)
    along_pole = (east * np.sin(pole) + north * np.cos(pole)) / (ball.radius_arcsec * (1 - ball.flattening))
    across = (east * np.cos(pole) - north * np.sin(pole)) / ball.radius_arcsec
    # position angle of the lit limb counted from the pole: `across` points to pole - 90 degrees turned east
    angle = np.radians(ball.bright_limb_pa_deg) - pole
    toward = along_pole * np.cos(angle) + across * np.sin(angle)
    side = across * np.cos(angle) - along_pole * np.sin(angle)
    return sphere_brightness(ball.name, toward, side, ball.phase_angle_deg)


def _rings(ball: Ball, east: np.ndarray, north: np.ndarray) -> np.ndarray:
    """Saturn's rings, evenly bright; what crosses the globe is left to the globe."""
    pole = np.radians(ball.pole_pa_deg)
    along_pole = (east * np.sin(pole) + north * np.cos(pole)) / ball.radius_arcsec
    across = (east * np.cos(pole) - north * np.sin(pole)) / ball.radius_arcsec
    radius2 = across**2 + (along_pole / max(ball.ring_sine, 1e-3)) ** 2
    bright = (
        (radius2 > _RINGS[0] ** 2) & (radius2 < _RINGS[1] ** 2) & (_inside_outline(ball, east, north) >= 1)
    )
    return bright.astype(float)


def _shining(ball: Ball, east: np.ndarray, north: np.ndarray) -> np.ndarray:
    """Brightness over a body and its rings, in sum 1 over an even grid that holds all of it; zeros where it is dark."""
    globe = _lit(ball, east, north)
    total = globe / max(globe.sum(), 1e-300)
    if ball.ring_share > 0:
        rings = _rings(ball, east, north)
        if rings.any():
            total = (1 - ball.ring_share) * total + ball.ring_share * rings / rings.sum()
    return total


def draw_sun(
    rate: np.ndarray,
    pointing: Pointing,
    sun: Ball,
    electrons_s: float,
    spread: PointSpread,
    motion: LimbMotion | None,
    planets: list[Ball],
) -> None:
    """Add the Sun (`electrons_s` from the whole disc) to `rate` (electrons/s/px), planets cut out of it."""
    radius_px = sun.radius_arcsec / pointing.scale_arcsec_px
    centre_rate = electrons_s / (np.pi * radius_px**2) / mean_over_centre()
    box = _box(pointing, sun, radius_px + spread.reach_px + 2, clip=True)
    if box is None:
        return
    x_low, x_high, y_low, y_high = box
    plane = PlaneMap.about(pointing, sun.vector, box)
    x, y = np.arange(x_low, x_high), np.arange(y_low, y_high)
    east, north = plane.grid(x, y)
    if motion is not None:
        motion.shift_grid(east, north, pointing, x_low, y_low)
    distance_px = np.sqrt(east**2 + north**2) / pointing.scale_arcsec_px
    profile = blurred_sun(radius_px, spread)
    rate[y_low:y_high, x_low:x_high] += centre_rate * profile.at(distance_px)
    for planet in planets:
        _cut_out(rate, pointing, sun, planet, centre_rate, spread, motion)
    # what is cut out is sampled more coarsely than the profile it is cut from: rounding may leave less than nothing
    np.maximum(rate, 0.0, out=rate)


def _cut_out(
    rate: np.ndarray,
    pointing: Pointing,
    sun: Ball,
    planet: Ball,
    centre_rate: float,
    spread: PointSpread,
    motion: LimbMotion | None,
) -> None:
    """Take away the sunlight that a planet in front hides, blurred as everything is."""
    radius_px = planet.radius_arcsec / pointing.scale_arcsec_px
    box = _box(pointing, planet, radius_px + spread.reach_px + 2)
    if box is None:
        return
    x_low, x_high, y_low, y_high = box
    finer = int(np.clip(np.ceil(40 / radius_px), 5, 11))
    x, y = _coordinates(x_low, x_high, finer), _coordinates(y_low, y_high, finer)
    east, north = PlaneMap.about(pointing, planet.vector, box).grid(x, y)
    sun_east, sun_north = PlaneMap.about(pointing, sun.vector, box).grid(x, y)
    if motion is not None:
        step = motion.shift_points(pointing, x, y)
        for array, change in ((east, 0), (north, 1), (sun_east, 0), (sun_north, 1)):
            array += step[change]
    hidden = _inside_outline(planet, east, north) < 1
    r2 = (sun_east**2 + sun_north**2) / sun.radius_arcsec**2
    light = np.where(hidden & (r2 < 1), limb_darkening(np.sqrt(np.clip(1 - r2, 0, 1))), 0.0)
    _add(rate, _shrink(spread.finer(finer).blur(light), finer), x_low, y_low, -centre_rate)


def draw_ball(
    rate: np.ndarray,
    pointing: Pointing,
    ball: Ball,
    electrons_s: float,
    spread: PointSpread,
    motion: LimbMotion | None,
    in_front: Ball | None = None,
) -> None:
    """Add a planet (`electrons_s` when nothing hides it) to `rate`, cut by the Moon `in_front` of it."""
    radius_px = ball.reach_arcsec / pointing.scale_arcsec_px
    box = _box(pointing, ball, radius_px + spread.reach_px + 2)
    if box is None:
        return
    x_low, x_high, y_low, y_high = box
    small = radius_px < _SMALL_PX
    if small:
        # a grid on the disc alone, drawn as points: a grid fine enough for the disc over the whole blur costs seconds
        points = _SMALL_POINTS if ball.ring_share == 0 else 3 * _SMALL_POINTS
        across = radius_px * 1.02 * np.linspace(-1, 1, points)
        x_mid, y_mid = pointing.project(ball.vector)
        x, y = float(x_mid) + across, float(y_mid) + across
        finer = 1
    else:
        finer = 3 if radius_px > 60 else 5
        x, y = _coordinates(x_low, x_high, finer), _coordinates(y_low, y_high, finer)
    east, north = PlaneMap.about(pointing, ball.vector, box).grid(x, y)
    step = motion.shift_points(pointing, x, y) if motion is not None else None
    if step is not None:
        east += step[0]
        north += step[1]
    light = _shining(ball, east, north)
    if not light.any():
        return
    if in_front is not None:
        moon_east, moon_north = PlaneMap.about(pointing, in_front.vector, box).grid(x, y)
        if step is not None:
            moon_east += step[0]
            moon_north += step[1]
        light = np.where(moon_east**2 + moon_north**2 < in_front.radius_arcsec**2, 0.0, light)
        if not light.any():
            return
    if small:
        rows, columns = np.nonzero(light)
        share = electrons_s * light[rows, columns]
        draw_points(rate, x[columns], y[rows], share, spread, faintest_e_s=1e-6 * electrons_s / share.size)
        return
    # the mean that a pixel takes of its sub-pixels is turned back into their sum
    _add(rate, _shrink(spread.finer(finer).blur(light), finer), x_low, y_low, electrons_s * finer**2)


def draw_moon(
    rate: np.ndarray,
    pointing: Pointing,
    moon: Ball,
    electrons_s: float,
    spread: PointSpread,
    motion: LimbMotion | None,
    earthshine_electrons_s: float = 0.0,
) -> None:
    """Add the Moon to `rate`: `electrons_s` from the sunlit part, `earthshine_electrons_s` from the whole disc."""
    radius_px = moon.radius_arcsec / pointing.scale_arcsec_px
    reach = int(np.ceil(spread.reach_px)) + 2
    box = _box(pointing, moon, radius_px + reach, clip=True, margin=reach)
    if box is None:
        return
    x_low, x_high, y_low, y_high = box
    plane = PlaneMap.about(pointing, moon.vector, box)
    x, y = np.arange(x_low, x_high), np.arange(y_low, y_high)
    east, north = plane.grid(x, y)
    if motion is not None:
        motion.shift_grid(east, north, pointing, x_low, y_low)
    area_px = np.pi * radius_px**2
    lit_scale = electrons_s / (area_px * mean_sphere_brightness("moon", moon.phase_angle_deg))
    dark = earthshine_electrons_s / area_px

    def light(east: np.ndarray, north: np.ndarray) -> np.ndarray:
        inside = _inside_outline(moon, east, north) < 1
        return lit_scale * _lit(moon, east, north) + dark * inside

    image = light(east, north)
    edge = np.abs(np.sqrt(east**2 + north**2) / moon.radius_arcsec - 1) < 1.5 / radius_px
    rows, columns = np.nonzero(edge)
    # sub-pixels of the pixels that the limb crosses, through the local slope of the map
    unit = pointing.scale_arcsec_px
    right, up = pointing.pixel_steps()
    total = np.zeros(rows.size)
    sub = (np.arange(6) - 2.5) / 6
    for dy in sub:
        for dx in sub:
            total += light(
                east[rows, columns] + unit * (dx * right[0] + dy * up[0]),
                north[rows, columns] + unit * (dx * right[1] + dy * up[1]),
            )
    image[rows, columns] = total / 36
    _add(rate, spread.blur(image), x_low, y_low, 1.0)


def _box(
    pointing: Pointing, ball: Ball, half_px: float, clip: bool = False, margin: int = 0
) -> tuple[int, int, int, int] | None:
    """Return the pixel box (x_low, x_high, y_low, y_high) about a body, None when it misses the frame."""
    x, y = pointing.project(ball.vector)
    if not (np.isfinite(x) and np.isfinite(y)):
        return None
    half = int(np.ceil(half_px))
    x_mid, y_mid = round(float(x)), round(float(y))
    low_x, high_x, low_y, high_y = x_mid - half, x_mid + half + 1, y_mid - half, y_mid + half + 1
    if high_x <= 0 or high_y <= 0 or low_x >= pointing.width_px or low_y >= pointing.height_px:
        return None
    if clip:
        low_x, high_x = max(low_x, -margin), min(high_x, pointing.width_px + margin)
        low_y, high_y = max(low_y, -margin), min(high_y, pointing.height_px + margin)
    return low_x, high_x, low_y, high_y
