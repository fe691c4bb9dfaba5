"""Stars at a date: all stars in a field, and one star by name, with proper motion and parallax.

To G = 10 everywhere on the sky, and as deep as a catalogue that the user names (`deeper_catalogue`). Positions are
accurate to what `sigma_mas` says: 0.2 mas at 2016.0, then growing with the uncertainty of the motion (0.05 mas/yr where
Hipparcos saw the star, 20 mas/yr where nobody did).
"""

from __future__ import annotations

import re
from dataclasses import dataclass
from importlib.resources import files

import numpy as np

from planner.errors import InputError
from planner.sky.bodies import AU_KM
from planner.sky.ephemeris import position_km
from planner.sky.observer import Observer
from planner.sky.places import observer_position_km, radec_deg, separation_arcsec, unit_vector
from planner.sky.starlist import EPOCH_YEAR, STAR, stars_in_force
from planner.sky.timescale import YEAR_S, tdb_s

_MAS = np.pi / 648e6
_EPOCH_TT_S = (EPOCH_YEAR - 2000.0) * YEAR_S
_FASTEST_DEG_YEAR = 10.4 / 3600.0  # Barnard's star


def _proper_names() -> dict[int, str]:
    text = files("planner.sky").joinpath("starnames.csv").read_text(encoding="utf-8")
    pairs = [line.split(",") for line in text.splitlines() if not line.startswith("#")][1:]
    return {int(hip): name for name, hip in pairs}


# Names of the IAU by Hipparcos number: the brightest stars, and those the Moon can cover
PROPER_NAMES = _proper_names()
NAMED = {name.lower(): hip for hip, name in PROPER_NAMES.items()}


@dataclass(frozen=True)
class StarField:
    """Stars at one date; arrays of shape (n,), brightest first.

    `ra_deg`, `dec_deg`: ICRS at the date, with proper motion and the parallax seen from the geocentre.
    `magnitude`: what a camera with a visual response records: Johnson V from Gaia's three bands.
    `bp_rp`: colour, NaN where unknown. `sigma_mas`: 1-sigma of the position, one coordinate, at the date.
    `index`: rows of the star list.
    """

    ra_deg: np.ndarray
    dec_deg: np.ndarray
    magnitude: np.ndarray
    g_mag: np.ndarray
    bp_rp: np.ndarray
    sigma_mas: np.ndarray
    index: np.ndarray

    def __len__(self) -> int:
        """Return the number of stars."""
        return len(self.index)

    @property
    def name(self) -> tuple[str, ...]:
        """Names, made when asked for: `HIP 21421`, or `Gaia DR3 ...`."""
        return star_names(self.index)

    def select(self, keep: np.ndarray) -> StarField:
        """Return the stars that a mask or an array of rows keeps."""
        return StarField(
            *(
                getattr(self, name)[keep]
                for name in ("ra_deg", "dec_deg", "magnitude", "g_mag", "bp_rp", "sigma_mas", "index")
            )
        )

    def stars(self) -> list[Star]:
        """Return each as a `Star`, with its motion."""
        return [_star(stars_in_force()[row]) for row in self.index]


@dataclass(frozen=True)
class Star:
    """One star with its motion: ICRS position at `epoch_year`, proper motion in right ascension times cos dec.

    The position was measured, with its sigma, at `sigma_year`.
    """

    name: str
    ra_deg: float
    dec_deg: float
    epoch_year: float
    pm_ra_mas_yr: float
    pm_dec_mas_yr: float
    parallax_mas: float
    magnitude: float
    g_mag: float
    sigma_position_mas: float
    sigma_pm_mas_yr: float
    sigma_year: float
    sigma_parallax_mas: float = 0.0

    def sigma_mas(self, tt_s: np.ndarray | float) -> np.ndarray:
        """Return the 1-sigma of the position at a date, one coordinate, in mas."""
        years = np.asarray(tt_s, float) / YEAR_S + 2000.0 - self.sigma_year
        return np.sqrt(
            self.sigma_position_mas**2 + (self.sigma_pm_mas_yr * years) ** 2 + self.sigma_parallax_mas**2
        )

    def vector(
        self, observer: Observer | None, tt_s: np.ndarray, observer_km: np.ndarray | None = None
    ) -> np.ndarray:
        """Return un-aberrated unit vectors (3, n), ICRS axes, with proper motion and parallax at these times."""
        tt_s = np.atleast_1d(np.asarray(tt_s, float))
        here = observer_position_km(observer, tt_s) if observer_km is None else observer_km
        years = tt_s / YEAR_S + 2000.0 - self.epoch_year
        ra, dec = np.radians(self.ra_deg), np.radians(self.dec_deg)
        start = unit_vector(self.ra_deg, self.dec_deg)
        east = np.array([-np.sin(ra), np.cos(ra), 0.0])
        north = np.array([-np.sin(dec) * np.cos(ra), -np.sin(dec) * np.sin(ra), np.cos(dec)])
        motion = (east * self.pm_ra_mas_yr + north * self.pm_dec_mas_yr) * _MAS
        vector = start[:, None] + motion[:, None] * years - self.parallax_mas * _MAS * here / AU_KM
        return vector / np.sqrt((vector**2).sum(axis=0))

    def place(self, observer: Observer | None, tt_s: np.ndarray) -> tuple[np.ndarray, np.ndarray]:
        """Return un-aberrated (ra_deg, dec_deg), ICRS axes, with proper motion and parallax at these times."""
        return radec_deg(self.vector(observer, tt_s))


def stars_in_field(
    ra_deg: float,
    dec_deg: float,
    radius_deg: float,
    tt_s: float,
    magnitude_limit: float | None = None,
    brightest: int | None = None,
) -> StarField:
    """Return the stars within a radius of a direction (ICRS), at the date, brightest first.

    `magnitude_limit` is in `magnitude` (V); `brightest`: about so many of them at most. A field of 20 degrees takes
    20 ms.
    """
    table = stars_in_force()
    slack = _FASTEST_DEG_YEAR * abs(tt_s - _EPOCH_TT_S) / YEAR_S + 0.001
    dec = table["dec_deg"]
    low, high = np.searchsorted(dec, [dec_deg - radius_deg - slack, dec_deg + radius_deg + slack])
    rows = np.arange(low, high)
    if magnitude_limit is not None:
        rows = rows[table["v"][low:high] <= magnitude_limit]
    reach = np.sin(np.radians(min(radius_deg + slack, 90.0))) / max(np.cos(np.radians(dec_deg)), 1e-9)
    if (
        reach < 1.0 and abs(dec_deg) + radius_deg + slack < 90.0
    ):  # away from the poles a window in right ascension
        away = np.abs((table["ra_deg"][rows] - ra_deg + 180.0) % 360.0 - 180.0)
        rows = rows[away <= np.degrees(np.arcsin(reach)) + slack]
    centre = unit_vector(ra_deg, dec_deg)
    near = np.cos(np.radians(min(radius_deg + slack, 180.0)))
    part = unit_vector(table["ra_deg"][rows], dec[rows])
    rows = rows[centre @ part >= near - 1e-12]
    if brightest is not None and len(rows) > brightest:
        rows = rows[np.argpartition(np.asarray(table["v"][rows]), brightest - 1)[:brightest]]
    field = _at_date(rows, tt_s)
    place = unit_vector(field.ra_deg, field.dec_deg)
    inside = separation_arcsec(place, np.broadcast_to(centre[:, None], place.shape)) <= radius_deg * 3600.0
    return field.select(inside)


def all_stars(tt_s: float, magnitude_limit: float | None = None) -> StarField:
    """Return all stars at the date, brightest first, to a limit of `magnitude` (V)."""
    table = stars_in_force()
    rows = np.arange(len(table))
    if magnitude_limit is not None:
        rows = rows[np.asarray(table["v"]) <= magnitude_limit]
    return _at_date(rows, tt_s)


def _at_date(rows: np.ndarray, tt_s: float) -> StarField:
    table = stars_in_force()[rows]
    order = np.argsort(table["v"], kind="stable")
    table, rows = table[order], rows[order]
    years = (tt_s - _EPOCH_TT_S) / YEAR_S
    ra, dec = np.radians(table["ra_deg"]), np.radians(table["dec_deg"])
    earth_au = position_km("earth", tdb_s(np.array([tt_s])))[:, 0] / AU_KM
    x, y, z = unit_vector(table["ra_deg"], table["dec_deg"])
    east_au = -np.sin(ra) * earth_au[0] + np.cos(ra) * earth_au[1]
    north_au = (
        -np.sin(dec) * (np.cos(ra) * earth_au[0] + np.sin(ra) * earth_au[1]) + np.cos(dec) * earth_au[2]
    )
    parallax = table["parallax"].astype(float)
    east = (table["pm_ra"] * years - parallax * east_au) * _MAS
    north = (table["pm_dec"] * years - parallax * north_au) * _MAS
    moved = np.stack(
        [
            x - np.sin(ra) * east - np.sin(dec) * np.cos(ra) * north,
            y + np.cos(ra) * east - np.sin(dec) * np.sin(ra) * north,
            z + np.cos(dec) * north,
        ]
    )
    ra_deg, dec_deg = radec_deg(moved)
    return StarField(
        ra_deg=ra_deg,
        dec_deg=dec_deg,
        magnitude=table["v"].astype(float),
        g_mag=table["g"].astype(float),
        bp_rp=(table["bp"] - table["rp"]).astype(float),
        sigma_mas=np.hypot(
            table["sigma_mas"], table["sigma_pm"] * (years + EPOCH_YEAR - table["sigma_year"])
        ).astype(float),
        index=rows,
    )


def star_names(index: np.ndarray) -> tuple[str, ...]:
    """Return the names of rows of the star list: `HIP 21421`, or `Gaia DR3 ...`."""
    return tuple(_name(row) for row in stars_in_force()[index])


def _name(row: np.void) -> str:
    if row["hip"] > 0:
        return f"HIP {row['hip']}"
    own = (
        "installed" in (row.dtype.names or ()) and not row["installed"]
    )  # of a catalogue that the user named
    if not own:
        return f"Gaia DR3 {row['source']}"
    return str(row["source"]) if row["source"] > 0 else f"{row['ra_deg']:.5f},{row['dec_deg']:+.5f}"


def _star(row: np.void) -> Star:
    return Star(
        name=_name(row),
        ra_deg=float(row["ra_deg"]),
        dec_deg=float(row["dec_deg"]),
        epoch_year=EPOCH_YEAR,
        pm_ra_mas_yr=float(row["pm_ra"]),
        pm_dec_mas_yr=float(row["pm_dec"]),
        parallax_mas=float(row["parallax"]),
        magnitude=float(row["v"]),
        g_mag=float(row["g"]),
        sigma_position_mas=float(row["sigma_mas"]),
        sigma_pm_mas_yr=float(row["sigma_pm"]),
        sigma_year=float(row["sigma_year"]),
        sigma_parallax_mas=float(row["sigma_parallax"]),
    )


def star(
    name: str,
    *,
    epoch_year: float | None = None,
    pm_mas_yr: tuple[float, float] | None = None,
    parallax_mas: float = 0.0,
    magnitude: float | None = None,
    sigma_mas: float = 1.0,
) -> Star:
    """Return one star: `HIP 21421`, a Gaia source id, an IAU name such as `Aldebaran`, or `RA,DEC` in degrees (ICRS).

    The keywords belong to `RA,DEC` alone: the epoch of the position (default 2016.0), its proper motion
    (right ascension times cos dec), parallax, magnitude, and 1-sigma of the position.
    Raises InputError when the star does not exist or the text is none of these.
    """
    text = name.strip()
    if "," in text:
        return _given_star(text, epoch_year, pm_mas_yr, parallax_mas, magnitude, sigma_mas)
    if epoch_year is not None or pm_mas_yr is not None:
        raise InputError(f"star: found {name!r} with an epoch or a motion; allowed only with RA,DEC")
    table = stars_in_force()
    hip = re.fullmatch(r"hip\s*(\d{1,6})", text, re.IGNORECASE)
    number = int(hip[1]) if hip else NAMED.get(text.lower())
    if number is not None:
        found = np.flatnonzero((table["hip"] == number) & (table["hip"] > 0))
    elif source := re.fullmatch(r"(?:gaia\s*(?:dr3)?\s*)?(\d{7,20})", text, re.IGNORECASE):
        found = np.flatnonzero((table["source"] == min(int(source[1]), 2**63 - 1)) & (table["source"] > 0))
    else:
        from difflib import get_close_matches

        close = get_close_matches(text.lower(), NAMED, n=1)
        hint = f" (did you mean {PROPER_NAMES[NAMED[close[0]]]}?)" if close else ""
        raise InputError(
            f"star: found {name!r}{hint}; allowed are `HIP 21421`, a Gaia DR3 source id, or RA,DEC in degrees"
        )
    if not len(found):
        raise InputError(
            f"star: found {name!r}, which the catalogue does not hold; allowed are stars of Hipparcos-2, "
            "of Gaia DR3 to G = 10, or RA,DEC in degrees"
        )
    return _star(table[found[0]])


def _given_star(
    text: str,
    epoch_year: float | None,
    pm_mas_yr: tuple[float, float] | None,
    parallax_mas: float,
    magnitude: float | None,
    sigma_mas: float,
) -> Star:
    try:
        ra_deg, dec_deg = (float(part) for part in text.split(","))
    except ValueError:
        raise InputError(f"star: found {text!r}; allowed is RA,DEC in degrees, such as 68.98,16.51") from None
    if not (0.0 <= ra_deg < 360.0 and -90.0 <= dec_deg <= 90.0):
        raise InputError(f"star: found {text!r}; allowed are RA in [0, 360) and DEC in [-90, 90] degrees")
    brightness = np.nan if magnitude is None else magnitude
    return Star(
        name=f"{ra_deg:.5f},{dec_deg:+.5f}",
        ra_deg=ra_deg,
        dec_deg=dec_deg,
        epoch_year=EPOCH_YEAR if epoch_year is None else epoch_year,
        pm_ra_mas_yr=0.0 if pm_mas_yr is None else pm_mas_yr[0],
        pm_dec_mas_yr=0.0 if pm_mas_yr is None else pm_mas_yr[1],
        parallax_mas=parallax_mas,
        magnitude=brightness,
        g_mag=brightness,
        sigma_position_mas=sigma_mas,
        sigma_pm_mas_yr=20.0 if pm_mas_yr is None else 0.1,
        sigma_year=EPOCH_YEAR if epoch_year is None else epoch_year,
    )


__all__ = [
    "NAMED",
    "PROPER_NAMES",
    "STAR",
    "Star",
    "StarField",
    "all_stars",
    "star",
    "star_names",
    "stars_in_field",
]
