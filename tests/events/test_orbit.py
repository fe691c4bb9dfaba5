"""Orbits carry bodies to where they are known to be, and come out of files as they were meant."""

from __future__ import annotations

import dataclasses

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from planner.errors import DocumentError, InputError
from planner.events import orbit as orbits
from planner.events.orbitfile import orbit_from_line, packed_epoch_jd, read_orbit_line
from planner.sequence.documents import load_orbit, orbit_of
from planner.sky.bodies import AU_KM
from planner.sky.ephemeris import state_km_km_s
from planner.sky.timescale import DAY_S, YEAR_S

T0 = 8.0e8


def let_go(body):
    """Return the trajectory of a massless body set off where a planet is, under the pull of all others."""
    position, velocity = state_km_km_s(body, np.array([T0]))
    state = np.concatenate([position[:, 0] / AU_KM, velocity[:, 0] * DAY_S / AU_KM])[None]
    return orbits.Trajectory(T0, state, without=body)


@pytest.mark.parametrize(
    ("body", "years", "within_km"),
    # what is left are the asteroids, which DE440 has and we leave out
    [("mars", 1.0, 0.2), ("mars", 5.0, 5.0), ("jupiter", 5.0, 8.0), ("venus", 1.0, 0.5)],
)
def test_a_planet_let_go_follows_the_ephemeris(body, years, within_km):
    # published ephemeris: DE440 (Park et al. 2021). 5 km at 2 au are 3 milliarcseconds
    times = T0 - np.linspace(0.0, years, 60) * YEAR_S
    position, velocity = let_go(body).state(times)
    expected, speed = state_km_km_s(body, times)
    assert np.sqrt(((position - expected) ** 2).sum(axis=0)).max() < within_km
    assert np.abs(velocity - speed).max() < 1e-5


def test_integration_comes_back_to_where_it_began():
    away = let_go("mars")
    position, velocity = away.state(np.array([T0 + 3 * YEAR_S]))
    state = np.concatenate([position[:, 0] / AU_KM, velocity[:, 0] * DAY_S / AU_KM])[None]
    back = orbits.Trajectory(T0 + 3 * YEAR_S, state, without="mars")
    start, _ = state_km_km_s("mars", np.array([T0]))
    assert np.abs(back.state(np.array([T0]))[0] - start).max() < 0.01


def test_times_may_come_in_any_order_and_again():
    course = let_go("mars")
    times = T0 + np.array([0.3, -0.2, 0.0, 0.9, -0.8]) * YEAR_S
    first = course.state(times)[0]
    assert course.state(times[::-1])[0][:, ::-1] == pytest.approx(first, abs=1e-6)


@settings(max_examples=60)
@given(
    st.floats(0.6, 40.0),
    st.floats(0.001, 0.95),
    st.floats(0.5, 179.0),
    st.floats(0.0, 359.9),
    st.floats(0.0, 359.9),
    st.floats(0.0, 359.9),
)
def test_elements_and_states_are_the_same_orbit(a, e, inclination, node, argument, anomaly):
    elements = np.array([a, e, inclination, node, argument, anomaly])
    back = orbits.elements_of(orbits.heliocentric_state(elements)[0])
    assert back[:3] == pytest.approx(elements[:3], rel=1e-8, abs=1e-8)
    turn = (back[3:] - elements[3:] + 180.0) % 360.0 - 180.0
    assert turn == pytest.approx(0.0, abs=1e-4)


def test_the_comet_of_the_handbook_example():
    # Meeus, Astronomical Algorithms, example 33.b: Encke 1990 October 6.0 TD, astrometric J2000 (from memory):
    # a 2.2091404, e 0.8502196, i 11.94524, node 334.75006, argument 186.23352, perihelion October 28.54502
    from planner.events.shadow import seen_from
    from planner.sky.places import observer_position_km, radec_deg

    a = 2.2091404
    motion = 0.9856076686 / a**1.5
    epoch_jd = 2448170.5
    anomaly = motion * (epoch_jd - (2448192.5 + 0.54502))
    encke = orbits.orbit_from_elements(
        "Encke", epoch_jd, (a, 0.8502196, 11.94524, 334.75006, 186.23352, anomaly), diameter_km=5.0
    )
    tt_s = np.array([(epoch_jd - 2451545.0) * DAY_S])
    vector, _ = seen_from(orbits.trajectory(encke).state, observer_position_km(None, tt_s), tt_s)
    ra, dec = radec_deg(vector)
    assert ra[0] == pytest.approx(158.558965, abs=5 / 3600)
    assert dec[0] == pytest.approx(19.158496, abs=5 / 3600)


@pytest.mark.parametrize(
    ("packed", "year", "month", "day"),
    # the examples of the public description of packed dates (from memory)
    [("J9611", 1996, 1, 1), ("J961A", 1996, 1, 10), ("J969U", 1996, 9, 30), ("K01AM", 2001, 10, 22)],
)
def test_packed_dates_are_read(packed, year, month, day):
    from datetime import date

    assert packed_epoch_jd(packed) == date(year, month, day).toordinal() + 1721424.5


@pytest.mark.parametrize("packed", ["", "K", "X9611", "K26Z1", "K262V", "K26_1"])
def test_a_wrong_packed_date_is_named(packed):
    with pytest.raises(InputError, match=r"columns 21-25 \(epoch\)"):
        packed_epoch_jd(packed)


# The form of the line of (1) Ceres for 2023 September 13 (from memory; not used as data)
LINE = (
    "00001    3.34  0.15 K239D  60.07881   73.42179   80.25496   10.58688  0.0789126  0.21406009   2.7672496  0 "
    "E2023-F87  7283 123 1801-2023 0.65 M-v 30k Some       4000      (1) Ceres                  20230321"
)


def test_a_one_line_orbit_is_read_column_by_column():
    read = orbit_from_line(LINE, diameter_km=940.0)
    assert read.elements == (2.7672496, 0.0789126, 10.58688, 80.25496, 73.42179, 60.07881)
    assert (read.absolute_magnitude, read.slope, read.diameter_km) == (3.34, 0.15, 940.0)
    assert read.epoch_jd_tdb == 2460200.5
    assert "Ceres" in read.name
    # U = 0: at most an arcsecond of runoff in ten years
    a_sigma = read.element_sigma[0]
    assert 1.5 * a_sigma / read.elements[0] * 0.21406009 * 3652.5 * 3600 == pytest.approx(1.0, rel=1e-3)
    assert "U = 0" in read.notes[0]


def test_a_diameter_is_estimated_from_the_brightness_and_said_to_be():
    # (1) Ceres: 940 km; H 3.34 at its true albedo of 0.09 gives that, at 0.14 less
    read = orbit_from_line(LINE)
    assert read.diameter_km == pytest.approx(763, abs=5)
    assert any("albedo" in note for note in read.notes)
    assert read.diameter_sigma_km > 0.3 * read.diameter_km


@pytest.mark.parametrize(
    ("start", "end", "text", "said"),
    [
        (70, 79, "0.07x9126", r"columns 71-79 \(eccentricity\): found '0.07x9126'"),
        (92, 103, "           ", r"columns 93-103 \(semi_major_axis_au\): found ''"),
        (20, 25, "99999", r"columns 21-25 \(epoch\)"),
        (70, 79, "1.2000000", r"orbit\.eccentricity: found 1\.2"),
    ],
)
def test_a_damaged_line_names_its_columns(start, end, text, said):
    damaged = LINE[:start] + text + LINE[end:]
    with pytest.raises(InputError, match=said):
        orbit_from_line(damaged)
    with pytest.raises(InputError, match="found a line of 20 characters"):
        orbit_from_line(LINE[:20])


def test_a_file_of_lines_gives_the_one_asked_for(tmp_path):
    path = tmp_path / "orbits.txt"
    other = LINE.replace("(1) Ceres", "(2) Other").replace("00001", "00002")
    path.write_text(f"header\n\n{LINE}\n{other}\n")
    assert "Other" in read_orbit_line(path, "other").name
    with pytest.raises(InputError, match="found 2 orbits; allowed is one"):
        read_orbit_line(path)
    with pytest.raises(InputError, match="found 0 orbits named 'third'"):
        read_orbit_line(path, "third")
    with pytest.raises(InputError, match="found no readable orbit"):
        read_orbit_line(tmp_path / "absent.txt")


DOCUMENT = """name: Invented
epoch_jd_tdb: 2462061.5
semi_major_axis_au: 2.65
eccentricity: 0.12
inclination_deg: 7.5
ascending_node_deg: 205.0
perihelion_argument_deg: 95.0
mean_anomaly_deg: 73.4
diameter_km: 140
"""


def test_yaml_and_json_say_the_same(tmp_path):
    import json

    import yaml

    (tmp_path / "a.yaml").write_text(DOCUMENT)
    (tmp_path / "a.json").write_text(json.dumps(yaml.safe_load(DOCUMENT)))
    one, other = (orbit_of(load_orbit(tmp_path / name)) for name in ("a.yaml", "a.json"))
    assert one == other
    assert one.elements == (2.65, 0.12, 7.5, 205.0, 95.0, 73.4)


@pytest.mark.parametrize(
    ("old", "new", "line", "key", "found"),
    [
        ("epoch_jd_tdb: 2462061.5\n", "", None, "epoch_jd_tdb", "nothing"),
        ("eccentricity: 0.12", "eccentricity: 1.5", 4, "eccentricity", "1.5"),
        ("mean_anomaly_deg: 73.4", "mean_anomaly_deg: many", 8, "mean_anomaly_deg", "many"),
        ("semi_major_axis_au", "semi_major_axis", 3, "semi_major_axis", "semi_major_axis"),
        ("diameter_km: 140", "diameter_km: -3", 9, "diameter_km", "-3"),
    ],
)
def test_wrong_elements_are_named_with_file_line_and_key(tmp_path, old, new, line, key, found):
    path = tmp_path / "orbit.yaml"
    path.write_text(DOCUMENT.replace(old, new))
    with pytest.raises(DocumentError) as caught:
        load_orbit(path)
    assert str(path) in str(caught.value)
    assert key in caught.value.key
    if line is not None:
        assert caught.value.line == line
    assert found in str(caught.value)


def test_an_orbit_needs_a_size(tmp_path):
    path = tmp_path / "orbit.yaml"
    path.write_text(DOCUMENT.replace("diameter_km: 140\n", ""))
    with pytest.raises(InputError, match=r"orbit\.diameter_km: found none"):
        orbit_of(load_orbit(path))
    with pytest.raises(InputError, match="says nothing of the body's size"):
        load_orbit(tmp_path / "body.bsp")
    path.write_text("name: X\nspk: absent.bsp\ndiameter_km: 3\n")
    with pytest.raises(InputError, match=r"absent\.bsp: found no readable SPK"):
        orbit_of(load_orbit(path))


def test_variants_are_one_sigma_away_in_one_element_each():
    sigma = (1e-7, 1e-7, 1e-5, 1e-5, 1e-5, 1e-5)
    base = orbits.orbit_from_elements("X", 2462061.5, (2.65, 0.12, 7.5, 205.0, 95.0, 73.4), diameter_km=10.0)
    course = orbits.trajectory(dataclasses.replace(base, element_sigma=sigma))
    epoch = np.array([(2462061.5 - 2451545.0) * DAY_S])
    nominal = course.state(epoch)[0]
    # the mean anomaly moves the body along its orbit: 1e-5 degrees times about 2.65 au
    shift = np.sqrt(((course.state(epoch, 6)[0] - nominal) ** 2).sum())
    assert shift == pytest.approx(np.radians(1e-5) * 2.65 * AU_KM, rel=0.15)
