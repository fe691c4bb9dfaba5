"""A star that is covered: the path plot shows what passes before it, to scale, and the star's light."""

from __future__ import annotations

from dataclasses import replace

import numpy as np
import pytest

from imaging.compose.choices import Choices
from imaging.compose.material import gather
from imaging.compose.passing import LightCurve, light_curve_of
from imaging.compose.pathdata import path_data
from imaging.compose.pathplot import draw_path_plot
from planner.errors import InputError
from planner.sequence.documents import load_plan
from planner.sky.timescale import tt_s_from_iso
from tests.compose.conftest import rehearse

CONTACTS = [
    {"name": "disappearance", "stamped_utc": "2028-10-14T21:39:54.100Z", "sigma_s": 0.05},
    {"name": "reappearance", "stamped_utc": "2028-10-14T21:40:05.800Z", "sigma_s": 0.05},
]


@pytest.fixture(scope="module")
def covered(tmp_path_factory):
    """A few frames of the invented minor planet before HIP 8588, with a light curve in the track's header."""
    rehearsal = rehearse(
        tmp_path_factory.mktemp("star"), "asteroid_occults_star_2028", "--binning", "8", "--frames", "5"
    )
    material = gather(load_plan(rehearsal.plan), rehearsal.track, rehearsal.frames)
    begin = [f"2028-10-14T21:{39 + s // 60:02d}:{s % 60:02d}.000Z" for s in range(30, 95, 2)]
    light = [0.0 if 54 < s < 66 else 1.0 for s in range(30, 95, 2)]
    curve = {"begin_utc": begin, "exposure_s": [0.01] * len(begin), "flux": light}
    return replace(material, meta={**material.meta, "light_curve": curve, "contacts": CONTACTS})


def test_the_body_passes_over_the_star_when_the_plan_says_so(covered):
    """Nearest in the middle between the predicted contacts, nearer than its radius, and drawn at its true size."""
    passing = path_data(covered, Choices()).passing
    predicted = [
        float(tt_s_from_iso(instant["utc"]))
        for instant in covered.plan.circumstances["instants"]
        if instant["name"] in ("disappearance", "reappearance")
    ]
    assert passing.tt_s[passing.nearest] == pytest.approx(np.mean(predicted), abs=1.0)
    away = np.hypot(*passing.line)
    assert away.min() < passing.radius_arcsec
    inside = passing.tt_s[away < passing.radius_arcsec]
    assert np.ptp(inside) == pytest.approx(np.ptp(predicted), abs=1.5)
    disc = covered.geometry_at(np.array([np.mean(predicted)])).discs["asteroid"]
    assert passing.radius_arcsec == pytest.approx(float(disc.semidiameter_arcsec[0]), rel=1e-3)


def test_the_plot_has_ticks_on_the_body_s_path_and_the_light_below(covered):
    data = path_data(covered, Choices())
    assert 3 <= len(data.ticks) <= 14
    for tick in data.ticks:
        apart = np.hypot(data.passing.line[0] - tick.right_arcsec, data.passing.line[1] - tick.up_arcsec)
        assert apart.min() < 0.01
    figure = draw_path_plot(data)
    panel = next(axes for axes in figure.axes if "light of the star" in axes.get_ylabel())
    words = " ".join(text.get_text() for text in panel.texts)
    assert "disappearance 21:39:54.100 ± 0.05 s" in words
    assert "reappearance 21:40:05.800 ± 0.05 s" in words
    lines = [line for line in panel.lines if line.get_marker() == "o"]
    assert sorted(set(np.asarray(lines[0].get_ydata()))) == [0.0, 1.0]


def test_a_short_cover_is_shown_in_its_surroundings_and_a_long_one_whole():
    t = np.arange(0.0, 7200.0, 10.0)
    short = LightCurve("HIP 1", t, np.ones_like(t), np.array([3600.0, 3620.0]), np.full(2, 0.1), ("d", "r"))
    assert short.span_tt_s() == (3570.0, 3650.0)
    long = replace(short, contact_tt_s=np.array([600.0, 5400.0]))
    assert long.span_tt_s() == (0.0, 7190.0)


def test_a_track_without_a_light_curve_has_no_such_panel(covered):
    bare = replace(covered, meta={key: value for key, value in covered.meta.items() if key != "light_curve"})
    assert light_curve_of(bare) is None
    assert not any("light" in axes.get_ylabel() for axes in draw_path_plot(path_data(bare, Choices())).axes)


def test_a_path_that_no_plane_holds_is_drawn_over_the_horizon(covered, monkeypatch):
    monkeypatch.setattr("imaging.compose.pathdata.WIDEST_ARCSEC", -1.0)
    assert path_data(covered, Choices()).horizontal
    with pytest.raises(InputError, match="altaz"):
        path_data(covered, Choices(grid="radec"))
