"""The limb of the Sun or the Moon: centre, radius and seeing of a disc, from its edge alone.

The pixels about the limb are sorted into sectors. In each sector the mean limb profile of the whole frame is fitted
with a level, a contrast and a displacement of its own, so that clouds, gradients and vignetting change levels and
not places. The displacements give the centre, robustly. The mean profile, fitted by a blurred model of a disc, gives
the true radius: an inflection point would be biased inward by the blur (0.08-0.5").
"""

from __future__ import annotations

from dataclasses import dataclass, replace

import numpy as np

from imaging.discs.circle import CircleFit, fit_circle, limb_motion
from imaging.discs.edge import Blur, EdgeFit, fit_edge
from imaging.discs.find import find_disc
from imaging.discs.outline import Outline
from imaging.discs.profile import ProfileFit, fit_sectors
from imaging.discs.ring import Circles, Lit, Ring, Template, collect, crossings
from imaging.discs.surface import evened
from planner.errors import NoSolutionError

# By what part of itself the correction for the law of scattering may be wrong (assumed: between Lommel-Seeliger's law
# and Lambert's the correction differs by a third).
LAW_SHARE = 0.3
# Pixels used until the fit has settled, and in the last turn: more cost time and seeing hides what they would add.
_SETTLING_PIXELS, _FINAL_PIXELS = 40_000, 160_000


@dataclass(frozen=True)
class LimbFit:
    """A disc fitted by its limb. Pixels are 0-based, `covariance` is of (x, y, radius) in px^2.

    `radius_px`: the true radius, unrefracted and unblurred. `arc_deg`: how much of the limb was used.
    `rms_px`: scatter of the limb about the fit. `motion_px`, `correlation_px`: rms displacement of the limb by
    seeing and relief, photon noise taken off, and the length over which it falls to 1/e. `power`, `sky`:
    brightness of mu^0, mu^1, mu^2 inside the limb and level outside, of the mean profile (contrast 1).
    """

    x_px: float
    y_px: float
    radius_px: float
    covariance: np.ndarray
    blur: Blur
    arc_deg: float
    rms_px: float
    motion_px: float
    correlation_px: float
    contrast_adu: float
    power: tuple[float, float, float]
    outline: Outline
    saturated: bool = False
    radius_held: bool = False
    notes: tuple[str, ...] = ()

    @property
    def sigma_px(self) -> tuple[float, float]:
        """1-sigma of x and y."""
        return float(np.sqrt(self.covariance[0, 0])), float(np.sqrt(self.covariance[1, 1]))

    @property
    def seeing_fwhm_px(self) -> float:
        """Full width at half maximum of the blur."""
        return self.blur.fwhm_px


def fit_limb(
    data: np.ndarray,
    radius_px: float | None = None,
    radius_sigma_px: float | None = None,
    guess_px: tuple[float, float] | None = None,
    outline: Outline | None = None,
    saturation: float | None = None,
    lit_angle_deg: float | None = None,
    lit_half_deg: float = 180.0,
    phase_angle_deg: float | None = None,
    avoid: Circles = (),
) -> LimbFit:
    """Fit the limb of the one bright disc in a frame.

    data: (rows, columns), any unit. `radius_px`: expected true radius; with `radius_sigma_px` it is a prior
    (give both for the Moon and for discs cut by the frame: the radius is held when the arc is short).
    `guess_px`: rough centre. `outline`: refraction. `lit_angle_deg`, `lit_half_deg`: polar angle (+x toward +y)
    of the middle of the lit limb and how far to each side it may be used; give them for the Moon, and its phase
    angle, by which the surface near the limb is evened. `avoid`:
    circles (x, y, radius) to leave out. Raises NoSolutionError with a reason when the data do not defend a
    number. The centre is unbiased to 0.01 px on clean frames; the error stated includes seeing as far as the
    limb itself shows it.
    """
    data = np.asarray(data, np.float32)
    outline = outline or Outline()
    if radius_px is not None and radius_px < 6:
        raise NoSolutionError(f"a disc of {radius_px:.1f} px in radius is too small for a limb fit")
    x, y, radius, error = _start(data, radius_px, guess_px)
    prior = (radius_px, radius_sigma_px) if radius_px is not None and radius_sigma_px is not None else None
    lit = Lit(lit_angle_deg, lit_half_deg)

    def gather(width: float, most: int) -> Ring:
        return collect(data, x, y, radius, width, outline, saturation, avoid, most)

    width = float(np.clip(3 * error, 10.0, max(0.35 * radius, 10.0)))
    blur_px = 1.0
    for _ in range(3):
        sectors, blur_px = crossings(gather(width, _SETTLING_PIXELS), x, y, radius, width, outline, lit)
        circle = fit_circle(sectors, x, y, radius, prior, outline)
        x, y, radius = circle.x, circle.y, circle.radius
        wander = float(np.median(np.abs(sectors.shift[sectors.good])))
        width = float(np.clip(max(4 * wander, 6 * blur_px), 8.0, width))

    shifts: np.ndarray | None = None
    edge: EdgeFit | None = None
    fit: ProfileFit | None = None
    width = float(np.clip(8 * blur_px, 7.0, max(0.3 * radius, 7.0)))
    ring = gather(width + 2, _SETTLING_PIXELS)
    final = False
    for turn in range(7):
        inner_blur = None
        if lit.angle_deg is not None:
            inner_blur = edge.blur if edge is not None else Blur(blur_px)
        even = ring
        if lit_angle_deg is not None and phase_angle_deg is not None and fit is not None and edge is not None:
            level = float(np.median(fit.sectors.level[fit.sectors.good]))
            even = evened(
                ring, x, y, radius + edge.shift_px, outline, lit_angle_deg, phase_angle_deg, edge.blur, level
            )
        before = shifts
        fit = fit_sectors(even, x, y, radius, width, outline, lit, shifts, inner_blur)
        if prior is not None or final or turn == 0:
            edge = _true_edge(fit.template, radius, blur_px, 6.0 if lit.angle_deg is None else 12.0)
        held = prior
        if prior is not None and edge is not None:
            # the prior is of the true radius, the circle is that of the profile
            held = (prior[0] - edge.shift_px, prior[1])
        circle = fit_circle(fit.sectors, x, y, radius, held, outline, correlated=True)
        dx, dy, dr = circle.x - x, circle.y - y, circle.radius - radius
        if final and even is not ring:
            rough = fit_sectors(ring, x, y, radius, width, outline, lit, before, inner_blur)
            plain = fit_circle(rough.sectors, x, y, radius, held, outline)
            moved = np.array([circle.x - plain.x, circle.y - plain.y, circle.radius - plain.radius])
            circle = replace(circle, covariance=circle.covariance + LAW_SHARE**2 * np.outer(moved, moved))
        angle = fit.sectors.angle
        own = fit.sectors.shift - (dx * np.cos(angle) + dy * np.sin(angle) + dr)
        shifts = np.where(circle.used, np.clip(own, -width / 3, width / 3), 0.0)
        x, y, radius = circle.x, circle.y, circle.radius
        if final:
            break
        if (np.hypot(dx, dy) + abs(dr) < 0.02 and turn >= 1) or turn == 5:
            final = True
            ring = gather(width + 2, _FINAL_PIXELS)
    assert edge is not None
    assert fit is not None
    return _defended(circle, fit, edge, ring, outline, prior)


def _start(
    data: np.ndarray, radius_px: float | None, guess_px: tuple[float, float] | None
) -> tuple[float, float, float, float]:
    if guess_px is not None and radius_px is not None:
        return guess_px[0], guess_px[1], radius_px, max(4.0, 0.01 * radius_px)
    rough = find_disc(data, radius_px)
    if rough.rival > 0.75:
        raise NoSolutionError("two discs of like strength in the frame: which one is meant cannot be told")
    return rough.x_px, rough.y_px, radius_px if radius_px is not None else rough.radius_px, rough.error_px


def _defended(
    circle: CircleFit,
    fit: ProfileFit,
    edge: EdgeFit,
    ring: Ring,
    outline: Outline,
    prior: tuple[float, float] | None,
) -> LimbFit:
    """Return the fit with its true radius, or raise when something about it is not as a disc's."""
    notes: list[str] = []
    arc = 360.0 * circle.used.mean()
    if arc < 25:
        raise NoSolutionError(f"only {arc:.0f} degrees of limb are seen: too little to place a disc")
    if prior is None and arc < 110:
        raise NoSolutionError(
            f"{arc:.0f} degrees of limb do not fix a centre without a known radius: give the scale"
        )
    if circle.rms > max(0.15 * circle.radius, 3.0):
        raise NoSolutionError(f"the edge wanders by {circle.rms:.1f} px about the best circle: not a limb")
    true_radius = circle.radius + edge.shift_px
    covariance = circle.covariance.copy()
    held = prior is not None and prior[1] < 2 * np.sqrt(max(covariance[2, 2], 0))
    covariance[2, 2] += edge.shift_sigma_px**2
    if prior is not None and abs(true_radius - prior[0]) > max(8 * prior[1], 0.03 * prior[0]):
        raise NoSolutionError(
            f"the disc has a radius of {true_radius:.1f} px where {prior[0]:.1f} is expected: another body or scale"
        )
    saturated = bool(ring.clipped.mean() > 0.2)
    if saturated:
        notes.append("the disc is saturated: its radius is that of the clipped image")
    if edge.residual > 400 and not saturated:
        notes.append("the limb profile is not that of a blurred disc: radius and seeing are rough")
    motion, length = limb_motion(fit.sectors, circle)
    return LimbFit(
        circle.x, circle.y, float(true_radius), covariance, edge.blur, float(arc), circle.rms, motion, length,
        float(np.median(fit.sectors.contrast[circle.used])), edge.power, outline, saturated, bool(held), tuple(notes),
    )  # fmt: skip


def _true_edge(template: Template, radius: float, blur_px: float, reach: float) -> EdgeFit:
    """Fit the blurred model of a disc to the mean profile, `reach` blurs to each side of where it is half.

    On the Sun, more than six blurs in, three powers of mu do not follow the limb darkening and pull the limb by
    hundredths of a pixel; what they miss nearer by is below a thousandth, the floor of the errors.
    """
    middle = float(template.offset[np.argmin(np.abs(template.value - 0.4))])
    near = np.abs(template.offset - middle) < max(reach * blur_px, 4.0)
    step = max(1, int(near.sum()) // 60)
    count = int(near.sum()) // step * step

    def fold(array: np.ndarray) -> np.ndarray:
        return array[near][:count].reshape(-1, step).mean(axis=1)

    sigma = np.hypot(fold(template.sigma) / np.sqrt(step), 1e-3)
    return fit_edge(fold(template.offset), fold(template.raw), sigma, radius, blur_px)
