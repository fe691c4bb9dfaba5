"""Median and clipped mean of frames that come round several times, so that no copy of them is kept anywhere.

What is kept does not depend on the number of frames: some sums, counts or bins a pixel. Median: successive binning
(Tibshirani 2008, arXiv:0806.3301: the median lies within one standard deviation of the mean), two rounds of 16 bins.
Clipped mean: centre and spread from the median of a few frames spread over all, then clipping about running sums.
"""

from __future__ import annotations

from collections.abc import Iterator, Sequence

import numpy as np

from imaging.compose.reductions import median

BINS = 16
SEED_MOST, SEED_LEAST = 15, 5
KAPPA = 3.0
ROWS = 64  # worked on at a time, so that what is needed in between stays small


class _Sums:
    """Number, weighted sum and sum of squares of values about a centre."""

    def __init__(self, shape: tuple[int, ...]):
        self.shape = shape
        self.count = np.zeros(shape, np.uint32)
        self.share: np.ndarray | None = None
        self.total: np.ndarray | None = None
        self.plain = np.zeros(shape, np.float32)
        self.square = np.zeros(shape, np.float32)

    def add(self, rows: slice, away: np.ndarray, keep: np.ndarray, weight: np.ndarray | None) -> None:
        away = np.where(keep, away, np.float32(0))
        self.count[rows] += keep
        self.plain[rows] += away
        self.square[rows] += away * away
        if weight is not None:
            if self.share is None or self.total is None:
                self.share, self.total = np.zeros(self.shape, np.float32), np.zeros(self.shape, np.float32)
            self.total[rows] += away * weight
            self.share[rows] += np.where(keep, weight, np.float32(0))

    def mean(self) -> np.ndarray:
        with np.errstate(invalid="ignore", divide="ignore"):
            return (self.plain / self.count.astype(np.float32)).astype(np.float32)

    def weighted_mean(self) -> np.ndarray:
        if self.share is None or self.total is None:
            return self.mean()
        with np.errstate(invalid="ignore", divide="ignore"):
            return np.asarray(self.total / self.share)

    def spread(self) -> np.ndarray:
        with np.errstate(invalid="ignore", divide="ignore"):
            n = self.count.astype(np.float32)
            variance = self.square / n - (self.plain / n) ** 2
            return np.sqrt(np.maximum(variance, 0) * n / np.maximum(n - 1, 1))


class _Rounds:
    """What both have in common: rows in strips, and words on what it costs."""

    def __init__(self, shape: tuple[int, ...], frames: int, memory_bytes: int):
        self.shape, self.frames, self.memory_bytes = shape, frames, memory_bytes

    def _strips(self) -> Iterator[slice]:
        for first in range(0, self.shape[0], ROWS):
            yield slice(first, min(first + ROWS, self.shape[0]))


class ClippedRounds(_Rounds):
    """Mean of what lies within three sigma; the frames come round twice after a few of them.

    Differs from the exact clipped mean where a value lies near the limit: by a tenth of the error of the mean (rms) on
    clean noise, measured in tests/compose/test_stack.py.
    """

    def __init__(self, shape: tuple[int, ...], frames: int, memory_bytes: int):
        super().__init__(shape, frames, memory_bytes)
        fits = memory_bytes // (4 * int(np.prod(shape)))
        self.seed = int(np.clip(fits, SEED_LEAST, min(SEED_MOST, frames)))
        self.how = f"frames are read twice, and {self.seed} of them once more; sums are kept in memory"

    def turns(self) -> Iterator[Sequence[int]]:
        """Yield the indices of the frames to add, round by round."""
        chosen = np.unique(np.linspace(0, self.frames - 1, self.seed).round().astype(int))
        self.cube: np.ndarray | None = np.full((len(chosen), *self.shape), np.nan, np.float32)
        self.added = 0
        yield chosen.tolist()
        self._center()
        for last in (False, True):
            self.sums = _Sums(self.shape)
            yield range(self.frames)
            if not last:
                self._narrow()

    def add(self, image: np.ndarray, weight: np.ndarray | None = None) -> None:
        """Take in one frame."""
        if self.cube is not None:
            self.cube[self.added] = image
            self.added += 1
            return
        for rows in self._strips():
            piece = image[rows]
            heavy = None
            if weight is not None:
                heavy = weight[rows] if piece.ndim == 2 else weight[rows][..., None]
            away = piece - self.center[rows]
            with np.errstate(invalid="ignore"):
                keep = np.abs(away - self.about[rows]) <= self.limit[rows]  # NaN compares false
            self.sums.add(rows, away, keep, heavy)

    def _center(self) -> None:
        """Set the centre and the limits from the frames kept."""
        assert self.cube is not None
        self.center = np.zeros(self.shape, np.float32)
        self.limit = np.full(self.shape, np.inf, np.float32)
        for rows in self._strips():
            part = self.cube[: self.added, rows]
            center, _ = median(part)
            away, number = median(np.abs(part - center))
            self.center[rows] = np.nan_to_num(center)
            self.limit[rows] = np.where(number >= 3, KAPPA * 1.4826 * away, np.inf)
        known = self.limit[np.isfinite(self.limit)]
        # a handful of values that happen to agree would else reject their neighbours
        self.floor = np.float32(0.8 * np.median(known)) if known.size else np.float32(0)
        # the centre of a few frames is off by half a sigma: wider than the limits that count
        self.limit = np.maximum(1.3 * self.limit, 1.3 * self.floor) + 1e-6 * np.abs(self.center)
        self.about = np.zeros(self.shape, np.float32)
        self.cube = None

    def _narrow(self) -> None:
        """Set the limits from the sums of the first round."""
        spread = self.sums.spread()
        self.about = np.nan_to_num(self.sums.mean())
        limit = np.maximum(KAPPA * 1.02 * spread, self.floor) + 1e-6 * np.abs(self.center)
        self.limit = np.where(self.sums.count >= 3, limit, np.inf).astype(np.float32)

    def result(self) -> tuple[np.ndarray, np.ndarray]:
        """Return the blend and the number of values used at each pixel."""
        return self.center + self.sums.weighted_mean(), self.sums.count


class MedianRounds(_Rounds):
    """Median within 1/256 of the standard deviation of a pixel's values; the frames come round three times."""

    def __init__(self, shape: tuple[int, ...], frames: int, memory_bytes: int):
        super().__init__(shape, frames, memory_bytes)
        self.how = "frames are read three times; bins are kept in memory"

    def turns(self) -> Iterator[Sequence[int]]:
        """Yield the indices of the frames to add, round by round."""
        self.center: np.ndarray | None = None
        self.sums: _Sums | None = _Sums(self.shape)
        yield range(self.frames)
        if self.center is None:
            self.center = np.zeros(self.shape, np.float32)
        spread = self.sums.spread() * np.float32(1.001) + 1e-6 * np.abs(self.center) + np.float32(1e-30)
        self.count = self.sums.count
        self.low = self.center + np.nan_to_num(self.sums.mean()) - np.nan_to_num(spread)
        self.width = np.nan_to_num(2 * spread / BINS)
        self.sums = None
        self.share = np.zeros(self.shape, np.float32)
        for _ in range(2):
            self.bins = np.zeros((BINS, *self.shape), np.uint16 if self.frames < 65536 else np.uint32)
            self.below = np.zeros(self.shape, np.uint32)
            yield range(self.frames)
            self._narrow()

    def add(self, image: np.ndarray, weight: np.ndarray | None = None) -> None:
        """Take in one frame."""
        if self.sums is not None:
            if self.center is None:
                self.center = np.nan_to_num(image)  # sums about a likely value keep their digits
            for rows in self._strips():
                away = image[rows] - self.center[rows]
                self.sums.add(rows, away, np.isfinite(away), None)
            return
        row_values = int(np.prod(self.shape[1:]))
        bins = self.bins.reshape(BINS, -1)
        for rows in self._strips():
            with np.errstate(invalid="ignore", divide="ignore"):
                place = np.floor((image[rows] - self.low[rows]) / self.width[rows])
            self.below[rows] += place < 0
            inside = np.flatnonzero((place >= 0) & (place < BINS))
            bins[place.ravel()[inside].astype(int), inside + rows.start * row_values] += 1

    def _narrow(self) -> None:
        """Take the bin that holds the middle value, and the place inside it by interpolation."""
        for rows in self._strips():
            upto = self.below[rows] + np.cumsum(self.bins[:, rows], axis=0, dtype=np.uint32)
            half = 0.5 * self.count[rows]
            which = np.minimum((upto < half).sum(axis=0), BINS - 1)
            inside = np.take_along_axis(self.bins[:, rows], which[None], axis=0)[0]
            before = np.take_along_axis(upto, which[None], axis=0)[0] - inside
            self.share[rows] = np.clip((half - before) / np.maximum(inside, 1), 0, 1)
            self.low[rows] += which * self.width[rows]
            self.width[rows] /= BINS
        del self.bins, self.below

    def result(self) -> tuple[np.ndarray, np.ndarray]:
        """Return the blend and the number of values used at each pixel."""
        value = self.low + self.share * self.width * BINS
        return np.where(self.count > 0, value, np.nan).astype(np.float32), self.count
