"""Bodies as discs on the sky: size, shape, phase, orientation, brightness."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np


@dataclass(frozen=True)
class SkyDisc:
    """A body drawn as a disc at n times; every array has shape (n,).

    `ra_deg`, `dec_deg`: un-aberrated topocentric direction, ICRS axes. `semidiameter_arcsec`: equatorial.
    `flattening`: apparent, (a - b) / a of the ellipse on the sky. `pole_pa_deg`: of the projected north pole.
    `phase_angle_deg`: Sun-body-observer. `bright_limb_pa_deg`: of the middle of the lit limb.
    `magnitude`: apparent V, out of the atmosphere. `distance_km`: from the observer.
    """

    name: str
    ra_deg: np.ndarray
    dec_deg: np.ndarray
    distance_km: np.ndarray
    semidiameter_arcsec: np.ndarray
    flattening: np.ndarray
    pole_pa_deg: np.ndarray
    phase_angle_deg: np.ndarray
    bright_limb_pa_deg: np.ndarray
    magnitude: np.ndarray
