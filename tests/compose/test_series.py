"""The Moon among stars, two sites on one disc, discs side by side, and colour through the mosaic."""

from __future__ import annotations

from dataclasses import replace
from pathlib import Path

import numpy as np
import pytest
import tifffile
from astropy.io import fits
from PIL import Image

from imaging.compose.arc import Landscape
from imaging.compose.canvas import Canvas
from imaging.compose.choices import Choices
from imaging.compose.composing import Outputs, compose_picture, write_picture
from imaging.compose.exposures import by_exposure, merged
from imaging.compose.ground import falloff, measured_falloff, sky_surface
from imaging.compose.light import Level, Light
from imaging.compose.material import Registered, gather
from imaging.compose.pathdata import path_data
from imaging.compose.pathplot import draw_path_plot
from imaging.compose.phase_series import phase_series
from imaging.compose.plane import plane_to_sky
from imaging.compose.pointing import DiscPointing
from imaging.compose.truth import caption
from imaging.frames.frame import Frame
from imaging.frames.mosaic import green_luminance, half_size_colour
from planner.cli.main import run_with
from planner.errors import InputError
from planner.sequence.documents import load_plan
from tests.compose.rehearsed import track_from_truth

SECOND_SITE = """
name: Far Shore (invented)
latitude_deg: -33.9
longitude_deg: 18.4
height_m: 100
timezone: Africa/Johannesburg
"""


def material_of(rehearsal):
    return gather(load_plan(rehearsal.plan), rehearsal.track, rehearsal.frames)


def test_among_stars_the_moon_moves_east_and_uranus_stands_still(occultation):
    picture = compose_picture(material_of(occultation), Choices(registration="stars", instants=3))
    places = np.array([(item.x_px, item.y_px) for item in picture.drawn])
    assert np.ptp(places, axis=0).max() * picture.canvas.scale_arcsec_px < 8.0  # its own motion in 88 minutes
    lit = [
        picture.canvas.from_sky(
            picture.anchor_ra_deg, picture.anchor_dec_deg, frame.reference_ra_deg, frame.reference_dec_deg
        )
        for frame, _ in picture.used
    ]
    assert float(lit[0][0]) > float(lit[-1][0]) + 100  # east is left
    for x_px, y_px in lit:
        # half a radius toward the lit side there is Moon
        assert picture.image[round(float(y_px)), round(float(x_px) + 70)] > 0.2


@pytest.fixture(scope="module")
def far_transit(tmp_path_factory, root):
    folder = tmp_path_factory.mktemp("far")
    (folder / "site.yaml").write_text(SECOND_SITE)
    plan, frames = folder / "plan.yaml", folder / "frames"
    brief = root / "configs" / "mercury_transit_2032.yaml"
    assert run_with(["plan", str(brief), "--site", str(folder / "site.yaml"), "-o", str(plan)]) in (0, 1)
    rehearsal = ["rehearse", str(plan), "-o", str(frames), "--frames", "12", "--binning", "8"]
    assert run_with([*rehearsal, "--quiet", "--jobs", "1"]) == 0
    return plan, track_from_truth(load_plan(plan), frames, folder / "checked"), frames


def test_two_sites_see_mercury_apart_by_its_parallax(transit, far_transit, monkeypatch):
    """Against the prediction of both sites at the same instants; the tracks are those of a perfect check."""
    material = material_of(transit)
    plan, track, frames = far_transit
    far = gather(load_plan(plan), track, frames)
    # these few frames are up to 15 minutes apart; the motion in between is taken off by the prediction
    monkeypatch.setattr("imaging.compose.two_sites.SAME_INSTANT_S", 900.0)
    monkeypatch.setattr("imaging.compose.disc_path.SAME_INSTANT_S", 900.0)
    picture = compose_picture(material, Choices(instants=5), far)
    said = float(picture.notes[-1].split(" arcsec apart")[0].rsplit(" ", 1)[1])
    expected = []
    for item in picture.drawn[: len(picture.drawn) // 2]:
        t = np.array([item.frame.tt_s])
        offsets = []
        for each in (material, far):
            g = each.geometry_at(t)
            sun, planet = g.discs["sun"], g.discs["mercury"]
            east = (planet.ra_deg - sun.ra_deg) * np.cos(np.radians(sun.dec_deg)) * 3600
            offsets.append((float(east[0]), float((planet.dec_deg - sun.dec_deg)[0] * 3600)))
        expected.append(np.hypot(*np.subtract(*offsets)))
    assert said == pytest.approx(np.mean(expected), abs=0.6)
    data = path_data(material, Choices(), other=far)
    across = [np.hypot(*(data.line - place[:, None])).min() for place in data.second.line[:, 200:500:50].T]
    assert 2.0 < np.mean(across) <= np.mean(expected) + 0.3  # the part of it across the track
    assert draw_path_plot(data).axes[0].child_axes  # enlarged in a corner
    assert picture.kind == "two-sites"
    assert "parallax" in caption(material, picture)
    assert len(picture.drawn) > 5


def test_another_event_cannot_be_the_second_site(transit, occultation):
    with pytest.raises(InputError, match="--second-site"):
        compose_picture(material_of(transit), Choices(), material_of(occultation))


def a_frame(data, pointing, tt_s=0.0, passage="visit 1", ra=200.0, dec=-8.0, name="a.fits", exposure_s=1.0):
    nan = float("nan")
    return Registered(
        Path(name), 0, passage, tt_s, "stars", pointing, pointing.scale_arcsec_px, nan, nan, ra, dec, ra, dec, 0.1, 0.1,
        (nan, nan, nan), exposure_s, "on-track",
    )  # fmt: skip


class InMemory(Light):
    """Light that is given its frames."""

    def read(self, registered):
        return self.frames[registered.path.name]  # type: ignore[attr-defined]


def test_a_series_of_discs_keeps_their_size_and_order_and_says_what_is_enlarged(loop, tmp_path):
    """Discs of 8, 6 and 4 px radius, enlarged three times: measured back from the sheet within 2 %."""
    material = material_of(loop)
    base = material.frames[0].tt_s
    frames, pixels = [], {}
    y, x = np.mgrid[:60, :60]
    for number, radius in enumerate((8.0, 6.0, 4.0)):
        pointing = DiscPointing(30.2, 29.7, 1.0, 15.0 * number, 1, 200.0, -8.0)
        disc = 500.0 / (1 + np.exp((np.hypot(x - 30.2, y - 29.7) - radius) / 0.3)) + 20
        name = f"{number}.fits"
        pixels[name] = Frame(Path(name), disc.astype(np.float32), None, 1.0)
        frames.append(a_frame(disc, pointing, base + number * 1e6, f"visit {number}", name=name))
    material = replace(material, frames=tuple(frames))
    light = InMemory(threads=1)
    object.__setattr__(light, "frames", pixels)
    picture = phase_series(material, Choices(enlarge=3.0, scale_arcsec_px=1.0), light)
    cell = picture.image.shape[0]
    for number, radius in enumerate((8.0, 6.0, 4.0)):
        tile = picture.image[:, number * cell : (number + 1) * cell]
        assert np.sqrt((tile > 0.5).sum() / np.pi) == pytest.approx(3 * radius, rel=0.02)
    assert picture.enlargement == 3
    # every disc has its date below it, in order
    assert [label[0] for label in picture.labels] == [item.x_px for item in picture.drawn]
    assert all(y < item.y_px for (_, y, _), item in zip(picture.labels, picture.drawn, strict=True))
    assert len({text for *_, text in picture.labels}) == 3
    assert "drawn 3 times their true size" in caption(material, picture)
    assert [item.x_px for item in picture.drawn] == sorted(item.x_px for item in picture.drawn)
    # what is exaggerated is told in every file that leaves the house
    _, statement = write_picture(
        material, picture, Outputs(tmp_path, ("fits", "tiff", "png", "jpg"), page=False)
    )
    assert statement["enlargement"] == 3
    assert "3 times their true size" in statement["exaggeration"]
    assert fits.getheader(tmp_path / "composite.fits")["ENLARGE"] == 3
    with Image.open(tmp_path / "composite.png") as png, Image.open(tmp_path / "composite.jpg") as jpg:
        assert "drawn 3 times their true size" in png.text["Description"]
        assert "drawn 3 times their true size" in jpg.getexif()[0x010E]
    assert "drawn 3 times" in tifffile.TiffFile(tmp_path / "composite.tiff").pages[0].description


@pytest.mark.parametrize("pattern", ["RGGB", "BGGR", "GRBG", "GBRG"])
def test_colours_of_a_mosaic_fall_on_each_other(pattern):
    """A white star through each mosaic: its three colours at the same place to 0.01 px, in equal amount to 0.5 %."""
    y, x = np.mgrid[:80, :90]
    star = 1000 * np.exp(-((x - 44.3) ** 2 + (y - 38.6) ** 2) / (2 * 2.2**2)) + 100
    mosaic = star.astype(np.float32)  # white: every pixel sees the same light
    frame = Frame(
        Path("colour.fits"), green_luminance(mosaic, pattern), None, 1.0, colour=half_size_colour(mosaic, pattern),
        mosaic=pattern,
    )  # fmt: skip
    pointing = DiscPointing(44.3, 38.6, 2.0, 30.0, 1, 200.0, -8.0)
    canvas = Canvas(61, 61, 2.0, 30.0, 30.0)
    image = Light(colour=True, threads=1).on_canvas(
        frame, a_frame(mosaic, pointing), canvas, (200.0, -8.0), Level(100.0, 1.0)
    )
    image = np.nan_to_num(image)  # the corners of the canvas are outside the frame
    gy, gx = np.mgrid[:61, :61]
    flux = image.sum(axis=(0, 1))
    for index in range(3):
        plane = image[..., index]
        assert (plane * gx).sum() / plane.sum() == pytest.approx(30.0, abs=0.01)
        assert (plane * gy).sum() / plane.sum() == pytest.approx(30.0, abs=0.01)
    assert flux == pytest.approx(np.full(3, (mosaic - 100).sum()), rel=5e-3)


def test_long_and_short_exposures_merge_into_one_linear_picture():
    nan = np.nan
    long, short = np.array([[1.0, nan, nan]]), np.array([[1.1, 50.0, nan]])
    whole = np.array([[1.1, 50.0, 400.0]])
    np.testing.assert_array_equal(merged([long, short], whole), [[1.0, 50.0, 400.0]])
    pointing = DiscPointing(0, 0, 1.0, 0, 1, 0, 0)
    frames = [a_frame(None, pointing, exposure_s=e, name=f"{e}.fits") for e in (0.01, 0.5, 0.011, 0.52)]
    assert [[frame.exposure_s for frame in group] for group in by_exposure(frames)] == [
        [0.52, 0.5],
        [0.011, 0.01],
    ]


def test_vignetting_is_found_beside_moonlight():
    """Corner loss of 35 % under gradients of 20 % in other directions: found to 1 %."""
    rng = np.random.default_rng(2)
    y, x = np.mgrid[:400, :600]
    share = falloff((400, 600), 0.25, 0.10)
    frames = [
        500 * (1 + 0.2 * (np.cos(a) * (x / 300 - 1) + np.sin(a) * (y / 200 - 1))) * share
        + rng.normal(0, 20, share.shape)
        for a in (0.3, 2.0, 4.4)
    ]  # fmt: skip
    a, b = measured_falloff([frame.astype(np.float32) for frame in frames])
    assert a + b == pytest.approx(0.35, abs=0.01)
    assert falloff((400, 600), a, b) == pytest.approx(share, abs=0.01)


def test_a_sky_too_faint_tells_no_vignetting():
    rng = np.random.default_rng(2)
    assert measured_falloff([rng.normal(0.3, 20, (200, 300)).astype(np.float32)]) is None


def test_the_sky_is_taken_off_and_the_stars_are_left():
    rng = np.random.default_rng(9)
    y, x = np.mgrid[:300, :400]
    sky = 300 + 0.2 * x - 0.1 * y + 2e-4 * (x - 200) ** 2
    data = sky + rng.normal(0, 5, sky.shape)
    data[::37, ::41] += 3000
    left = data - sky_surface(data.astype(np.float32))
    assert np.abs(np.median(left.reshape(6, 50, 8, 50).swapaxes(1, 2).reshape(6, 8, -1), axis=-1)).max() < 1.0


def test_a_place_on_the_plane_comes_back_from_a_disc_frame():
    pointing = DiscPointing(52.0, 47.0, 2.0, 130.0, -1, 200.0, -8.0)
    ra, dec = plane_to_sky(200.0, -8.0, 33.0, -21.0)
    assert pointing.pixel_to_sky(*pointing.sky_to_pixel(ra, dec)) == pytest.approx(
        (float(ra), float(dec)), abs=1e-9
    )


def test_the_arc_stands_at_its_altitudes_over_the_landscape(loop, tmp_path):
    """Each place measured back from the picture with the pinhole formula, and the ground is left as it was."""
    shown = np.full((900, 1600), 40, np.uint8)
    shown[700:] = 15
    Image.fromarray(shown).save(tmp_path / "hill.png")
    material = material_of(loop)
    geometry = material.geometry
    azimuth = float(np.median(geometry.azimuth_deg))
    landscape = Landscape(
        tmp_path / "hill.png", azimuth, 100.0, 1500.0
    )  # Mars culminates near the zenith: look up
    picture = compose_picture(material, Choices(instants=12), landscape=landscape)
    focal_px = 800 / np.tan(np.radians(50))
    assert len(picture.drawn) >= 2
    tilt = np.arctan((1500 - 449.5) / focal_px)
    for item in picture.drawn:
        g = material.geometry_at(np.array([item.frame.tt_s]))
        alt, az = np.radians(g.altitude_deg[0]), np.radians(g.azimuth_deg[0] - azimuth)
        forward, right, up = np.cos(alt) * np.cos(az), np.cos(alt) * np.sin(az), np.sin(alt)
        depth = forward * np.cos(tilt) + up * np.sin(tilt)
        x = 799.5 + focal_px * right / depth
        y = 449.5 + focal_px * (up * np.cos(tilt) - forward * np.sin(tilt)) / depth
        assert (item.x_px, item.y_px) == pytest.approx((x, y), abs=0.01)
        ground = ((40 / 255 + 0.055) / 1.055) ** 2.4
        row, column = round(item.y_px), round(item.x_px)
        assert picture.image[row - 1 : row + 2, column - 1 : column + 2].max() > 2 * ground
    assert np.median(picture.image[:100]) == pytest.approx(((15 / 255 + 0.055) / 1.055) ** 2.4, rel=1e-3)


def test_a_landscape_that_looks_elsewhere_says_where_the_target_is(loop, tmp_path):
    Image.fromarray(np.zeros((90, 160), np.uint8)).save(tmp_path / "hill.png")
    with pytest.raises(InputError, match="stands at azimuth"):
        compose_picture(
            material_of(loop), Choices(), landscape=Landscape(tmp_path / "hill.png", 0.0, 5.0, 80.0)
        )
