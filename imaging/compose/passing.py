"""What a path plot shows of a star that is covered: the body that passes before it, and the star's light."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from imaging.compose.canvas import Canvas
from imaging.compose.material import Material
from planner.sky.timescale import tt_s_from_iso

LINE_POINTS = 361
VIEW_RADII = 12.0  # half a view, in units of the body's radius and its least distance together
LEAST_VIEW_ARCSEC = 0.5


@dataclass(frozen=True)
class Passing:
    """The body: its predicted path (2, n), right and up in arcseconds from the star, while it is in view.

    `nearest`: where on the path it is nearest to the star. `half_arcsec`: half the view that shows it well.
    """

    name: str
    line: np.ndarray
    tt_s: np.ndarray
    radius_arcsec: float
    half_arcsec: float

    @property
    def nearest(self) -> int:
        """Index of the point nearest to the star."""
        return int(np.hypot(*self.line).argmin())


@dataclass(frozen=True)
class LightCurve:
    """The star's light in units of its whole light, at mid-exposure (n,), and the instants it went out and came back.

    `contact_tt_s`, `contact_sigma_s`: by the clock of the frames, as the light is.
    """

    star: str
    tt_s: np.ndarray
    light: np.ndarray
    contact_tt_s: np.ndarray
    contact_sigma_s: np.ndarray
    contact_names: tuple[str, ...]

    def span_tt_s(self) -> tuple[float, float]:
        """Return the time worth showing: all of it, or what surrounds a cover that is short against it."""
        first, last = float(self.tt_s.min()), float(self.tt_s.max())
        if self.contact_tt_s.size:
            low, high = float(self.contact_tt_s.min()), float(self.contact_tt_s.max())
            around = max(1.5 * (high - low), 10.0)
            if high - low + 2 * around < 0.5 * (last - first):
                return low - around, high + around
        return first, last


def passing_of(material: Material, canvas: Canvas, anchor_deg: tuple[float, float]) -> Passing | None:
    """Return the body that passes before a star among stars; None for any other event."""
    geometry = material.geometry
    bodies = [name for name in geometry.discs if name not in ("sun", "moon")]
    if geometry.reference != "stars" or geometry.target in geometry.discs or len(bodies) != 1:
        return None
    tt_s = np.array([frame.tt_s for frame in material.frames])
    tt_s = np.linspace(tt_s[0], tt_s[-1], LINE_POINTS)
    line, radius = _line(material, bodies[0], tt_s, canvas, anchor_deg)
    away = np.hypot(*line)
    near = int(away.argmin())
    rate = np.hypot(*(line[:, min(near + 1, len(tt_s) - 1)] - line[:, max(near - 1, 0)]))
    rate /= tt_s[min(near + 1, len(tt_s) - 1)] - tt_s[max(near - 1, 0)]
    finer = tt_s[near] + np.linspace(-1, 1, LINE_POINTS) * (tt_s[1] - tt_s[0])
    least = float(np.hypot(*_line(material, bodies[0], finer, canvas, anchor_deg)[0]).min())
    half = max(VIEW_RADII * (radius + least), LEAST_VIEW_ARCSEC)
    shown = tt_s[near] + np.linspace(-1.5, 1.5, LINE_POINTS) * half / max(float(rate), 1e-9)
    line, radius = _line(material, bodies[0], shown, canvas, anchor_deg)
    name = "minor planet" if bodies[0] == "asteroid" else bodies[0].capitalize()
    return Passing(name, line, shown, radius, half)


def _line(
    material: Material, body: str, tt_s: np.ndarray, canvas: Canvas, anchor_deg: tuple[float, float]
) -> tuple[np.ndarray, float]:
    disc = material.geometry_at(tt_s).discs[body]
    line = np.array(canvas.from_sky(*anchor_deg, disc.ra_deg, disc.dec_deg), float)
    return line, float(disc.semidiameter_arcsec[len(tt_s) // 2])


def light_curve_of(material: Material) -> LightCurve | None:
    """Return the light curve that the track's header holds; None where the check made none."""
    kept = material.meta.get("light_curve")
    if not kept:
        return None
    flux = np.array([np.nan if value is None else value for value in kept["flux"]], float)
    begin = np.array([float(tt_s_from_iso(str(text))) for text in kept["begin_utc"]])
    middle = begin + 0.5 * np.array(kept["exposure_s"], float)
    known = np.isfinite(flux)
    if known.sum() < 2:
        return None
    contacts = [item for item in material.meta.get("contacts") or [] if item.get("stamped_utc")]
    return LightCurve(
        material.target,
        middle[known],
        flux[known],
        np.array([float(tt_s_from_iso(str(item["stamped_utc"]))) for item in contacts]),
        np.array([float(item.get("sigma_s") or np.nan) for item in contacts]),
        tuple(str(item["name"]) for item in contacts),
    )
