"""Exposures too short for stars are registered on the planets in them, by the solution of a neighbouring frame."""

from __future__ import annotations

import shutil
from dataclasses import replace

import numpy as np
import pytest
from astropy.io import fits
from astropy.table import Table

from imaging.compose.bright import LEAST_SIGMA_PX, with_short_exposures
from imaging.compose.choices import Choices
from imaging.compose.composing import compose_picture
from imaging.compose.light import Light
from imaging.compose.material import gather
from imaging.compose.truth import statement
from imaging.track.table import read_track
from planner.sequence.documents import load_plan
from tests.compose.conftest import rehearse


@pytest.fixture(scope="module")
def meeting(tmp_path_factory):
    """Venus and Jupiter, long and short exposures in turn, the short ones not solved, as a check leaves them."""
    rehearsal = rehearse(
        tmp_path_factory.mktemp("meeting"), "planets_meet_2028", "--binning", "8", "--frames", "16"
    )
    table = Table.read(rehearsal.track)
    short = np.asarray(table["exposure_s"]) < 0.1
    assert short.sum() == 8
    table["solved_by"] = np.where(short, "none", table["solved_by"]).astype(str)
    table["reason"] = np.where(short, "without stars", "").astype(str)
    for name in ("x_px", "y_px", "measured_ra_deg", "measured_dec_deg"):
        table[name][short] = np.nan
    table.write(rehearsal.track, overwrite=True)
    return rehearsal


def material_of(rehearsal):
    return gather(load_plan(rehearsal.plan), rehearsal.track, rehearsal.frames)


def test_short_exposures_lie_where_the_renderer_drew_them(meeting):
    """Both planets, in every short frame, within three of the stated sigmas of where they were drawn.

    The perfect solution of a neighbour is off by the mount's jitter, which is what the planets have to tell.
    """
    before = material_of(meeting)
    material = with_short_exposures(before, Light())
    short = [frame for frame in material.frames if frame.solved_by == "planets"]
    assert len(short) == len(before.starless)
    assert material.set_aside == ()
    truth = Table.read(meeting.frames.with_name("frames.truth.ecsv"))
    drawn = {str(row["file"]): (row["target_x_px"], row["target_y_px"]) for row in truth}
    for frame in short:
        x, y = frame.pointing.sky_to_pixel(
            np.array([frame.predicted_ra_deg]), np.array([frame.predicted_dec_deg])
        )
        apart = np.hypot(*np.subtract((float(x[0]), float(y[0])), drawn[frame.path.name]))
        sigma_px = frame.registration_sigma_arcsec / frame.scale_arcsec_px
        assert sigma_px >= LEAST_SIGMA_PX / np.sqrt(2)
        assert apart < 3 * max(sigma_px, LEAST_SIGMA_PX)
        assert not frame.measured  # the prediction was put in: it is no measurement
        back = frame.pointing.pixel_to_sky(x, y)
        assert back[0][0] == pytest.approx(frame.predicted_ra_deg, abs=1e-6)
    assert "too short for stars" in material.notes[-1]


def light_about(plane, x, y, radius=4):
    """Light within a circle, above what surrounds it."""
    row, column = round(y), round(x)
    box = np.asarray(plane[row - 9 : row + 10, column - 9 : column + 10], float)
    v, u = np.indices(box.shape)
    away = np.hypot(u - 9 + column - x, v - 9 + row - y)
    return float((box[away < radius] - np.nanmedian(box[away > 7])).sum())


def place_on(picture, material, name):
    disc = material.geometry_at(np.array([material.frames[len(material.frames) // 2].tt_s])).discs[name]
    at = picture.canvas.from_sky(
        picture.anchor_ra_deg, picture.anchor_dec_deg, disc.ra_deg[0], disc.dec_deg[0]
    )
    return float(at[0]), float(at[1])


def light_in_frame(frame, material, name, flat):
    """Counts a second of a planet in a frame as it was read, freed of vignetting."""
    disc = material.geometry_at(np.array([frame.tt_s])).discs[name]
    x, y = (float(value[0]) for value in frame.pointing.sky_to_pixel(disc.ra_deg, disc.dec_deg))
    data = fits.getdata(frame.path).astype(float)
    rows, columns = data.shape
    r2 = ((x - columns / 2) ** 2 + (y - rows / 2) ** 2) / ((columns / 2) ** 2 + (rows / 2) ** 2)
    return light_about(data, x, y) / frame.exposure_s / (1 - flat * r2)


def test_what_long_exposures_burn_out_comes_from_the_short_ones(meeting):
    """Venus and Jupiter hold the light that the short exposures have, to 2 %, and the statement says by what."""
    material = with_short_exposures(material_of(meeting), Light())
    merged = compose_picture(material, Choices())
    burnt = compose_picture(material_of(meeting), Choices())
    flat = next(float(note.split()[1]) / 100 for note in merged.notes if note.startswith("vignetting"))
    for name in ("venus", "jupiter"):
        light = {
            kind: light_about(picture.image, *place_on(picture, material, name))
            for kind, picture in (("merged", merged), ("burnt", burnt))
        }
        short = [
            light_in_frame(frame, material, name, flat)
            for frame in material.frames
            if frame.solved_by == "planets"
        ]
        assert light["merged"] == pytest.approx(np.median(short), rel=0.02)
        assert light["merged"] > 1.5 * light["burnt"]
    told = statement(material, merged)
    roles = {item["registered_by"]: item["role"] for item in told["frames"]}
    assert roles["planets"] == "target"
    assert "planets in short exposures" in told["registration"]
    assert all(
        (item["pointing_sigma_arcsec"] is not None) == (item["registered_by"] == "planets")
        for item in told["frames"]
    )
    assert any("burnt out" in note for note in told["notes"])


def test_a_short_exposure_without_a_planet_or_a_neighbour_stays_aside(meeting, tmp_path):
    frames = tmp_path / "frames"
    shutil.copytree(meeting.frames, frames)
    spoilt = replace(meeting, frames=frames)
    short = material_of(meeting).starless
    with fits.open(frames / short[0].path.name, mode="update") as hdus:
        rng = np.random.default_rng(2)
        hdus[0].data[:] = 200 + rng.integers(0, 9, hdus[0].data.shape)
    material = with_short_exposures(material_of(spoilt), Light())
    assert [item.path for item in material.set_aside] == [short[0].path.name]
    assert material.set_aside[0].reason == "shows neither stars nor Venus where it should be"
    alone = material_of(spoilt)
    alone = replace(alone, starless=tuple(replace(frame, passage="elsewhere") for frame in alone.starless))
    assert with_short_exposures(alone, Light()).frames == alone.frames
    assert len(read_track(meeting.track)) == 16
