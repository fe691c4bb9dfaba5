"""How much brighter the twilight sky is over the Sun than at the zenith: single scattering against the CIE clear sky.

    python docs/notes/twilight_direction.py

Sunlight is scattered once by air and haze in a spherical atmosphere (the classical theory of twilight: Rozenberg 1966,
Twilight, chapter 3), and dimmed on its way to the place of scattering and from there to the eye. Light scattered more
than once is left out: beyond some 8 degrees of solar depression, and away from the Sun, it is most of what one sees.
Optical depths at 550 nm: air 0.097 (8 km scale height), haze 0.08 (1.5 km; forward, g = 0.65), ozone 0.03 about 22 km.

Magnitudes brighter than the zenith, single scattering / CIE type 12 with the Sun held on the horizon (what
`planner/sequence/skyglow.py` uses), at azimuth 0, 45 and 90 degrees from the Sun:

| depression | altitude | 0 | 45 | 90 |
|---|---|---|---|---|
| 0.5 | 60 | 0.41 / 0.54 | 0.28 / 0.36 | 0.13 / 0.13 |
| 0.5 | 15 | 2.03 / 2.96 | 1.49 / 1.77 | 0.91 / 1.03 |
| 3 | 30 | 1.41 / 1.90 | 1.06 / 1.19 | 0.52 / 0.59 |
| 3 | 15 | 2.09 / 2.96 | 1.64 / 1.77 | 0.79 / 1.03 |
| 6 | 30 | 2.10 / 1.90 | 1.58 / 1.19 | 0.50 / 0.59 |
| 6 | 15 | 3.25 / 2.96 | 2.54 / 1.77 | 0.72 / 1.03 |
"""

import numpy as np

EARTH_KM = 6371.0
AIR, HAZE = (0.097, 8.0), (0.08, 1.5)  # optical depth, scale height in km
OZONE = (0.03, 22.0, 5.0)  # optical depth, height, width
HAZE_G, HAZE_ALBEDO = 0.65, 0.9


def density(layer: tuple[float, float], height_km: np.ndarray) -> np.ndarray:
    """Return optical depth a kilometre of an exponential layer."""
    return layer[0] / layer[1] * np.exp(-height_km / layer[1])


def extinction(height_km: np.ndarray) -> np.ndarray:
    """Return optical depth a kilometre of all that dims."""
    depth, middle, width = OZONE
    ozone = depth / (width * np.sqrt(2 * np.pi)) * np.exp(-0.5 * ((height_km - middle) / width) ** 2)
    return density(AIR, height_km) + density(HAZE, height_km) + ozone


def scattered_once(zenith_deg: float, azimuth_deg: float, depression_deg: float) -> float:
    """Return the radiance of a direction, its azimuth counted from the Sun's, in no fixed unit."""
    zenith, azimuth, depression = np.radians([zenith_deg, azimuth_deg, depression_deg])
    sight = np.array([np.sin(zenith) * np.cos(azimuth), np.sin(zenith) * np.sin(azimuth), np.cos(zenith)])
    sun = np.array([np.cos(depression), 0.0, -np.sin(depression)])
    along = np.concatenate([np.linspace(0, 60, 241)[1:], np.geomspace(61, 1500, 160)])
    places = np.array([0.0, 0.0, EARTH_KM])[:, None] + sight[:, None] * along
    height = np.sqrt((places**2).sum(axis=0)) - EARTH_KM
    step = np.diff(along, prepend=0.0)
    to_eye = np.cumsum(extinction(height) * step)
    sunward = np.concatenate([np.linspace(0, 400, 401), np.linspace(405, 2500, 300)])
    rays = places[:, :, None] + sun[:, None, None] * sunward
    ray_height = np.sqrt((rays**2).sum(axis=0)) - EARTH_KM
    lit = (ray_height >= 0).all(axis=1)
    dimming = extinction(np.clip(ray_height, 0, None))
    from_sun = ((dimming[:, 1:] + dimming[:, :-1]) / 2 * np.diff(sunward)).sum(axis=1)
    cos_angle = sight @ sun
    rayleigh = 3 / (16 * np.pi) * (1 + cos_angle**2)
    haze = (1 - HAZE_G**2) / (4 * np.pi) / (1 + HAZE_G**2 - 2 * HAZE_G * cos_angle) ** 1.5
    source = density(AIR, height) * rayleigh + HAZE_ALBEDO * density(HAZE, height) * haze
    return float((source * np.exp(-to_eye - from_sun) * lit * step).sum())


if __name__ == "__main__":
    from planner.sequence.skyglow import towards_sun

    print("| depression | altitude | azimuth | single scattering | CIE |\n|---|---|---|---|---|")
    for depression in (0.5, 3.0, 6.0, 9.0):
        overhead = scattered_once(0.01, 0.0, depression)
        for altitude in (60.0, 30.0, 15.0):
            for azimuth in (0.0, 45.0, 90.0, 180.0):
                once = 2.5 * np.log10(
                    max(scattered_once(90 - altitude, azimuth, depression), 1e-99) / overhead
                )
                cie = 2.5 * np.log10(float(towards_sun(altitude, -depression, azimuth)))
                print(f"| {depression:g} | {altitude:g} | {azimuth:g} | {once:.2f} | {cie:.2f} |")
