"""The time of a frame is what its header says in any common dialect, and is refused where it would be a guess."""

from __future__ import annotations

import pytest
from astropy.io import fits
from astropy.time import Time

from imaging.frames.times import NoTimeError, time_from_exif, time_from_fits, time_of_fits_plane, zone_of
from planner.errors import InputError
from planner.sky.timescale import utc_iso


def header(**cards):
    made = fits.Header()
    for key, value in cards.items():
        made[key.replace("_", "-")] = value
    return made


def middle(made, zone=None, decimals=3):
    return utc_iso(time_from_fits(made, zone_of(zone)).middle_tt_s, decimals)


# FITS standard 4.0, sections 9.2-9.5 (DATE-BEG, DATE-AVG, DATE-END, MJD-*, TIMESYS); the rest is common practice.
@pytest.mark.parametrize(
    ("cards", "expected"),
    [
        ({"DATE_OBS": "2027-02-19T20:15:30", "EXPTIME": 10}, "2027-02-19T20:15:35.000Z"),
        ({"DATE_OBS": "2027-02-19T20:15:30.25Z", "EXPTIME": 10}, "2027-02-19T20:15:35.250Z"),
        ({"DATE_OBS": "2027-02-19T20:15:30", "XPOSURE": 3.0, "EXPTIME": 10}, "2027-02-19T20:15:31.500Z"),
        ({"DATE_BEG": "2027-02-19T20:15:30", "DATE_END": "2027-02-19T20:15:40"}, "2027-02-19T20:15:35.000Z"),
        (
            {"DATE_OBS": "2027-02-19T20:15:30", "DATE_AVG": "2027-02-19T20:15:34.5", "EXPTIME": 9},
            "2027-02-19T20:15:34.500Z",
        ),
        ({"DATE_END": "2027-02-19T20:15:40", "EXPTIME": 10}, "2027-02-19T20:15:35.000Z"),
        ({"DATE_OBS": "2027-02-19", "TIME_OBS": "20:15:30.5", "EXPTIME": 1}, "2027-02-19T20:15:31.000Z"),
        ({"DATE_OBS": "2027-02-19", "UT": "20:15:30", "EXPTIME": 1}, "2027-02-19T20:15:30.500Z"),
        ({"DATE_OBS": "19/02/98", "TIME_OBS": "20:15:30", "EXPTIME": 0}, "1998-02-19T20:15:30.000Z"),
        ({"DATE_OBS": "2027-02-19 20:15:30", "EXPTIME": 2}, "2027-02-19T20:15:31.000Z"),
        ({"DATE_OBS": "2027-02-19T23:59:58", "EXPTIME": 10}, "2027-02-20T00:00:03.000Z"),
        ({"MJD_OBS": 61455.84409722, "EXPTIME": 10}, "2027-02-19T20:15:35.000Z"),
        ({"DATE_OBS": "2016-12-31T23:59:59", "EXPTIME": 2}, "2016-12-31T23:59:60.000Z"),  # a leap second
    ],
)
def test_mid_exposure_is_what_the_keywords_say(cards, expected):
    assert middle(header(**cards)) == expected


def test_a_comment_may_say_that_the_stamp_is_the_middle():
    made = header(DATE_OBS="2027-02-19T20:15:30", EXPTIME=10)
    made.comments["DATE-OBS"] = "UTC of the middle of the exposure"
    assert middle(made) == "2027-02-19T20:15:30.000Z"


@pytest.mark.parametrize("scale", ["TT", "TAI", "TDB", "GPS"])
def test_time_scales_other_than_utc_are_honoured(scale):
    found = time_from_fits(header(DATE_OBS="2027-02-19T20:15:30", EXPTIME=0, TIMESYS=scale)).middle_tt_s
    as_tai = Time("2027-02-19T20:15:30", scale={"GPS": "tai"}.get(scale, scale.lower()))
    expected = (as_tai.tt.jd1 - 2451545.0 + as_tai.tt.jd2) * 86400.0 + (19.0 if scale == "GPS" else 0.0)
    assert found == pytest.approx(expected, abs=2e-5)


def test_local_time_needs_a_zone_and_takes_the_users():
    made = header(DATE_OBS="2027-02-19T22:15:30", EXPTIME=0)
    made.comments["DATE-OBS"] = "local time of the start"
    with pytest.raises(NoTimeError, match="--zone"):
        time_from_fits(made)
    assert middle(made, "Asia/Nicosia") == "2027-02-19T20:15:30.000Z"
    assert middle(made, "+02:00") == "2027-02-19T20:15:30.000Z"


@pytest.mark.parametrize(
    ("cards", "reason"),
    [
        ({}, "no DATE-OBS"),
        ({"DATE_OBS": "2027-02-19"}, "without a time of day"),
        ({"DATE_OBS": "yesterday evening"}, "not a date"),
        ({"DATE_OBS": "2027-02-31T10:00:00"}, "calendar"),
        ({"DATE_OBS": "1900-01-01T00:00:00"}, "never set"),
        ({"DATE_OBS": "1970-01-01T00:00:00"}, "never set"),
        ({"DATE_OBS": "1931-05-01T20:00:00"}, "outside"),
        ({"DATE_OBS": "2399-05-01T20:00:00"}, "outside"),
        ({"DATE_OBS": "2027-02-19T20:15:30", "TIMESYS": "MARS"}, "not a time scale"),
    ],
)
def test_a_time_that_would_be_a_guess_is_refused_with_its_reason(cards, reason):
    with pytest.raises(NoTimeError, match=reason):
        time_from_fits(header(**cards))


def test_the_resolution_of_the_stamp_is_its_uncertainty():
    coarse = time_from_fits(header(DATE_OBS="2027-02-19T20:15:30", EXPTIME=0)).sigma_s
    fine = time_from_fits(header(DATE_OBS="2027-02-19T20:15:30.123", EXPTIME=0)).sigma_s
    assert coarse == pytest.approx(1 / 12**0.5)
    assert fine == pytest.approx(0.001 / 12**0.5)


def test_an_exposure_that_is_not_stated_is_said_so():
    assert "not stated" in time_from_fits(header(DATE_OBS="2027-02-19T20:15:30")).notes[0]


EXIF = {"DateTimeOriginal": "2027:02:19 22:15:30", "SubSecTimeOriginal": "25", "OffsetTimeOriginal": "+02:00"}


# Exif 2.31: DateTimeOriginal, SubSecTimeOriginal, OffsetTimeOriginal
def test_exif_counts_sub_seconds_and_offset():
    time = time_from_exif(EXIF, None, 4.0)
    assert utc_iso(time.middle_tt_s, 3) == "2027-02-19T20:15:32.250Z"
    assert "OffsetTimeOriginal" in time.source


def test_exif_without_offset_is_refused_until_the_user_gives_a_zone():
    tags = {key: value for key, value in EXIF.items() if key != "OffsetTimeOriginal"}
    with pytest.raises(NoTimeError, match="--zone"):
        time_from_exif(tags, None, 4.0)
    time = time_from_exif(tags, zone_of("+02:00"), 4.0)
    assert utc_iso(time.middle_tt_s, 3) == "2027-02-19T20:15:32.250Z"
    assert "given by the user" in time.notes[0]


@pytest.mark.parametrize("tags", [{}, {"DateTimeOriginal": "0000:00:00 00:00:00", "OffsetTimeOriginal": "Z"}])
def test_exif_without_a_date_has_no_time(tags):
    with pytest.raises(NoTimeError):
        time_from_exif(tags, zone_of("Z"), None)


@pytest.mark.parametrize("text", ["+25:00", "here", "+2x"])
def test_a_zone_must_be_one(text):
    with pytest.raises(InputError):
        zone_of(text)


# FITS standard 4.0, table 30 and section 9.2: CTYPEn TIME, and MJDREF, JDREF or DATEREF as its zero
@pytest.mark.parametrize(
    ("cards", "expected"),
    [
        ({"MJDREF": 61455.0, "CRVAL3": 72930.0}, "2027-02-19T20:15:30.500Z"),
        ({"MJDREFI": 61455, "MJDREFF": 0.5, "CRVAL3": 29730.0}, "2027-02-19T20:15:30.500Z"),
        ({"DATEREF": "2027-02-19T20:15:00", "CRVAL3": 30.0}, "2027-02-19T20:15:30.500Z"),
        ({"DATE_OBS": "2027-02-19T20:15:30"}, "2027-02-19T20:15:30.500Z"),
        ({"DATE_OBS": "2027-02-19T20:15:30", "CUNIT3": "d", "CDELT3": 1.0}, "2027-02-21T20:15:30.000Z"),
    ],
)
def test_planes_of_a_cube_have_the_times_of_its_axis(cards, expected):
    axis = {"CTYPE3": "TIME", "CUNIT3": "s", "CRPIX3": 1.0, "CRVAL3": 0.0, "CDELT3": 0.25} | cards
    time = time_of_fits_plane(header(**axis), 2, 10)
    assert utc_iso(time.middle_tt_s, 3) == expected
    assert time.end_tt_s - time.begin_tt_s == pytest.approx(
        axis["CDELT3"] * (86400 if axis["CUNIT3"] == "d" else 1)
    )


def test_a_cube_of_another_axis_tells_no_time_for_its_planes():
    with pytest.raises(NoTimeError, match="each of its 10 planes: the third axis is FREQ"):
        time_of_fits_plane(header(CTYPE3="FREQ", DATE_OBS="2027-02-19T20:15:30"), 2, 10)
