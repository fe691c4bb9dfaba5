"""The predicted path of the target, ready to be asked at any instant thousands of times.

Two kinds of place, by the reference of the family: an offset (east, north) in arcseconds from the centre of the
Sun's or Moon's disc *as seen*, refraction included; or an ICRS direction among the stars. Both are sampled at
Chebyshev nodes in blocks of one hour and evaluated from their coefficients, so that a fit may move the clock by
hours, or try another site or body, at no cost.
"""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass, replace
from typing import TYPE_CHECKING

import numpy as np
from numpy.polynomial import chebyshev

from planner.events.family import Geometry
from planner.sky.observer import Observer

if TYPE_CHECKING:
    from planner.sequence.models import EventRequest, Plan

ARCSEC_RAD = 206264.80624709636
BLOCK_S = 3600.0
NODES = 10  # a topocentric path is a polynomial and a 24 h wave: over 1 h this leaves under 1e-7 arcsec


@dataclass(frozen=True)
class Expected:
    """What is expected at n instants; every array has shape (n,).

    `east_arcsec`, `north_arcsec`: as seen, from the reference disc; NaN among stars. `ra_deg`, `dec_deg`: of the
    target. `reference_semidiameter_arcsec` (NaN among stars) and `target_semidiameter_arcsec`.
    `altitude_deg`: of the target, refracted; `zenith_pa_deg` from ICRS north.
    """

    tt_s: np.ndarray
    east_arcsec: np.ndarray
    north_arcsec: np.ndarray
    ra_deg: np.ndarray
    dec_deg: np.ndarray
    reference_semidiameter_arcsec: np.ndarray
    target_semidiameter_arcsec: np.ndarray
    altitude_deg: np.ndarray
    zenith_pa_deg: np.ndarray


def unit_vectors(ra_deg: np.ndarray, dec_deg: np.ndarray) -> np.ndarray:
    """Return unit vectors, shape (..., 3)."""
    ra, dec = np.radians(ra_deg), np.radians(dec_deg)
    return np.stack([np.cos(dec) * np.cos(ra), np.cos(dec) * np.sin(ra), np.sin(dec)], axis=-1)


def tangent_offsets(
    center_ra_deg: np.ndarray, center_dec_deg: np.ndarray, direction: np.ndarray
) -> tuple[np.ndarray, np.ndarray]:
    """Return the gnomonic (east, north) in arcseconds of directions (n, 3) about centres; NaN behind them."""
    ra, dec = np.radians(center_ra_deg), np.radians(center_dec_deg)
    east = np.stack([-np.sin(ra), np.cos(ra), np.zeros_like(ra)], axis=-1)
    north = np.stack([-np.sin(dec) * np.cos(ra), -np.sin(dec) * np.sin(ra), np.cos(dec)], axis=-1)
    depth = np.sum(unit_vectors(center_ra_deg, center_dec_deg) * direction, axis=-1)
    depth = np.where(depth > 0, depth, np.nan)
    return (
        np.sum(east * direction, axis=-1) / depth * ARCSEC_RAD,
        np.sum(north * direction, axis=-1) / depth * ARCSEC_RAD,
    )


def toward(direction: np.ndarray, ra_deg: np.ndarray, pa_deg: np.ndarray) -> np.ndarray:
    """Return unit tangents (n, 3) at directions toward position angles, from ICRS north through east."""
    ra, pa = np.radians(ra_deg), np.radians(pa_deg)
    east = np.stack([-np.sin(ra), np.cos(ra), np.zeros_like(ra)], axis=-1)
    north = np.cross(direction, east)
    return np.sin(pa)[:, None] * east + np.cos(pa)[:, None] * north


def as_seen(
    place: tuple[np.ndarray, np.ndarray],
    reference: tuple[np.ndarray, np.ndarray],
    altitude_deg: np.ndarray,
    zenith_pa_deg: np.ndarray,
    observer: Observer | None,
) -> tuple[np.ndarray, np.ndarray]:
    """Return the (east, north) offset in arcseconds of a body from a reference, as the refracting air shows them.

    `place`, `reference`: (ra_deg, dec_deg). `altitude_deg` (refracted) and `zenith_pa_deg` are at the place. East and
    north are those of the *refracted* reference, which is where a camera on an equatorial mount keeps its angle.
    Without an observer, without air, or below the horizon the offset is the true one.
    """
    body, center = unit_vectors(*place), unit_vectors(*reference)
    true = np.column_stack(tangent_offsets(*reference, body))
    if observer is None or observer.pressure_here_hpa == 0:
        return true[:, 0], true[:, 1]
    from planner.sky.refraction import refraction_arcsec, true_altitude_deg

    seen = np.isfinite(altitude_deg) & (altitude_deg > 0)
    altitude = np.radians(true_altitude_deg(np.where(seen, altitude_deg, 45.0), observer))[:, None]
    up = toward(body, place[0], np.where(seen, zenith_pa_deg, 0.0))
    zenith = np.sin(altitude) * body + np.cos(altitude) * up

    def lifted(direction: np.ndarray) -> np.ndarray:
        height = np.sum(zenith * direction, axis=1)
        lift = refraction_arcsec(np.degrees(np.arcsin(np.clip(height, -1, 1))), observer) / ARCSEC_RAD
        along = zenith - height[:, None] * direction
        along /= np.maximum(np.linalg.norm(along, axis=1), 1e-12)[:, None]
        return np.cos(lift)[:, None] * direction + np.sin(lift)[:, None] * along

    center = lifted(center)
    ra = np.degrees(np.arctan2(center[:, 1], center[:, 0]))
    dec = np.degrees(np.arcsin(np.clip(center[:, 2], -1, 1)))
    lifted_offset = np.column_stack(tangent_offsets(ra, dec, lifted(body)))
    offset = np.where(seen[:, None], lifted_offset, true)
    return offset[:, 0], offset[:, 1]


def target_place(geometry: Geometry) -> tuple[np.ndarray, np.ndarray, np.ndarray]:
    """Return (ra_deg, dec_deg, semidiameter_arcsec) of the target, be it a disc or a star of the event."""
    if geometry.target in geometry.discs:
        disc = geometry.discs[geometry.target]
        return disc.ra_deg, disc.dec_deg, disc.semidiameter_arcsec
    name, ra_deg, dec_deg, _ = next(
        (star for star in geometry.stars if star[0] == geometry.target), geometry.stars[0]
    )
    del name
    return ra_deg, dec_deg, np.zeros_like(ra_deg)


class PredictedPath:
    """The path of one target against one reference, for one observer.

    `geometry`: a function of `tt_s` (n,) that returns the family's `Geometry`.
    """

    def __init__(
        self,
        geometry: Callable[[np.ndarray], Geometry],
        observer: Observer | None,
        centered: Callable[[], PredictedPath] | None = None,
    ):
        self._geometry, self._centered = geometry, centered
        self.observer = observer
        self._from_center: PredictedPath | None = None
        self._airless: PredictedPath | None = None
        self._blocks: dict[int, np.ndarray] = {}
        self._among_stars: bool | None = None
        angle = np.pi * (np.arange(NODES) + 0.5) / NODES
        self._nodes = np.cos(angle)
        self._to_coefficients = np.linalg.inv(chebyshev.chebvander(self._nodes, NODES - 1))

    @classmethod
    def of_plan(cls, plan: Plan, observer: Observer | None = None) -> PredictedPath:
        """Return the path of a plan's event, from the plan's site or from another observer's."""
        from planner.sequence.documents import observer_of

        return cls.of_event(plan.event, observer_of(plan.site) if observer is None else observer)

    @classmethod
    def of_event(cls, request: EventRequest, observer: Observer) -> PredictedPath:
        """Return the path of an event as one observer sees it; raises InputError when there is no such event."""
        from planner.events.catalogue import family
        from planner.sequence.documents import event_spec

        kind = family(request.family)
        event = kind.nearest(event_spec(request))

        def from_center() -> PredictedPath:
            return cls(lambda tt_s: kind.geometry(event, None, tt_s), None)

        return cls(lambda tt_s: kind.geometry(event, observer, tt_s), observer, from_center)

    @property
    def among_stars(self) -> bool:
        """True when places are directions among stars, False when offsets from a disc."""
        if self._among_stars is None:
            raise RuntimeError("ask for a place first")
        return self._among_stars

    def geometry(self, tt_s: np.ndarray) -> Geometry:
        """Return the family's geometry itself, exact, at these instants."""
        return self._geometry(np.atleast_1d(np.asarray(tt_s, dtype=float)))

    def from_center(self) -> PredictedPath:
        """Return the path as the Earth's centre would see it; only of a path made by `of_plan` or `of_event`."""
        if self._from_center is None:
            if self._centered is None:
                raise RuntimeError("the path was not made from a plan")
            self._from_center = self._centered()
        return self._from_center

    def airless(self) -> PredictedPath:
        """Return the path as the observer would see it without air."""
        if self.observer is None or self.observer.pressure_here_hpa == 0:
            return self
        if self._airless is None:
            observer = replace(self.observer, pressure_hpa=0.0)
            self._airless = PredictedPath(self._geometry, observer, self.from_center)
        return self._airless

    def at(self, tt_s: np.ndarray) -> Expected:
        """Return what is expected at instants of shape (n,), from the sampled blocks."""
        tt_s = np.atleast_1d(np.asarray(tt_s, dtype=float))
        number = np.floor(tt_s / BLOCK_S).astype(np.int64)
        wanted, place = np.unique(number, return_inverse=True)
        self._sample([block for block in wanted.tolist() if block not in self._blocks])
        coefficients = np.stack([self._blocks[block] for block in wanted.tolist()])[place]
        basis = chebyshev.chebvander((tt_s - number * BLOCK_S) / BLOCK_S * 2.0 - 1.0, NODES - 1)
        value = np.einsum("nk,nkq->nq", basis, coefficients)
        direction = value[:, :3]
        return Expected(
            tt_s=tt_s,
            east_arcsec=value[:, 3],
            north_arcsec=value[:, 4],
            ra_deg=np.degrees(np.arctan2(direction[:, 1], direction[:, 0])) % 360.0,
            dec_deg=np.degrees(np.arctan2(direction[:, 2], np.hypot(direction[:, 0], direction[:, 1]))),
            reference_semidiameter_arcsec=value[:, 5],
            target_semidiameter_arcsec=value[:, 6],
            altitude_deg=value[:, 7],
            zenith_pa_deg=np.degrees(np.arctan2(value[:, 8], value[:, 9])),
        )

    def _sample(self, blocks: list[int]) -> None:
        if not blocks:
            return
        start = np.asarray(blocks, dtype=float)[:, None] * BLOCK_S
        tt_s = start + (self._nodes[None, :] + 1.0) / 2.0 * BLOCK_S
        values = self._values(tt_s.ravel()).reshape(len(blocks), NODES, -1)
        for block, value in zip(blocks, values, strict=True):
            self._blocks[block] = self._to_coefficients @ value

    def _values(self, tt_s: np.ndarray) -> np.ndarray:
        geometry = self._geometry(tt_s)
        ra_deg, dec_deg, semidiameter = target_place(geometry)
        direction = unit_vectors(ra_deg, dec_deg)
        self._among_stars = geometry.reference == "stars"
        nothing = np.full(tt_s.shape, np.nan)
        east, north, reference = nothing, nothing, nothing
        if not self._among_stars:
            disc = geometry.discs[geometry.reference]
            east, north = as_seen(
                (ra_deg, dec_deg),
                (disc.ra_deg, disc.dec_deg),
                geometry.altitude_deg,
                geometry.zenith_pa_deg,
                self.observer,
            )
            reference = disc.semidiameter_arcsec
        zenith = np.radians(geometry.zenith_pa_deg)
        columns = [
            east,
            north,
            reference,
            semidiameter,
            geometry.altitude_deg,
            np.sin(zenith),
            np.cos(zenith),
        ]
        return np.column_stack([direction, *columns])
