"""Lunar elevation grids: PDS images in simple cylindrical projection, with the label beside them.

Any resolution works (4, 16, 64 pixels a degree, ...): the image is memory mapped, and only what a limb needs is read.
"""

from __future__ import annotations

import re
from dataclasses import dataclass
from pathlib import Path

import numpy as np

from planner.errors import InputError

_SAMPLE_TYPES = {
    ("LSB_INTEGER", 16): "<i2",
    ("MSB_INTEGER", 16): ">i2",
    ("LSB_INTEGER", 32): "<i4",
    ("MSB_INTEGER", 32): ">i4",
    ("PC_REAL", 32): "<f4",
    ("IEEE_REAL", 32): ">f4",
}
_UNITS_KM = {"METER": 1e-3, "METERS": 1e-3, "M": 1e-3, "KILOMETER": 1.0, "KILOMETERS": 1.0, "KM": 1.0}


@dataclass(frozen=True, eq=False)
class ElevationGrid:
    """Heights over a sphere: `samples` (lines, line samples), pixel registered, north at the top, longitude eastward.

    height = `scale_km` x sample, above `radius_km`. The first sample's western edge is `west_deg`.
    """

    path: Path
    samples: np.ndarray
    scale_km: float
    radius_km: float
    pixels_per_degree: float
    west_deg: float
    axes: str

    @property
    def pixel_km(self) -> float:
        """Size of a pixel on the equator."""
        return float(np.radians(1.0 / self.pixels_per_degree) * self.radius_km)

    def height_km(self, latitude_deg: np.ndarray, longitude_deg: np.ndarray) -> np.ndarray:
        """Return heights above `radius_km` at selenographic points, bilinear, in the shape of the input."""
        lines, width = self.samples.shape
        y = (90.0 - latitude_deg) * self.pixels_per_degree - 0.5
        x = (longitude_deg - self.west_deg) * self.pixels_per_degree - 0.5
        y = np.clip(y, 0.0, lines - 1.0)
        top = np.minimum(y.astype(np.int64), lines - 2)
        left = np.floor(x).astype(np.int64)
        dy, dx = y - top, x - left
        left = left % width
        right = (left + 1) % width
        flat = self.samples.reshape(-1)
        upper, lower = top * width, (top + 1) * width
        north = flat[upper + left] * (1.0 - dx) + flat[upper + right] * dx
        south = flat[lower + left] * (1.0 - dx) + flat[lower + right] * dx
        return (north * (1.0 - dy) + south * dy) * self.scale_km


def elevation_grid(path: str | Path) -> ElevationGrid:
    """Open a grid by its image (.IMG) or its label (.LBL); the other must lie beside it.

    Raises InputError when one is missing, the label lacks what is needed, or the image is not as large as it says.
    """
    path = Path(path)
    label_path = path if path.suffix.lower() == ".lbl" else _beside(path, ".lbl")
    try:
        text = label_path.read_text(encoding="latin-1")
    except OSError as error:
        raise InputError(
            f"{label_path}: found no readable label ({error.strerror}); allowed is a PDS label (.LBL) beside its image"
        ) from error
    label = _Label(label_path, text)
    projection = label.text_of("MAP_PROJECTION_TYPE").upper()
    if projection not in ("SIMPLE CYLINDRICAL", "EQUIRECTANGULAR"):
        raise label.wrong("MAP_PROJECTION_TYPE", projection, "SIMPLE CYLINDRICAL")
    if label.text_of("POSITIVE_LONGITUDE_DIRECTION").upper() != "EAST":
        raise label.wrong(
            "POSITIVE_LONGITUDE_DIRECTION", label.text_of("POSITIVE_LONGITUDE_DIRECTION"), "EAST"
        )
    kind = (label.text_of("SAMPLE_TYPE").upper(), int(label.number("SAMPLE_BITS")))
    if kind not in _SAMPLE_TYPES:
        raise label.wrong(
            "SAMPLE_TYPE", f"{kind[0]} of {kind[1]} bits", ", ".join(f"{k} {b}" for k, b in _SAMPLE_TYPES)
        )
    lines, width = int(label.number("LINES")), int(label.number("LINE_SAMPLES"))
    resolution = label.number("MAP_RESOLUTION")
    if not (abs(lines / resolution - 180.0) < 1e-6 and abs(width / resolution - 360.0) < 1e-6):
        raise label.wrong(
            "MAP_RESOLUTION", f"{resolution:g} with {lines} x {width} samples", "a grid of the whole Moon"
        )
    unit = label.text_of("UNIT").upper()
    if unit not in _UNITS_KM:
        raise label.wrong("UNIT", unit, "METER or KILOMETER")
    image_path = label_path.with_name(label.image_name())
    if not image_path.exists():
        image_path = _beside(label_path, ".img")
    samples = _mapped_image(image_path, _SAMPLE_TYPES[kind], lines, width)
    return ElevationGrid(
        path=image_path,
        samples=samples,
        scale_km=label.number("SCALING_FACTOR") * _UNITS_KM[unit],
        radius_km=label.number("OFFSET") * _UNITS_KM[unit],
        pixels_per_degree=resolution,
        west_deg=label.number("WESTERNMOST_LONGITUDE"),
        axes=label.text_of("COORDINATE_SYSTEM_NAME"),
    )


def _beside(path: Path, suffix: str) -> Path:
    for candidate in (path.with_suffix(suffix), path.with_suffix(suffix.upper())):
        if candidate.exists():
            return candidate
    return path.with_suffix(suffix.upper())


def _mapped_image(path: Path, dtype: str, lines: int, width: int) -> np.ndarray:
    expected = lines * width * np.dtype(dtype).itemsize
    try:
        found = path.stat().st_size
    except OSError as error:
        raise InputError(
            f"{path}: found no image ({error.strerror}); allowed is the one its label names"
        ) from error
    if found != expected:
        raise InputError(f"{path}: found {found} bytes; allowed are {expected}, the size its label gives")
    return np.memmap(path, dtype=dtype, mode="r", shape=(lines, width))


class _Label:
    """The keys of a PDS3 label that a grid needs."""

    def __init__(self, path: Path, text: str):
        self.path = path
        text = re.sub(r"/\*.*?\*/", "", text, flags=re.S)
        self.values = {
            key: value.strip()
            for key, value in re.findall(r"^\s*(\^?\w+)\s*=\s*(\"[^\"]*\"|'[^']*'|[^\r\n]+)", text, re.M)
        }

    def text_of(self, key: str) -> str:
        if key not in self.values:
            raise InputError(f"{self.path}: {key}: found none; allowed is a PDS3 label of an elevation grid")
        return self.values[key].strip("\"' ")

    def number(self, key: str) -> float:
        text = self.text_of(key)
        found = re.match(r"[-+]?\d*\.?\d+(?:[eE][-+]?\d+)?", text)
        if not found:
            raise self.wrong(key, text, "a number")
        return float(found[0])

    def image_name(self) -> str:
        found = re.search(r"\"?([\w.\-]+)\"?", self.text_of("^IMAGE").strip('("'))
        return found[1] if found else self.path.with_suffix(".IMG").name

    def wrong(self, key: str, found: str, allowed: str) -> InputError:
        return InputError(f"{self.path}: {key}: found {found}; allowed is {allowed}")
