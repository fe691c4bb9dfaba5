"""Judging a plan by named rules: what is wrong, where, how much, and what would cure it.

Errors stop a plan, cautions stay in it. A rule is a function from a `Case` to findings, listed in `RULES`.
"""

from __future__ import annotations

from collections.abc import Callable, Iterator
from dataclasses import dataclass
from functools import cached_property

import numpy as np

from planner.errors import InputError
from planner.events.family import Geometry
from planner.sequence.frametimes import frame_starts
from planner.sequence.models import Finding, Passage, Plan
from planner.sequence.setting import Setting

_SAMPLES = 200

Rule = Callable[["Case"], Iterator[Finding]]


@dataclass(frozen=True)
class Case:
    """A plan before its judges, with what several rules look at."""

    plan: Plan
    setting: Setting

    @cached_property
    def frames(self) -> tuple[np.ndarray, np.ndarray, np.ndarray, np.ndarray]:
        """(passage index, shot index, start_tt_s, exposure_s) of every frame still to take, in time order."""
        rows = frame_starts(self.plan)
        done = np.array([passage.done for passage in self.plan.passages], bool)
        keep = ~done[rows[0]] if len(rows[0]) else np.zeros(0, bool)
        return rows[0][keep], rows[1][keep], rows[2][keep], rows[3][keep]

    @cached_property
    def sample_rows(self) -> np.ndarray:
        """Indices of frames spread over the plan: the first of every shot, and some between."""
        passage, shot, start, _ = self.frames
        if not len(start):
            return np.zeros(0, int)
        changes = np.flatnonzero(np.diff(passage * 100000 + shot)) + 1
        spread = np.linspace(0, len(start) - 1, min(_SAMPLES, len(start))).astype(int)
        return np.unique(np.concatenate([[0], changes[: 4 * _SAMPLES], spread, [len(start) - 1]]))

    @cached_property
    def sky(self) -> Geometry:
        """The geometry at the sampled frames."""
        return self.setting.geometry(self.frames[2][self.sample_rows])

    @cached_property
    def target(self) -> tuple[np.ndarray, np.ndarray]:
        """(ra_deg, dec_deg) of the target at the sampled frames."""
        from planner.sequence.recipes import place_of

        return place_of(self.sky, self.sky.target)

    def passage_of_sample(self, sample: int) -> Passage:
        """Return the passage that a sampled frame belongs to."""
        return self.plan.passages[int(self.frames[0][self.sample_rows[sample]])]

    def where(self, chosen: np.ndarray) -> str:
        """Return the names of the passages in which a condition holds at the sampled frames."""
        names = dict.fromkeys(self.passage_of_sample(int(i)).name for i in np.flatnonzero(chosen))
        listed = list(names)
        return listed[0] if len(listed) == 1 else f"{listed[0]} to {listed[-1]} ({len(listed)} passages)"


def judge(plan: Plan, setting: Setting) -> list[Finding]:
    """Return the findings of all rules on one plan, errors first."""
    from planner.sequence import rules_camera, rules_event, rules_gear, rules_pointing, rules_sky

    case = Case(plan, setting)
    rules = (
        *rules_event.RULES,
        *rules_camera.RULES,
        *rules_gear.RULES,
        *rules_pointing.RULES,
        *rules_sky.RULES,
    )
    found = [finding for rule in rules for finding in rule(case)]
    return sorted(found, key=lambda finding: ("error", "caution", "note").index(finding.level))


def judge_together(plans: list[Plan]) -> list[Plan]:
    """Return the plans of several cameras with what is found only when they are seen together."""
    from planner.sequence.rules_pointing import shared_mount

    together = list(shared_mount(plans))
    if not together:
        return plans
    return [plan.model_copy(update={"findings": [*together, *plan.findings]}) for plan in plans]


def stop_at_errors(plan: Plan) -> None:
    """Raise InputError, with every error in it, when a plan has findings that make it useless."""
    errors = [finding for finding in plan.findings if finding.level == "error"]
    if errors:
        told = "; ".join(f"{each.rule} ({each.where}): {each.sentence} {each.cure}" for each in errors)
        raise InputError(f"{plan.title}, {plan.rig.name}: this plan cannot be shot: {told}")
