"""The lit Moon made even: what the law of scattering takes from each place near the limb is given back.

Near the terminator the brightness falls off within pixels of the limb, in the middle of the lit limb it does not: one
mean profile for all sectors would lie a tenth of a pixel off, to the dark side.
"""

from __future__ import annotations

from dataclasses import replace

import numpy as np

from imaging.discs.edge import Blur
from imaging.discs.outline import Outline
from imaging.discs.ring import Ring

_STEP_PX, _STEP_DEG = 0.2, 2.0
_LEAST = 0.05  # of the limb's light; darker ground is near the terminator and not lifted further


def evened(
    ring: Ring,
    x: float,
    y: float,
    radius: float,
    outline: Outline,
    lit_angle_deg: float,
    phase_angle_deg: float,
    blur: Blur,
    level: float,
) -> Ring:
    """Return the ring with values above `level` divided by a blurred surface of Lommel & Seeliger over a blurred step.

    `lit_angle_deg`: polar angle of the middle of the lit limb. The law is 1 along the lit limb itself, so that the limb
    stays where it is.
    """
    offset, angle = ring.polar(x, y, radius, outline)
    away = np.abs((np.degrees(angle) - lit_angle_deg + 180) % 360 - 180)
    reach = float(np.abs(offset).max()) + 1
    places = np.arange(-reach, reach + _STEP_PX, _STEP_PX)
    turns = np.arange(0.0, 180.0 + _STEP_DEG, _STEP_DEG)
    table = _table(places, turns, radius, phase_angle_deg, blur)
    column = (offset - places[0]) / _STEP_PX
    row = away / _STEP_DEG
    from scipy.ndimage import map_coordinates

    share = map_coordinates(table, [row, column], order=1, mode="nearest")
    return replace(ring, value=level + (ring.value - level) / share)


def _table(
    places: np.ndarray, turns_deg: np.ndarray, radius: float, phase_angle_deg: float, blur: Blur
) -> np.ndarray:
    """Return the share of a step's light at offsets from the limb (columns) and turns from the lit middle (rows)."""
    from scipy.ndimage import gaussian_filter1d

    margin = int(np.ceil(12 * blur.sigma_px / _STEP_PX))
    wide = places[0] + _STEP_PX * np.arange(-margin, places.size + margin)
    inside = np.clip(0.5 - wide / _STEP_PX, 0, 1)
    distance = np.clip(1 + wide / radius, 0, 1)
    mu = np.sqrt(1 - distance**2)[None, :]
    phase = np.radians(phase_angle_deg)
    mu0 = np.sin(phase) * distance * np.cos(np.radians(turns_deg))[:, None] + np.cos(phase) * mu
    bright = np.where(mu0 > 0, mu0 / np.maximum(mu0 + mu, 1e-9), 0.0)

    def seen(light: np.ndarray) -> np.ndarray:
        # pixels average the light over one pixel: 1/12 px^2 of variance
        out = np.zeros_like(light)
        for weight, sigma in blur.parts():
            width = np.sqrt(sigma**2 + 1 / 12) / _STEP_PX
            out += weight * gaussian_filter1d(light, width, axis=-1, mode="nearest", truncate=5.0)
        return out

    step = seen(inside)
    share = seen(bright * inside) / np.maximum(step, 1e-9)
    # far outside nothing is left of either: there the share of the last place holds
    last = int(np.argmax(step < 1e-4)) or wide.size
    share[:, last:] = share[:, last - 1 : last]
    return np.clip(share[:, margin : margin + places.size], _LEAST, 1.0)
