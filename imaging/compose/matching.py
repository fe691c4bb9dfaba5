"""Visits brought to one transparency and one sky, measured where they overlap, so that a mosaic shows no seams."""

from __future__ import annotations

import numpy as np

from imaging.compose.ground import block_levels

LIGHT_BLOCK_PX = 16
SKY_BLOCK_PX = 64
SURELY = 15.0  # signal to noise of the blocks of starlight that are compared
FEWEST_BLOCKS = 8
LEAST_WEIGHT = 1.0 / 250.0


class Matching:
    """Compares each visit with the mean of those before it."""

    def __init__(self) -> None:
        self.light = self.light_count = self.sky = self.sky_count = np.zeros(0)
        self.gains: list[float] = []

    def matched(self, stars: np.ndarray) -> tuple[np.ndarray, float]:
        """Return a visit's star stack with its starlight and sky brought to those before, and the factor for it.

        The first visit is the measure of all. The factor is the median ratio of starlight in blocks of 16 pixels;
        what is left of the sky is a plane through its block levels. With fewer than 8 blocks in common nothing is
        changed.
        """
        grey = stars if stars.ndim == 2 else stars.mean(axis=2)
        light = _block_means(grey, LIGHT_BLOCK_PX) - block_levels(grey, LIGHT_BLOCK_PX)
        block = min(SKY_BLOCK_PX, *(max(8, side // 4) for side in grey.shape))
        sky = block_levels(grey, block)
        if not self.gains:
            self.light, self.light_count = np.nan_to_num(light), np.isfinite(light).astype(float)
            self.sky, self.sky_count = np.nan_to_num(sky), np.isfinite(sky).astype(float)
            self.gains.append(1.0)
            return stars, 1.0
        gain = self._gain(light)
        plane = self._plane(gain * sky, block, grey.shape)
        for total, count, new in ((self.light, self.light_count, light), (self.sky, self.sky_count, sky)):
            known = np.isfinite(new)
            total += np.where(known, gain * np.nan_to_num(new), 0)
            count += known
        self.gains.append(gain)
        changed = gain * stars - (plane if stars.ndim == 2 else plane[..., None])
        return np.asarray(changed, np.float32), gain

    def _gain(self, light: np.ndarray) -> float:
        with np.errstate(invalid="ignore", divide="ignore"):
            before = self.light / self.light_count
            both = np.isfinite(before) & np.isfinite(light)
            if both.sum() < FEWEST_BLOCKS:
                return 1.0
            noise = [
                1.4826 * np.median(np.abs(v[both] - np.median(v[both]))) + 1e-12 for v in (before, light)
            ]
            bright = both & (before > SURELY * noise[0]) & (light > SURELY * noise[1])
            if bright.sum() < FEWEST_BLOCKS:
                return 1.0
            return float(np.median(before[bright] / light[bright]))

    def _plane(self, sky: np.ndarray, block: int, shape: tuple[int, ...]) -> np.ndarray:
        """Return the plane by which a visit's sky differs from those before, on the pixels of the picture."""
        v, u = (np.indices(sky.shape) + 0.5) * block / np.reshape(shape, (2, 1, 1)) * 2 - 1
        with np.errstate(invalid="ignore", divide="ignore"):
            apart = sky - self.sky / self.sky_count
        keep = np.isfinite(apart)
        plane: np.ndarray = np.zeros(3)
        if keep.sum() >= FEWEST_BLOCKS:
            design = np.stack([np.ones_like(u), u, v], axis=-1)
            for _ in range(5):
                plane, *_ = np.linalg.lstsq(design[keep], apart[keep], rcond=None)
                left = apart - design @ plane
                spread = 1.4826 * np.nanmedian(np.abs(left[keep])) + 1e-12
                keep = np.isfinite(apart) & (np.abs(left) < 3 * spread)
                if keep.sum() < FEWEST_BLOCKS:
                    break
        y = ((np.arange(shape[0], dtype=np.float32) + 0.5) / shape[0] * 2 - 1)[:, None]
        x = ((np.arange(shape[1], dtype=np.float32) + 0.5) / shape[1] * 2 - 1)[None, :]
        return np.asarray(plane[0] + plane[1] * x + plane[2] * y, np.float32)


def _block_means(image: np.ndarray, block: int) -> np.ndarray:
    """Return means of whole blocks, NaN where a pixel is missing."""
    rows, columns = image.shape[0] // block, image.shape[1] // block
    whole = image[: rows * block, : columns * block].reshape(rows, block, columns, block)
    return np.asarray(whole.mean(axis=(1, 3), dtype=np.float64))


def edge_weight(image: np.ndarray, share: float = 0.2) -> np.ndarray:
    """Return weights that rise smoothly from the edge of what a frame covers, float32 in 0..1 (rows, columns).

    The slope reaches over `share` of the shorter side of the coverage, so that noise and light change slowly where
    frames end. Covered pixels keep at least 1/250, so that a lone frame counts fully.
    """
    import cv2

    covered = np.isfinite(image if image.ndim == 2 else image.sum(axis=2)).astype(np.uint8)
    # a border of nothing: the edge of the picture is no edge of the frame
    away = cv2.distanceTransform(covered, cv2.DIST_L2, 3)
    reach = max(2.0, share * 2.0 * float(away.max()))
    if covered.all():
        return np.ones(covered.shape, np.float32)
    weight = np.clip(away / reach, 0.0, 1.0)
    weight = weight * weight * (3.0 - 2.0 * weight)
    return np.maximum(weight, LEAST_WEIGHT).astype(np.float32)
