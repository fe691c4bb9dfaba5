"""Composites of rehearsals lie where the sky put them: limbs, stars and planets are measured back from the pictures."""

from __future__ import annotations

import json

import numpy as np
import pytest
from astropy.io import fits
from astropy.wcs import WCS
from PIL import Image

from imaging.compose.choices import Choices
from imaging.compose.composing import compose_picture
from imaging.compose.files import NARROWEST_PX
from imaging.compose.material import gather
from imaging.compose.stretch import background
from imaging.compose.timelapse import Film, make_film
from imaging.discs.limb import fit_limb
from planner.cli.main import run_with
from planner.sequence.documents import load_plan
from tests.compose.conftest import rehearse


def material_of(rehearsal, **options):
    return gather(load_plan(rehearsal.plan), rehearsal.track, rehearsal.frames, **options)


def test_the_sun_is_round_centred_and_of_the_predicted_size(transit):
    """Limb registration: 0.05 px of the injected truth is required; the size is that of the ephemeris."""
    material = material_of(transit)
    picture = compose_picture(material, Choices(instants=5))
    radius = float(material.geometry.discs["sun"].semidiameter_arcsec[8]) / picture.canvas.scale_arcsec_px
    fit = fit_limb(np.nan_to_num(picture.image))
    assert fit.x_px == pytest.approx(picture.canvas.anchor_x_px, abs=0.05)
    assert fit.y_px == pytest.approx(picture.canvas.anchor_y_px, abs=0.05)
    assert fit.radius_px == pytest.approx(radius, abs=0.15)  # blur moves the inflection (pitfall 29)


def test_mercury_is_drawn_where_the_prediction_has_it(transit):
    """The darkest weight of each patch against the predicted place; Mercury is 1.6 px wide here."""
    picture = compose_picture(material_of(transit), Choices(instants=5))
    ground = compose_picture(material_of(transit), Choices(instants=5, blend="max"))
    found = 0
    for item in picture.drawn:
        row, column = round(item.y_px), round(item.x_px)
        box = (slice(row - 3, row + 4), slice(column - 3, column + 4))
        if np.hypot(row - picture.canvas.anchor_y_px, column - picture.canvas.anchor_x_px) > 140:
            continue
        depth = np.clip(np.median(ground.image[box]) - picture.image[box] - 0.02, 0, None)
        y, x = np.mgrid[box[0], box[1]]
        assert (depth * x).sum() / depth.sum() == pytest.approx(item.predicted_x_px, abs=0.25)
        assert (depth * y).sum() / depth.sum() == pytest.approx(item.predicted_y_px, abs=0.25)
        found += 1
    assert found >= 3


@pytest.mark.parametrize("up", ["north", "zenith", "ecliptic", "track"])
def test_every_orientation_shows_the_same_sky(transit, up):
    material = material_of(transit)
    picture = compose_picture(material, Choices(instants=3, orientation=up))
    for item in picture.drawn:
        wcs = WCS(picture.canvas.wcs_header(item.frame.reference_ra_deg, item.frame.reference_dec_deg))
        ra, dec = wcs.all_pix2world(item.x_px, item.y_px, 0)
        apart = np.hypot(
            (ra - item.frame.target_ra_deg) * np.cos(np.radians(dec)), dec - item.frame.target_dec_deg
        )
        assert apart * 3600 < 1e-3
    if up == "track":
        first, last = picture.drawn[0], picture.drawn[-1]
        assert abs(last.y_px - first.y_px) < 0.02 * abs(last.x_px - first.x_px)


def test_the_moon_is_registered_on_its_limb_and_uranus_stands_beside_it(occultation):
    material = material_of(occultation)
    picture = compose_picture(material, Choices(instants=6))
    disc = material.geometry.discs["moon"]
    away = [
        np.hypot(item.x_px - picture.canvas.anchor_x_px, item.y_px - picture.canvas.anchor_y_px)
        * picture.canvas.scale_arcsec_px
        for item in picture.drawn
    ]
    assert min(away) > 0.99 * disc.semidiameter_arcsec.min()
    for item in picture.drawn:
        box = picture.image[
            round(item.y_px) - 2 : round(item.y_px) + 3, round(item.x_px) - 2 : round(item.x_px) + 3
        ]
        assert np.nanmax(box) > np.nanmedian(box) + 0.003
    lit = disc.bright_limb_pa_deg[0]
    fit = fit_limb(
        np.nan_to_num(picture.image),
        radius_px=float(disc.semidiameter_arcsec[8]) / picture.canvas.scale_arcsec_px,
        radius_sigma_px=0.05,
        lit_angle_deg=lit + 90.0,
        lit_half_deg=75.0,
    )
    assert fit.x_px == pytest.approx(picture.canvas.anchor_x_px, abs=0.1)
    assert fit.y_px == pytest.approx(picture.canvas.anchor_y_px, abs=0.1)


def test_the_path_of_mars_has_one_place_a_visit_and_none_in_the_ground(loop):
    material = material_of(loop)
    picture = compose_picture(material, Choices())
    assert len(picture.drawn) == len({frame.passage for frame in material.frames})
    for item in picture.drawn:
        assert picture.image[round(item.y_px), round(item.x_px)] > 20 * background(picture.image)[1]
        assert item.displacement_arcsec < 0.1 * picture.canvas.scale_arcsec_px


def test_a_short_path_is_shown_in_the_field_of_a_frame_with_what_it_passes(tmp_path):
    """Venus moves by an arcminute in a field of a degree; Jupiter, which every frame holds, stays in the picture."""
    rehearsal = rehearse(tmp_path, "planets_meet_2028", "--binning", "8", "--frames", "4")
    material = material_of(rehearsal)
    picture = compose_picture(material, Choices())
    rows, columns = fits.getdata(material.frames[0].path).shape
    assert picture.image.size > 0.5 * rows * columns
    assert np.isfinite(picture.image).mean() > 0.99
    pointing, disc = material.frames[2].pointing, material.geometry.discs["jupiter"]
    x, y = pointing.sky_to_pixel(disc.ra_deg[2:3], disc.dec_deg[2:3])
    assert (0 < x) & (x < columns) & (0 < y) & (y < rows)
    place = picture.canvas.from_sky(
        picture.anchor_ra_deg, picture.anchor_dec_deg, float(disc.ra_deg[2]), float(disc.dec_deg[2])
    )
    assert 0 < place[0] < picture.canvas.width_px
    assert 0 < place[1] < picture.canvas.height_px
    make_film(tmp_path / "film.gif", material, Film(size_px=(320, 240), stamp=False))
    with Image.open(tmp_path / "film.gif") as film:
        rows = np.flatnonzero((np.asarray(film.convert("L")) > 200).any(axis=1))
        # the film is centred between the planets: one as far above its middle as the other below
        assert rows[0] + rows[-1] == pytest.approx(film.height - 1, abs=0.05 * film.height)
        assert np.ptp(rows) > 0.3 * film.height


def test_compose_writes_what_it_says_and_readers_agree(transit, tmp_path, capsys):
    out = tmp_path / "picture"
    code = run_with(
        ["compose", *transit.arguments, "-o", str(out), "--formats", "fits,tiff,png,jpg", "--plots", "png,svg,pdf",
         "--instants", "5", "--json", "--dpi", "80"]
    )  # fmt: skip
    assert code == 0
    said = json.loads(capsys.readouterr().out)
    assert {path.name for path in out.iterdir()} == {path.rsplit("/", 1)[1] for path in said["files"]}
    kept = json.loads((out / "composite.truth.json").read_text())
    assert kept["largest_displacement_arcsec"] == said["largest_displacement_arcsec"]
    assert len(kept["drawn"]) == 5
    assert kept["exaggeration"].startswith("none")

    with fits.open(out / "composite.fits") as hdus:
        hdus.verify("exception")
        assert hdus[0].data.dtype == np.dtype(">f4")
        assert len(hdus["FRAMES"].data) == hdus[0].header["NCOMBINE"] == len(kept["frames"])
        assert WCS(hdus[0].header).has_celestial
        assert hdus[0].header["REGERR"] == pytest.approx(kept["registration_error_arcsec"], rel=1e-6)
        linear = hdus[0].data
    import tifffile
    from PIL import Image, ImageCms

    with tifffile.TiffFile(out / "composite.tiff") as tiff:
        page = tiff.pages[0]
        assert page.dtype == np.uint16
        assert page.shape == linear.shape
        assert page.asarray()[page.shape[0] // 2, page.shape[1] // 2] > 50000
        icc = page.tags["InterColorProfile"].value
    import io

    ImageCms.getOpenProfile(io.BytesIO(icc))
    with Image.open(out / "composite.png") as image:
        assert image.text["Title"].startswith("Mercury")
        assert "predicted place" in image.text["Description"]
        # a narrow picture stands on a wider caption
        assert image.size[0] == max(linear.shape[1], NARROWEST_PX)
        assert image.size[1] > linear.shape[0]  # the caption band
        assert ImageCms.getOpenProfile(io.BytesIO(image.info["icc_profile"]))
    with Image.open(out / "composite.jpg") as image:
        image.load()
        assert image.getexif()[0x010E].startswith("Mercury")
    assert (out / "path_light.svg").read_text().count("<text") > 10
    assert (out / "path_dark.pdf").read_bytes().startswith(b"%PDF")


def test_a_second_run_keeps_what_is_there_unless_forced(transit, tmp_path, capsys):
    out = tmp_path / "picture"
    short = [
        "compose",
        *transit.arguments,
        "-o",
        str(out),
        "--formats",
        "png",
        "--plots",
        "none",
        "--instants",
        "2",
        "--quiet",
    ]
    assert run_with(short) == 0
    before = (out / "composite.png").read_bytes()
    assert run_with(short) == 2
    assert "--force" in capsys.readouterr().err
    assert (out / "composite.png").read_bytes() == before
    assert run_with([*short, "--force", "--up", "zenith"]) == 0
    assert (out / "composite.png").read_bytes() != before
