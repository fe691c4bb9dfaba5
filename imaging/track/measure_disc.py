"""A frame of the Sun or the Moon measured: the limb fitted, then the target looked for from it."""

from __future__ import annotations

from dataclasses import replace
from typing import Any

import numpy as np

from imaging.discs.find import find_disc
from imaging.discs.limb import LimbFit, fit_limb
from imaging.discs.outline import Outline, pixel_angle_deg
from imaging.discs.planet import DiscPlace, planet_beside_moon, planet_on_sun
from imaging.frames.frame import Frame
from imaging.stars.solve import detect_frame
from imaging.track.measurement import AS_PREDICTED, DiscReference, Measurement
from imaging.track.nominal import NEAR_ARCSEC, Nominal, Promise, body_of
from imaging.track.path import Expected
from planner.errors import NoSolutionError
from planner.events.family import Geometry

RADIUS_TOLERANCE = 0.01  # of a rig file's scale: focus and temperature change a focal length by less
FULL_PHASE_DEG = 3.0  # below this phase angle the whole limb of the Moon is lit
LIT_HALF_DEG = 80.0  # how far to each side of its middle the lit limb is used
PHASE_SEEN_DEG = 25.0  # above this phase angle the centre of light tells where the Sun stands
TURNED_DEG = 15.0  # beyond this difference the light is believed, not the plan
VAGUE_PX, VAGUE_ARCSEC = 0.7, 2.0  # a place less certain than both is not a planet's


class OnDisc:
    """Measures frames of one plan against a limb; where one frame had the target helps the next."""

    def __init__(self, promise: Promise):
        self.promise = promise
        self._shift_px = np.zeros(2)
        self._stray_rate = float("nan")

    def measure(
        self, frame: Frame, blank: Measurement, geometry: Geometry, expected: Expected
    ) -> Measurement:
        """Return the target's place from the disc's centre; raises NoSolutionError when there is no limb."""
        nominal = blank.nominal
        limb = self._limb(frame, nominal, geometry, expected)
        center = np.array([limb.x_px, limb.y_px])
        nominal = _turned_to(nominal, center, frame.data.shape, geometry)
        offset = np.array(nominal.to_pixels(float(expected.east_arcsec[0]), float(expected.north_arcsec[0])))
        reference = DiscReference(
            limb.x_px,
            limb.y_px,
            limb.radius_px,
            limb.covariance[:2, :2],
            float(np.sqrt(limb.covariance[2, 2])),
            limb.contrast_adu,
            limb.seeing_fwhm_px,
        )
        blank = replace(
            blank,
            nominal=nominal,
            disc=reference,
            solved_by=f"{geometry.reference}-limb",
            predicted_px=tuple((center + offset).tolist()),
        )
        radius = float(expected.target_semidiameter_arcsec[0]) / nominal.scale_arcsec_px
        hidden = _hidden(geometry, expected)
        self._stray_rate = float("nan")
        try:
            # a stamp outside the plan's hours says nothing of what was to be seen: the target is looked for all over
            stray = hidden is None or not nominal.passage
            place = self._found(frame, limb, center + offset, radius, geometry, stray)
        except NoSolutionError as none:
            return replace(blank, reason=hidden or str(none))
        self._shift_px = np.array([place.x_px, place.y_px]) - center - offset
        return replace(
            blank,
            x_px=place.x_px,
            y_px=place.y_px,
            covariance_px2=place.covariance,
            stray_rate_adu_s=self._stray_rate,
            far=bool(np.hypot(*self._shift_px) > self._near_px(frame, radius)),
            reason="; ".join((*limb.notes, *place.notes)),
        )

    def _limb(self, frame: Frame, nominal: Nominal, geometry: Geometry, expected: Expected) -> LimbFit:
        disc = geometry.discs[geometry.reference]
        semidiameter = float(disc.semidiameter_arcsec[0])
        altitude, zenith_pa = float(expected.altitude_deg[0]), float(expected.zenith_pa_deg[0])
        outline = Outline()
        if np.isfinite(altitude) and altitude > 0 and self.promise.path.observer is not None:
            up = _along(expected, zenith_pa)
            if np.isfinite(up) and abs(up) < 7200:
                altitude -= up / 3600.0
            outline = Outline.seen(
                max(altitude, 0.1),
                zenith_pa,
                nominal.rotation_deg,
                nominal.parity,
                semidiameter,
                self.promise.path.observer,
            )
        radius = semidiameter / nominal.scale_arcsec_px
        options: dict[str, Any] = {"outline": outline, "saturation": frame.saturation_adu}
        if geometry.reference == "moon":
            options["radius_sigma_px"] = RADIUS_TOLERANCE * radius
            if float(disc.phase_angle_deg[0]) > FULL_PHASE_DEG:
                bright = float(disc.bright_limb_pa_deg[0])
                promised = pixel_angle_deg(bright, nominal.rotation_deg, nominal.parity)
                options["lit_angle_deg"] = _lit_angle_deg(
                    frame.data, radius, promised, float(disc.phase_angle_deg[0])
                )
                options["lit_half_deg"] = LIT_HALF_DEG
                options["phase_angle_deg"] = float(disc.phase_angle_deg[0])
        return fit_limb(frame.data, radius, **options)

    def _found(
        self,
        frame: Frame,
        limb: LimbFit,
        predicted: np.ndarray,
        radius_px: float,
        geometry: Geometry,
        stray: bool,
    ) -> DiscPlace:
        """Look for the target near its prediction, near where the last frame had it, and if `stray` anywhere."""
        near = self._near_px(frame, radius_px)
        center = np.array([limb.x_px, limb.y_px])
        tries = [(predicted, near)]
        if np.hypot(*self._shift_px) > near / 2:
            tries.insert(0, (predicted + self._shift_px, near))
        if geometry.reference == "sun" and stray:
            tries += [(predicted, 0.2 * limb.radius_px), (center, 1.02 * limb.radius_px)]
        reason = NoSolutionError("nothing was looked for")
        for place, search in tries:
            try:
                return self._sure(frame, limb, place, search, radius_px, geometry)
            except NoSolutionError as none:
                reason = none
        if geometry.reference == "moon" and stray:
            point = _point_off_disc(frame, limb)
            if point is not None:
                self._stray_rate = point[1] / max(frame.exposure_s or 1.0, 1e-6)
                return self._sure(frame, limb, point[0], 3.0, radius_px, geometry)
        raise reason

    def _near_px(self, frame: Frame, radius_px: float) -> float:
        """Return how far from its prediction the target is looked for first."""
        return max(NEAR_ARCSEC / self.promise.rig.scale_arcsec_px / frame.binning, 3 * radius_px, 8.0)

    def _sure(
        self,
        frame: Frame,
        limb: LimbFit,
        place: np.ndarray,
        search_px: float,
        radius_px: float,
        geometry: Geometry,
    ) -> DiscPlace:
        """Return a place that is sharp enough to be a planet's; glare and gradients give vague ones."""
        found = self._place(frame, limb, place, search_px, radius_px, geometry)
        worst = max(found.sigma_px)
        limit = max(VAGUE_PX, VAGUE_ARCSEC / (self.promise.rig.scale_arcsec_px * frame.binning))
        if worst > limit:
            raise NoSolutionError(
                f"what is seen there has no sharp place (1 sigma {worst:.1f} px): not the planet"
            )
        return found

    def _place(
        self,
        frame: Frame,
        limb: LimbFit,
        place: np.ndarray,
        search_px: float,
        radius_px: float,
        geometry: Geometry,
    ) -> DiscPlace:
        x, y = place.tolist()
        if geometry.reference == "sun":
            return planet_on_sun(
                frame.data, x, y, radius_px, limb, search_px, saturation=frame.saturation_adu
            )
        nominal = self.promise.of_frame(frame)
        body = body_of(
            geometry, radius_px, lambda pa: pixel_angle_deg(pa, nominal.rotation_deg, nominal.parity)
        )
        return planet_beside_moon(
            frame.data,
            x,
            y,
            body,
            limb,
            search_px,
            saturation=frame.saturation_adu,
            gain_e_adu=frame.gain_e_adu,
        )


def _point_off_disc(frame: Frame, limb: LimbFit) -> tuple[np.ndarray, float] | None:
    """Return the place and the light of the brightest point clear of the Moon's limb, None when nothing is bright."""
    found = detect_frame(frame)
    away = np.hypot(found.x_px - limb.x_px, found.y_px - limb.y_px) - limb.radius_px
    clear = np.flatnonzero((away > 4.0 + 2.0 * limb.seeing_fwhm_px) & (found.snr > 20.0))
    if not clear.size:
        return None
    first = clear[np.argmax(found.flux_adu[clear])]
    return np.array([found.x_px[first], found.y_px[first]]), float(found.flux_adu[first])


def _lit_angle_deg(data: np.ndarray, radius_px: float, promised_deg: float, phase_angle_deg: float) -> float:
    """Return the polar angle of the middle of the lit limb: as promised, unless the light itself lies elsewhere.

    A camera that was turned or mirrored must not make the terminator a limb. Dark and bright ground shifts the
    Moon's centre of light by a few degrees of this angle, so small differences leave the promise as it is.
    """
    if phase_angle_deg < PHASE_SEEN_DEG:
        return promised_deg
    rough = find_disc(data, radius_px)
    step = max(1, int(radius_px / 100))
    small = data[::step, ::step]
    y, x = (np.arange(n) * step for n in small.shape)
    dx, dy = x[None, :] - rough.x_px, y[:, None] - rough.y_px
    inside = (np.hypot(dx, dy) < 0.97 * radius_px) & np.isfinite(small)
    if inside.sum() < 100:
        return promised_deg
    light = np.where(inside, small - np.percentile(small[inside], 5), 0.0)
    seen = np.degrees(np.arctan2(float(np.sum(light * dy)), float(np.sum(light * dx))))
    away = (seen - promised_deg + 180.0) % 360.0 - 180.0
    return float(seen) if abs(away) > TURNED_DEG else promised_deg


def _hidden(geometry: Geometry, expected: Expected) -> str | None:
    """Return why nothing was to be seen at this time, where the prediction itself says so."""
    apart = float(np.hypot(expected.east_arcsec[0], expected.north_arcsec[0]))
    disc, target = (
        float(expected.reference_semidiameter_arcsec[0]),
        float(expected.target_semidiameter_arcsec[0]),
    )
    name = geometry.target.capitalize() if geometry.target.islower() else geometry.target
    if geometry.reference == "sun" and apart > disc - NEAR_ARCSEC:
        where = "off the Sun's disc" if apart > disc + target else "at the Sun's limb"
        return f"{name} {AS_PREDICTED} {where}"
    if geometry.reference == "moon" and apart < disc + target + NEAR_ARCSEC:
        return f"{name} {AS_PREDICTED} {'behind the Moon' if apart < disc else 'at the limb of the Moon'}"
    return None


def _turned_to(nominal: Nominal, center: np.ndarray, shape: tuple[int, ...], geometry: Geometry) -> Nominal:
    """Return the promise with the rotation at the disc, where north differs from north on the camera's axis.

    A mount keeps its roll against the pole as its axis sees it; meridians converge by (distance east) tan(declination).
    """
    middle = np.array([(shape[1] - 1) / 2.0, (shape[0] - 1) / 2.0])
    east, _ = nominal.to_sky(*(center - middle))
    dec = np.radians(float(geometry.discs[geometry.reference].dec_deg[0]))
    turn = float(east) / 3600.0 * np.tan(np.clip(dec, -1.5, 1.5))
    return replace(nominal, rotation_deg=(nominal.rotation_deg + turn) % 360.0)


def _along(expected: Expected, pa_deg: float) -> float:
    """Return the offset from the reference toward a position angle, in arcseconds."""
    pa = np.radians(pa_deg)
    return float(expected.east_arcsec[0] * np.sin(pa) + expected.north_arcsec[0] * np.cos(pa))
