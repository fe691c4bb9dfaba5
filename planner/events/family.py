"""The one small interface behind which every event family stands, and what it gives back.

A family gives three things, always in un-aberrated topocentric directions (light-time applied, neither
aberration nor deflection): aberration scales a small field as a whole by at most 1e-4, which the fitted scale
of a frame absorbs, and it shifts stars and planets alike; so one kind of place serves star fields and discs.
Refraction is not in these directions: `altitude_deg` and `zenith_pa_deg` let a renderer or a fit apply it.

Axes are those of the ICRS; angles are in degrees, small angles in arcseconds; position angles in `Geometry`
count from ICRS north through east. Times inside are TT seconds from J2000.0 (`tt_s`).
Position angles in `Instant` are from true celestial north of date, the convention of published tables.
"""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass, field
from typing import Any, Protocol

import numpy as np

from planner.sky.discs import SkyDisc
from planner.sky.observer import Observer


@dataclass(frozen=True)
class EventSpec:
    """What the user asks for: a family, the bodies, and a date near the event (TT seconds from J2000.0)."""

    family: str
    body: str
    date_tt_s: float
    other_body: str | None = None
    star: str | None = None
    orbit: Any = None
    radii: str | None = None
    limb: Any = None
    options: tuple[tuple[str, Any], ...] = ()


@dataclass(frozen=True)
class Event:
    """One event found: its spec with the date moved to the geocentric middle, and the span to look at."""

    spec: EventSpec
    start_tt_s: float
    middle_tt_s: float
    end_tt_s: float
    title: str


@dataclass(frozen=True)
class BudgetTerm:
    """One source of error of an instant, as a 1-sigma in seconds."""

    name: str
    sigma_s: float


@dataclass(frozen=True)
class Instant:
    """A predicted instant; never a bare time. Angles that do not apply are NaN."""

    name: str
    tt_s: float
    position_angle_deg: float
    altitude_deg: float
    azimuth_deg: float
    visible: bool
    limited_by: str | None
    budget: tuple[BudgetTerm, ...] = ()
    extra: tuple[tuple[str, Any], ...] = ()

    @property
    def sigma_s(self) -> float:
        """Combined 1-sigma: the root of the sum of the squares of the budget."""
        return float(np.sqrt(sum(term.sigma_s**2 for term in self.budget)))

    @property
    def largest_term(self) -> str | None:
        """Name of the largest term of the budget."""
        return max(self.budget, key=lambda term: term.sigma_s).name if self.budget else None


@dataclass(frozen=True)
class Series:
    """A table that goes with circumstances, such as evening after evening: columns with units in their names."""

    title: str
    columns: tuple[str, ...]
    rows: tuple[tuple[Any, ...], ...]


@dataclass(frozen=True)
class Circumstances:
    """What happens at a site (or at the geocentre, `observer=None`): instants in time order, and what bounds them."""

    event: Event
    observer: Observer | None
    happens: bool
    reason: str | None
    instants: tuple[Instant, ...]
    least_separation_arcsec: float
    conventions: dict[str, str] = field(default_factory=dict)
    cautions: tuple[str, ...] = ()
    facts: dict[str, Any] = field(default_factory=dict)
    series: tuple[Series, ...] = ()

    def instant(self, name: str) -> Instant | None:
        """Return the instant of this name, or None where it does not occur."""
        return next((instant for instant in self.instants if instant.name == name), None)


@dataclass(frozen=True)
class Geometry:
    """Everything on the sky that matters to an event at n times: what render draws, framing frames, check compares.

    `target`: name of the moving point in `discs` (transit: the planet; star occultation: see `stars`).
    `reference`: `sun`, `moon` or `stars`: what positions are measured against, what frames are registered on.
    `stars`: names and ICRS places (with proper motion and parallax of the date) of stars that are part of the event:
    tuples (name, ra_deg (n,), dec_deg (n,), magnitude).
    `altitude_deg`, `azimuth_deg`: of the target, refracted altitude (NaN at the geocentre).
    `zenith_pa_deg`: position angle of the zenith at the target, from ICRS north through east.
    `sun_altitude_deg`: geometric, for twilight.
    """

    tt_s: np.ndarray
    discs: dict[str, SkyDisc]
    target: str
    reference: str
    altitude_deg: np.ndarray
    azimuth_deg: np.ndarray
    zenith_pa_deg: np.ndarray
    sun_altitude_deg: np.ndarray
    stars: tuple[tuple[str, np.ndarray, np.ndarray, float], ...] = ()


class Family(Protocol):
    """What an event family offers. `observer=None` means the geocentre.

    `targets` lists the bodies (or `star`, `asteroid`) the family can do. `reference`: as in `Geometry`.
    `campaign`: True when the event lasts weeks and is shot in visits, False when it is one passage.
    `search` with `bodies=None` looks for all of `targets`; `tick(done, total)` reports progress.
    """

    name: str
    targets: tuple[str, ...]
    reference: str
    campaign: bool

    def search(
        self,
        start_tt_s: float,
        end_tt_s: float,
        observer: Observer | None = None,
        bodies: tuple[str, ...] | None = None,
        tick: Callable[[int, int], None] | None = None,
    ) -> list[Event]:
        """Return the events between two instants, in time order."""
        ...

    def nearest(self, spec: EventSpec) -> Event:
        """Return the event nearest to the date of the spec; raises InputError when the body cannot do it."""
        ...

    def predict(self, event: Event, observer: Observer | None = None) -> Circumstances:
        """Return the circumstances of an event at a site."""
        ...

    def geometry(self, event: Event, observer: Observer | None, tt_s: np.ndarray) -> Geometry:
        """Return the discs on the sky at these times."""
        ...
