"""EXIF tags of camera files: times, exposure, camera, orientation; names without their group."""

from __future__ import annotations

from pathlib import Path

import numpy as np

# Exif 2.31, tag 0x0112: what turns the stored rows into the picture, as (transpose, flip rows, flip columns)
_ORIENTATIONS = {
    "2": (False, False, True),
    "3": (False, True, True),
    "4": (False, True, False),
    "5": (True, False, False),
    "6": (True, False, True),
    "7": (True, True, True),
    "8": (True, True, False),
}


def read_tags(path: Path) -> dict[str, str]:
    """Return the EXIF tags of a file as text, `{}` when there are none or they are damaged."""
    import logging

    import exifread

    logging.getLogger("exifread").setLevel(logging.CRITICAL)
    try:
        with open(path, "rb") as file:
            found = exifread.process_file(file, details=False)
    except Exception:  # damaged EXIF must not cost the picture
        return {}
    tags: dict[str, str] = {}
    for key, value in found.items():
        name = key.split(" ", 1)[-1]
        if isinstance(value, bytes) or key.startswith("Thumbnail"):
            continue
        text = str(getattr(value, "values", [value])[0]) if name == "Orientation" else str(value)
        tags.setdefault(name, text.strip())
    return tags


def exposure_of(tags: dict[str, str]) -> float | None:
    """Return ExposureTime in seconds, or None."""
    text = tags.get("ExposureTime", "")
    try:
        above, _, below = text.partition("/")
        value = float(above) / float(below or 1)
    except (ValueError, ZeroDivisionError):
        return None
    return value if 0 < value < 86400 else None


def camera_of(tags: dict[str, str]) -> str | None:
    """Return make and model, or None."""
    text = " ".join(part for part in (tags.get("Make", ""), tags.get("Model", "")) if part)
    return text or None


def turned(pixels: np.ndarray, tags: dict[str, str]) -> np.ndarray:
    """Return the pixels as the orientation flag wants them looked at."""
    transpose, rows, columns = _ORIENTATIONS.get(tags.get("Orientation", "1"), (False, False, False))
    if transpose:
        pixels = pixels.swapaxes(0, 1)
    if rows:
        pixels = pixels[::-1]
    if columns:
        pixels = pixels[:, ::-1]
    return np.ascontiguousarray(pixels)
