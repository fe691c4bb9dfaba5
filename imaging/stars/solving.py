"""Solving a list of files, one after the other, each with what the ones before taught; and what is written down."""

from __future__ import annotations

from collections.abc import Callable, Iterator
from dataclasses import dataclass, replace
from pathlib import Path
from typing import Any

import numpy as np

from imaging.frames.calibrating import Calibration
from imaging.frames.frame import Frame
from imaging.frames.reading import read_frame
from imaging.stars.detection import Detections
from imaging.stars.solution import PlateSolution
from imaging.stars.solve import Hint, detect_frame, solve_frame
from planner.errors import FrameSetAside, NoSolutionError


@dataclass(frozen=True)
class Solved:
    """What became of one file: a solution, or the reason why there is none."""

    path: Path
    solution: PlateSolution | None
    reason: str | None
    frame: Frame | None = None
    found: Detections | None = None

    def as_object(self) -> dict[str, Any]:
        """Return the entry of `solve --json`."""
        one = self.solution
        return {
            "file": str(self.path),
            "solved": one is not None,
            "center_ra_deg": one and round(one.center_ra_deg, 7),
            "center_dec_deg": one and round(one.center_dec_deg, 7),
            "center_sigma_arcsec": one and round(_center_sigma_arcsec(one), 4),
            "scale_arcsec_px": one and round(one.scale_arcsec_px, 7),
            "position_angle_deg": one and round(one.position_angle_deg, 5),
            "mirrored": one and one.mirrored,
            "width_px": one and one.width_px,
            "height_px": one and one.height_px,
            "stars_found": None if self.found is None else len(self.found),
            "stars_matched": one and len(one.matched.x_px),
            "rms_px": one and round(one.rms_px, 4),
            "false_alarm_log10": one and round(one.false_alarm_log10, 1),
            "how": one and one.how,
            "reason": self.reason,
        }


def solve_files(
    paths: list[Path],
    hint: Hint,
    zone: str | None = None,
    blind: bool = True,
    tick: Callable[[int, int], None] | None = None,
    index_tick: Callable[[int, int], None] | None = None,
    calibration: Calibration | None = None,
    file_time: bool = False,
) -> Iterator[Solved]:
    """Yield what became of each file, in order; a frame that cannot be used does not stop the run.

    A frame is tried from the one solved before it, then with the hint, then blind. `index_tick` reports the
    building of the blind index. `calibration`: what is taken off each frame first. `file_time`: fall back on
    the modification time of a file that tells no time.
    """
    previous: PlateSolution | None = None
    for number, path in enumerate(paths):
        solved = _solve_one(path, hint, previous, zone, blind, index_tick, calibration, file_time)
        previous = solved.solution or previous
        if tick is not None:
            tick(number + 1, len(paths))
        yield solved


def _solve_one(
    path: Path,
    hint: Hint,
    previous: PlateSolution | None,
    zone: str | None,
    blind: bool,
    index_tick: Callable[[int, int], None] | None,
    calibration: Calibration | None,
    file_time: bool,
) -> Solved:
    frame, found = None, None
    try:
        frame = read_frame(path, zone, calibration=calibration, file_time=file_time)
        found = detect_frame(frame)
        if hint.scale_arcsec_px is None and frame.scale_hint_arcsec_px is not None:
            hint = replace(hint, scale_arcsec_px=frame.scale_hint_arcsec_px)
        if hint.near is None:
            hint = replace(hint, near=pointing_of(frame.header))
        if previous is not None and (previous.height_px, previous.width_px) != frame.data.shape:
            previous = None
        solution = solve_frame(
            frame,
            hint.near,
            hint.scale_arcsec_px,
            previous,
            hint.rotation_deg,
            hint.parity,
            detections=found,
            scale_tolerance=hint.scale_tolerance,
            lens=hint.lens,
            blind=blind,
            tick=index_tick,
        )
    except FrameSetAside as aside:
        return Solved(path, None, aside.reason, frame, found)
    except NoSolutionError as none:
        return Solved(path, None, str(none), frame, found)
    return Solved(path, solution, None, frame, found)


def pointing_of(header: dict[str, Any]) -> tuple[float, float] | None:
    """Return where a header says that the telescope pointed (ra_deg, dec_deg), or None.

    `RA`, `DEC` in degrees and `OBJCTRA`, `OBJCTDEC` in sexagesimal hours and degrees (common practice, no source). A
    hint only: it decides nothing.
    """
    for ra_key, dec_key in (("RA", "DEC"), ("OBJCTRA", "OBJCTDEC"), ("TELRA", "TELDEC")):
        ra, dec = _angle(header.get(ra_key)), _angle(header.get(dec_key))
        if ra is None or dec is None:
            continue
        if isinstance(header.get(ra_key), str) and any(mark in str(header[ra_key]).strip() for mark in ": "):
            ra *= 15.0
        if 0 <= ra <= 360 and -90 <= dec <= 90:
            return ra % 360, dec
    return None


def _angle(value: Any) -> float | None:
    try:
        parts = [float(part) for part in str(value).replace(":", " ").split()]
    except ValueError:
        return None
    if not 1 <= len(parts) <= 3:
        return None
    size = abs(parts[0]) + sum(part / 60 ** (i + 1) for i, part in enumerate(parts[1:]))
    return -size if str(value).strip().startswith("-") else size


def _center_sigma_arcsec(solution: PlateSolution) -> float:
    return float(np.sqrt(np.trace(solution.covariance_at_center_px2) / 2) * solution.scale_arcsec_px)


def wcs_header(solution: PlateSolution, provenance: dict[str, str]) -> Any:
    """Return the FITS header of a solution: its WCS with SIP, and how well it is known."""
    header = solution.wcs.to_header(relax=True)
    header["IMAGEW"] = (solution.width_px, "[pixel] width of the frame")
    header["IMAGEH"] = (solution.height_px, "[pixel] height of the frame")
    header["STARS"] = (len(solution.matched.x_px), "catalogue stars matched")
    header["RMSPX"] = (round(solution.rms_px, 4), "[pixel] residual, both axes together")
    header["SIGCENPX"] = (
        round(float(np.sqrt(np.trace(solution.covariance_at_center_px2) / 2)), 5),
        "[pixel] 1-sigma of the solution in the middle",
    )
    header["CHANCE"] = (round(solution.false_alarm_log10, 1), "log10 of the false-alarm probability")
    for role, version in provenance.items():
        header.add_history(f"{role}: {version}")
    return header


def write_wcs(solution: PlateSolution, path: Path, force: bool = False) -> None:
    """Write a solution as a FITS file without pixels, beside the frames; raises OutputExistsError."""
    from astropy.io import fits

    from planner.outputs import whole_file
    from planner.provenance import versions

    header = wcs_header(solution, versions())
    with whole_file(path, force) as part:
        fits.PrimaryHDU(header=header).writeto(part, overwrite=True)


def write_copy(solved: Solved, path: Path, force: bool = False) -> None:
    """Write a FITS copy of a frame (its luminance) with the solution in its header; the original stays as it is."""
    from astropy.io import fits

    from planner.outputs import whole_file
    from planner.provenance import versions

    assert solved.solution is not None
    assert solved.frame is not None
    header = wcs_header(solved.solution, versions())
    if solved.frame.time is not None:
        from planner.sky.timescale import utc_iso

        header["DATE-AVG"] = (
            utc_iso(solved.frame.time.middle_tt_s, 3).rstrip("Z"),
            "UTC, middle of the exposure",
        )
        header["TIMESYS"] = "UTC"
    header["ROWORDER"] = "TOP-DOWN" if solved.frame.row_zero == "top" else "BOTTOM-UP"
    with whole_file(path, force) as part:
        fits.PrimaryHDU(np.asarray(solved.frame.data, dtype=np.float32), header=header).writeto(
            part, overwrite=True
        )
