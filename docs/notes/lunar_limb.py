"""What a lunar elevation grid says of the limb: settles the constants of `planner/sky/moonlimb.py`.

    python docs/notes/lunar_limb.py LDEM_4.IMG [moon_pa_de421_1900-2050.bpc moon_080317.tf]

Limbs at 300 librations of 1975-2047: their mean, the centre that fits them best, what a smooth circle leaves, and how
coarser grids change them.
"""

import dataclasses
import sys

import numpy as np

from planner.sky import moonlimb
from planner.sky.places import direction

model = moonlimb.limb_model(*sys.argv[1:])
times = np.random.default_rng(3).uniform(-8e8, 1.5e9, 300)
angles = np.arange(0.0, 360.0, 0.5)
cos, sin = np.cos(np.radians(angles)), np.sin(np.radians(angles))


def limbs_at(factor):
    """Return heights (times, angles) of the limb, the grid averaged over blocks, without the rise for finer relief."""
    samples = model.grid.samples
    lines, width = samples.shape
    blocks = samples.reshape(lines // factor, factor, width // factor, factor).mean(axis=(1, 3))
    grid = dataclasses.replace(
        model.grid, samples=blocks, pixels_per_degree=model.grid.pixels_per_degree / factor
    )
    coarse = moonlimb.LimbModel(grid, model.orientation)
    return np.array([moonlimb.limb_profile(None, t, coarse, angles)[1] - coarse.rise_km for t in times])


limbs = {factor: limbs_at(factor) for factor in (1, 2, 4, 8)}
heights = limbs[1]
moon = direction("moon", None, times)
axes = model.orientation.mean_earth_axes(times - moon.light_time_s)
ra, dec = np.radians(moon.ra_deg), np.radians(moon.dec_deg)
north = np.stack([-np.sin(dec) * np.cos(ra), -np.sin(dec) * np.sin(ra), np.cos(dec)])
east = np.stack([-np.sin(ra), np.cos(ra), 0 * ra])
north, east = (np.einsum("nij,jn->ni", axes, v) for v in (north, east))
harmonic = np.concatenate([2 * (heights * cos).mean(axis=1), 2 * (heights * sin).mean(axis=1)])
centre, *_ = np.linalg.lstsq(np.concatenate([north, east]), harmonic, rcond=None)
circle = np.outer(north @ centre, cos) + np.outer(east @ centre, sin)
resolution = model.grid.pixels_per_degree
print(
    f"mean limb above 1737.4 km: {heights.mean():.3f} km; about the centre of mass {heights.std():.3f} km rms"
)
print(
    f"centre of the limb, mean-Earth axes: {np.round(centre, 3)} km; about it {(heights - circle).std():.3f} km rms"
)
spread = np.percentile(heights - circle - heights.mean(), [0.5, 99.5])
print(f"99 % of the limb lies within {spread[0]:.2f} to {spread[1]:.2f} km of that circle")
print("\n| pixels a degree | from | mean change, km | rms change, km |\n|---|---|---|---|")
for fine, coarse in ((1, 2), (2, 4), (4, 8)):
    change = limbs[coarse] - limbs[fine]
    print(f"| {resolution / coarse:g} | {resolution / fine:g} | {change.mean():.3f} | {change.std():.3f} |")
