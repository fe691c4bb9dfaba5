"""The registry of event families: one line each."""

from __future__ import annotations

from functools import lru_cache
from importlib import import_module

from planner.errors import InputError
from planner.events.family import Circumstances, Event, Family
from planner.sky.observer import Observer

FAMILIES = {
    "solar-transit": "planner.events.transit:SolarTransit",
    "moon-occults-planet": "planner.events.moon_planet:MoonOccultsPlanet",
    "moon-occults-star": "planner.events.moon_star:MoonOccultsStar",
    "planets-meet": "planner.events.meeting:PlanetsMeet",
    "asteroid-occults-star": "planner.events.asteroid:AsteroidOccultsStar",
    "retrograde-track": "planner.events.retrograde:RetrogradeTrack",
    "apparition-arc": "planner.events.apparition:ApparitionArc",
}


def family(name: str) -> Family:
    """Return the family of this name; raises InputError with the names allowed."""
    try:
        module_name, class_name = FAMILIES[name].split(":")
    except KeyError:
        raise InputError(f"event.family: found {name!r}; allowed are {', '.join(FAMILIES)}") from None
    return getattr(import_module(module_name), class_name)()


@lru_cache(maxsize=1024)
def predicted(event: Event, observer: Observer | None) -> Circumstances:
    """Return the circumstances of an event, kept: a search looks at what it finds, and so does who asked for it."""
    return family(event.spec.family).predict(event, observer)
