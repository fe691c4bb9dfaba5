"""Which frames to show: evenly spaced in time, and among neighbours the sharpest."""

from __future__ import annotations

import numpy as np


def evenly_spaced(
    tt_s: np.ndarray, wanted: int, merit: np.ndarray | None = None, usable: np.ndarray | None = None
) -> np.ndarray:
    """Return indices of about `wanted` frames at evenly spaced instants, first and last included.

    Around each instant the frame of highest `merit` within a tenth of the spacing is taken (NaN counts as lowest),
    else the nearest in time; an instant with no usable frame within half the spacing is left out: a gap stays a
    gap. Where frames are few, up to a third fewer instants are taken if that makes the spacing more even.
    """
    candidates = np.flatnonzero(np.ones(len(tt_s), bool) if usable is None else usable)
    if not candidates.size or wanted < 1:
        return np.zeros(0, int)
    best, best_unevenness = np.zeros(0, int), np.inf
    for number in range(wanted, max(1, wanted - wanted // 3) - 1, -1):
        chosen, unevenness = _spaced(tt_s, candidates, number, merit)
        if unevenness < best_unevenness - 0.05:
            best, best_unevenness = chosen, unevenness
    return best


def _spaced(
    tt_s: np.ndarray, candidates: np.ndarray, wanted: int, merit: np.ndarray | None
) -> tuple[np.ndarray, float]:
    """Return the frames nearest to `wanted` instants, and how far the worst is off in units of the spacing."""
    times = tt_s[candidates]
    if wanted == 1 or times[-1] == times[0]:
        instants = np.array([0.5 * (times[0] + times[-1])])
        spacing = max(float(times[-1] - times[0]), 1.0)
    else:
        instants = np.linspace(times[0], times[-1], wanted)
        spacing = float(instants[1] - instants[0])
    value = np.zeros(candidates.size) if merit is None else np.nan_to_num(merit[candidates], nan=-np.inf)
    chosen: list[int] = []
    worst = 0.0
    for instant in instants:
        away = np.abs(times - instant)
        near = np.flatnonzero(away <= 0.1 * spacing)
        if near.size and merit is not None:
            place = int(near[np.lexsort((away[near], -value[near]))[0]])
        else:
            place = int(np.argmin(away))
            if away[place] > 0.5 * spacing:
                continue
        worst = max(worst, float(away[place]) / spacing if away[place] > 0.1 * spacing else 0.0)
        if candidates[place] not in chosen:
            chosen.append(int(candidates[place]))
    return np.array(sorted(chosen), int), worst
