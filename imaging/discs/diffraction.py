"""A star behind a straight edge, as waves have it: fringes, and what band and stellar disc leave of them."""

from __future__ import annotations

import numpy as np


def straight_edge(
    offset_m: np.ndarray,
    distance_m: float,
    wavelength_nm: float = 550.0,
    bandwidth_nm: float = 0.0,
    star_diameter_mas: float = 0.0,
) -> np.ndarray:
    """Return the intensity behind a straight edge over the undisturbed one; `offset_m` counts into the light.

    Fresnel integrals C and S at v = offset sqrt(2 / (wavelength distance)): ((1/2 + C)^2 + (1/2 + S)^2) / 2
    (Born & Wolf, Principles of Optics, section 8.7). Averaged over a flat band and over a uniform stellar disc.
    """
    from scipy.special import fresnel

    bands = (
        np.linspace(-0.5, 0.5, 9) * bandwidth_nm + wavelength_nm
        if bandwidth_nm > 0
        else np.array([wavelength_nm])
    )
    half = 0.5 * np.radians(star_diameter_mas / 3.6e6) * distance_m
    strips = (np.arange(15) + 0.5) / 15 * 2 - 1 if half > 0 else np.array([0.0])
    weight = np.sqrt(1 - strips**2)
    weight /= weight.sum()
    offset_m = np.asarray(offset_m, float)
    out = np.zeros_like(offset_m)
    for band in bands:
        for strip, share in zip(strips, weight, strict=True):
            s, c = fresnel((offset_m + strip * half) * np.sqrt(2 / (band * 1e-9 * distance_m)))
            out += share * 0.5 * ((0.5 + c) ** 2 + (0.5 + s) ** 2) / bands.size
    return out
