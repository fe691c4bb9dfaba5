"""Path plots: labels do not collide, ticks are round, grids are where the sky has them, bars measure what they say."""

from __future__ import annotations

from datetime import UTC
from itertools import combinations
from zoneinfo import ZoneInfo

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st

from imaging.compose.canvas import Canvas
from imaging.compose.choices import Choices
from imaging.compose.files import captioned, round_length
from imaging.compose.labels import Crowd
from imaging.compose.material import gather
from imaging.compose.palette import DARK, LIGHT
from imaging.compose.pathdata import path_data
from imaging.compose.pathplot import draw_path_plot
from imaging.compose.plane import plane_to_sky
from imaging.compose.plot_marks import star_places
from imaging.compose.skygrid import altaz_grid, dec_label, edge_crossing, ra_label, radec_grid
from imaging.compose.stretch import Stretch, background, measured_stretch
from planner.errors import InputError
from planner.sequence.documents import load_plan


def material_of(rehearsal):
    return gather(load_plan(rehearsal.plan), rehearsal.track, rehearsal.frames)


@pytest.mark.parametrize(
    ("event", "grid", "palette"),
    [
        ("transit", "auto", LIGHT),
        ("occultation", "auto", DARK),
        ("loop", "auto", LIGHT),
        ("occultation", "altaz", LIGHT),
    ],
)
def test_no_two_words_cover_each_other_and_no_star_runs_under_them(event, grid, palette, request):
    data = path_data(material_of(request.getfixturevalue(event)), Choices(grid=grid))
    figure = draw_path_plot(data, palette)
    figure.canvas.draw()
    axes = figure.axes[0]
    words = [*axes.texts, *figure.texts, *figure.legends[0].get_texts()]
    for panel in figure.axes[1:]:
        low, high = panel.get_ylim()
        ticks = zip(panel.get_yticks(), panel.get_yticklabels(), strict=True)
        words += [panel.yaxis.label, *(label for value, label in ticks if low <= value <= high)]
    boxes = [(text.get_text(), text.get_window_extent()) for text in words if text.get_text()]
    assert len(boxes) > 10
    for (one, a), (other, b) in combinations(boxes, 2):
        wide, tall = min(a.x1, b.x1) - max(a.x0, b.x0), min(a.y1, b.y1) - max(a.y0, b.y0)
        assert not (wide > 1 and tall > 1), f"{one!r} covers {other!r}"
    ornaments = [*figure.texts, *figure.legends[0].get_texts()]
    for stars in axes.collections:
        if not hasattr(stars, "get_sizes") or len(stars.get_offsets()) < 20:
            continue
        x, y = axes.transData.transform(stars.get_offsets()).T
        for text in [*ornaments, *(t for t in axes.texts if t.get_text() in "NE")]:
            box = text.get_window_extent()
            assert not ((x > box.x0) & (x < box.x1) & (y > box.y0) & (y < box.y1)).any(), text.get_text()


def test_over_the_horizon_the_path_is_where_the_site_has_it(occultation):
    """Altitude and azimuth measured back from the plot's plane against the geometry; azimuth runs to the right."""
    material = material_of(occultation)
    data = path_data(material, Choices(grid="altaz"))
    geometry = material.geometry_at(data.line_tt_s)
    minus_azimuth, altitude = plane_to_sky(*data.anchor_deg, *data.canvas.to_plane(*data.line))
    assert altitude == pytest.approx(geometry.altitude_deg, abs=1e-6)
    assert -minus_azimuth % 360 == pytest.approx(geometry.azimuth_deg % 360, abs=1e-6)
    assert data.line[0, -1] > data.line[0, 0]  # toward the west, looking west
    labels = [line.label for line in altaz_grid(data.canvas, data.anchor_deg, (-4e4, 4e4, -4e4, 4e4))]
    assert "270° W" in labels
    with pytest.raises(InputError, match="--grid"):
        path_data(material, Choices(grid="radec"))


def test_stars_are_drawn_to_the_limit_asked_for(loop):
    data = path_data(material_of(loop), Choices(star_limit=6.0))
    places = star_places(data, (-30000.0, 30000.0, -20000.0, 20000.0))
    assert 5 < len(places.magnitude) < 60
    assert places.faintest <= 6.0
    assert places.magnitude[0] == pytest.approx(1.36, abs=0.1)  # Regulus, V 1.36: from memory


def test_ticks_are_at_round_instants_of_the_zone(transit, loop):
    hours = path_data(material_of(transit), Choices())
    assert [tick.label for tick in hours.ticks][:3] == ["07:00", "07:30", "08:00"]
    local = path_data(material_of(transit), Choices(), ZoneInfo("Asia/Nicosia"), "Asia/Nicosia")
    assert [tick.label for tick in local.ticks][:2] == ["09:00", "09:30"]
    days = path_data(material_of(loop), Choices(), UTC)
    assert "1 Jan 2027" in [tick.label for tick in days.ticks]


def test_the_plot_draws_the_discs_at_their_published_size(transit):
    """The Sun's semidiameter on 2032 November 13 is 16.16 arcmin (959.63 arcsec over 0.9897 au): from memory."""
    data = path_data(material_of(transit), Choices())
    assert data.disc_radius_arcsec / 60 == pytest.approx(16.16, abs=0.01)
    circle = next(patch for patch in draw_path_plot(data).axes[0].patches if hasattr(patch, "radius"))
    assert circle.radius == data.disc_radius_arcsec


@given(st.lists(st.tuples(st.floats(50, 750), st.floats(50, 550)), min_size=2, max_size=14))
def test_placed_labels_never_overlap_while_there_is_room(points):
    crowd = Crowd((0, 0, 800, 600), np.array(points).T, [])
    for point in points:
        crowd.place(point, (34, 12), (0.0, 1.0), 6, optional=True)
    for a, b in combinations(crowd.boxes, 2):
        assert min(a[2], b[2]) - max(a[0], b[0]) <= 0 or min(a[3], b[3]) - max(a[1], b[1]) <= 0
    for left, low, right, high in crowd.boxes:
        assert left >= 0
        assert low >= 0
        assert right <= 800
        assert high <= 600


def test_grid_lines_run_where_the_sky_has_them():
    canvas = Canvas(1, 1, 1.0, 0.0, 0.0, 20.0)
    lines = radec_grid(canvas, (150.0, 20.0), (-20000.0, 20000.0, -15000.0, 15000.0))
    for line in lines:
        ra, dec = plane_to_sky(150.0, 20.0, *canvas.to_plane(*line.points))
        constant = ra if line.kind == "ra" else dec
        assert np.nanstd(constant) < 1e-6
    assert any(edge_crossing(line.points, (-20000, 20000, -15000, 15000), "left") for line in lines)


@pytest.mark.parametrize(
    ("label", "text"),
    [
        (ra_label(150.0, 5.0), "10h 00m"),
        (ra_label(359.999, 15.0), "0h"),
        (ra_label(10.0, 0.1), "0h 40m 00s"),
        (dec_label(-0.5, 0.5), "−0° 30′"),
        (dec_label(22.0, 5.0), "+22°"),
        (dec_label(-5.0125, 0.0125), "−5° 00′ 45″"),
        (dec_label(0.0, 5.0), "0°"),
        (dec_label(11.0431, 0.2 / 3600), "+11° 02′ 35.2″"),
        (ra_label(27.71595, 0.02 * 15 / 3600), "1h 50m 51.83s"),
    ],
)
def test_grid_labels_read_as_the_trade_writes_them(label, text):
    assert label == text


def test_scale_bars_are_round_and_as_long_as_they_say():
    """The bar in the picture measured back from its pixels."""
    assert round_length(7.9) == (5.0, "5″")
    assert round_length(1250) == (1200.0, "20′")
    assert round_length(40000) == (36000.0, "10°")
    picture = captioned(np.zeros((600, 800), np.float32), "A caption.", 0.0, 2.5)
    length, _ = round_length(0.22 * 800 * 2.5)
    bar = picture[600:] > 0.7
    row = int(np.argmax(bar.sum(axis=1)))
    columns = np.flatnonzero(bar[row])
    assert columns[-1] - columns[0] == pytest.approx(length / 2.5, abs=2)


def test_a_stretch_is_measured_and_monotonic():
    rng = np.random.default_rng(4)
    sky = rng.normal(40, 2, (400, 500)).astype(np.float32)
    sky[::40, ::40] += 5000
    stretch = measured_stretch(sky, "stars")
    level, sigma = background(sky)
    assert level == pytest.approx(40, abs=0.2)
    assert sigma == pytest.approx(2, rel=0.1)
    assert float(stretch.tones(np.array([[level]]))[0, 0]) == pytest.approx(0.10, abs=0.01)
    assert (np.diff(stretch.tones(np.linspace(30, 6000, 500)[None])[0]) >= 0).all()
    linear = measured_stretch(sky, "linear")
    tones = linear.tones(np.array([[0.0, linear.white / 2, linear.white]]))[0]
    assert tones == pytest.approx([0.0, 0.5, 1.0], abs=0.01)
    assert Stretch("srgb", 0.0, 1.0).tones(np.array([[0.2140]]))[0, 0] == pytest.approx(0.5, abs=0.001)


def test_a_faint_planet_beside_the_moon_is_made_to_show():
    image = np.zeros((300, 300), np.float32)
    y, x = np.mgrid[:300, :300]
    image[np.hypot(x - 150, y - 150) < 80] = 1.0
    plain, bent = measured_stretch(image, "disc"), measured_stretch(image, "disc", 0.01)
    assert plain.tones(np.array([[0.01]]))[0, 0] < 0.15
    assert bent.tones(np.array([[0.01]]))[0, 0] == pytest.approx(0.45, abs=0.01)
    assert bent.tones(np.array([[1.0]]))[0, 0] > 0.95
