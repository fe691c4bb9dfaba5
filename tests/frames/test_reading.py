"""Frames of every dialect come in as they are; what cannot be used is set aside with one line of reason."""

from __future__ import annotations

import struct

import numpy as np
import pytest
from astropy.io import fits

from imaging.frames import reading
from imaging.frames.mosaic import green_luminance
from imaging.frames.reading import frame_count, read_frame, read_frames
from planner.errors import FrameSetAside, InputError

STAMP = "2027-02-19T20:15:30.25"


def sky(shape=(40, 60), seed=1):
    return np.random.default_rng(seed).normal(1000, 10, shape)


def write_fits(path, data, **cards):
    header = fits.Header()
    for key, value in {"DATE_OBS": STAMP, "EXPTIME": 10.0, **cards}.items():
        if value is not None:
            header[key.replace("_", "-")] = value
    fits.PrimaryHDU(data, header).writeto(path)
    return path


@pytest.mark.parametrize(
    ("dtype", "tolerance"),
    [
        ("uint8", 0),
        ("int16", 0),
        ("uint16", 0),
        ("int32", 0),
        ("uint32", 0),
        ("float32", 0),
        ("float64", 1e-3),
    ],
)
def test_fits_of_every_depth_gives_its_values(tmp_path, dtype, tolerance):
    data = (sky() / (8 if dtype == "uint8" else 1)).astype(dtype)
    frame = read_frame(write_fits(tmp_path / "a.fits", data))
    assert frame.data.dtype == np.float32
    assert np.abs(frame.data - data).max() <= tolerance
    assert frame.row_zero == "bottom"


def test_fits_16_bit_unsigned_saturates_where_its_numbers_end(tmp_path):
    assert read_frame(write_fits(tmp_path / "a.fits", sky().astype("uint16"))).saturation_adu == 65535


def test_blank_integers_and_nan_become_nan_not_numbers(tmp_path):
    data = sky().astype("int16")
    data[3, 4] = -32768
    path = write_fits(tmp_path / "a.fits", data, BLANK=-32768)
    frame = read_frame(path)
    assert np.isnan(frame.data[3, 4])
    assert np.isfinite(frame.data).sum() == data.size - 1


@pytest.mark.parametrize("compression", ["RICE_1", "GZIP_1"])
def test_tile_compressed_fits_reads_like_plain_fits(tmp_path, compression):
    data = sky().astype("int32")
    hdu = fits.CompImageHDU(data, compression_type=compression)
    hdu.header["DATE-OBS"] = STAMP
    hdu.writeto(tmp_path / "a.fits.fz")
    frame = read_frame(tmp_path / "a.fits.fz")
    assert np.array_equal(frame.data, data.astype("float32"))
    assert frame.time is not None


def test_a_cube_gives_its_planes_one_at_a_time(tmp_path):
    cube = np.stack([sky(seed=i) for i in range(5)]).astype("float32")
    path = write_fits(tmp_path / "cube.fits", cube)
    assert frame_count(path) == 5
    frames = list(read_frames(path))
    assert [frame.frame_index for frame in frames] == [0, 1, 2, 3, 4]
    assert np.array_equal(frames[3].data, cube[3])
    assert np.array_equal(read_frame(path, index=4).data, cube[4])
    assert "each of its 5 planes" in frames[0].time_missing


def test_site_and_scale_come_from_the_header(tmp_path):
    cards = {
        "OBSGEO_X": 4398306.0,
        "OBSGEO_Y": 704150.0,
        "OBSGEO_Z": 4549000.0,
        "FOCALLEN": 400.0,
        "XPIXSZ": 4.0,
    }
    frame = read_frame(write_fits(tmp_path / "a.fits", sky(), **cards))
    latitude, longitude, _ = frame.site
    assert (latitude, longitude) == pytest.approx((45.8, 9.1), abs=0.1)
    assert frame.scale_hint_arcsec_px == pytest.approx(206.264806 * 4.0 / 400.0)


# A linear ramp over a mosaic is the same ramp in green: no half-pixel offset is left.
@pytest.mark.parametrize("pattern", ["RGGB", "BGGR", "GRBG", "GBRG"])
def test_green_of_a_mosaic_does_not_shift(pattern):
    y, x = np.mgrid[0:20, 0:30].astype(float)
    green = 100 + 3 * x + 2 * y
    colours = {"R": 7.0, "G": 1.0, "B": 0.1}
    gain = np.array([[colours[pattern[2 * r + c]] for c in (0, 1)] for r in (0, 1)])
    mosaic = green * np.tile(gain, (10, 15))
    assert np.abs(green_luminance(mosaic, pattern) - green)[1:-1, 1:-1].max() < 1e-3


def test_a_bayer_offset_in_the_header_turns_the_pattern(tmp_path):
    path = write_fits(tmp_path / "a.fits", sky().astype("uint16"), BAYERPAT="RGGB", XBAYROFF=1, YBAYROFF=0)
    assert read_frame(path).mosaic == "GRBG"


def test_colour_is_kept_when_asked_for(tmp_path):
    path = write_fits(tmp_path / "a.fits", sky().astype("uint16"), BAYERPAT="RGGB")
    assert read_frame(path).colour is None
    assert read_frame(path, colour=True).colour.shape == (20, 30, 3)


@pytest.mark.parametrize(("suffix", "depth"), [("png", 8), ("png", 16), ("tif", 8), ("tif", 16), ("jpg", 8)])
@pytest.mark.parametrize("planes", [1, 3])
def test_rasters_keep_their_depth_and_their_top(tmp_path, suffix, depth, planes):
    import cv2
    import tifffile

    high = 2**depth - 1
    data = np.tile(np.linspace(0.1, 0.9, 64)[:, None] * high, (1, 48)).astype(f"uint{depth}")
    data[:6] = high  # the top of the picture is bright
    if planes == 3:
        data = np.repeat(data[..., None], 3, axis=2)
    path = tmp_path / f"a.{suffix}"
    tifffile.imwrite(path, data) if suffix == "tif" else cv2.imwrite(str(path), data)
    frame = read_frame(path, colour=True)
    assert frame.row_zero == "top"
    assert frame.data[2].mean() > 0.98 * high
    assert frame.data[40].mean() == pytest.approx(data[40].mean(), rel=0.02)
    assert frame.saturation_adu == high
    assert (frame.colour is None) == (planes == 1)


# Exif 2.31, tag 0x0112: where the stored first corner lies in the picture
@pytest.mark.parametrize(
    ("flag", "corner"),
    [
        (1, (0, 0)),
        (2, (0, -1)),
        (3, (-1, -1)),
        (4, (-1, 0)),
        (5, (0, 0)),
        (6, (0, -1)),
        (7, (-1, -1)),
        (8, (-1, 0)),
    ],
)
def test_the_orientation_flag_turns_the_picture_upright(tmp_path, flag, corner):
    from PIL import Image

    data = np.zeros((32, 48), dtype="uint8")
    data[16:] = 20
    data[:8, :8] = 250  # the stored first corner
    image = Image.fromarray(data)
    exif = Image.Exif()
    exif[0x0112] = flag
    image.save(tmp_path / "a.jpg", exif=exif, quality=95)
    frame = read_frame(tmp_path / "a.jpg")
    assert frame.data.shape == ((32, 48) if flag <= 4 else (48, 32))
    rows = slice(0, 6) if corner[0] == 0 else slice(-6, None)
    columns = slice(0, 6) if corner[1] == 0 else slice(-6, None)
    assert frame.data[rows, columns].mean() > 200


def exif_directory(at):
    """An Exif directory as TIFF 6.0 writes one, at this place of a file: exposure 4 s, date, offset, sub-seconds."""
    date, offset = b"2027:02:19 22:15:30\0", b"+02:00\0\0"
    data = at + 2 + 4 * 12 + 4
    rows = [
        struct.pack("<HHII", 0x829A, 5, 1, data),
        struct.pack("<HHII", 0x9003, 2, 20, data + 8),
        struct.pack("<HHII", 0x9011, 2, 7, data + 28),
        struct.pack("<HHI4s", 0x9291, 2, 3, b"25\0\0"),
    ]
    return struct.pack("<H", 4) + b"".join(rows) + bytes(4) + struct.pack("<II", 4, 1) + date + offset


def write_tiff_with_exif(path, picture):
    import tifffile

    tags = [(271, "s", 0, "Invented", True), (272, "s", 0, "Camera", True), (65000, "I", 1, 0, True)]
    tifffile.imwrite(path, picture, extratags=tags, metadata=None, byteorder="<")
    at = path.stat().st_size + path.stat().st_size % 2
    with tifffile.TiffFile(path, mode="r+b") as file:
        place = next(tag.offset for tag in file.pages[0].tags if tag.code == 65000)
    with open(path, "r+b") as file:
        file.seek(place)  # the entry that leads to the directory, which the library would not write
        file.write(struct.pack("<HHII", 34665, 4, 1, at))
        file.seek(at)
        file.write(exif_directory(at))


@pytest.mark.parametrize("suffix", ["jpg", "tif", "png"])
def test_exif_of_a_picture_tells_its_time(tmp_path, suffix):
    from PIL import Image
    from PIL.TiffImagePlugin import IFDRational

    from planner.sky.timescale import utc_iso

    exif = Image.Exif()
    exif[0x010F], exif[0x0110] = "Invented", "Camera"
    inner = exif.get_ifd(0x8769)
    inner[0x9003], inner[0x9291], inner[0x9011], inner[0x829A] = (
        "2027:02:19 22:15:30",
        "25",
        "+02:00",
        IFDRational(4, 1),
    )
    picture = np.random.default_rng(1).integers(0, 250, (40, 60), dtype="uint8")
    if suffix == "tif":
        write_tiff_with_exif(tmp_path / "a.tif", picture)
    else:
        Image.fromarray(picture).save(tmp_path / f"a.{suffix}", exif=exif)
    frame = read_frame(tmp_path / f"a.{suffix}")
    assert frame.exposure_s == 4.0
    assert frame.camera == "Invented Camera"
    assert utc_iso(frame.time.middle_tt_s, 3) == "2027-02-19T20:15:32.250Z"


def test_pages_of_a_tiff_are_frames(tmp_path):
    import tifffile

    pages = np.stack([sky(seed=i) for i in range(3)]).astype("uint16")
    tifffile.imwrite(tmp_path / "a.tif", pages, photometric="minisblack")
    assert frame_count(tmp_path / "a.tif") == 3
    assert np.array_equal(read_frame(tmp_path / "a.tif", index=2).data, pages[2])


def write_ser(path, frames, depth=8, colour=0, stamps=True, byteorder="<"):
    count, height, width = frames.shape[:3]
    head = struct.pack(
        "<14siiiiiii40s40s40sqq",
        b"LUCAM-RECORDER",
        0,
        colour,
        0,
        width,
        height,
        depth,
        count,
        b"",
        b"cam",
        b"",
        0,
        0,
    )
    body = frames.astype("u1" if depth <= 8 else f"{byteorder}u2").tobytes()
    ticks = 639_426_789_302_500_000 + 200_000 * np.arange(count)  # 20 ms apart
    path.write_bytes(head + body + (ticks.astype("<i8").tobytes() if stamps else b""))
    return path


@pytest.mark.parametrize("byteorder", ["<", ">"])
def test_ser_gives_frames_with_their_own_times_in_either_byte_order(tmp_path, byteorder):
    smooth = np.add.outer(np.arange(32) * 300.0, np.arange(48) * 100.0) + 500
    frames = np.stack([smooth + 10 * i for i in range(4)])
    path = write_ser(tmp_path / "a.ser", frames, depth=14, byteorder=byteorder)
    assert frame_count(path) == 4
    found = list(read_frames(path))
    assert np.array_equal(found[2].data, frames[2].astype("float32"))
    steps = np.diff([frame.time.middle_tt_s for frame in found])
    assert steps == pytest.approx([0.02] * 3, abs=1e-6)
    assert "not stated" in found[0].time.notes[0]


def test_ser_without_stamps_says_so(tmp_path):
    frame = read_frame(write_ser(tmp_path / "a.ser", sky((2, 32, 48)) / 8, stamps=False))
    assert frame.time is None
    assert "no time stamps" in frame.time_missing


def test_video_frames_have_their_own_times(tmp_path):
    import av

    path = tmp_path / "a.mp4"
    with av.open(str(path), "w") as container:
        container.metadata["creation_time"] = "2027-02-19T20:15:30Z"
        stream = container.add_stream("mpeg4", rate=25)
        stream.width, stream.height, stream.pix_fmt = 64, 48, "yuv420p"
        for i in range(10):
            picture = np.full((48, 64, 3), 20 + 15 * i, dtype="uint8")
            picture[10:20, 10:20] = 250
            for packet in stream.encode(av.VideoFrame.from_ndarray(picture, format="rgb24")):
                container.mux(packet)
        for packet in stream.encode():
            container.mux(packet)
    found = list(read_frames(path))
    assert len(found) == 10
    assert found[7].data[30:, 30:].mean() > found[1].data[30:, 30:].mean() + 50
    steps = np.diff([frame.time.middle_tt_s for frame in found])
    assert steps == pytest.approx([0.04] * 9, abs=1e-3)
    assert found[0].time.sigma_s > 0.2  # the container knows its beginning to the second


def test_camera_raw_is_read_as_its_mosaic(tmp_path):
    import tifffile

    mosaic = (np.random.default_rng(3).normal(2000, 30, (64, 96))).astype("uint16")
    tags = [
        (50706, "B", 4, (1, 4, 0, 0), True),  # DNGVersion
        (50708, "s", 0, "Invented Camera", True),
        (33421, "H", 2, (2, 2), True),  # CFARepeatPatternDim
        (33422, "B", 4, (0, 1, 1, 2), True),  # CFAPattern RGGB
        (50714, "H", 1, 256, True),  # BlackLevel
        (50717, "H", 1, 16383, True),  # WhiteLevel
        (50721, "2i", 9, (1, 1, 0, 1, 0, 1, 0, 1, 1, 1, 0, 1, 0, 1, 0, 1, 1, 1), True),  # ColorMatrix1
    ]
    path = tmp_path / "a.dng"
    tifffile.imwrite(path, mosaic, photometric=32803, extratags=tags, metadata=None)
    frame = read_frame(path)
    assert frame.mosaic == "RGGB"
    assert frame.saturation_adu == pytest.approx(16383 - 256, abs=1)
    assert frame.data.mean() == pytest.approx(mosaic[1::2, ::2].mean() - 256, abs=5)


def damaged(path, keep):
    raw = path.read_bytes()
    path.write_bytes(raw[: int(len(raw) * keep)])
    return path


def huge(path):
    header = b"".join(
        card.ljust(80).encode()
        for card in (
            "SIMPLE  =                    T",
            "BITPIX  =                   16",
            "NAXIS   =                    2",
            "NAXIS1  =                32768",
            "NAXIS2  =                32768",
            "END",
        )
    )
    path.write_bytes(header.ljust(2880))
    return path


def bad_files(tmp_path):
    png = tmp_path / "whole.png"
    import cv2

    cv2.imwrite(str(png), sky().astype("uint8"))
    ser = write_ser(tmp_path / "short.ser", sky((3, 32, 48)) / 8)
    nan = sky()
    nan[:] = np.nan
    lying = tmp_path / "lying.fits"
    write_fits(lying, sky().astype("int16"))
    lying.write_bytes(
        lying.read_bytes().replace(b"NAXIS2  =                   40", b"NAXIS2  =                 4000")
    )
    encrypted = np.random.default_rng(5).integers(0, 256, 20000, dtype="uint8").tobytes()
    for name in ("secret.fits", "secret.jpg", "secret.cr2", "secret.mp4"):
        (tmp_path / name).write_bytes(encrypted)
    for name in ("empty.fits", "empty.png"):
        (tmp_path / name).write_bytes(b"")
    (tmp_path / "text.txt").write_text("a night's log\n")
    (tmp_path / "text.fits").write_text("a night's log\n")
    table = fits.BinTableHDU.from_columns([fits.Column("a", "E", array=np.arange(3.0))])
    table.writeto(tmp_path / "table.fits")
    return [
        (damaged(write_fits(tmp_path / "cut.fits", sky((300, 300))), 0.5), "cut short"),
        (damaged(png, 0.4), "damaged|cannot be read|blank|truncated"),
        (damaged(ser, 0.5), "cut short"),
        (lying, "cut short"),
        (tmp_path / "secret.fits", "damaged or encrypted"),
        (tmp_path / "secret.jpg", "damaged or encrypted"),
        (tmp_path / "secret.cr2", "damaged or encrypted"),
        (tmp_path / "secret.mp4", "damaged or encrypted"),
        (tmp_path / "empty.fits", "empty"),
        (tmp_path / "empty.png", "empty"),
        (tmp_path / "text.txt", "none of the formats"),
        (tmp_path / "text.fits", "does not begin like one"),
        (tmp_path / "table.fits", "no image"),
        (write_fits(tmp_path / "one.fits", np.ones((1, 1))), "1 x 1"),
        (write_fits(tmp_path / "nan.fits", nan), "blank or NaN"),
        (write_fits(tmp_path / "black.fits", np.zeros((40, 60), "int16")), "all black"),
        (write_fits(tmp_path / "full.fits", np.full((40, 60), 65535, "uint16")), "every pixel is 65535"),
        (huge(tmp_path / "huge.fits"), "megapixels"),
        (tmp_path / "not_there.fits", "cannot be opened"),
        (tmp_path, "a folder"),
    ]


def test_bad_files_are_set_aside_with_one_line_and_no_traceback(tmp_path):
    import re

    for path, reason in bad_files(tmp_path):
        with pytest.raises(FrameSetAside) as aside:
            read_frame(path)
        assert re.search(reason, aside.value.reason), f"{path.name}: {aside.value.reason}"
        assert "\n" not in str(aside.value)


def test_a_wrong_extension_does_not_matter(tmp_path):
    write_fits(tmp_path / "a.fits", sky()).rename(tmp_path / "a.jpg")
    assert read_frame(tmp_path / "a.jpg").time is not None


def test_a_zone_that_is_none_is_the_users_mistake(tmp_path):
    with pytest.raises(InputError, match="allowed are an offset"):
        read_frame(write_fits(tmp_path / "a.fits", sky()), zone="Middle-Earth/Shire")


def test_the_file_date_counts_only_when_asked_for(tmp_path):
    path = write_fits(tmp_path / "a.fits", sky(), DATE_OBS=None)
    assert read_frame(path).time is None
    dated = read_frame(path, file_time=True)
    assert dated.time.source == "file modification time and exposure"


def test_every_dialect_is_a_module_of_its_own():
    from importlib import import_module

    for module_name, _ in reading.DIALECTS.values():
        module = import_module(module_name)
        assert callable(module.recognises)
        assert callable(module.frames)
