"""The sky over a plan, worked out again from the plan alone: what its pictures and sheets are drawn from."""

from __future__ import annotations

from dataclasses import dataclass
from datetime import datetime
from functools import cached_property

import numpy as np

from planner.events import catalogue
from planner.events.family import Event, Family, Geometry
from planner.sequence.capacity import end_utc
from planner.sequence.documents import observer_of
from planner.sequence.frametimes import PlannedFrames, planned_event, planned_frames
from planner.sequence.models import Plan
from planner.sky.observer import Observer


@dataclass(frozen=True)
class Outlook:
    """A plan with its event, observer and geometry at hand."""

    plan: Plan

    @cached_property
    def family(self) -> Family:
        """The event's family."""
        return catalogue.family(self.plan.event.family)

    @cached_property
    def event(self) -> Event:
        """The event."""
        return planned_event(self.plan)

    @cached_property
    def observer(self) -> Observer:
        """The observer at the site."""
        return observer_of(self.plan.site)

    @cached_property
    def frames(self) -> PlannedFrames:
        """Every frame with its pointing."""
        return planned_frames(self.plan)

    @property
    def campaign(self) -> bool:
        """Whether the plan lasts weeks."""
        return self.family.campaign

    def geometry(self, tt_s: np.ndarray) -> Geometry:
        """Return the discs on the sky at these times."""
        return self.family.geometry(self.event, self.observer, np.asarray(tt_s, float))

    @property
    def first_utc(self) -> datetime:
        """Start of the first frame."""
        return min(shot.start_utc for passage in self.plan.passages for shot in passage.shots)

    @property
    def last_utc(self) -> datetime:
        """End of the last frame."""
        return max(end_utc(passage) for passage in self.plan.passages)

    def instants(self) -> list[tuple[str, datetime, float]]:
        """Return (name, UTC, 1-sigma in seconds) of the event's instants."""
        return [
            (each["name"], datetime.fromisoformat(each["utc"]), float(each["sigma_s"]))
            for each in self.plan.circumstances["instants"]
        ]
