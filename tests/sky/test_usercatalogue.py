"""A catalogue that the user names adds its stars to the installed ones, and a wrong one says what is wrong."""

from __future__ import annotations

import numpy as np
import pytest
from astropy import units as u
from astropy.coordinates import SkyCoord
from astropy.table import Table
from astropy.time import Time

from planner.errors import InputError
from planner.sky import starlist
from planner.sky.stars import star_names, stars_in_field
from planner.sky.usercatalogue import read_catalogue

TT_2027 = 27 * 365.25 * 86400.0
RA, DEC = 120.0, 20.0


def faint(count=40, epoch=2015.5, seed=1):
    """Stars of 11 to 14 that no installed catalogue holds, with motions (invented)."""
    rng = np.random.default_rng(seed)
    return Table(
        {
            "ra": RA + rng.uniform(-0.3, 0.3, count),
            "dec": DEC + rng.uniform(-0.3, 0.3, count),
            "mag": rng.uniform(11, 14, count),
            "pmra": rng.normal(0, 30, count),
            "pmdec": rng.normal(0, 30, count),
            "epoch": np.full(count, epoch),
        }
    )


@pytest.mark.parametrize(
    ("name", "form"),
    [("a.fits", "fits"), ("a.vot", "votable"), ("a.ecsv", "ascii.ecsv"), ("a.csv", "ascii.csv")],
)
def test_every_format_gives_the_same_stars(tmp_path, name, form):
    table = faint()
    table.write(tmp_path / name, format=form)
    stars = read_catalogue(tmp_path / name)
    assert len(stars) == 40
    # astropy carries the same motions to 2016.0
    there = SkyCoord(
        table["ra"] * u.deg, table["dec"] * u.deg, pm_ra_cosdec=table["pmra"] * u.mas / u.yr,
        pm_dec=table["pmdec"] * u.mas / u.yr, distance=1 * u.kpc, obstime=Time(2015.5, format="jyear"),
    ).apply_space_motion(Time(2016.0, format="jyear"))  # fmt: skip
    away = there.separation(SkyCoord(stars["ra_deg"] * u.deg, stars["dec_deg"] * u.deg)).mas
    assert away.max() < 0.05


def test_units_of_the_file_are_honoured(tmp_path):
    table = faint()
    plain = tmp_path / "plain.ecsv"
    table.write(plain)
    for name, unit in (("ra", u.deg), ("dec", u.deg), ("pmra", u.mas / u.yr), ("pmdec", u.mas / u.yr)):
        table[name].unit = unit
    table["ra"] = table["ra"].to(u.hourangle)
    table["pmra"] = table["pmra"].to(u.arcsec / u.yr)
    table.write(tmp_path / "units.ecsv")
    one, other = read_catalogue(plain), read_catalogue(tmp_path / "units.ecsv")
    for name in ("ra_deg", "dec_deg", "pm_ra", "v"):
        assert np.allclose(one[name], other[name], rtol=1e-6)


@pytest.mark.parametrize(
    "names",
    [("RAJ2000", "DEJ2000", "Vmag"), ("RA_ICRS", "DE_ICRS", "Gmag"), ("ra_deg", "dec_deg", "magnitude")],
)
def test_columns_are_known_by_the_names_catalogues_give_them(tmp_path, names):
    table = faint()[["ra", "dec", "mag"]]
    for old, new in zip(("ra", "dec", "mag"), names, strict=True):
        table.rename_column(old, new)
    table.write(tmp_path / "a.csv")
    stars = read_catalogue(tmp_path / "a.csv")
    assert (stars["sigma_pm"] == starlist.UNKNOWN_MOTION_MAS_YEAR).all()
    assert (stars["sigma_year"] == 2000.0).all()


def test_rows_with_a_blank_are_left_out(tmp_path):
    (tmp_path / "a.csv").write_text("ra,dec,mag\n10.5,20.5,12\n11.0,,13\n12.0,21.0,\n13.0,22.0,11.5\n")
    assert read_catalogue(tmp_path / "a.csv")["ra_deg"].tolist() == pytest.approx([10.5, 13.0])


@pytest.mark.parametrize(
    ("text", "words"),
    [
        ("alpha_x,dec,mag\n1,2,3\n", ["ra: found the columns alpha_x, dec, mag", "allowed is one named ra"]),
        ("ra,dec\n1,2\n", ["magnitude: found the columns ra, dec"]),
        ("ra,dec,mag\n5h12m,2,3\n", ["ra: found '5h12m'", "numbers, in deg"]),
        ("ra,dec,mag\n400,2,3\n", ["ra: found 400", "0 to 360"]),
        ("ra,dec,mag\n40,95,3\n", ["dec: found 95", "-90 to 90"]),
        ("ra,dec,mag,pmra\n40,5,3,1\n", ["one of the columns pm_ra, pm_dec"]),
        ("ra,dec,mag,pmra,pmdec\n40,5,3,1,2\n", ["epoch: found a proper motion without its epoch"]),
        ("ra,dec,mag,epoch\n40,5,3,57000\n", ["epoch: found 57000", "1800 to 2200 years"]),
        ("ra,dec,mag\n", ["0 rows"]),
    ],
)
def test_a_wrong_catalogue_names_column_found_and_allowed(tmp_path, text, words):
    (tmp_path / "a.csv").write_text(text)
    with pytest.raises(InputError) as wrong:
        read_catalogue(tmp_path / "a.csv")
    for word in words:
        assert word in str(wrong.value)
    assert "\n" not in str(wrong.value)


@pytest.mark.parametrize(
    ("name", "words"),
    [("a.doc", "allowed are .fits"), ("no.csv", "no such file"), ("bad.fits", "no fits table")],
)
def test_a_file_that_is_no_catalogue_is_one_line(tmp_path, name, words):
    for one in ("a.doc", "bad.fits"):
        (tmp_path / one).write_text("ra,dec,mag\n1,2,3\n")
    with pytest.raises(InputError, match=words) as wrong:
        read_catalogue(tmp_path / name)
    assert "\n" not in str(wrong.value)


def test_its_stars_are_there_while_it_is_in_force_and_gone_afterwards(tmp_path):
    faint().write(tmp_path / "a.ecsv")
    before = stars_in_field(RA, DEC, 0.6, TT_2027)
    with starlist.deeper_catalogue(tmp_path / "a.ecsv"):
        within = stars_in_field(RA, DEC, 0.6, TT_2027)
        names = star_names(within.index)
        rows = starlist.rows_in_force()
        assert (starlist.stars_in_force()["ra_deg"][rows] == starlist.star_list()["ra_deg"]).all()
    assert len(within) == len(before) + 40
    assert len(set(names)) == len(names)
    assert set(star_names(before.index)) < set(names)
    assert len(stars_in_field(RA, DEC, 0.6, TT_2027)) == len(before)


def test_an_installed_star_stays_one_and_takes_a_motion_that_nobody_had_measured(tmp_path):
    table = starlist.star_list()
    unknown = table["sigma_pm"] >= starlist.UNKNOWN_MOTION_MAS_YEAR
    rows = np.concatenate([np.flatnonzero(unknown)[:5], np.flatnonzero(~unknown)[:5]])
    own = Table(
        {"ra": table["ra_deg"][rows], "dec": table["dec_deg"][rows], "mag": table["v"][rows] + 0.2,
         "pmra": np.full(10, 77.0), "pmdec": np.full(10, -33.0), "epoch": np.full(10, 2016.0)}
    )  # fmt: skip
    own.write(tmp_path / "a.fits")
    with starlist.deeper_catalogue(tmp_path / "a.fits"):
        merged = starlist.stars_in_force()
        assert len(merged) == len(table)
        now = merged[starlist.rows_in_force()[rows]]
        assert np.allclose(now["pm_ra"][:5], 77.0)
        assert np.allclose(now["pm_ra"][5:], table["pm_ra"][rows[5:]])
