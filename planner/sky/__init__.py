"""Where things are: time scales, ephemeris, bodies, stars, observer, refraction, brightness."""
