"""Which frames to show: evenly spaced in time, and among neighbours the sharpest."""

from __future__ import annotations

import numpy as np

NEAR = 0.1  # of the spacing: how far from its instant a frame may be for the sake of sharpness
GAP = 1.6  # typical spacings
ENDS = 8  # frames at either end that are tried as first and last


def evenly_spaced(
    tt_s: np.ndarray, wanted: int, merit: np.ndarray | None = None, usable: np.ndarray | None = None
) -> np.ndarray:
    """Return indices of about `wanted` frames at evenly spaced instants.

    Around each instant the frame of highest `merit` within a tenth of the spacing is taken (NaN counts as lowest),
    else the nearest in time; an instant with no usable frame within half the spacing is left out: a gap stays a
    gap. Where frames are few, up to two fifths fewer instants are taken, and the first and last of them up to half a
    spacing further in, if that makes the spacing more even.
    """
    candidates = np.flatnonzero(np.ones(len(tt_s), bool) if usable is None else usable)
    if not candidates.size or wanted < 1:
        return np.zeros(0, int)
    times = tt_s[candidates]
    value = np.zeros(candidates.size) if merit is None else np.nan_to_num(merit[candidates], nan=-np.inf)
    if wanted == 1 or times[-1] == times[0]:
        middle = 0.5 * (times[0] + times[-1])
        return candidates[_taken(times, np.array([middle]), max(float(np.ptp(times)), 1.0), value)]
    best, least = candidates[:0], np.inf
    for number in range(wanted, max(2, wanted - 2 * wanted // 5) - 1, -1):
        for first, last in _ends(times, number):
            instants = np.linspace(first, last, number)
            chosen = _taken(times, instants, float(instants[1] - instants[0]), value)
            lost = 1 - (last - first) / (times[-1] - times[0])
            cost = _unevenness(times[chosen]) + 0.25 * lost + 0.3 * (1 - len(chosen) / wanted)
            if cost < least - 1e-9:
                best, least = candidates[chosen], cost
    return best


def _ends(times: np.ndarray, number: int) -> list[tuple[float, float]]:
    """Return pairs of first and last instants to try: at frames within half a spacing of the ends."""
    reach = 0.5 * (times[-1] - times[0]) / (number - 1)
    early = times[times <= times[0] + reach]
    late = times[times >= times[-1] - reach]
    early = early[np.unique(np.linspace(0, early.size - 1, ENDS).astype(int))]
    late = late[np.unique(np.linspace(0, late.size - 1, ENDS).astype(int))]
    return [(float(a), float(b)) for a in early for b in late[::-1] if b > a]


def _taken(times: np.ndarray, instants: np.ndarray, spacing: float, value: np.ndarray) -> np.ndarray:
    """Return the places of the frames taken."""
    away = np.abs(times[None, :] - instants[:, None])
    nearest = away.argmin(axis=1)
    off = away.min(axis=1)
    near = away <= NEAR * spacing
    # the highest value among the near ones; of equal ones the nearest
    rank = np.where(near, value[None, :], -np.inf)
    top = rank.max(axis=1, keepdims=True)
    sharpest = np.where(near & (rank == top), away, np.inf).argmin(axis=1)
    return np.unique(np.where(near.any(axis=1), sharpest, nearest)[off <= 0.5 * spacing])


def _unevenness(times: np.ndarray) -> float:
    """Return half the range of the steps in units of their mean, gaps left out; a fiftieth does not count."""
    steps = np.diff(times)
    steps = steps[steps <= GAP * np.median(steps)] if steps.size else steps
    return max(float(np.ptp(steps) / (2 * steps.mean())) - 0.02, 0.0) if steps.size else 0.0


def spacing_sentence(tt_s: np.ndarray) -> str | None:
    """Return how far apart the instants drawn are, and where frames are missing; None for fewer than three."""
    if len(tt_s) < 3:
        return None
    from planner.sky.timescale import utc_iso

    steps = np.diff(tt_s)
    typical = float(np.median(steps))
    gap = steps > GAP * typical
    low, high = float(steps[~gap].min()), float(steps[~gap].max())
    apart = _length(typical) if high - low < 0.25 * typical else f"{_length(low)} to {_length(high)}"
    sentence = f"the instants drawn are {apart} apart"
    if gap.any():
        spans = [
            f"{utc_iso(float(tt_s[i]), 0)} and {utc_iso(float(tt_s[i + 1]), 0)}"
            for i in np.flatnonzero(gap)[:4]
        ]
        sentence += f"; no frame shows the target between {', between '.join(spans)}"
    return sentence


def _length(seconds: float) -> str:
    for unit, size in (("days", 86400.0), ("h", 3600.0), ("min", 60.0)):
        if seconds >= 1.5 * size:
            return f"{seconds / size:.3g} {unit}"
    return f"{seconds:.3g} s"
