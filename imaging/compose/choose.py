"""Which frames to show: evenly spaced in time, and among neighbours the sharpest."""

from __future__ import annotations

import numpy as np


def evenly_spaced(
    tt_s: np.ndarray, wanted: int, merit: np.ndarray | None = None, usable: np.ndarray | None = None
) -> np.ndarray:
    """Return indices of at most `wanted` frames at evenly spaced instants, first and last included.

    Around each instant the frame of highest `merit` within a fifth of the spacing is taken (NaN counts as lowest), else
    the nearest in time; an instant with no usable frame within half the spacing is left out: a gap stays a gap.
    """
    candidates = np.flatnonzero(np.ones(len(tt_s), bool) if usable is None else usable)
    if not candidates.size or wanted < 1:
        return np.zeros(0, int)
    times = tt_s[candidates]
    if wanted == 1 or times[-1] == times[0]:
        instants = np.array([0.5 * (times[0] + times[-1])])
        spacing = max(times[-1] - times[0], 1.0)
    else:
        instants = np.linspace(times[0], times[-1], wanted)
        spacing = instants[1] - instants[0]
    value = np.zeros(candidates.size) if merit is None else np.nan_to_num(merit[candidates], nan=-np.inf)
    chosen: list[int] = []
    for instant in instants:
        away = np.abs(times - instant)
        near = np.flatnonzero(away <= 0.2 * spacing)
        if near.size and merit is not None:
            best = near[np.lexsort((away[near], -value[near]))[0]]
        else:
            best = int(np.argmin(away))
            if away[best] > 0.5 * spacing:
                continue
        if candidates[best] not in chosen:
            chosen.append(int(candidates[best]))
    return np.array(sorted(chosen), int)
