"""The three ways to place a planet: on the Sun, among the stars, beside the Moon."""

from imaging.discs.among_stars import planet_among_stars
from imaging.discs.beside_moon import planet_beside_moon
from imaging.discs.lit import Body
from imaging.discs.on_sun import planet_on_sun
from imaging.discs.stamp import DiscPlace

__all__ = ["Body", "DiscPlace", "planet_among_stars", "planet_beside_moon", "planet_on_sun"]
