"""From light to numbers: vignetting, photon and read noise, full well, bleeding, gain, quantisation."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from planner.sequence.models import Rig
from planner.sequence.radiometry import at_gain, vignetting_factor


@dataclass(frozen=True)
class Readout:
    """A recorded frame: `adu` (rows, columns) in the file's integer type, and what it takes to undo the gain."""

    adu: np.ndarray
    gain_e_adu: float
    read_noise_e: float
    saturation_adu: float


def binned(rig: Rig, binning: int) -> Rig:
    """Return the rig as if its pixels were `binning` times larger, levels in ADU unchanged."""
    if binning == 1:
        return rig
    sensor = rig.sensor
    return rig.model_copy(
        update={
            "sensor": sensor.model_copy(
                update={
                    "width_px": sensor.width_px // binning,
                    "height_px": sensor.height_px // binning,
                    "pixel_um": sensor.pixel_um * binning,
                    "full_well_e": sensor.full_well_e * binning**2,
                    "gain_e_adu": sensor.gain_e_adu * binning**2,
                    "dark_e_s": sensor.dark_e_s * binning**2,
                    "gains": [
                        each.model_copy(
                            update={
                                "e_adu": each.e_adu * binning**2,
                                "full_well_e": each.full_well_e * binning**2,
                            }
                        )
                        for each in sensor.gains
                    ],
                    "bayer": None,
                }
            )
        }
    )


def vignetting(rig: Rig, shape: tuple[int, int]) -> np.ndarray:
    """Return the part of the light that arrives at each pixel of the middle `shape` (rows, columns) of the sensor."""
    rows, columns = shape
    y = np.arange(rows, dtype=np.float32) - (rows - 1) / 2
    x = np.arange(columns, dtype=np.float32) - (columns - 1) / 2
    corner = np.hypot(rig.sensor.width_px / 2, rig.sensor.height_px / 2)
    radius = np.sqrt(y[:, None] ** 2 + x[None, :] ** 2) / np.float32(corner)
    return vignetting_factor(rig, radius).astype(np.float32)


def record(
    electrons: np.ndarray, rig: Rig, gain: float, generator: np.random.Generator, bleed: bool = False
) -> Readout:
    """Return what the camera records of expected electrons a pixel (vignetting, sky and dark included).

    Photon noise is Poisson below 40 electrons and its normal limit above. `bleed`: charge above the full well
    runs along the column, half each way, as in a CCD without a drain.
    """
    sensor, setting = rig.sensor, at_gain(rig, gain)
    noise = generator.standard_normal(electrons.shape, dtype=np.float32)
    charge = electrons + np.sqrt(electrons) * noise
    faint = electrons < 40
    if faint.any():
        charge[faint] = generator.poisson(electrons[faint])
    if bleed:
        charge = _bleed(charge, setting.full_well_e)
    np.clip(charge, 0, setting.full_well_e, out=charge)
    charge += setting.read_noise_e * generator.standard_normal(electrons.shape, dtype=np.float32)
    top = 2**sensor.bit_depth - 1
    adu = np.rint(charge / np.float32(setting.e_adu) + np.float32(sensor.bias_adu))
    kind = np.uint8 if sensor.bit_depth <= 8 else (np.uint16 if sensor.bit_depth <= 16 else np.uint32)
    saturation = min(top, sensor.bias_adu + setting.full_well_e / setting.e_adu)
    return Readout(np.clip(adu, 0, top).astype(kind), setting.e_adu, setting.read_noise_e, float(saturation))


def _bleed(charge: np.ndarray, full_well_e: float) -> np.ndarray:
    """Spill what is above the full well along the columns until it finds room; what reaches the edge is lost."""
    charge = charge.copy()
    for column in np.nonzero((charge > full_well_e).any(axis=0))[0]:
        values = charge[:, column]
        excess = np.where(values > full_well_e, values - full_well_e, 0.0)
        values = np.minimum(values, full_well_e)
        for order in (slice(None), slice(None, None, -1)):
            carry = 0.0
            room = full_well_e - values[order]
            half = 0.5 * excess[order]
            filled = values[order].copy()
            for row in range(len(filled)):
                carry += half[row]
                if carry > 0:
                    step = min(carry, room[row])
                    filled[row] += step
                    carry -= step
            values = filled if order == slice(None) else filled[::-1]
        charge[:, column] = values
    return charge
