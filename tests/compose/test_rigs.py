"""Frames of different scale, camera angle, binning, parity and rig make one picture, and filters are kept apart."""

from __future__ import annotations

import json
import shutil
from dataclasses import replace

import numpy as np
import pytest
from astropy.io import fits

from imaging.compose.choices import Choices
from imaging.compose.composing import compose_picture
from imaging.compose.material import gather
from imaging.compose.phase_series import phase_series
from imaging.compose.pointing import DiscPointing
from imaging.compose.selection import joined, through_filter
from imaging.discs.limb import fit_limb
from imaging.frames.frame import Frame
from planner.cli.main import run_with
from planner.errors import InputError
from planner.sequence.documents import load_plan
from tests.compose.rehearsed import track_from_truth
from tests.compose.test_series import InMemory, a_frame


@pytest.fixture(scope="module")
def other_rig(tmp_path_factory, root):
    """The same transit through another telescope: other scale, bias, binning, camera angle, and mirrored."""
    folder = tmp_path_factory.mktemp("other")
    rig = (root / "configs" / "rigs" / "refractor_1000mm.yaml").read_text()
    rig = rig.replace("1000", "700", 1) if "focal_length_mm: 1000" not in rig else rig.replace(
        "focal_length_mm: 1000", "focal_length_mm: 700"
    )  # fmt: skip
    (folder / "rig.yaml").write_text(rig)
    plan, frames = folder / "plan.yaml", folder / "frames"
    brief = str(root / "configs" / "mercury_transit_2032.yaml")
    assert run_with(["plan", brief, "--rig", str(folder / "rig.yaml"), "-o", str(plan)]) in (0, 1)
    options = ["--frames", "9", "--binning", "4", "--rotation", "33", "--mirror", "--quiet", "--jobs", "1"]
    assert run_with(["rehearse", str(plan), "-o", str(frames), *options]) == 0
    return plan, track_from_truth(load_plan(plan), frames, folder / "checked"), frames


@pytest.mark.slow
def test_two_rigs_make_one_sun_with_mercury_in_place(transit, other_rig):
    first = gather(load_plan(transit.plan), transit.track, transit.frames)
    plan, track, frames = other_rig
    second = gather(load_plan(plan), track, frames)
    assert second.frames[0].scale_arcsec_px != pytest.approx(first.frames[0].scale_arcsec_px, rel=0.05)
    both = joined(first, [second])
    assert len(both.frames) == len(first.frames) + len(second.frames)
    picture = compose_picture(both, Choices(instants=20, scale_arcsec_px=first.frames[0].scale_arcsec_px))
    used = {frame.path.parent for frame, _ in picture.used}
    assert used == {transit.frames, frames}
    fit = fit_limb(np.nan_to_num(picture.image))
    assert fit.x_px == pytest.approx(picture.canvas.anchor_x_px, abs=0.05)
    assert fit.y_px == pytest.approx(picture.canvas.anchor_y_px, abs=0.05)
    ground = compose_picture(
        both, Choices(instants=20, scale_arcsec_px=picture.canvas.scale_arcsec_px, blend="max")
    )
    found = set()
    for item in picture.drawn:
        row, column = round(item.y_px), round(item.x_px)
        if np.hypot(row - picture.canvas.anchor_y_px, column - picture.canvas.anchor_x_px) > 140:
            continue
        box = (slice(row - 3, row + 4), slice(column - 3, column + 4))
        depth = np.clip(np.median(ground.image[box]) - picture.image[box] - 0.02, 0, None)
        y, x = np.mgrid[box]
        assert (depth * x).sum() / depth.sum() == pytest.approx(item.predicted_x_px, abs=0.25)
        assert (depth * y).sum() / depth.sum() == pytest.approx(item.predicted_y_px, abs=0.25)
        assert np.median(picture.image[box]) == pytest.approx(np.median(ground.image[box]), abs=0.03)
        found.add(item.frame.path.parent)
    assert len(found) == 2


def test_another_event_is_no_other_rig(transit, occultation):
    first, second = (gather(load_plan(r.plan), r.track, r.frames) for r in (transit, occultation))
    with pytest.raises(InputError, match="--also"):
        joined(first, [second])


@pytest.mark.parametrize("planes", [1, 3])
def test_a_phase_stands_the_same_way_whatever_the_camera_angle(loop, planes):
    """A half-lit disc in frames of four angles, two parities and three scales, one of them in colour: derotated."""
    material = gather(load_plan(loop.plan), loop.track, loop.frames)
    base = material.frames[0].tt_s
    frames, pixels = [], {}
    cases = [(0.0, 1, 1.0), (75.0, 1, 0.7), (200.0, -1, 1.3), (310.0, -1, 1.0)]
    y, x = np.mgrid[:90, :96]
    for number, (rotation, parity, scale) in enumerate(cases):
        pointing = DiscPointing(47.3, 44.6, scale, rotation, parity, 200.0, -8.0)
        east, north = _offsets(pointing, x, y)
        away = np.hypot(east, north)
        lit = 1 / (1 + np.exp((away - 8) / 0.3)) / (1 + np.exp(-(0.6 * east + 0.8 * north) / 0.4))
        name = f"{number}.fits"
        data = (500 * lit * scale**2 + 20).astype(np.float32)
        tint = np.stack([data, 0.8 * data, 0.5 * data], axis=2) if planes == 3 else None
        pixels[name] = Frame(material.frames[0].path, data, None, 1.0, colour=tint)
        frames.append(a_frame(data, pointing, base + number * 1e6, f"visit {number}", name=name))
    light = InMemory(threads=1, colour=planes == 3)
    object.__setattr__(light, "frames", pixels)
    picture = phase_series(replace(material, frames=tuple(frames)), Choices(scale_arcsec_px=1.0), light)
    sheet = picture.image if planes == 1 else picture.image[..., 0]
    cell = sheet.shape[0]
    half = cell // 2
    gy, gx = np.mgrid[-half : half + 1, -half : half + 1]
    for number in range(len(cases)):
        tile = np.clip(sheet[:, number * cell : (number + 1) * cell], 0, None)
        # north is up and east is left: the light's centre lies toward (-0.6, 0.8)
        mean = np.array([(tile * gx).sum(), (tile * gy).sum()]) / tile.sum()
        assert mean / np.hypot(*mean) == pytest.approx((-0.6, 0.8), abs=0.02)
        assert np.hypot(*mean) == pytest.approx(4 * 8 / (3 * np.pi), rel=0.04)  # of a half disc
    if planes == 3:
        bright = picture.image[sheet > 0.8]
        assert bright[:, 1] / bright[:, 0] == pytest.approx(np.full(len(bright), 0.8), abs=0.01)
        assert bright[:, 2] / bright[:, 0] == pytest.approx(np.full(len(bright), 0.5), abs=0.01)


def _offsets(pointing, x, y):
    """East and north (arcsec) of pixels, by the definition in DEVELOPERS.md."""
    right = pointing.parity * (x - pointing.x_px) * pointing.scale_arcsec_px
    up = (y - pointing.y_px) * pointing.scale_arcsec_px
    pa = np.radians(pointing.rotation_deg)
    return up * np.sin(pa) - right * np.cos(pa), up * np.cos(pa) + right * np.sin(pa)


@pytest.fixture
def two_filters(transit, tmp_path):
    """The rehearsed transit, two frames in three through R and one through B."""
    frames = tmp_path / "frames"
    shutil.copytree(transit.frames, frames)
    for number, path in enumerate(sorted(frames.glob("*.fits"))):
        fits.setval(path, "FILTER", value="RRB"[number % 3])
    return replace(transit, frames=frames)


@pytest.mark.parametrize(("asked", "share"), [(None, 2 / 3), ("r", 2 / 3), ("B", 1 / 3), ("all", 1.0)])
def test_filters_are_kept_apart(two_filters, asked, share):
    material = gather(load_plan(two_filters.plan), two_filters.track, two_filters.frames)
    kept = through_filter(material, asked)
    assert len(kept.frames) == pytest.approx(share * len(material.frames), abs=1)
    if asked != "all":
        name = (asked or "R").upper()
        assert {fits.getheader(frame.path)["FILTER"] for frame in kept.frames} == {name}
        assert f"only frames through {name} were used" in kept.notes[0]


def test_the_statement_says_which_filter_and_an_unknown_one_is_refused(two_filters, tmp_path, capsys):
    short = [
        "compose",
        *two_filters.arguments,
        "--formats",
        "png",
        "--plots",
        "none",
        "--instants",
        "3",
        "--quiet",
    ]
    assert run_with([*short, "-o", str(tmp_path / "a")]) == 0
    notes = json.loads((tmp_path / "a" / "composite.truth.json").read_text())["notes"]
    assert any("kept apart" in note and "through B" in note for note in notes)
    assert run_with([*short, "-o", str(tmp_path / "b"), "--filter", "V"]) == 2
    said = capsys.readouterr().err
    assert "--filter: found 'V'" in said
    assert "B, R" in said
