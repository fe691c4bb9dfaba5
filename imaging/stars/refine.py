"""From a few stars to all: matches grow outwards from a hypothesis, as far as the fitted camera is sure of itself."""

from __future__ import annotations

from dataclasses import dataclass
from functools import cached_property
from typing import Any

import numpy as np

from imaging.stars.brightness import Brightness, consistent, fit_brightness, likeness
from imaging.stars.camera import Camera, CameraFit, Lens, fit_camera
from imaging.stars.roundness import averaged
from imaging.stars.verify import Evidence, crowding

GATE_SIGMAS = 3.5
SHARPEST_PX = 0.25  # a detection is never trusted better than this while matching
MOST_STARS = 800  # of a solution: twice as many would take a third off an error of 0.004 px
STARS_LOOKED_AT = 2000  # of the catalogue, in a frame
_GROWN_ENOUGH = 120  # pairs after which growing ends and the whole catalogue is matched
_NEIGHBOURS = 6
MAGNITUDE_SIGMAS = 3.0
_LEAST_RATIO = 1.0  # a detection likelier to be there by chance is not taken for the star
_ENOUGH_TESTED, _PROMISING_LOG10 = 12, -0.5  # when a hypothesis is dropped
_MIX_UP = 0.05  # chance of another detection in the gate up to which a star is matched


@dataclass(frozen=True)
class Sky:
    """Catalogue stars to match, brightest first: unit vectors (n, 3), magnitudes, position errors in arcsec.

    `index`: rows of the star list, for their names.
    """

    vectors: np.ndarray
    magnitude: np.ndarray
    sigma_arcsec: np.ndarray
    index: np.ndarray

    def __len__(self) -> int:
        """Return the number of stars."""
        return len(self.magnitude)

    def take(self, chosen: np.ndarray) -> Sky:
        """Return these of the stars."""
        return Sky(
            self.vectors[chosen], self.magnitude[chosen], self.sigma_arcsec[chosen], self.index[chosen]
        )


@dataclass(frozen=True)
class Field:
    """Detections of one frame as matching needs them, brightest first; `magnitude` is instrumental."""

    x_px: np.ndarray
    y_px: np.ndarray
    sigma_px: np.ndarray
    magnitude: np.ndarray
    saturated: np.ndarray
    shape: tuple[int, int]
    tree: Any

    @cached_property
    def _histogram(self) -> tuple[np.ndarray, np.ndarray]:
        """Magnitudes in steps of a tenth and how many unsaturated detections have them."""
        low, high = float(self.magnitude.min()), float(self.magnitude.max())
        edges = np.linspace(low - 0.05, high + 0.05, max(2, round((high - low) / 0.1) + 2))
        counts, _ = np.histogram(self.magnitude[~self.saturated], edges)
        return (edges[1:] + edges[:-1]) / 2, counts.astype(float)

    @property
    def half_diagonal_px(self) -> float:
        """Half of the frame's diagonal."""
        return float(np.hypot(*self.shape) / 2)

    @property
    def area_px2(self) -> float:
        """Number of pixels."""
        return float(self.shape[0] * self.shape[1])

    def take(self, chosen: np.ndarray) -> Field:
        """Return these of the detections."""
        return field_of(
            self.x_px[chosen],
            self.y_px[chosen],
            self.sigma_px[chosen],
            self.magnitude[chosen],
            self.saturated[chosen],
            self.shape,
        )

    def nearest(
        self, x: np.ndarray, y: np.ndarray, bright: Brightness | None, magnitude: np.ndarray
    ) -> tuple[np.ndarray, np.ndarray, np.ndarray]:
        """Return distance and index of the nearest detection as bright as each star, and how many in the frame are.

        Distance is infinite where none of the nearest few is.
        """
        near = min(_NEIGHBOURS, len(self.x_px))
        distance, index = self.tree.query(np.column_stack([x, y]), k=near)
        distance, index = distance.reshape(len(x), near), index.reshape(len(x), near)
        if bright is None:
            return distance[:, 0], index[:, 0], np.full(len(x), len(self.x_px), dtype=float)
        expected, sigma = bright.expected(magnitude)
        half_width = MAGNITUDE_SIGMAS * sigma
        fits = consistent(expected, half_width, self.magnitude[index], self.saturated[index])
        first = fits.argmax(axis=1)
        line = np.arange(len(x))
        distance = np.where(fits[line, first], distance[line, first], np.inf)
        ordered = np.sort(self.magnitude)
        rivals = np.searchsorted(ordered, expected + half_width) - np.searchsorted(
            ordered, expected - half_width
        )
        return distance, index[line, first], rivals + float(self.saturated.sum())

    def tested(
        self,
        x: np.ndarray,
        y: np.ndarray,
        sigma_px: np.ndarray,
        bright: Brightness,
        magnitude: np.ndarray,
        used: np.ndarray,
    ) -> tuple[np.ndarray, np.ndarray, np.ndarray]:
        """Look for stars predicted here, so bright, among the detections not `used`.

        Returns the likelihood ratio of each star against chance (see `verify`), the detection that speaks most for it,
        and whether it may not be tested, because a used detection is there. No two stars share a detection.
        """
        near = min(_NEIGHBOURS, len(self.x_px))
        distance, index = self.tree.query(np.column_stack([x, y]), k=near)
        distance, index = distance.reshape(len(x), near), index.reshape(len(x), near)
        gate = GATE_SIGMAS * sigma_px[:, None]
        taken = np.zeros(len(self.x_px), dtype=bool)
        taken[used] = True
        occupied = (taken[index] & (distance < gate)).any(axis=1)
        expected, sigma = bright.expected(magnitude)
        away = self.magnitude[index] - expected[:, None]
        away = np.where(self.saturated[index], np.minimum(away, 0.0), away) / sigma[:, None]
        steps, counts = self._histogram
        rivals = likeness((steps - expected[:, None]) / sigma[:, None]) @ counts + self.saturated.sum() + 1.0
        place = np.exp(-0.5 * (distance / sigma_px[:, None]) ** 2) / (2 * np.pi * sigma_px[:, None] ** 2)
        each = np.where((distance < gate) & ~taken[index], place * likeness(away), 0.0)
        best = each.argmax(axis=1)
        line = np.arange(len(x))
        crowd = crowding(x, y, self.tree, self.area_px2)
        ratio = each[line, best] / rivals * self.area_px2 / crowd
        chosen = index[line, best]
        ratio[occupied] = 0.0
        for_it = np.flatnonzero(ratio > 0)
        first = np.zeros(len(x), dtype=bool)
        first[for_it[np.unique(chosen[for_it], return_index=True)[1]]] = True
        return np.where(first, ratio, 0.0), chosen, occupied


@dataclass(frozen=True)
class Match:
    """A camera with its pairs: indices into detections and catalogue, and the evidence gathered on the way."""

    fit: CameraFit
    detection: np.ndarray
    star: np.ndarray
    evidence: Evidence
    bright: Brightness


def field_of(
    x_px: np.ndarray,
    y_px: np.ndarray,
    sigma_px: np.ndarray,
    magnitude: np.ndarray,
    saturated: np.ndarray,
    shape: tuple[int, int],
) -> Field:
    """Return detections with their tree."""
    from scipy.spatial import cKDTree

    tree = cKDTree(np.column_stack([x_px, y_px]), balanced_tree=False, compact_nodes=False)
    return Field(x_px, y_px, sigma_px, magnitude, saturated, shape, tree)


def grow(
    start: Camera,
    lens: Lens,
    field: Field,
    sky: Sky,
    detection: np.ndarray,
    star: np.ndarray,
    sharpest_px: float = SHARPEST_PX,
) -> Match | None:
    """Grow the pairs (`detection`, `star`) of a hypothesis over the frame; None when the evidence speaks against it.

    Each catalogue star is tested once, when the camera fitted without it predicts it; those predicted best come
    first. A hypothesis is dropped when a dozen stars say nothing for it. No place is trusted better than `sharpest_px`.
    """
    sky, star, row = _in_reach(start, field, sky, star)
    evidence = Evidence()
    tested = np.zeros(len(sky), dtype=bool)
    tested[star] = True
    height, width = field.shape
    widest = min(0.5 / np.sqrt(max(len(field.x_px), 1) / field.area_px2), 0.025 * field.half_diagonal_px)
    bright = _bright(field, sky, detection, star)
    fit = _fit(start, lens, field, sky, detection, star, iterations=4)
    for step in range(14):
        x, y = fit.camera.pixels(sky.vectors)
        with np.errstate(invalid="ignore"):
            new = np.flatnonzero((x >= 0) & (x <= width - 1) & (y >= 0) & (y <= height - 1) & ~tested)
        if len(new) == 0:
            break
        spread2 = np.maximum(np.trace(fit.covariance_at(x[new], y[new]), axis1=1, axis2=2) / 2, 0)
        catalogue_px = sky.sigma_arcsec[new] / fit.camera.scale_arcsec_px
        sigma = np.sqrt(spread2 + catalogue_px**2 + sharpest_px**2 + fit.sigma_model_px**2)
        gate = GATE_SIGMAS * sigma
        order = np.argsort(gate, kind="stable")[: int(1.5 * 1.6**step)]
        order = order[gate[order] < (widest if step else 2 * widest)]
        if len(order) == 0:
            break
        now = new[order]
        ratio, nearest, occupied = field.tested(
            x[now], y[now], sigma[order], bright, sky.magnitude[now], detection
        )
        evidence.add(ratio[~occupied])
        tested[now] = True
        if evidence.tested >= _ENOUGH_TESTED and evidence.chance_log10(1) > _PROMISING_LOG10:
            return None
        taken = np.flatnonzero(ratio > _LEAST_RATIO)
        if len(taken):
            detection = np.concatenate([detection, nearest[taken]])
            star = np.concatenate([star, now[taken]])
            fit = _fit(fit.camera, lens, field, sky, detection, star, iterations=3)
            detection, star = _without_outliers(fit, field, sky, detection, star)
            bright = _bright(field, sky, detection, star)
        if len(star) >= _GROWN_ENOUGH:
            break
    return Match(fit, detection, row[star], evidence, bright)


def _in_reach(camera: Camera, field: Field, sky: Sky, star: np.ndarray) -> tuple[Sky, np.ndarray, np.ndarray]:
    """Return the stars that the frame could show, the hypothesis's own among them, and their rows in `sky`."""
    if camera.projection == "TAN":
        radius = np.arctan(1.15 * field.half_diagonal_px / camera.focal_px)
    else:
        radius = min(1.15 * field.half_diagonal_px / camera.focal_px, np.pi)
    near = sky.vectors @ camera.axes[2] > np.cos(radius)
    near[star] = True
    row = np.flatnonzero(near)
    return sky.take(row), np.searchsorted(row, star), row


def settle(match: Match, lens: Lens, field: Field, sky: Sky, limit: int = MOST_STARS) -> Match:
    """Match the whole catalogue with the fitted camera, and fit again until the pairs no longer change.

    `sky` may be another list than the one grown on. At most `limit` stars are used, the brightest.
    """
    from planner.errors import NoSolutionError

    fit, bright = match.fit, match.bright
    height, width = field.shape
    detection, star = match.detection, np.empty(0, dtype=int)
    for _ in range(10):
        x, y = fit.camera.pixels(sky.vectors)
        with np.errstate(invalid="ignore"):
            inside = np.flatnonzero((x >= -1) & (x <= width) & (y >= -1) & (y <= height))[: 2 * limit]
        if len(inside) == 0:
            break
        spread2 = np.maximum(np.trace(fit.covariance_at(x[inside], y[inside]), axis1=1, axis2=2) / 2, 0)
        catalogue_px = sky.sigma_arcsec[inside] / fit.camera.scale_arcsec_px
        distance, nearest, rivals = field.nearest(x[inside], y[inside], bright, sky.magnitude[inside])
        # where the camera is not sure enough yet, the nearest detection is often another star: wait for the next turn
        clear = 16 * (spread2 + fit.sigma_model_px**2) * np.pi * (rivals + 1) / field.area_px2 < _MIX_UP
        sigma2 = spread2 + catalogue_px**2 + field.sigma_px[nearest] ** 2 + fit.sigma_model_px**2 + 0.05**2
        close = np.flatnonzero((distance < 4 * np.sqrt(sigma2)) & clear)
        close = close[np.argsort(distance[close] ** 2 / sigma2[close], kind="stable")]
        chosen = np.sort(close[np.unique(nearest[close], return_index=True)[1]])[:limit]
        if len(chosen) < min(4, len(match.star)):
            break
        same = len(chosen) == len(star) and np.array_equal(inside[chosen], star)
        detection, star = nearest[chosen], inside[chosen]
        fit = _fit(fit.camera, lens, field, sky, detection, star, iterations=3)
        sigma = np.hypot(field.sigma_px[detection], sky.sigma_arcsec[star] / fit.camera.scale_arcsec_px)
        fit = averaged(
            fit,
            lens,
            field.x_px[detection],
            field.y_px[detection],
            sky.vectors[star],
            sigma,
            field.shape,
        )
        bright = _bright(field, sky, detection, star)
        if same:
            break
    if len(star) < 3:
        raise NoSolutionError(
            "the stars of a promising pointing were lost when the whole catalogue was matched"
        )
    return Match(fit, detection, star, match.evidence, bright)


def _bright(field: Field, sky: Sky, detection: np.ndarray, star: np.ndarray) -> Brightness:
    return fit_brightness(field.magnitude[detection], sky.magnitude[star], field.saturated[detection])


def _fit(
    camera: Camera,
    lens: Lens,
    field: Field,
    sky: Sky,
    detection: np.ndarray,
    star: np.ndarray,
    iterations: int,
) -> CameraFit:
    sigma = np.hypot(field.sigma_px[detection], sky.sigma_arcsec[star] / camera.scale_arcsec_px)
    return fit_camera(
        camera,
        lens,
        field.x_px[detection],
        field.y_px[detection],
        sky.vectors[star],
        sigma,
        field.shape,
        iterations=iterations,
    )


def _without_outliers(
    fit: CameraFit, field: Field, sky: Sky, detection: np.ndarray, star: np.ndarray
) -> tuple[np.ndarray, np.ndarray]:
    """Drop pairs far off the fit (6 sigma), never below six."""
    sigma2 = field.sigma_px[detection] ** 2 + fit.sigma_model_px**2 + SHARPEST_PX**2
    sigma2 = sigma2 + (sky.sigma_arcsec[star] / fit.camera.scale_arcsec_px) ** 2
    keep = (fit.residual_px**2).sum(axis=1) < 36 * sigma2
    return (detection[keep], star[keep]) if keep.sum() >= 6 else (detection, star)
