"""Instants go in and out exactly; UT1 is known where it can be, and its uncertainty grows where it cannot."""

from __future__ import annotations

from datetime import UTC, datetime, timedelta, timezone

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st

from planner.errors import InputError
from planner.sky import timescale as scale
from planner.sky.rotation import earth_orientation
from tests.sky.published import published


@given(st.datetimes(datetime(1600, 1, 1), datetime(2599, 12, 31)))  # noqa: DTZ001
def test_a_civil_instant_comes_back_to_the_microsecond(naive):
    moment = naive.replace(tzinfo=UTC)
    back = scale.datetime_from_tt_s(scale.tt_s_from_datetime(moment))
    # float64 seconds resolve 4 microseconds in 2600
    assert abs((back - moment).total_seconds()) <= 5e-6


@pytest.mark.parametrize(
    ("text", "decimals", "printed"),
    [
        ("2032-11-13T06:41:12.34Z", 1, "2032-11-13T06:41:12.3Z"),
        ("2032-11-13T06:41:12.96Z", 1, "2032-11-13T06:41:13.0Z"),
        ("2031-12-31T23:59:59.96Z", 1, "2032-01-01T00:00:00.0Z"),
        ("2032-11-13T07:41:12+01:00", 0, "2032-11-13T06:41:12Z"),
        ("2016-12-31T23:59:60.25Z", 2, "2016-12-31T23:59:60.25Z"),
        ("2016-12-31T23:59:60.97Z", 1, "2017-01-01T00:00:00.0Z"),
        ("2016-12-31T23:59:59.97Z", 1, "2016-12-31T23:59:60.0Z"),
        ("1600-01-01T00:00:00Z", 3, "1600-01-01T00:00:00.000Z"),
    ],
)
def test_printed_instants_round_with_carry_and_know_leap_seconds(text, decimals, printed):
    assert scale.utc_iso(scale.tt_s_from_iso(text), decimals) == printed


def test_a_leap_second_lasts_a_second():
    before, within, after = (
        scale.tt_s_from_iso(text)
        for text in ("2016-12-31T23:59:59Z", "2016-12-31T23:59:60Z", "2017-01-01T00:00:00Z")
    )
    assert within - before == pytest.approx(1.0, abs=1e-6)
    assert after - within == pytest.approx(1.0, abs=1e-6)


@pytest.mark.parametrize(("when", "seconds"), [("2003-06-01", 32), ("2008-01-17", 33), ("2017-09-01", 37)])
def test_tai_minus_utc_is_the_published_one(when, seconds):
    # ERFA test suite, TAI-UTC
    row = next(row for row in published("time") if row["quantity"] == "TAI-UTC")
    assert when in row["inputs"]
    assert str(seconds) in row["value"]
    noon = datetime.fromisoformat(f"{when}T12:00:00+00:00")
    utc_s = (noon - datetime(2000, 1, 1, 12, tzinfo=UTC)).total_seconds()
    assert scale.tt_s_from_datetime(noon) - utc_s - 32.184 == pytest.approx(seconds, abs=1e-6)


def test_instants_agree_with_astropy():
    from astropy.time import Time

    times = Time(["1972-01-01T00:00:00", "1999-07-01T12:34:56.789", "2026-06-01T00:00:00"], scale="utc")
    tt_s = scale.tt_s_from_time(times)
    assert scale.utc_iso(tt_s, 3) == [f"{text}Z" for text in times.isot]
    assert scale.tt_s_from_time(scale.time_from_tt_s(tt_s)) == pytest.approx(tt_s, abs=1e-6)
    assert scale.time_from_tt_s(tt_s).scale == "utc"
    assert scale.time_from_tt_s(scale.tt_s_from_iso("1950-01-01T00:00:00Z")).scale == "tt"


def test_tdb_agrees_with_the_full_series_to_10_microseconds():
    import erfa

    days = np.linspace(-160_000, 230_000, 3000)
    full = erfa.dtdb(2451545.0, days, 0.0, 0.0, 0.0, 0.0)
    assert scale.tdb_s(days * 86400.0) - days * 86400.0 == pytest.approx(full, abs=1.2e-5)


def test_a_time_without_zone_is_refused():
    with pytest.raises(InputError, match="Z or an offset"):
        scale.tt_s_from_iso("2032-11-13T06:41:12")
    with pytest.raises(InputError, match="Z or an offset"):
        scale.tt_s_from_datetime(datetime(2032, 11, 13))  # noqa: DTZ001


@pytest.mark.parametrize("text", ["", "yesterday", "2032-11-13", "2032-13-01T00:00:00Z", "12:30:05"])
def test_what_is_no_instant_is_refused(text):
    with pytest.raises(InputError, match="allowed is"):
        scale.tt_s_from_iso(text)


def test_any_offset_means_the_same_instant():
    moment = datetime(2032, 11, 13, 6, 41, 12, tzinfo=UTC)
    elsewhere = moment.astimezone(timezone(timedelta(hours=-9, minutes=-30)))
    assert scale.tt_s_from_datetime(elsewhere) == scale.tt_s_from_datetime(moment)
    assert scale.tt_s_from_datetime([moment, elsewhere]) == pytest.approx(scale.tt_s_from_datetime(moment))


@pytest.mark.parametrize(
    ("text", "kind"),
    [
        ("1769-06-03T22:00:00Z", "UT1 (no UTC before 1972)"),
        ("2012-06-06T01:00:00Z", "UTC"),
        ("2040-01-01T00:00:00Z", "UTC (leap seconds unknown, none assumed)"),
        ("2600-01-01T00:00:00Z", "UT1 (leap seconds unknown)"),
    ],
)
def test_an_instant_says_what_its_time_scale_is_worth(text, kind):
    assert scale.utc_kind(scale.tt_s_from_iso(text)) == kind


@pytest.mark.parametrize(
    ("year", "seconds", "tolerance"),
    [
        # Meeus, Astronomical Algorithms, example 10.a
        (1977.1, 47.6, 0.05),
        # the Astronomical Almanac, K8-K9 (from memory)
        (1900.0, -2.7, 1.0),
        (1950.0, 29.15, 0.4),
        (2000.0, 63.83, 0.01),
        (2012.0, 66.60, 0.01),
    ],
)
def test_delta_t_is_the_published_one(year, seconds, tolerance):
    tt_s = (year - 2000.0) * scale.YEAR_S
    assert float(scale.delta_t_s(tt_s)) == pytest.approx(seconds, abs=tolerance)


def test_delta_t_agrees_with_skyfields_reading_of_the_same_spline():
    from skyfield.api import load

    years = np.linspace(1600.0, 2015.0, 300)
    times = load.timescale(builtin=True).tt_jd(2451545.0 + (years - 2000.0) * 365.25)
    ours = scale.delta_t_s((years - 2000.0) * scale.YEAR_S)
    difference = np.abs(ours - times.delta_t)
    assert difference[years < 1950].max() < 1e-4
    assert difference[years > 1974].max() < 1e-3
    # between, ours joins the daily tables that begin in 1962, theirs keeps the spline to 1973
    assert difference.max() < 0.7


def test_delta_t_has_no_steps():
    tt_s = np.arange(-450.0, 649.0, 1 / 365.25) * scale.YEAR_S
    # the fastest drift since 1550 was 2.5 s a year (0.007 s a day)
    assert np.abs(np.diff(scale.delta_t_s(tt_s))).max() < 0.12


def test_ut1_beyond_the_tables_is_extrapolated_with_a_growing_sigma():
    end = earth_orientation().last_table_tt_s
    years = np.array([0.0, 1.0, 5.0, 10.0, 50.0, 600.0])
    sigma = scale.ut1_sigma_s(end + years * scale.YEAR_S)
    assert np.all(np.diff(sigma) > 0)
    # growth measured by extrapolating past tables: 0.1, 0.8 and 2.3 s rms at 1, 5 and 10 years
    assert sigma[1:4] == pytest.approx([0.1, 0.8, 2.3], rel=0.35)
    past = scale.ut1_sigma_s((np.array([1600.0, 1700.0, 1800.0, 1900.0, 1990.0]) - 2000.0) * scale.YEAR_S)
    assert np.all(np.diff(past) < 0)


@pytest.mark.parametrize(("year", "named"), [(1500, "1499-12"), (2700, "2700"), (20000, "20000")])
def test_a_date_outside_the_ephemeris_is_named_with_the_span_allowed(year, named):
    with pytest.raises(InputError, match=rf"found .*{named}.*1550-01-02 to 2650-01-23"):
        scale.require_span((year - 2000.0) * scale.YEAR_S)
    with pytest.raises(InputError, match="not a number"):
        scale.require_span(np.nan)
