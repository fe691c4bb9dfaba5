"""A star catalogue of the user's own, deeper than the installed one: FITS, VOTable, ECSV or CSV, read by astropy.

Needed are a right ascension, a declination and a magnitude; a proper motion (with its epoch), an epoch and a source id
are taken where they are. Positions are ICRS. Columns are known by the names that catalogues give them, in any case.
"""

from __future__ import annotations

from pathlib import Path
from typing import Any

import numpy as np

from planner.errors import InputError
from planner.sky.starlist import EPOCH_YEAR, STAR, UNKNOWN_MOTION_MAS_YEAR

# Names in use by the large catalogue services and by hand (common practice, no source); the first is what we suggest.
COLUMNS: dict[str, tuple[str, ...]] = {
    "ra": ("ra", "ra_deg", "raj2000", "ra_icrs", "_raj2000", "_ra_icrs", "_ra", "ra_j2000", "alpha", "right_ascension"),
    "dec": ("dec", "dec_deg", "dej2000", "decj2000", "de_icrs", "_dej2000", "_de_icrs", "_de", "dec_icrs", "de",
            "dec_j2000", "delta", "declination"),
    "magnitude": ("magnitude", "mag", "v", "vmag", "v_mag", "g", "gmag", "g_mag", "phot_g_mean_mag", "rmag", "r_mag",
                  "rpmag", "vtmag", "hpmag"),
    "pm_ra": ("pm_ra", "pmra", "pmra_mas_yr", "pm_ra_mas_yr", "pm_ra_cosdec"),
    "pm_dec": ("pm_dec", "pmdec", "pmde", "pmdec_mas_yr", "pm_dec_mas_yr"),
    "epoch": ("epoch", "ref_epoch", "epoch_year", "ep"),
    "source": ("source", "source_id", "gaia", "dr3_source_id"),
}  # fmt: skip
_NEEDED = ("ra", "dec", "magnitude")
_UNITS = {"ra": "deg", "dec": "deg", "pm_ra": "mas / yr", "pm_dec": "mas / yr", "epoch": "yr"}
_FORMATS = {
    ".fits": "fits", ".fit": "fits", ".fz": "fits", ".vot": "votable", ".votable": "votable", ".xml": "votable",
    ".ecsv": "ascii.ecsv", ".csv": "ascii.csv",
}  # fmt: skip
_MOST_ROWS = 20_000_000
_SIGMA_MAS = 30.0  # of a position whose error nobody states: the better surveys reach this (assumed)
_PLAIN_EPOCH = 2000.0  # of a position without epoch and motion


def read_catalogue(path: Path) -> np.ndarray:
    """Return the stars of a catalogue file as rows of dtype `STAR`, ICRS at 2016.0, in the order of the file.

    Right ascension and declination in degrees, motions in mas/yr (that of right ascension times cos dec), the epoch a
    year; a unit in the file is honoured. A motion needs an epoch: a column, or `epoch` in the table's metadata.
    Without both, positions are taken for 2000.0 and their motion as unknown. Rows with a blank are left out.
    Raises InputError with the column, what was found and what is allowed.
    """
    table = _table(path)
    names = {name.strip().lower(): name for name in table.colnames}
    chosen = {
        kind: next((names[one] for one in known if one in names), None) for kind, known in COLUMNS.items()
    }
    for kind in _NEEDED:
        if chosen[kind] is None:
            there = ", ".join(table.colnames[:12]) + (", ..." if len(table.colnames) > 12 else "")
            raise InputError(
                f"{path}: {kind}: found the columns {there}; allowed is one named {' or '.join(COLUMNS[kind][:5])}"
            )
    columns = {
        kind: _numbers(path, table, name, kind)
        for kind, name in chosen.items()
        if name is not None and kind != "source"
    }
    if ("pm_ra" in columns) != ("pm_dec" in columns):
        raise InputError(f"{path}: found one of the columns pm_ra, pm_dec; allowed are both or none")
    epoch = columns.get("epoch")
    if epoch is None:
        stated = _stated_epoch(path, table)
        if stated is None and "pm_ra" in columns:
            raise InputError(
                f"{path}: epoch: found a proper motion without its epoch; allowed is a column named epoch (a year), or "
                "epoch in the table's metadata"
            )
        epoch = np.full(len(table), _PLAIN_EPOCH if stated is None else stated)
    source = _sources(table, chosen["source"])
    good = np.isfinite(epoch)
    for kind in _NEEDED:
        good &= np.isfinite(columns[kind])
    if not good.any():
        raise InputError(f"{path}: found no row with ra, dec and magnitude; allowed are one or more")
    _check_range(path, chosen["ra"], columns["ra"][good], 0.0, 360.0, "degrees")
    _check_range(path, chosen["dec"], columns["dec"][good], -90.0, 90.0, "degrees")
    _check_range(path, chosen["magnitude"], columns["magnitude"][good], -30.0, 40.0, "magnitudes")
    _check_range(path, chosen["epoch"] or "epoch", epoch[good], 1800.0, 2200.0, "years")
    columns = {kind: values[good] for kind, values in columns.items()}
    return _stars(columns, epoch[good], source[good])


def _stars(columns: dict[str, np.ndarray], epoch: np.ndarray, source: np.ndarray) -> np.ndarray:
    stars = np.zeros(len(epoch), STAR)
    nothing = np.full(len(epoch), np.nan)
    pm_ra, pm_dec = columns.get("pm_ra", nothing), columns.get("pm_dec", nothing)
    known = np.isfinite(pm_ra) & np.isfinite(pm_dec)
    years = EPOCH_YEAR - epoch
    ra, dec = np.radians(columns["ra"]), np.radians(columns["dec"])
    step = np.pi / 648e6 * years
    east, north = (np.where(known, motion, 0.0) * step for motion in (pm_ra, pm_dec))
    # along the tangent at the old place, as the motions are given
    x = np.cos(dec) * np.cos(ra) - np.sin(ra) * east - np.sin(dec) * np.cos(ra) * north
    y = np.cos(dec) * np.sin(ra) + np.cos(ra) * east - np.sin(dec) * np.sin(ra) * north
    z = np.sin(dec) + np.cos(dec) * north
    stars["ra_deg"] = np.degrees(np.arctan2(y, x)) % 360.0
    stars["dec_deg"] = np.degrees(np.arctan2(z, np.hypot(x, y)))
    stars["pm_ra"], stars["pm_dec"] = (np.where(known, motion, 0.0) for motion in (pm_ra, pm_dec))
    stars["sigma_mas"], stars["sigma_year"] = _SIGMA_MAS, epoch
    stars["sigma_pm"] = np.where(known, 1.0, UNKNOWN_MOTION_MAS_YEAR)
    stars["g"] = stars["v"] = columns["magnitude"]
    stars["bp"], stars["rp"] = np.nan, np.nan
    stars["source"] = source
    return stars


def _table(path: Path) -> Any:
    import warnings

    from astropy.table import Table

    kind = _FORMATS.get(Path(path).suffix.lower())
    if kind is None:
        raise InputError(f"{path}: found a catalogue named {Path(path).suffix or 'without suffix'}; "
                         f"allowed are {', '.join(_FORMATS)}")  # fmt: skip
    if not Path(path).is_file():
        raise InputError(f"{path}: found no such file; allowed is a star catalogue")
    try:
        with warnings.catch_warnings():
            warnings.simplefilter("ignore")
            table = Table.read(path, format=kind)
    except Exception as error:  # the readers raise anything on a file that is none
        raise InputError(
            f"{path}: found a file that is no {kind} table ({' '.join(str(error).split())[:120]})"
        ) from None
    if not 0 < len(table) <= _MOST_ROWS:
        raise InputError(f"{path}: found {len(table)} rows; allowed are 1 to {_MOST_ROWS}")
    return table


def _numbers(path: Path, table: Any, name: str, kind: str) -> np.ndarray:
    """Return a column as float64 in our unit, NaN for blanks."""
    column = table[name]
    if column.dtype.kind not in "fiu":
        example = next((str(one) for one in column if str(one) not in ("--", "")), "blanks")
        raise InputError(
            f"{path}: {name}: found {example[:40]!r}; allowed are numbers, in {_UNITS.get(kind, 'magnitudes')}"
        )
    values = np.ma.filled(
        np.ma.asarray(column.data if hasattr(column, "data") else column).astype(float), np.nan
    )
    unit = getattr(column, "unit", None)
    if unit is not None and kind in _UNITS:
        from astropy import units as u

        try:
            values = values * u.Unit(unit).to(u.Unit(_UNITS[kind]))
        except (u.UnitConversionError, TypeError, ValueError):
            raise InputError(
                f"{path}: {name}: found the unit {unit}; allowed is one of {_UNITS[kind]}"
            ) from None
    return np.asarray(values, dtype=float)


def _sources(table: Any, name: str | None) -> np.ndarray:
    """Return source ids where the column holds whole numbers, else 0."""
    if name is None or table[name].dtype.kind not in "iu":
        return np.zeros(len(table), dtype=np.int64)
    return np.ma.filled(np.ma.asarray(table[name]), 0).astype(np.int64)


def _stated_epoch(path: Path, table: Any) -> float | None:
    for key, value in table.meta.items():
        if str(key).strip().lower() in COLUMNS["epoch"]:
            try:
                return float(str(value).strip().lstrip("Jj"))
            except ValueError:
                raise InputError(
                    f"{path}: {key}: found {value!r}; allowed is a year such as 2016.0"
                ) from None
    return None


def _check_range(
    path: Path, name: str | None, values: np.ndarray, low: float, high: float, unit: str
) -> None:
    beyond = (values < low) | (values > high)
    if beyond.any():
        raise InputError(
            f"{path}: {name}: found {values[beyond][0]:g}; allowed are {low:g} to {high:g} {unit}"
        )
