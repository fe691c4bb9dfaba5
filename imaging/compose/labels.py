"""Labels that do not collide: each is tried at places around its point, and the one that covers least is taken."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np


@dataclass
class Crowd:
    """What is already on the sheet, in pixels: boxes (n, 4) as left, low, right, high, and points to keep clear."""

    frame: tuple[float, float, float, float]
    points: np.ndarray
    boxes: list[tuple[float, float, float, float]]

    def cost(self, box: tuple[float, float, float, float]) -> float:
        """Return how bad a box is: overlaps with boxes count most, leaving the sheet is forbidden."""
        left, low, right, high = box
        if left < self.frame[0] or low < self.frame[1] or right > self.frame[2] or high > self.frame[3]:
            return np.inf
        cost = 0.0
        for other in self.boxes:
            wide = min(right, other[2]) - max(left, other[0])
            tall = min(high, other[3]) - max(low, other[1])
            if wide > 0 and tall > 0:
                cost += 1000.0 + wide * tall
        if self.points.size:
            x, y = self.points
            cost += 4.0 * np.count_nonzero((x > left) & (x < right) & (y > low) & (y < high))
        return cost

    def place(
        self,
        at_px: tuple[float, float],
        size_px: tuple[float, float],
        toward: tuple[float, float],
        gap_px: float,
        optional: bool = False,
    ) -> tuple[float, float] | None:
        """Return the middle of the best free place for a label, and occupy it.

            `toward` is the wished direction (unit vector, pixels); directions further from it cost more. None when the
        label is optional and would cover another one or several points, or when it fits nowhere on the sheet.
        """
        best, best_cost = None, np.inf
        wide, tall = size_px
        for reach in (1.0, 1.6, 2.4, 3.4):
            for turn in (0, 30, -30, 60, -60, 90, -90, 130, -130, 180):
                sin, cos = np.sin(np.radians(turn)), np.cos(np.radians(turn))
                dx, dy = cos * toward[0] - sin * toward[1], sin * toward[0] + cos * toward[1]
                # the box is pushed out so that its nearest edge stands off by the gap
                x = at_px[0] + dx * (gap_px * reach + abs(dx) * wide / 2) + 0.0
                y = at_px[1] + dy * (gap_px * reach + abs(dy) * tall / 2)
                x += np.sign(dx) * (1 - abs(dx)) * 0.3 * wide * abs(dx)
                box = (x - wide / 2, y - tall / 2, x + wide / 2, y + tall / 2)
                cost = self.cost(box) + 4.0 * (reach - 1) + abs(turn) / 60
                if cost < best_cost:
                    best, best_cost = (x, y), cost
        if best is None or (optional and best_cost >= 12):
            return None
        x, y = best
        self.boxes.append((x - wide / 2, y - tall / 2, x + wide / 2, y + tall / 2))
        return best
