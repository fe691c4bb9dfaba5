"""Colour profiles for the files we write: grey or sRGB primaries, with the sRGB tone curve or none (linear).

Built after ICC.1:2001-04 (version 2.4, which every reader knows); primaries and curve of IEC 61966-2-1, adapted to D50.
"""

from __future__ import annotations

import struct

import numpy as np

_D50 = (0.9642, 1.0, 0.8249)
# sRGB primaries adapted to D50 (Bradford), as in the profile of IEC 61966-2-1
_PRIMARIES = {
    "rXYZ": (0.43607, 0.22249, 0.01392),
    "gXYZ": (0.38515, 0.71687, 0.09708),
    "bXYZ": (0.14307, 0.06061, 0.71410),
}


def profile(colours: int, linear: bool) -> bytes:
    """Return an ICC profile for pictures of 1 (grey) or 3 (red, green, blue) planes."""
    name = f"Syzygraph {'grey' if colours == 1 else 'sRGB primaries'}, {'linear' if linear else 'sRGB curve'}"
    tags = {"desc": _description(name), "cprt": _text("No copyright, use freely"), "wtpt": _xyz(*_D50)}
    curve = _curve(linear)
    if colours == 1:
        tags["kTRC"] = curve
    else:
        tags |= {tag: _xyz(*value) for tag, value in _PRIMARIES.items()}
        tags |= {"rTRC": curve, "gTRC": curve, "bTRC": curve}
    return _packed(tags, b"GRAY" if colours == 1 else b"RGB ")


def _packed(tags: dict[str, bytes], space: bytes) -> bytes:
    place = 128 + 4 + 12 * len(tags)
    table, body = struct.pack(">I", len(tags)), b""
    seen: dict[bytes, int] = {}
    for tag, data in tags.items():
        if data not in seen:
            seen[data] = place + len(body)
            body += data + b"\0" * (-len(data) % 4)
        table += struct.pack(">4sII", tag.encode(), seen[data], len(data))
    size = place + len(body)
    header = struct.pack(
        ">I4sI4s4s4s6H4s4sI4sI8sI3I4s44x",
        size, b"\0" * 4, 0x02400000, b"mntr", space, b"XYZ ",
        2026, 1, 1, 0, 0, 0,
        b"acsp", b"\0" * 4, 0, b"\0" * 4, 0, b"\0" * 8, 0,
        *(round(value * 65536) for value in _D50),
        b"\0" * 4,
    )  # fmt: skip
    return header + table + body


def _xyz(x: float, y: float, z: float) -> bytes:
    return struct.pack(">4s4x3i", b"XYZ ", *(round(value * 65536) for value in (x, y, z)))


def _text(text: str) -> bytes:
    return struct.pack(">4s4x", b"text") + text.encode("ascii") + b"\0"


def _description(text: str) -> bytes:
    ascii_text = text.encode("ascii") + b"\0"
    return struct.pack(">4s4xI", b"desc", len(ascii_text)) + ascii_text + b"\0" * (4 + 4 + 2 + 1 + 67)


def _curve(linear: bool) -> bytes:
    if linear:
        return struct.pack(">4s4xI", b"curv", 0)
    tone = np.linspace(0, 1, 1024)
    light = np.where(tone <= 0.04045, tone / 12.92, ((tone + 0.055) / 1.055) ** 2.4)
    return struct.pack(">4s4xI", b"curv", 1024) + np.round(light * 65535).astype(">u2").tobytes()
