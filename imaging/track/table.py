"""track.ecsv: one row a frame, measured against predicted, with what was fitted to all frames in its header."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass, field, fields
from pathlib import Path
from typing import Any

import numpy as np

from planner.errors import InputError
from planner.outputs import whole_file

NAN = float("nan")


def _column(unit: str | None, description: str, default: Any = NAN) -> Any:
    return field(default=default, metadata={"unit": unit, "description": description})


@dataclass(frozen=True)
class TrackRow:
    """One frame: when, how it was solved, where the target is, where it should be, and the verdict.

    Pixels are 0-based array pixels; offsets are as seen, refraction included, from ICRS north through east.
    """

    file: str = _column(None, "name of the frame's file", "")
    frame_index: int = _column(None, "number of the frame within its file", 0)
    passage: str = _column(None, "passage of the plan that the frame falls into", "")
    utc_mid: str = _column(None, "mid-exposure as stamped, UTC", "")
    utc_sigma_s: float = _column("s", "1-sigma of the stamp by its own resolution")
    exposure_s: float = _column("s", "exposure")
    solved_by: str = _column(None, "stars, sun-limb, moon-limb or none", "none")
    x_px: float = _column("pix", "target, column")
    y_px: float = _column("pix", "target, row")
    sigma_x_px: float = _column("pix", "1-sigma of the target's column")
    sigma_y_px: float = _column("pix", "1-sigma of the target's row")
    reference_x_px: float = _column("pix", "centre of the reference disc, column")
    reference_y_px: float = _column("pix", "centre of the reference disc, row")
    reference_radius_px: float = _column("pix", "radius of the reference disc")
    reference_sigma_px: float = _column("pix", "1-sigma of the centre of the reference disc, one axis")
    scale_arcsec_px: float = _column("arcsec", "scale of the frame, arcseconds a pixel")
    rotation_deg: float = _column("deg", "position angle of the array's +y direction")
    parity: int = _column(None, "+1 the sky as seen (in a FITS array), -1 mirrored", 0)
    wcs_file: str = _column(None, "FITS header of the plate solution, beside the track", "")
    measured_ra_deg: float = _column("deg", "ICRS, un-aberrated topocentric")
    measured_dec_deg: float = _column("deg", "ICRS, un-aberrated topocentric")
    predicted_ra_deg: float = _column("deg", "ICRS, un-aberrated topocentric")
    predicted_dec_deg: float = _column("deg", "ICRS, un-aberrated topocentric")
    measured_east_arcsec: float = _column("arcsec", "offset from the reference disc's centre, as seen")
    measured_north_arcsec: float = _column("arcsec", "offset from the reference disc's centre, as seen")
    predicted_east_arcsec: float = _column("arcsec", "offset from the reference disc's centre, as seen")
    predicted_north_arcsec: float = _column("arcsec", "offset from the reference disc's centre, as seen")
    along_arcsec: float = _column("arcsec", "observed minus computed along the motion, clock as stamped")
    across_arcsec: float = _column("arcsec", "observed minus computed across it, to the left as seen")
    sigma_along_arcsec: float = _column("arcsec", "1-sigma, with the scatter the frames show")
    sigma_across_arcsec: float = _column("arcsec", "1-sigma, with the scatter the frames show")
    verdict: str = _column(None, "on-track, off-track or unmeasured", "unmeasured")
    reason: str = _column(None, "why a frame is off-track or unmeasured, or what was noted", "")


COLUMNS = {item.name: item for item in fields(TrackRow)}
LATER = ("reference_sigma_px",)  # columns that tracks written before they were thought of do without


@dataclass(frozen=True)
class Track:
    """A track read back: its rows as columns, (n,) arrays by name, and its header."""

    path: Path
    columns: dict[str, np.ndarray]
    meta: dict[str, Any]

    def __getitem__(self, name: str) -> np.ndarray:
        """Return a column."""
        return self.columns[name]

    def __len__(self) -> int:
        """Return the number of rows."""
        return len(self.columns["file"])

    @property
    def measured(self) -> np.ndarray:
        """Mask of the rows that hold a measured place."""
        return self.columns["verdict"] != "unmeasured"


def write_track(path: Path, rows: Sequence[TrackRow], meta: dict[str, Any], force: bool = False) -> None:
    """Write rows and header as ECSV (astropy); raises OutputExistsError when the file exists and not `force`."""
    from astropy.table import Column, Table

    table = Table()
    kinds: dict[str, Any] = {"str": str, "int": int, "float": float}
    for name, item in COLUMNS.items():
        values = [getattr(row, name) for row in rows]
        table[name] = Column(
            np.array(values, dtype=kinds[str(item.type)]),
            unit=item.metadata["unit"],
            description=item.metadata["description"],
        )
    table.meta.update(meta)
    with whole_file(path, force) as part:
        table.write(part, format="ascii.ecsv", overwrite=True)


def read_track(path: str | Path) -> Track:
    """Return a track; raises InputError when the file is none."""
    from astropy.table import Table

    path = Path(path)
    try:
        table = Table.read(path, format="ascii.ecsv")
    except FileNotFoundError:
        raise InputError(
            f"{path}: no such file; a track.ecsv written by `syzygraph check` is needed"
        ) from None
    except Exception as error:
        raise InputError(f"{path}: is not a track ({' '.join(str(error).split())[:120]})") from None
    for name in LATER:
        if name not in table.colnames:
            table[name] = np.full(len(table), np.nan)
    missing = [name for name in COLUMNS if name not in table.colnames]
    if missing:
        raise InputError(f"{path}: is not a track: column {missing[0]!r} is missing")
    columns = {}
    for name in COLUMNS:
        column = table[name]
        if hasattr(column, "filled"):
            column = column.filled("" if column.dtype.kind == "U" else np.nan)
        columns[name] = np.asarray(column)
    return Track(path, columns, dict(table.meta))
