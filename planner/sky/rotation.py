"""How far the Earth has turned: UT1 and polar motion, from published tables and beyond them.

Before 1962 Delta T comes from a published spline, then from daily tables, and after their last prediction from an
extrapolation whose uncertainty grows and is carried. Nothing is fetched and nothing goes stale.
"""

from __future__ import annotations

from dataclasses import dataclass
from functools import lru_cache
from importlib.resources import files

import numpy as np

from planner.errors import InputError

DAY_S = 86400.0
YEAR_S = 365.25 * DAY_S
J2000_MJD = 51544.5
TT_MINUS_TAI_S = 32.184

# 1-sigma of Delta T before the tables, by year. From 1800 on: how far two published reductions of the same lunar
# occultations (Morrison et al. 2021; McCarthy & Babcock 1986) lie apart. Earlier: the error column of Morrison &
# Stephenson 2004, J. Hist. Astron. 35, 327 (from memory).
_PAST_SIGMA_S = (
    (1550.0, 20.0),
    (1600.0, 15.0),
    (1650.0, 10.0),
    (1700.0, 5.0),
    (1800.0, 3.0),
    (1850.0, 1.5),
    (1900.0, 0.6),
    (1962.0, 0.3),
)
# Growth of UT1 beyond the tables: Brownian motion of the length of day, Huber 2006, J. Geodesy 80, 283 (formula as
# quoted by NASA/GSFC, "Uncertainty in Delta T"), times 1.6: 0.1, 0.9 and 2.6 s at 1, 5 and 10 years, as measured by
# extrapolating past tables (docs/notes/ut1_growth.py).
_HUBER_Q_MS2_YEAR = 0.058
_HUBER_SCALE = 1.6
_HUBER_SPAN_YEAR = 2500.0


@dataclass(frozen=True)
class EarthOrientation:
    """Daily and coarser nodes in TT seconds from J2000.0; arrays of shape (n,)."""

    tt_s: np.ndarray
    delta_t_s: np.ndarray
    sigma_s: np.ndarray
    pole_tt_s: np.ndarray
    pole_x_arcsec: np.ndarray
    pole_y_arcsec: np.ndarray
    leap_tt_s: np.ndarray
    leap_offset_s: np.ndarray
    leap_expiry_tt_s: float
    first_table_tt_s: float
    last_table_tt_s: float


def delta_t_s(tt_s: np.ndarray) -> np.ndarray:
    """Return TT - UT1 in seconds: Morrison et al. 2021 before 1962, IERS tables, then an extrapolation.

    The sub-daily tidal terms of UT1 (under 0.1 ms) are left out.
    """
    orientation = earth_orientation()
    return np.interp(tt_s, orientation.tt_s, orientation.delta_t_s)


def ut1_sigma_s(tt_s: np.ndarray) -> np.ndarray:
    """Return the 1-sigma of UT1 in seconds: the tables' own, and a growing one on both sides of them."""
    orientation = earth_orientation()
    return np.interp(tt_s, orientation.tt_s, orientation.sigma_s)


def polar_motion_arcsec(tt_s: np.ndarray) -> tuple[np.ndarray, np.ndarray]:
    """Return the pole (x, y) in arcseconds; outside the tables the secular pole (good to 0.2", 6 m)."""
    orientation = earth_orientation()
    year = 2000.0 + np.asarray(tt_s) / YEAR_S
    inside = (tt_s >= orientation.pole_tt_s[0]) & (tt_s <= orientation.pole_tt_s[-1])
    x = np.interp(tt_s, orientation.pole_tt_s, orientation.pole_x_arcsec)
    y = np.interp(tt_s, orientation.pole_tt_s, orientation.pole_y_arcsec)
    recent = np.clip(year, 1900.0, 2100.0) - 2000.0
    # Secular pole: IERS Conventions (2010), update of 2018 to section 7.1.4, eq. 21.
    return (
        np.where(inside, x, 0.0550 + 0.001677 * recent),
        np.where(inside, y, 0.3205 + 0.003460 * recent),
    )


@lru_cache(maxsize=1)
def earth_orientation() -> EarthOrientation:
    """Read the installed tables once (about 50 ms); raises InputError when the package lacks them."""
    folder = files("astropy_iers_data").joinpath("data")
    try:
        finals = folder.joinpath("finals2000A.all").read_bytes()
        long_series = folder.joinpath("eopc04.1962-now").read_bytes()
        leaps = folder.joinpath("Leap_Second.dat").read_text(encoding="utf-8")
    except OSError as error:
        raise InputError(
            f"astropy-iers-data: {error}; allowed is a package that holds the IERS tables"
        ) from error
    leap_mjd, leap_offset, expiry_mjd = _leap_seconds(leaps)
    old = _eopc04(long_series)
    new = _finals2000a(finals)
    old = old[:, old[0] < new[0, 0]]
    mjd, x, y, ut1_utc, sigma = np.concatenate([old, new], axis=1)
    tai_utc = _tai_minus_utc(mjd, leap_mjd, leap_offset)
    table_tt_s = (mjd - J2000_MJD) * DAY_S + tai_utc + TT_MINUS_TAI_S
    table_delta_t = TT_MINUS_TAI_S + tai_utc - ut1_utc
    past_s = np.arange(1540.0, 1962.0, 0.05)
    past_tt_s = (past_s - 2000.0) * YEAR_S
    keep = past_tt_s < table_tt_s[0] - 30 * DAY_S
    past_tt_s, past_year = past_tt_s[keep], past_s[keep]
    # the spline ends 0.4 s below the tables of 1962; the step is spread over its last years, where atomic clocks began
    past_delta_t = _historic_delta_t(past_year)
    past_delta_t += (table_delta_t[0] - past_delta_t[-1]) * np.clip((past_year - 1950.0) / 6.0, 0.0, 1.0)
    future_s, future_delta_t, future_sigma = _future(table_tt_s, table_delta_t, sigma[-1])
    known, value = np.array(_PAST_SIGMA_S).T
    return EarthOrientation(
        tt_s=np.concatenate([past_tt_s, table_tt_s, future_s]),
        delta_t_s=np.concatenate([past_delta_t, table_delta_t, future_delta_t]),
        sigma_s=np.concatenate([np.exp(np.interp(past_year, known, np.log(value))), sigma, future_sigma]),
        pole_tt_s=table_tt_s,
        pole_x_arcsec=x,
        pole_y_arcsec=y,
        leap_tt_s=(leap_mjd - J2000_MJD) * DAY_S + leap_offset + TT_MINUS_TAI_S,
        leap_offset_s=leap_offset,
        leap_expiry_tt_s=(expiry_mjd - J2000_MJD) * DAY_S + leap_offset[-1] + TT_MINUS_TAI_S,
        first_table_tt_s=float(table_tt_s[0]),
        last_table_tt_s=float(table_tt_s[-1]),
    )


def _future(
    table_tt_s: np.ndarray, table_delta_t: np.ndarray, last_sigma: float
) -> tuple[np.ndarray, np.ndarray, np.ndarray]:
    """Extrapolate Delta T: the mean rate of the last year (which does best), bent towards the long-term parabola.

    The parabola is that of Stephenson, Morrison & Hohenkerk 2016, Proc. R. Soc. A 472, 20160404 (-320 + 32.5 u^2);
    a cubic meets it 800 years on.
    """
    start = 2000.0 + table_tt_s[-1] / YEAR_S
    recent = table_tt_s > table_tt_s[-1] - YEAR_S
    rate = np.polyfit(table_tt_s[recent] / YEAR_S, table_delta_t[recent], 1)[0]
    end = start + 800.0
    target, target_rate = -320.0 + 32.5 * ((end - 1825.0) / 100.0) ** 2, 0.65 * (end - 1825.0) / 100.0
    years = np.concatenate([np.arange(0.05, 20.0, 0.05), np.arange(20.0, 700.0, 0.5)])
    u, span = years / 800.0, 800.0
    delta_t = (
        (2 * u**3 - 3 * u**2 + 1) * table_delta_t[-1]
        + (u**3 - 2 * u**2 + u) * span * rate
        + (3 * u**2 - 2 * u**3) * target
        + (u**3 - u**2) * span * target_rate
    )
    huber_s = 365.25e-3 * years * np.sqrt(years * _HUBER_Q_MS2_YEAR / 3.0 * (1.0 + years / _HUBER_SPAN_YEAR))
    sigma = np.hypot(last_sigma, _HUBER_SCALE * huber_s)
    return table_tt_s[-1] + years * YEAR_S, delta_t, sigma


def _historic_delta_t(year: np.ndarray) -> np.ndarray:
    text = files("planner.sky").joinpath("delta_t_s15.csv").read_text(encoding="utf-8")
    rows = np.array([line.split(",") for line in text.splitlines() if line[0].isdigit()], float)
    start, end, a0, a1, a2, a3 = rows[np.searchsorted(rows[:, 0], year, side="right") - 1].T
    u = (year - start) / (end - start)
    return a0 + u * (a1 + u * (a2 + u * a3))


def _columns(raw: bytes, width: int, spans: tuple[tuple[int, int], ...]) -> np.ndarray:
    """Cut fixed-width lines into floats, (columns, rows); NaN where blank."""
    table = np.frombuffer(raw[: len(raw) // width * width], "S1").reshape(-1, width)
    fields = [np.ascontiguousarray(table[:, a:b]).view(f"S{b - a}").ravel() for a, b in spans]
    return np.array([np.where(np.char.strip(f) == b"", b"nan", f).astype(float) for f in fields])


def _finals2000a(raw: bytes) -> np.ndarray:
    width = raw.index(b"\n") + 1
    columns = _columns(raw, width, ((7, 15), (18, 27), (37, 46), (58, 68), (68, 78)))
    return columns[:, np.isfinite(columns[1]) & np.isfinite(columns[3])]


def _eopc04(raw: bytes) -> np.ndarray:
    body = raw[raw.index(b"\n1962") + 1 :]
    width = body.index(b"\n") + 1
    return _columns(body[: 4200 * width], width, ((16, 26), (26, 38), (38, 50), (50, 62), (134, 146)))


def _leap_seconds(text: str) -> tuple[np.ndarray, np.ndarray, float]:
    from datetime import UTC, datetime

    rows = [line.split() for line in text.splitlines() if line.strip() and not line.startswith("#")]
    expiry = next(line.split("on", 1)[1] for line in text.splitlines() if "File expires on" in line)
    moment = datetime.strptime(expiry.strip(), "%d %B %Y").replace(tzinfo=UTC)
    return (
        np.array([float(row[0]) for row in rows]),
        np.array([float(row[4]) for row in rows]),
        moment.timestamp() / DAY_S + 40587.0,
    )


def _tai_minus_utc(mjd: np.ndarray, leap_mjd: np.ndarray, leap_offset: np.ndarray) -> np.ndarray:
    """Return TAI - UTC: leap seconds from 1972, before that the drifting UTC of 1960-1972 as ERFA holds it."""
    offset = leap_offset[np.clip(np.searchsorted(leap_mjd, mjd, side="right") - 1, 0, None)]
    early = mjd < leap_mjd[0]
    if early.any():
        import erfa

        year, month, day, fraction = erfa.jd2cal(2400000.5, mjd[early])
        offset = offset.copy()
        offset[early] = erfa.dat(year, month, day, fraction)
    return offset
