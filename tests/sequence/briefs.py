"""Briefs that tests start from; every site and rig in them is invented."""

from __future__ import annotations

from functools import lru_cache

from planner.sequence.documents import load_brief
from planner.sequence.models import Brief, Plan
from tests.conftest import ROOT

EXAMPLES = ("mercury_transit_2032", "moon_occults_planet_2030", "mars_retrograde_2027")


@lru_cache
def example(name: str) -> Brief:
    return load_brief(ROOT / "configs" / f"{name}.yaml")


@lru_cache
def example_plan(name: str) -> Plan:
    from planner.sequence.builder import build_plan

    return build_plan(example(name))


def changed(brief: Brief, **parts: dict) -> Brief:
    """Return a brief with some values of its site, rig (and the rig's parts), event or wish replaced."""
    updates = {}
    for part in ("site", "event", "wish"):
        if part in parts:
            updates[part] = _with(getattr(brief, part), parts[part])
    rig = brief.rig
    for part in ("sensor", "optics", "mount", "clock", "guiding", "power"):
        if part in parts:
            rig = rig.model_copy(update={part: _with(getattr(rig, part), parts[part])})
    if "rig" in parts:
        rig = _with(rig, parts["rig"])
    return brief.model_copy(update={**updates, "rig": rig})


def _with(model, values: dict):
    return type(model).model_validate({**model.model_dump(exclude_unset=True), **values})


TRANSIT, OCCULTATION, CAMPAIGN = EXAMPLES
