"""Centre of light and centre of figure of a sphere lit from one side."""

from __future__ import annotations

from functools import lru_cache

import numpy as np

# Which law stands for which surface: powdery rock, or clouds and dust. Common practice, no source.
_LAW = {"moon": "lommel-seeliger", "mercury": "lommel-seeliger"}


def law_of(body: str) -> str:
    """Return the law of scattering assumed for a body: `lambert` or `lommel-seeliger`."""
    return _LAW.get(body, "lambert")


def light_offset_radii(phase_angle_deg: float, law: str = "lambert") -> float:
    """Return how far the centre of light lies from the centre of figure, toward the lit limb, in radii.

    Lambert: 3 pi / 16 sin a (1 + cos a) / (sin a + (pi - a) cos a), by integration over the sphere (as
    Lindegren 1977, A&A 57, 55, has it for a Lambert sphere; from memory). Lommel-Seeliger: integrated
    numerically, to 1e-4.
    """
    if law == "lambert":
        angle = np.radians(np.clip(phase_angle_deg, 0.0, 179.5))
        return float(
            3
            * np.pi
            / 16
            * np.sin(angle)
            * (1 + np.cos(angle))
            / (np.sin(angle) + (np.pi - angle) * np.cos(angle))
        )
    phase, offset = _lommel_seeliger_table()
    return float(np.interp(phase_angle_deg, phase, offset))


@lru_cache(maxsize=1)
def _lommel_seeliger_table() -> tuple[np.ndarray, np.ndarray]:
    # mu = cos b cos l and mu0 = cos b cos(l - a) in longitude l and latitude b from the equator through Sun and
    # observer; over b, light integrates to that of cos^2 b (pi / 2) and its moment to that of cos^3 b (4 / 3)
    phase = np.linspace(0.0, 179.0, 180)
    node, weight = np.polynomial.legendre.leggauss(200)
    offset = []
    for angle in np.radians(phase):
        low, high = angle - np.pi / 2, np.pi / 2
        longitude = 0.5 * (high - low) * (node + 1) + low
        mu0, mu = np.cos(longitude - angle), np.cos(longitude)
        bright = mu0 / np.maximum(mu0 + mu, 1e-12) * mu
        light = np.sum(weight * bright) * (np.pi / 2)
        moment = np.sum(weight * bright * np.sin(longitude)) * (4 / 3)
        offset.append(moment / light if light > 0 else 1.0)
    return phase, np.array(offset)


def minnaert(
    toward: np.ndarray, side: np.ndarray, phase_angle_deg: float, exponent: np.ndarray | float
) -> np.ndarray:
    """Return brightness over a sphere, mu0^k mu^(k-1) (Minnaert 1941); k = 1 is Lambert's law, 0 off the lit disc.

    `toward`, `side`: offsets in radii, the first toward the middle of the lit limb. An exponent below 0.05, to which a
    fit may stray, counts as 0.05: at zero the dark side would be lit.
    """
    k = np.maximum(exponent, 0.05)
    inside = toward**2 + side**2
    mu = np.sqrt(np.clip(1 - inside, 1e-4, 1))
    angle = np.radians(phase_angle_deg)
    mu0 = np.clip(np.sin(angle) * toward + np.cos(angle) * mu, 0, 1)
    return np.where(inside < 1, mu0**k * mu ** (k - 1), 0.0)
