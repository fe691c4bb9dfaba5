"""Is it chance? A sequential test whose error probability holds whenever one stops.

A hypothesis (a few matched stars) predicts where further catalogue stars fall, and how bright. Each is tested once,
with everything fixed before it is looked at, and only then used in the fit. Its likelihood ratio is that of a star seen
with probability d, scattered as predicted, against detections of the frame's own brightnesses strewn at random. The
product of these ratios is a test martingale, so it exceeds 1/a with probability a at most, at whatever step one stops
(Ville 1939; Shafer et al. 2011, Statist. Sci. 26, 84). A mean over several d is one too.
"""

from __future__ import annotations

from dataclasses import dataclass, field
from typing import Any

import numpy as np

DETECTED_SHARES = (0.03, 0.1, 0.25, 0.5, 0.8, 0.95)
ACCEPT_LOG10 = (
    -6.0
)  # one answer for every way: a millionth, stated as a bound (counted: docs/notes/solving.md)
_SHARED = 3  # pairs that make two matches the same
_MOST = 1e7  # one star says no more than this: profiles have wings, and detections come in twos


@dataclass
class Evidence:
    """The running log likelihood ratios, one a share of stars detected, and the counts."""

    log_ratio: np.ndarray = field(default_factory=lambda: np.zeros(len(DETECTED_SHARES)))
    tested: int = 0
    met: int = 0

    def add(self, ratio: np.ndarray) -> None:
        """Add stars tested: `ratio` (n,), how much likelier what is there is for the star than for chance, 0 if empty.

        Its mean under chance must be 1 at most.
        """
        shares = np.array(DETECTED_SHARES)[:, None]
        self.log_ratio = self.log_ratio + np.log1p(shares * (np.minimum(ratio, _MOST) - 1)).sum(axis=1)
        self.tested += len(ratio)
        self.met += int((ratio > 1).sum())

    def log_mean(self) -> float:
        """Return the natural logarithm of the likelihood ratio, averaged over the shares of stars detected."""
        top = self.log_ratio.max()
        return float(top + np.log(np.mean(np.exp(self.log_ratio - top))))

    def chance_log10(self, trials: float) -> float:
        """Return log10 of the probability that any of `trials` false hypotheses looks this good."""
        return float(min(0.0, (-self.log_mean() + np.log(max(trials, 1.0))) / np.log(10)))


@dataclass
class Tally:
    """The evidence of many hypotheses, those that come to the same pairs of stars taken together.

    Each likelihood ratio counts with the share that its hypothesis had beforehand. Shares sum to one, so the mean of
    the sum under chance is one at most, and it exceeds 1/a with probability a at most (Markov).
    """

    pairs: list[set[tuple[int, int]]] = field(default_factory=list)
    log_sum: list[float] = field(default_factory=list)
    best: list[tuple[float, Any]] = field(default_factory=list)

    def add(self, match: Any, names: np.ndarray, log_share: float) -> tuple[float, Any]:
        """Add a match, its stars by `names`; return log10 of the false-alarm probability of its like, and the best."""
        log_ratio = log_share + match.evidence.log_mean()
        own = set(zip(match.detection.tolist(), names[match.star].tolist(), strict=True))
        for i, others in enumerate(self.pairs):
            if len(own & others) >= _SHARED:
                self.log_sum[i] = float(np.logaddexp(self.log_sum[i], log_ratio))
                if log_ratio > self.best[i][0]:
                    self.pairs[i], self.best[i] = own, (log_ratio, match)
                break
        else:
            i = len(self.pairs)
            self.pairs.append(own)
            self.log_sum.append(log_ratio)
            self.best.append((log_ratio, match))
        return min(0.0, -self.log_sum[i] / np.log(10)), self.best[i][1]


def crowding(x_px: np.ndarray, y_px: np.ndarray, tree: Any, area_px2: float) -> np.ndarray:
    """Return how much denser detections stand near each place than in the whole frame, at least 1 (8 nearest)."""
    near = min(9, tree.n)
    if near < 2:
        return np.ones(len(x_px))
    distance, _ = tree.query(np.column_stack([x_px, y_px]), k=near)
    local = (near - 1) / (np.pi * np.maximum(distance[:, -1], 1.0) ** 2)
    return np.maximum(local * area_px2 / tree.n, 1.0)
