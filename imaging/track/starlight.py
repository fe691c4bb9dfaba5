"""The target star of an occultation in one frame: a piece about where it is expected, whether it is seen there or not.

Pieces are small, so that thousands of frames are kept; its light is summed when all frames are known.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from imaging.discs.edge import FWHM_OVER_SIGMA
from imaging.discs.glare import limb_and_glare
from imaging.discs.stamp import Stamp
from imaging.frames.frame import Frame
from imaging.stars.detection import Detections
from imaging.stars.solve import detect_frame
from imaging.track.measurement import Measurement
from imaging.track.nominal import Promise
from imaging.track.path import tangent_offsets, target_place, unit_vectors
from planner.errors import NoSolutionError
from planner.events.family import Geometry

HALF_PX = 28  # half side of a piece: what the pointing may be off, an aperture, and its ring of sky
_BRIGHTEST = 12  # detections, and catalogue stars, that are laid on each other
_FAINTER_MAG = 3.5  # catalogue stars so much fainter than the target are not laid on
_ROTATION_SLACK = 0.03  # radians, by which a camera's roll may be off
_NEAR_PX = 40.0  # the mount moves by less from frame to frame
_POINTING_SIGMAS = 5.0


@dataclass(frozen=True, eq=False)
class StarPiece:
    """What one frame holds about a star's expected place, the glow of the Moon's limb taken off; NaN where nothing.

    `dx_px`, `dy_px`: the expected place from the middle pixel. `y_px`: its row.
    `fwhm_px`: of a star, NaN when not known. `comparison`: light that clouds dim alike, NaN when there is none.
    `placed`: the frame's own stars or limb say where the star is.
    """

    data: np.ndarray
    dx_px: float
    dy_px: float
    y_px: float
    fwhm_px: float
    comparison: float
    placed: bool


class StarCatcher:
    """Cuts the target star out of one frame after the other; frames too short to be solved are laid on the others."""

    def __init__(self, promise: Promise):
        self.promise = promise
        self._shift: np.ndarray | None = None
        self._parity_rotation: tuple[int, float] | None = None
        self._from_star: dict[int, np.ndarray] = {}

    def piece(
        self, frame: Frame, m: Measurement, geometry: Geometry, found: Detections | None = None
    ) -> StarPiece | None:
        """Return the piece about the target; None when the frame does not hold its place.

        `found`: the frame's detections where they are known already.
        """
        fwhm, comparison = float("nan"), float("nan")
        if np.isfinite(m.predicted_px).all():
            x, y = m.predicted_px
            placed = True
            if m.disc is not None:
                fwhm, comparison = m.disc.seeing_fwhm_px, m.disc.contrast_adu
            elif m.stars is not None:
                fwhm, comparison = m.stars.fwhm_px, m.stars.zero_point_adu
        elif geometry.reference == "stars":
            found = found if found is not None else detect_frame(frame)
            x, y = self._laid_on(frame, m, geometry, found)
            placed, fwhm = False, float(found.psf_fwhm_px) if len(found) else float("nan")
        else:
            return None
        rows, columns = frame.data.shape
        if not (0 <= x < columns and 0 <= y < rows):
            return None
        column, row = round(x), round(y)
        data = _cut(frame.data, column, row)
        if m.disc is not None:
            data = data - _glow(data, column, row, m, x, y, fwhm)
        return StarPiece(data.astype(np.float32), x - column, y - row, y, fwhm, comparison, placed)

    def _laid_on(
        self, frame: Frame, m: Measurement, geometry: Geometry, found: Detections
    ) -> tuple[float, float]:
        """Return the target's place by the few stars that a short exposure shows, by scale and orientation promised.

        The brightest stars of the catalogue are laid on the brightest detections. When the target is among them, its
        own place; else that of another star and how the target lay from it in frames before.
        """
        nominal = m.nominal
        turn = (nominal.parity, round(nominal.rotation_deg, 1))
        if turn != self._parity_rotation:  # the mount was turned over
            self._parity_rotation, self._shift, self._from_star = turn, None, {}
        catalogue, index = self._catalogue(frame, m, geometry)
        bright = np.argsort(-found.snr)[:_BRIGHTEST]
        bright = bright[found.snr[bright] > 6.0]
        seen = np.column_stack([found.x_px[bright], found.y_px[bright]])
        weight = np.minimum(found.snr[bright], 60.0)
        shift = self._best_shift(catalogue, seen, weight, nominal.scale_arcsec_px)
        if shift is None:
            last = self._shift if self._shift is not None else np.zeros(2)
            place = catalogue[0] + last
            return float(place[0]), float(place[1])
        self._shift = shift
        matched: dict[int, np.ndarray] = {}
        for number, place in enumerate(catalogue):
            away = np.hypot(*(seen - place - shift).T)
            if away.min() < self._slack(catalogue, number):
                matched[number] = seen[away.argmin()]
        if 0 in matched:
            place = matched[0]
            for number, other in matched.items():
                self._from_star[int(index[number])] = place - other
            self._shift = place - catalogue[0]
            return float(place[0]), float(place[1])
        number = min(matched)
        known = self._from_star.get(int(index[number]), catalogue[0] - catalogue[number])
        place = matched[number] + known
        return float(place[0]), float(place[1])

    @staticmethod
    def _slack(catalogue: np.ndarray, number: int) -> float:
        return 4.0 + _ROTATION_SLACK * float(np.hypot(*(catalogue[number] - catalogue[0])))

    def _best_shift(
        self, catalogue: np.ndarray, seen: np.ndarray, weight: np.ndarray, scale_arcsec_px: float
    ) -> np.ndarray | None:
        """Return by how much the promised places must be moved to lie on detections; None when nothing is seen."""
        if not seen.size:
            return None
        pointing = self.promise.rig.mount.pointing_error_arcsec / scale_arcsec_px
        reach = max(_POINTING_SIGMAS * pointing, 100.0)
        middle = self._shift if self._shift is not None else np.zeros(2)
        allowed = [_NEAR_PX, reach] if self._shift is not None else [reach]
        shifts = (seen[:, None, :] - catalogue[None, :, :]).reshape(-1, 2)
        slack = np.array([self._slack(catalogue, number) for number in range(len(catalogue))])
        for limit in allowed:
            tried = shifts[np.hypot(*(shifts - middle).T) < limit]
            if not len(tried):
                continue
            # (shifts, stars, detections): how much light lies on catalogue stars
            apart = catalogue[None, :, None, :] + tried[:, None, None, :] - seen[None, None, :, :]
            near = np.hypot(apart[..., 0], apart[..., 1]) < slack[None, :, None]
            score = (near.any(axis=1) * weight).sum(axis=1)
            # of equals, the one that moves the promise least
            score = score - 0.5 * np.hypot(*(tried - middle).T) / limit
            return np.asarray(tried[score.argmax()])
        return None

    def _catalogue(self, frame: Frame, m: Measurement, geometry: Geometry) -> tuple[np.ndarray, np.ndarray]:
        """Return the promised pixels of the target and of the brightest stars about it, and numbers to know them by."""
        from planner.sky.stars import stars_in_field

        nominal = m.nominal
        rows, columns = frame.data.shape
        ra, dec, _ = target_place(geometry)
        magnitude = next((star[3] for star in geometry.stars if star[0] == geometry.target), 8.0)
        half_deg = np.hypot(rows, columns) / 2 * nominal.scale_arcsec_px / 3600
        field = stars_in_field(
            nominal.aim_ra_deg,
            nominal.aim_dec_deg,
            min(half_deg, 30.0),
            m.time.middle_tt_s,
            magnitude + _FAINTER_MAG,
        )
        own = unit_vectors(ra[:1], dec[:1])
        places = unit_vectors(field.ra_deg, field.dec_deg)
        others = np.linalg.norm(places - own, axis=1) > 5 / 206265
        vectors = np.concatenate([own, places[others][: _BRIGHTEST - 1]])
        center = np.full(len(vectors), nominal.aim_ra_deg), np.full(len(vectors), nominal.aim_dec_deg)
        east, north = tangent_offsets(*center, vectors)
        pixels = np.linalg.solve(np.column_stack(nominal.axes()), np.stack([east, north])).T
        number = np.concatenate([[-1], np.rint(places[others][: _BRIGHTEST - 1, 1] * 1e9)]).astype(np.int64)
        return pixels + np.array([(columns - 1) / 2, (rows - 1) / 2]), number


def _cut(data: np.ndarray, column: int, row: int) -> np.ndarray:
    """Return a square piece about a pixel, NaN beyond the frame."""
    size = 2 * HALF_PX + 1
    out = np.full((size, size), np.nan)
    y0, x0 = row - HALF_PX, column - HALF_PX
    low_y, low_x = max(y0, 0), max(x0, 0)
    high_y, high_x = min(y0 + size, data.shape[0]), min(x0 + size, data.shape[1])
    out[low_y - y0 : high_y - y0, low_x - x0 : high_x - x0] = data[low_y:high_y, low_x:high_x]
    return out


def _glow(
    data: np.ndarray, column: int, row: int, m: Measurement, x: float, y: float, fwhm_px: float
) -> np.ndarray:
    """Return the Moon's limb and its glare in a piece: what pixels equally far from the limb share."""
    assert m.disc is not None
    seen = np.isfinite(data)
    stamp = Stamp(
        np.where(seen, data, 0.0), column - HALF_PX, row - HALF_PX, seen, np.zeros(data.shape, bool)
    )
    fwhm_px = float(np.nan_to_num(fwhm_px, nan=3.0))
    xs, ys = stamp.grid()
    clear = np.hypot(xs - x, ys - y) > 3 * max(fwhm_px, 2)
    disc = m.disc
    try:
        return limb_and_glare(
            stamp, disc.x_px, disc.y_px, disc.radius_px, fwhm_px / FWHM_OVER_SIGMA, clear
        ).light
    except NoSolutionError:  # all of it is on the Moon, whose surface is even about the star
        return np.zeros_like(data)
