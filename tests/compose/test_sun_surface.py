"""The Sun's turning is undone: a spot seen hours apart falls on itself."""

from __future__ import annotations

from pathlib import Path

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st

from imaging.compose.canvas import Canvas
from imaging.compose.light import Level, Light
from imaging.compose.material import Registered
from imaging.compose.pointing import DiscPointing
from imaging.compose.sun_surface import SunView, sun_view
from imaging.frames.frame import Frame
from planner.sky.timescale import tt_s_from_iso

HOUR = 3600.0
VIEW = SunView(960.0, 20.0, 3.5)


def seen(view: SunView, latitude_deg: float, longitude_deg: float) -> tuple[float, float]:
    """East and north of a spot by rotation matrices, another road than the module's."""
    b, lon, tilt, pa = np.radians([latitude_deg, longitude_deg, view.middle_latitude_deg, view.pole_pa_deg])
    body = np.array([np.cos(b) * np.sin(lon), np.sin(b), np.cos(b) * np.cos(lon)])  # west, north, toward
    tip = np.array([[1, 0, 0], [0, np.cos(tilt), -np.sin(tilt)], [0, np.sin(tilt), np.cos(tilt)]])
    x, y, _ = tip @ body
    turn = np.array([[-np.cos(pa), np.sin(pa)], [np.sin(pa), np.cos(pa)]])
    east, north = turn @ np.array([x, y]) * view.radius_arcsec
    return float(east), float(north)


def synodic_deg_day(latitude_deg: float) -> float:
    """Howard, Harvey & Forgach 1990 in microradians a second (from memory), less the Earth's 0.9856 degrees a day."""
    s2 = np.sin(np.radians(latitude_deg)) ** 2
    return float(np.degrees((2.894 - 0.428 * s2 - 0.370 * s2**2) * 1e-6) * 86400 - 0.9856)


@pytest.mark.parametrize("latitude_deg", [-25.0, 0.0, 12.0, 30.0])
@pytest.mark.parametrize("longitude_deg", [-50.0, 0.0, 35.0])
def test_a_spot_moves_as_the_rotation_law_says(latitude_deg, longitude_deg):
    moved = VIEW.turned(5 * HOUR)(*seen(VIEW, latitude_deg, longitude_deg))
    expected = seen(VIEW, latitude_deg, longitude_deg + synodic_deg_day(latitude_deg) * 5 / 24)
    assert moved == pytest.approx(expected, abs=0.02)


def test_the_middle_of_the_disc_moves_west_by_nine_arcsec_an_hour():
    """13.3 degrees a day on a radius of 960 arcsec is 9.3 arcsec an hour: common practice, no source."""
    east, north = SunView(960.0, 0.0, 0.0).turned(HOUR)(0.0, 0.0)
    assert east == pytest.approx(-9.3, abs=0.1)
    assert north == pytest.approx(0.0, abs=1e-6)


@given(st.floats(0, 359), st.floats(-7.3, 7.3), st.floats(-0.9, 0.9), st.floats(-0.9, 0.9), st.floats(-4, 4))
def test_there_and_back_is_where_it_was(pole_pa_deg, tilt_deg, x, y, hours):
    if np.hypot(x, y) > 0.88:
        return
    view = SunView(960.0, pole_pa_deg, tilt_deg)
    there = view.turned(hours * HOUR)(960 * x, 960 * y)
    assert view.turned(-hours * HOUR)(*there) == pytest.approx((960 * x, 960 * y), abs=0.05)


def test_the_limb_and_the_sky_stay():
    angle = np.radians(np.arange(0, 360, 10))
    for share in (0.99, 1.0, 1.3):
        east, north = 960 * share * np.cos(angle), 960 * share * np.sin(angle)
        moved = VIEW.turned(6 * HOUR)(east, north)
        assert np.hypot(moved[0] - east, moved[1] - north).max() < 1e-9


def test_the_tilt_of_the_sun_is_that_of_the_almanac():
    """B0 is +7.2 degrees about September 8 and 0 about June 6: common practice, no source."""
    from planner.sky.discs import sky_disc

    for text, expected in (("2032-09-08T12:00:00Z", 7.2), ("2032-06-06T00:00:00Z", 0.0)):
        tt_s = float(tt_s_from_iso(text))
        disc = sky_disc("sun", None, np.array([tt_s]))
        view = sun_view(960.0, 0.0, float(disc.ra_deg[0]), float(disc.dec_deg[0]), tt_s)
        assert view.middle_latitude_deg == pytest.approx(expected, abs=0.15)


def test_spots_stay_sharp_in_a_blend_of_six_hours():
    """A spot of 8 arcsec at 2.4 arcsec a pixel in 7 frames over 6 h: place and nine tenths of its depth stay."""
    scale, size = 2.4, 861
    y, x = np.mgrid[:size, :size]
    canvas = Canvas(size, size, scale, 430.0, 430.0)
    east, north = canvas.to_plane(x, y)
    disc = 1.0 / (1.0 + np.exp((np.hypot(east, north) - 960.0) / 2.0))

    def frame_at(hours):
        spot = seen(VIEW, 15.0, -10.0 + synodic_deg_day(15.0) * hours / 24)
        depth = 0.6 * np.exp(-((east - spot[0]) ** 2 + (north - spot[1]) ** 2) / (2 * 8.0**2))
        return (disc * (1 - depth) * 1000).astype(np.float32), spot

    pointing = DiscPointing(430.0, 430.0, scale, 0.0, 1, 228.0, -18.0)
    nan = float("nan")
    frame = Registered(
        Path("sun.fits"), 0, "crossing", 0.0, "sun-limb", pointing, scale, 228.0, -18.0, nan, nan, nan, nan, nan, nan,
        (430.0, 430.0, 400.0), 0.01, "unmeasured",
    )  # fmt: skip
    total = np.zeros((size, size))
    for hours in range(-3, 4):
        data, _ = frame_at(hours)
        image = Light(threads=1).on_canvas(
            Frame(frame.path, data, None, None), frame, canvas, (228.0, -18.0), Level(0.0, 1000.0),
            surface=VIEW.turned(hours * HOUR),
        )  # fmt: skip
        total += np.nan_to_num(image) / 7
    _, spot = frame_at(0)
    cx, cy = (round(float(value)) for value in canvas.from_plane(*spot))
    cut = total[cy - 12 : cy + 13, cx - 12 : cx + 13]
    depth = 1 - cut
    gy, gx = np.mgrid[cy - 12 : cy + 13, cx - 12 : cx + 13]
    place = (depth * gx).sum() / depth.sum(), (depth * gy).sum() / depth.sum()
    assert place == pytest.approx(tuple(float(value) for value in canvas.from_plane(*spot)), abs=0.1)
    assert depth.max() > 0.9 * 0.6
