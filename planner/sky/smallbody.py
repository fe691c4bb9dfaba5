"""Small bodies from SPK files as agencies hand them out: Chebyshev records, or modified difference arrays.

Layouts of the public SPK specification (NAIF, "SPK Required Reading"): type 2 and 3 (Chebyshev), 1 and 21 (modified
difference arrays: Shampine & Gordon 1975, as numerical integrators leave them). Bodies are given about the Sun or
the barycentre of the solar system, on ICRF axes.
"""

from __future__ import annotations

from dataclasses import dataclass
from pathlib import Path

import numpy as np

from planner.errors import InputError
from planner.sky.ephemeris import ChebyshevSegment, state_km_km_s

_TYPES = (1, 2, 3, 21)
_CENTRES = {0: None, 10: "sun"}


@dataclass(frozen=True)
class DifferenceArrays:
    """A run of modified difference arrays; `records` (n, 4 size + 11), each good up to its entry of `ends_s`."""

    records: np.ndarray
    ends_s: np.ndarray
    size: int

    def state(self, tdb_s: np.ndarray) -> tuple[np.ndarray, np.ndarray]:
        """Return position and velocity (3, n) in km and km/s about the segment's centre."""
        position, velocity = np.empty((3, len(tdb_s))), np.empty((3, len(tdb_s)))
        index = np.minimum(np.searchsorted(self.ends_s, tdb_s), len(self.records) - 1)
        for row in np.unique(index):
            mine = index == row
            position[:, mine], velocity[:, mine] = self._evaluate(self.records[row], tdb_s[mine])
        return position, velocity

    def _evaluate(self, record: np.ndarray, tdb_s: np.ndarray) -> tuple[np.ndarray, np.ndarray]:
        size = self.size
        steps = record[1 : size + 1]
        start, speed = record[size + 1 : size + 7].reshape(3, 2).T
        differences = record[size + 7 : 4 * size + 7].reshape(3, size)
        highest = int(record[4 * size + 7])
        orders = record[4 * size + 8 : 4 * size + 11].astype(int)
        delta = tdb_s - record[0]
        # weights of the differences, integrated once (velocity) and twice (position): Shampine & Gordon 1975, chapter 5
        ratio, shift = [np.ones_like(delta)], []
        reach = delta
        for j in range(highest - 2):
            ratio.append(reach / steps[j])
            shift.append(delta / steps[j])
            reach = delta + steps[j]
        weights = [np.full_like(delta, 1.0 / (j + 1)) for j in range(highest)]
        weights += [np.zeros_like(delta)] * highest
        depth, last = 0, highest - 1
        while last >= 2:
            depth += 1
            for j in range(depth):
                weights[j + last] = ratio[j + 1] * weights[j + last - 1] - shift[j] * weights[j + last]
            last -= 1
        position, velocity = np.empty((3, len(delta))), np.empty((3, len(delta)))
        for axis in range(3):
            twice = sum(differences[axis, j] * weights[j + last] for j in range(orders[axis]))
            position[axis] = start[axis] + delta * (speed[axis] + delta * twice)
        for j in range(depth):
            weights[j + last] = ratio[j + 1] * weights[j + last - 1] - shift[j] * weights[j + last]
        last -= 1
        for axis in range(3):
            once = sum(differences[axis, j] * weights[j + last] for j in range(orders[axis]))
            velocity[axis] = speed[axis] + delta * once
        return position, velocity


@dataclass(frozen=True)
class SmallBody:
    """One body of an SPK file: runs of records with the span (TDB seconds) and the centre of each."""

    path: Path
    target: int
    runs: tuple[tuple[float, float, str | None, DifferenceArrays | ChebyshevSegment], ...]

    @property
    def span_tdb_s(self) -> tuple[float, float]:
        """First and last TDB second of the file's body."""
        return min(run[0] for run in self.runs), max(run[1] for run in self.runs)

    def state(self, tdb_s: np.ndarray) -> tuple[np.ndarray, np.ndarray]:
        """Return barycentric position (3, n) in km and velocity (3, n) in km/s, ICRF axes.

        Raises InputError outside the file's span.
        """
        tdb_s = np.atleast_1d(np.asarray(tdb_s, float))
        position, velocity = np.full((3, len(tdb_s)), np.nan), np.full((3, len(tdb_s)), np.nan)
        for start, end, centre, run in self.runs:
            mine = (tdb_s >= start) & (tdb_s <= end) & np.isnan(position[0])
            if not mine.any():
                continue
            if isinstance(run, ChebyshevSegment):
                r, v = run.evaluate(tdb_s[mine], True)
                assert v is not None
            else:
                r, v = run.state(tdb_s[mine])
            if centre is not None:
                middle, drift = state_km_km_s(centre, tdb_s[mine])
                r, v = r + middle, v + drift
            position[:, mine], velocity[:, mine] = r, v
        if np.isnan(position).any():
            low, high = self.span_tdb_s
            raise InputError(
                f"{self.path}: found no place of body {self.target} at {_year(tdb_s.min())} to {_year(tdb_s.max())}; "
                f"allowed is {_year(low)} to {_year(high)}"
            )
        return position, velocity


def _year(tdb_s: float) -> str:
    return f"{2000.0 + tdb_s / (365.25 * 86400.0):.3f}"


def small_body(path: str | Path, target: int | None = None) -> SmallBody:
    """Open an SPK file and return its body, or the one of this number where it holds several.

    Raises InputError when the file is no SPK, holds no such body, or holds it in a way that is not read.
    """
    from jplephem.spk import SPK

    path = Path(path)
    try:
        kernel = SPK.open(str(path))
        segments = list(kernel.segments)
        held = sorted({segment.target for segment in segments})
        if target is None and len(held) != 1:
            raise InputError(f"{path}: found the bodies {held}; allowed is one of them, named by spk_target")
        number = held[0] if target is None else target
        if number not in held:
            raise InputError(f"{path}: found no body {number}; allowed are {held}")
        runs = []
        for segment in segments:
            if segment.target != number:
                continue
            if segment.data_type not in _TYPES:
                raise InputError(
                    f"{path}: found a segment of type {segment.data_type}; allowed are types {_TYPES}"
                )
            if segment.center not in _CENTRES or segment.frame != 1:
                raise InputError(
                    f"{path}: found places about body {segment.center} in frame {segment.frame}; allowed is the Sun "
                    "(10) or the barycentre (0), frame 1 (ICRF)"
                )
            runs.append((segment.start_second, segment.end_second, _CENTRES[segment.center], _run(segment)))
        kernel.close()
    except (OSError, ValueError, IndexError) as error:
        raise InputError(f"{path}: found no readable SPK file ({error}); allowed is a .bsp file") from error
    # of segments that overlap the last one in the file counts
    return SmallBody(path, number, tuple(reversed(runs)))


def _run(segment) -> DifferenceArrays | ChebyshevSegment:  # type: ignore[no-untyped-def]
    daf = segment.daf
    if segment.data_type in (2, 3):
        start_s, interval_s, width, count = daf.read_array(segment.end_i - 3, segment.end_i)
        width, count = int(width), int(count)
        records = daf.read_array(segment.start_i, segment.start_i + width * count - 1).reshape(count, width)
        parts = 3 if segment.data_type == 2 else 6
        terms = (width - 2) // parts
        return ChebyshevSegment(records[:, : 2 + 3 * terms], start_s, interval_s, terms)
    if segment.data_type == 21:
        size, count = (int(word) for word in daf.read_array(segment.end_i - 1, segment.end_i))
    else:
        size, count = 15, int(daf.read_array(segment.end_i, segment.end_i)[0])
    width = 4 * size + 11
    records = daf.read_array(segment.start_i, segment.start_i + width * count - 1).reshape(count, width)
    first = segment.start_i + width * count
    return DifferenceArrays(records, daf.read_array(first, first + count - 1), size)
