"""The registry of event families: one line each."""

from __future__ import annotations

from importlib import import_module

from planner.errors import InputError
from planner.events.family import Family

FAMILIES = {
    "solar-transit": "planner.events.transit:SolarTransit",
    "moon-occults-planet": "planner.events.moon_planet:MoonOccultsPlanet",
    "moon-occults-star": "planner.events.moon_star:MoonOccultsStar",
    "retrograde-track": "planner.events.retrograde:RetrogradeTrack",
}


def family(name: str) -> Family:
    """Return the family of this name; raises InputError with the names allowed."""
    try:
        module_name, class_name = FAMILIES[name].split(":")
    except KeyError:
        raise InputError(f"event.family: found {name!r}; allowed are {', '.join(FAMILIES)}") from None
    return getattr(import_module(module_name), class_name)()
