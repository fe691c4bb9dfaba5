"""From four stars to all: matches grow outwards from a hypothesis, as far as the fitted camera is sure of itself."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from imaging.stars.camera import Camera, CameraFit, Lens, fit_camera
from imaging.stars.verify import Evidence, local_density

GATE_SIGMAS = 3.5
_SHARPEST_PX = 0.25  # a detection is never trusted better than this while matching


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
    """Detections of one frame as matching needs them, brightest first."""

    x_px: np.ndarray
    y_px: np.ndarray
    sigma_px: np.ndarray
    shape: tuple[int, int]
    tree: object

    @property
    def half_diagonal_px(self) -> float:
        """Half of the frame's diagonal."""
        return float(np.hypot(*self.shape) / 2)


@dataclass(frozen=True)
class Match:
    """A camera with its pairs: indices into detections and catalogue, and the evidence gathered on the way."""

    fit: CameraFit
    detection: np.ndarray
    star: np.ndarray
    evidence: Evidence
    stars_in_frame: int


def field_of(x_px: np.ndarray, y_px: np.ndarray, sigma_px: np.ndarray, shape: tuple[int, int]) -> Field:
    """Return detections with their tree."""
    from scipy.spatial import cKDTree

    return Field(x_px, y_px, sigma_px, shape, cKDTree(np.column_stack([x_px, y_px])))


def grow(
    start: Camera,
    lens: Lens,
    field: Field,
    sky: Sky,
    detection: np.ndarray,
    star: np.ndarray,
    give_up: float = -3.0,
) -> Match | None:
    """Grow the pairs (`detection`, `star`) of a hypothesis over the frame; None when the evidence speaks against it.

    Each catalogue star is tested once, when the camera fitted without it predicts it well enough. `give_up`: log10 of
    the likelihood ratio at which a hypothesis is dropped.
    """
    evidence = Evidence()
    tested = np.zeros(len(sky), dtype=bool)
    tested[star] = True
    height, width = field.shape
    area = float(height * width)
    reach = 0.5 / np.sqrt(max(len(field.x_px), 1) / area)  # half the mean distance of detections
    widest = min(0.6 * reach, 0.02 * field.half_diagonal_px)
    fit = _fit(start, lens, field, sky, detection, star)
    in_frame = 0
    for _ in range(14):
        x, y = fit.camera.pixels(sky.vectors)
        with np.errstate(invalid="ignore"):
            inside = (x >= 0) & (x <= width - 1) & (y >= 0) & (y <= height - 1)
        in_frame = int(inside.sum())
        new = np.flatnonzero(inside & ~tested)
        if len(new) == 0:
            break
        known = fit.covariance_at(x[new], y[new])
        spread2 = np.maximum(np.trace(known, axis1=1, axis2=2) / 2, 0)
        catalogue_px = sky.sigma_arcsec[new] / fit.camera.scale_arcsec_px
        gate = GATE_SIGMAS * np.sqrt(spread2 + catalogue_px**2 + _SHARPEST_PX**2 + fit.sigma_model_px**2)
        sure = gate < widest
        if sure.sum() < min(3, len(new)):
            # too little is certain: let the nearest tenth in, at the widest gate
            nearest = np.argsort(gate)[: max(3, len(new) // 10)]
            sure = np.zeros(len(new), dtype=bool)
            sure[nearest[gate[nearest] < 4 * widest]] = True
        if not sure.any():
            break
        now, gate_now = new[sure], gate[sure]
        distance, nearest = field.tree.query(np.column_stack([x[now], y[now]]))
        chance = 1 - np.exp(-local_density(x[now], y[now], field.tree, area) * np.pi * gate_now**2)
        met = distance < gate_now
        used = np.isin(nearest, detection)
        evidence.add((met & ~used)[~(met & used)], chance[~(met & used)])
        tested[now] = True
        taken = np.flatnonzero(met & ~used)
        taken = taken[np.argsort(distance[taken] / gate_now[taken])]
        _, first = np.unique(nearest[taken], return_index=True)
        taken = taken[first]
        if evidence.log_ratio.max() < give_up * np.log(10):
            return None
        if len(taken):
            detection = np.concatenate([detection, nearest[taken]])
            star = np.concatenate([star, now[taken]])
            fit = _fit(fit.camera, lens, field, sky, detection, star)
            detection, star = _without_outliers(fit, field, sky, detection, star)
    return Match(fit, detection, star, evidence, in_frame)


def settle(match: Match, lens: Lens, field: Field, sky: Sky) -> Match:
    """Match the whole catalogue with the fitted camera, and fit again until the pairs no longer change."""
    fit, detection, star = match.fit, match.detection, match.star
    height, width = field.shape
    in_frame = match.stars_in_frame
    for _ in range(6):
        x, y = fit.camera.pixels(sky.vectors)
        with np.errstate(invalid="ignore"):
            inside = np.flatnonzero((x >= -1) & (x <= width) & (y >= -1) & (y <= height))
        in_frame = len(inside)
        spread2 = np.trace(fit.covariance_at(x[inside], y[inside]), axis1=1, axis2=2) / 2
        catalogue_px = sky.sigma_arcsec[inside] / fit.camera.scale_arcsec_px
        distance, nearest = field.tree.query(np.column_stack([x[inside], y[inside]]))
        sigma2 = spread2 + catalogue_px**2 + field.sigma_px[nearest] ** 2 + fit.sigma_model_px**2 + 0.05**2
        close = np.flatnonzero(distance < 4 * np.sqrt(sigma2))
        close = close[np.argsort(distance[close] ** 2 / sigma2[close])]
        _, first = np.unique(nearest[close], return_index=True)
        chosen = close[first]
        new_detection, new_star = nearest[chosen], inside[chosen]
        if len(chosen) < 4:
            break
        same = len(new_star) == len(star) and np.array_equal(np.sort(new_star), np.sort(star))
        detection, star = new_detection, new_star
        fit = _fit(fit.camera, lens, field, sky, detection, star)
        if same:
            break
    return Match(fit, detection, star, match.evidence, in_frame)


def _fit(
    camera: Camera, lens: Lens, field: Field, sky: Sky, detection: np.ndarray, star: np.ndarray
) -> CameraFit:
    sigma = np.hypot(field.sigma_px[detection], sky.sigma_arcsec[star] / camera.scale_arcsec_px)
    return fit_camera(
        camera, lens, field.x_px[detection], field.y_px[detection], sky.vectors[star], sigma, field.shape
    )


def _without_outliers(
    fit: CameraFit, field: Field, sky: Sky, detection: np.ndarray, star: np.ndarray
) -> tuple[np.ndarray, np.ndarray]:
    """Drop pairs far off the fit (6 sigma), never below six."""
    sigma2 = field.sigma_px[detection] ** 2 + fit.sigma_model_px**2 + _SHARPEST_PX**2
    sigma2 = sigma2 + (sky.sigma_arcsec[star] / fit.camera.scale_arcsec_px) ** 2
    keep = (fit.residual_px**2).sum(axis=1) < 36 * sigma2
    return (detection[keep], star[keep]) if keep.sum() >= 6 else (detection, star)
