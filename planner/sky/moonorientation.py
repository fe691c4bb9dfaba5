"""How the Moon is turned: its mean-Earth axes on the sky, from an orientation kernel or from the analytic libration.

A kernel is a binary file of Euler angles of the principal axes (public DAF/PCK layout, type 2: NAIF, "PCK Required
Reading"); a frame kernel (text) turns principal axes into the mean-Earth axes of maps. Without one, or outside its
span, the published series is used (`planner.sky.bodies.moon_orientation_deg`), which is good to 150 m.
"""

from __future__ import annotations

import re
from dataclasses import dataclass
from pathlib import Path

import numpy as np

from planner.errors import InputError
from planner.sky.bodies import ARCSEC, moon_orientation_deg
from planner.sky.ephemeris import ChebyshevSegment, mapped_segment
from planner.sky.timescale import tdb_s

# From principal to mean-Earth axes for DE421: rotations about axes 3, 2, 1 in arcseconds.
# Williams, Boggs & Folkner 2008, JPL IOM 335-JW,DB,WF-20080314-001, eq. 5
_DE421_TO_MEAN_EARTH: tuple[tuple[float, ...], tuple[int, ...]] = ((67.92, 78.56, 0.30), (3, 2, 1))
ANALYTIC = "analytic libration (IAU WGCCRE 2009, 150 m)"


@dataclass(frozen=True, eq=False)
class MoonOrientation:
    """Orientation of the Moon; `segment=None` is the analytic libration alone."""

    segment: ChebyshevSegment | None = None
    to_mean_earth: np.ndarray | None = None
    name: str = ""

    def source(self, tt_s: float) -> str:
        """Return what the orientation at an instant comes from, for people."""
        if self.segment is not None and self._covered(np.array([tt_s]))[0]:
            return self.name
        if self.segment is not None:
            return f"{ANALYTIC}; {self.name} does not reach this date"
        return ANALYTIC

    def mean_earth_axes(self, tt_s: np.ndarray) -> np.ndarray:
        """Return the matrix ICRS to mean-Earth axes, (n, 3, 3): kernel where it reaches, else the analytic series."""
        tt_s = np.atleast_1d(np.asarray(tt_s, float))
        inside = self._covered(tt_s)
        axes = np.empty((len(tt_s), 3, 3))
        if inside.any():
            assert self.segment is not None
            (phi, delta, w), _ = self.segment.evaluate(tdb_s(tt_s[inside]), False)
            principal = _about(3, w) @ _about(1, delta) @ _about(3, phi)
            axes[inside] = self.to_mean_earth @ principal
        if not inside.all():
            ra, dec, w_deg = moon_orientation_deg(tt_s[~inside])
            axes[~inside] = (
                _about(3, np.radians(w_deg))
                @ _about(1, np.radians(90.0 - dec))
                @ _about(3, np.radians(90.0 + ra))
            )
        return axes

    def _covered(self, tt_s: np.ndarray) -> np.ndarray:
        if self.segment is None:
            return np.zeros(len(tt_s), bool)
        return (tt_s > self.segment.start_s + 1.0) & (tt_s < self.segment.end_s - 1.0)


def moon_orientation(
    kernel: str | Path | None = None, frame_kernel: str | Path | None = None
) -> MoonOrientation:
    """Return the Moon's orientation from a binary kernel and its frame kernel; without a kernel the analytic one.

    Without a frame kernel the rotation published for DE421 is used. Raises InputError when a file named cannot be
    read as what it should be.
    """
    if kernel is None:
        return MoonOrientation()
    path = Path(kernel)
    segment, frame_id = _principal_axes(path)
    if frame_kernel is None:
        angles, axes = _DE421_TO_MEAN_EARTH
        source = "frame rotation of DE421"
    else:
        angles, axes = _frame_rotation(Path(frame_kernel), frame_id)
        source = Path(frame_kernel).name
    # the kernel gives mean-Earth to principal as [a1]_axis1 [a2]_axis2 [a3]_axis3; the inverse is wanted
    turn = np.eye(3)
    for angle, axis in zip(angles, axes, strict=True):
        turn = turn @ _about(axis, np.array([angle * ARCSEC]))[0]
    return MoonOrientation(segment, turn.T, f"{path.name} with {source}")


def _principal_axes(path: Path) -> tuple[ChebyshevSegment, int]:
    from jplephem.pck import PCK

    try:
        kernel = PCK.open(str(path))
        segments = [segment for segment in kernel.segments if segment.data_type == 2]
        if len(segments) != 1 or segments[0].frame != 1:
            raise ValueError("not one segment of type 2 on ICRF axes")
        segment, frame_id = mapped_segment(segments[0]), int(segments[0].body)
        kernel.close()
    except (OSError, ValueError, IndexError) as error:
        raise InputError(
            f"{path}: found no readable lunar orientation ({error}); allowed is a binary kernel (.bpc) of the Moon's "
            "principal axes"
        ) from error
    return segment, frame_id


def _frame_rotation(path: Path, principal_id: int) -> tuple[tuple[float, ...], tuple[int, ...]]:
    """Return angles (arcseconds) and axes of the mean-Earth frame that is defined relative to the kernel's frame."""
    try:
        text = path.read_text(encoding="utf-8", errors="strict")
    except (OSError, UnicodeDecodeError) as error:
        raise InputError(
            f"{path}: found no readable frame kernel ({error}); allowed is a text kernel (.tf)"
        ) from error
    data = "\n".join(re.findall(r"^\s*\\begindata\s*$(.*?)(?:^\s*\\begintext\s*$|\Z)", text, re.M | re.S))
    values = dict(re.findall(r"(\w+)\s*=\s*(\([^)]*\)|'[^']*'|\S+)", data))
    principal = next(
        (values[f"FRAME_{key}_NAME"] for key in [principal_id] if f"FRAME_{key}_NAME" in values), None
    )
    for key, relative in values.items():
        found = re.fullmatch(r"TKFRAME_(\w+)_RELATIVE", key)
        if not found or relative != principal or values.get(f"TKFRAME_{found[1]}_SPEC") != "'ANGLES'":
            continue
        if values.get(f"TKFRAME_{found[1]}_UNITS") != "'ARCSECONDS'":
            break
        angles = tuple(float(part) for part in _members(values[f"TKFRAME_{found[1]}_ANGLES"]))
        axes = tuple(int(part) for part in _members(values[f"TKFRAME_{found[1]}_AXES"]))
        return angles, axes
    raise InputError(
        f"{path}: found no frame given by angles in arcseconds relative to frame {principal_id}; allowed is the "
        "frame kernel that belongs to the orientation kernel"
    )


def _members(text: str) -> list[str]:
    return re.split(r"[,\s]+", text.strip("() \n"))


def _about(axis: int, angle: np.ndarray) -> np.ndarray:
    """Return frame rotations about axis 1, 2 or 3 by angles in radians, (n, 3, 3)."""
    cos, sin = np.cos(angle), np.sin(angle)
    matrix = np.zeros((len(angle), 3, 3))
    one, two = axis % 3, (axis + 1) % 3
    matrix[:, axis - 1, axis - 1] = 1.0
    matrix[:, one, one], matrix[:, two, two] = cos, cos
    matrix[:, one, two], matrix[:, two, one] = sin, -sin
    return matrix
