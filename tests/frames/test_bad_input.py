"""Whatever lies in a folder of frames, the run goes on, says why in one line, and stays small."""

from __future__ import annotations

import json
import tracemalloc
import zlib

import numpy as np
import pytest
from astropy.io import fits

from imaging.frames.reading import frame_count, read_frame
from planner.cli.main import run_with
from planner.errors import FrameSetAside
from tests.frames.test_reading import bad_files, sky, write_fits, write_ser

HUGE = 32768


def huge_fits(path):
    cards = ("SIMPLE  =                    T", "BITPIX  =                   16", "NAXIS   =                    2",
             f"NAXIS1  = {HUGE:20d}", f"NAXIS2  = {HUGE:20d}", "END")  # fmt: skip
    path.write_bytes(b"".join(card.ljust(80).encode() for card in cards).ljust(2880) + bytes(5760))


def huge_compressed_fits(path):
    fits.CompImageHDU(sky((300, 300)).astype("int16")).writeto(path)
    raw = path.read_bytes()
    for axis in (b"ZNAXIS1 ", b"ZNAXIS2 "):
        at = raw.index(axis)
        raw = raw[:at] + axis + f"= {HUGE:20d}".encode() + raw[at + 30 :]
    path.write_bytes(raw)


def huge_png(path):
    def chunk(kind, body):
        return len(body).to_bytes(4, "big") + kind + body + zlib.crc32(kind + body).to_bytes(4, "big")

    head = HUGE.to_bytes(4, "big") * 2 + bytes([16, 0, 0, 0, 0])
    path.write_bytes(b"\x89PNG\r\n\x1a\n" + chunk(b"IHDR", head) + chunk(b"IDAT", zlib.compress(bytes(1000))))


def huge_tiff(path):
    import tifffile

    tifffile.imwrite(path, sky().astype("uint16"))
    with tifffile.TiffFile(path, mode="r+b") as file:
        for tag in ("ImageWidth", "ImageLength"):
            file.pages[0].tags[tag].overwrite(HUGE)


def huge_ser(path):
    write_ser(path, sky((2, 32, 48)) / 8)
    raw = bytearray(path.read_bytes())
    raw[26:34] = HUGE.to_bytes(4, "little") * 2
    path.write_bytes(raw)


@pytest.mark.parametrize(
    ("write", "name"),
    [
        (huge_fits, "a.fits"),
        (huge_compressed_fits, "a.fits.fz"),
        (huge_png, "a.png"),
        (huge_tiff, "a.tif"),
        (huge_ser, "a.ser"),
    ],
)
def test_a_header_that_promises_a_billion_pixels_is_refused_before_memory_is_taken(tmp_path, write, name):
    write(tmp_path / name)
    tracemalloc.start()
    with pytest.raises(FrameSetAside, match="megapixels") as aside:
        read_frame(tmp_path / name)
    peak = tracemalloc.get_traced_memory()[1]
    tracemalloc.stop()
    assert "\n" not in str(aside.value)
    assert peak < 30e6


def test_a_long_cube_takes_the_memory_of_a_plane(tmp_path):
    from imaging.frames.reading import read_frames

    cube = np.random.default_rng(1).normal(1000, 10, (60, 400, 500)).astype("float32")
    fits.PrimaryHDU(cube).writeto(tmp_path / "cube.fits")
    whole = cube.nbytes
    del cube
    tracemalloc.start()
    assert sum(1 for _ in read_frames(tmp_path / "cube.fits")) == 60
    peak = tracemalloc.get_traced_memory()[1]
    tracemalloc.stop()
    assert peak < whole / 4


@pytest.mark.parametrize(
    ("write", "reason"),
    [
        (lambda path: write_fits(path, np.maximum(sky(), 65535).astype("uint16")), "every pixel is 65535"),
        (lambda path: write_fits(path, np.where(sky() > 970, 65535, 400).astype("uint16")), "is saturated"),
        (lambda path: path.write_bytes(b"\x1f\x8b" + bytes(100)), "damaged|does not begin"),
        (lambda path: path.write_bytes(b"SIMPLE  =" + bytes(20)), "damaged|cannot be read|no image"),
        (
            lambda path: path.write_bytes(b"SIMPLE  =                    T".ljust(80) + b"\xff" * 2800),
            "damaged|no image|cannot",
        ),
        (lambda path: write_fits(path, np.zeros((3, 0))), "no image|pixels"),
        (lambda path: write_fits(path, sky((4, 900))), "900 x 4"),
        (lambda path: write_fits(path, np.where(sky() > 980, np.nan, sky())), "mostly blank"),
    ],
)
def test_what_holds_no_picture_says_so(tmp_path, write, reason):
    path = tmp_path / "a.fits"
    write(path)
    with pytest.raises(FrameSetAside, match=reason) as aside:
        read_frame(path)
    assert "\n" not in str(aside.value)
    assert len(str(aside.value)) < 300


def test_a_container_without_its_frames_is_set_aside(tmp_path):
    write_ser(tmp_path / "a.ser", sky((3, 32, 48)) / 8)
    head = (tmp_path / "a.ser").read_bytes()[:100]
    (tmp_path / "a.ser").write_bytes(head)
    with pytest.raises(FrameSetAside, match="cut short"):
        frame_count(tmp_path / "a.ser")


def test_solve_sets_every_bad_file_aside_and_goes_on(tmp_path, capsys):
    """Noise at the end is a frame that can be read: it says how many stars it has, the files before it why not."""
    folder = tmp_path / "night"
    folder.mkdir()
    bad = [path for path, _ in bad_files(folder) if path.is_file()]
    write_fits(folder / "zz_noise.fits", sky((200, 300)))
    code = run_with(["solve", str(folder), "--near", "80,10", "--scale", "2", "--no-blind", "--json"])
    told = {one["file"]: one for one in json.loads(capsys.readouterr().out)}
    assert code == 1
    for path in bad:
        one = told[str(path)]
        assert not one["solved"]
        assert one["reason"]
        assert "\n" not in one["reason"]
        assert one["stars_found"] is None
    assert "stars found" in told[str(folder / "zz_noise.fits")]["reason"]


@pytest.mark.parametrize(
    ("stamp", "reason"),
    [("1900-01-01T00:00:00", "never set"), ("1899-05-01T00:00:00", "outside"), ("2399-01-01T00:00:00", "outside"),
     ("2027-13-40T99:00:00", "calendar|not a date"), (None, "no DATE-OBS")],
)  # fmt: skip
def test_a_frame_of_an_impossible_date_keeps_its_pixels_and_says_that_it_has_no_time(tmp_path, stamp, reason):
    import re

    frame = read_frame(write_fits(tmp_path / "a.fits", sky(), DATE_OBS=stamp))
    assert frame.time is None
    assert re.search(reason, frame.time_missing)
    assert "\n" not in frame.time_missing
