"""From times to instants: each with position angle, altitude, azimuth, what limits it, and its budget."""

from __future__ import annotations

from collections.abc import Callable, Mapping
from dataclasses import replace

import numpy as np

from planner.errors import InputError
from planner.events import cautions
from planner.events.budget import terms_of
from planner.events.family import Event, EventSpec, Instant
from planner.events.visibility import view
from planner.sky import places, timescale
from planner.sky.observer import Observer

_SIGMA_WORTH_A_WARNING_S = 0.5


class InstantMaker:
    """What an observer sees of a target at n times, ready to be named and given a budget.

    `target_km`, `reference_km`: (3, n) un-aberrated vectors from the observer; position angles are of the target from
    the reference. `limit_km` is what must be above the horizon (default: the target).
    """

    def __init__(
        self,
        observer: Observer | None,
        tt_s: np.ndarray,
        target_km: np.ndarray,
        reference_km: np.ndarray | None = None,
        magnitude: np.ndarray | float | None = None,
    ):
        """Look at the target."""
        self.observer = observer
        self.tt_s = np.atleast_1d(np.asarray(tt_s, dtype=float))
        self.view = view(target_km, observer, self.tt_s, magnitude)
        count = len(self.tt_s)
        self.position_angle_deg = np.full(count, np.nan)
        self.zenith_angle_deg = np.full(count, np.nan)
        if reference_km is not None and count:
            start = places.radec_deg(reference_km)
            angle = places.position_angle_deg(reference_km, target_km)
            self.position_angle_deg = (angle - places.north_of_date_pa_deg(*start, self.tt_s)) % 360.0
            if observer is not None:
                zenith = places.zenith_pa_deg(*start, observer, self.tt_s)
                self.zenith_angle_deg = (angle - zenith) % 360.0

    def limit(self, where: np.ndarray, reason: str) -> None:
        """Add a reason why instants are not seen, where nothing else limits them already."""
        limits = [
            old or (reason if hit else None) for old, hit in zip(self.view.limited_by, where, strict=True)
        ]
        self.view = replace(self.view, limited_by=tuple(limits))

    def instants(
        self,
        names: np.ndarray | list[str],
        terms: list[tuple[str, np.ndarray]],
        extra: Mapping[str, np.ndarray | list] | None = None,
    ) -> tuple[Instant, ...]:
        """Return the instants in time order; `terms` and `extra` hold (n,) values by name."""
        extra = dict(extra or {})
        if self.observer is not None:
            extra["zenith_position_angle_deg"] = self.zenith_angle_deg
            extra["sun_altitude_deg"] = self.view.sun_altitude_deg
        made = [
            Instant(
                name=str(name),
                tt_s=float(self.tt_s[i]),
                position_angle_deg=float(self.position_angle_deg[i]),
                altitude_deg=float(self.view.altitude_deg[i]),
                azimuth_deg=float(self.view.azimuth_deg[i]),
                visible=self.view.limited_by[i] is None,
                limited_by=self.view.limited_by[i],
                budget=terms_of(terms, i),
                extra=tuple((key, _plain(values[i])) for key, values in extra.items()),
            )
            for i, name in enumerate(names)
        ]
        return tuple(sorted(made, key=lambda instant: instant.tt_s))

    def time_cautions(self) -> tuple[str, ...]:
        """Return a caution where the Earth's rotation is not known to half a second."""
        sigma = float(np.max(timescale.ut1_sigma_s(self.tt_s), initial=0.0))
        if sigma < _SIGMA_WORTH_A_WARNING_S:
            return ()
        return tuple(text.format(sigma) for text in cautions.FAR_TIME)


def zenith_pa_deg(vector_km: np.ndarray, observer: Observer | None, tt_s: np.ndarray) -> np.ndarray:
    """Return the position angle of the zenith at a target, from ICRS north through east (NaN at the geocentre)."""
    if observer is None:
        return np.full(np.shape(tt_s), np.nan)
    return places.zenith_pa_deg(*places.radec_deg(vector_km), observer, tt_s)


def civil_day(tt_s: float) -> str:
    """Return the civil (UTC) day of an instant as in a title: 2032 November 13."""
    moment = timescale.datetime_from_tt_s(float(tt_s))
    return f"{moment.year} {moment:%B} {moment.day}"


def nearest_of(
    spec: EventSpec,
    find: Callable[[float, float], list[Event]],
    reaches_year: tuple[float, ...],
) -> Event:
    """Return the event nearest to the spec's date, looking further and further around it.

    Raises InputError when the date is outside the ephemeris, or nothing is found in the widest reach.
    """
    date = spec.date_tt_s
    timescale.require_span(date, "event.date")
    first, last = timescale.SPAN
    for reach in reaches_year:
        half = reach * timescale.YEAR_S
        events = find(max(first, date - half), min(last, date + half))
        if events:
            event = min(events, key=lambda event: abs(event.middle_tt_s - date))
            return replace(event, spec=replace(spec, date_tt_s=event.middle_tt_s))
    raise InputError(
        f"event.date: found no {spec.family} of {spec.body or spec.star} within {reaches_year[-1]:g} years of "
        f"{timescale.utc_iso(date, 0)}; allowed is a date nearer to one"
    )


def _plain(value):  # type: ignore[no-untyped-def]
    return value.item() if isinstance(value, np.generic) else value
