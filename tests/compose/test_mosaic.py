"""Panels of a mosaic beside the target give their stars to the picture, and no target."""

from __future__ import annotations

import numpy as np
import pytest

from imaging.compose.choices import Choices
from imaging.compose.composing import compose_picture
from imaging.compose.material import gather
from planner.cli.main import run_with
from planner.sequence.documents import load_plan
from tests.compose.rehearsed import track_from_truth

BRIEF = """
title: Mars with a mosaic
event: {family: retrograde-track, body: mars, date: 2027-02-19}
wish: {mosaic: {columns: 2, rows: 2}, visits: 2, frames_per_visit: 2}
"""


@pytest.fixture(scope="module")
def mosaic(tmp_path_factory, root):
    folder = tmp_path_factory.mktemp("mosaic")
    (folder / "brief.yaml").write_text(BRIEF)
    plan, frames = folder / "plan.yaml", folder / "frames"
    configs = root / "configs"
    arguments = ["plan", str(folder / "brief.yaml"), "--site", str(configs / "sites" / "kestrel_ridge.yaml")]
    assert run_with([*arguments, "--rig", str(configs / "rigs" / "lens_135mm.yaml"), "-o", str(plan)]) in (
        0,
        1,
    )
    options = ["--binning", "10", "--quiet", "--jobs", "1"]
    assert run_with(["rehearse", str(plan), "-o", str(frames), *options]) == 0
    document = load_plan(plan)
    return document, gather(document, track_from_truth(document, frames, folder / "checked"), frames)


def test_panels_without_the_target_enter_the_star_stack(mosaic):
    plan, material = mosaic
    beside = {passage.name for passage in plan.passages if not passage.holds_target}
    assert len(beside) >= 4
    assert any(frame.passage in beside and not frame.measured for frame in material.frames)
    picture = compose_picture(material, Choices())
    used = {frame.passage for frame, role in picture.used if "stars" in role}
    assert beside <= used
    assert picture.left_out == ()
    holding = {passage.name for passage in plan.passages if passage.holds_target}
    assert {item.frame.passage for item in picture.drawn} <= holding
    assert len({item.frame.passage.rsplit(" ", 1)[0] for item in picture.drawn}) == 2  # one a visit at least
    for passage in plan.passages:
        if passage.name in beside:
            x, y = picture.canvas.from_sky(
                picture.anchor_ra_deg, picture.anchor_dec_deg, passage.aim_ra_deg, passage.aim_dec_deg
            )
            assert 0 < x < picture.canvas.width_px
            assert 0 < y < picture.canvas.height_px
            row, column = round(float(y)), round(float(x))
            assert picture.count[row - 20 : row + 20, column - 20 : column + 20].min() >= 1
    assert np.isfinite(picture.image).mean() > 0.995


def test_check_says_of_a_panel_beside_the_target_that_the_target_is_not_there(mosaic):
    """It took a bright star for Mars there, and called it off its path."""
    from imaging.track.checking import CheckOptions, measure_files
    from imaging.track.measurement import AS_PREDICTED, Measurement

    plan, material = mosaic
    beside = {passage.name for passage in plan.passages if not passage.holds_target}
    files = sorted({frame.path for frame in material.frames if frame.passage in beside})[:3]
    told = list(measure_files(plan, files, CheckOptions()))
    assert len(told) == 3
    for one in told:
        assert isinstance(one, Measurement)
        assert one.solved_by == "stars"
        assert not one.measured
        assert AS_PREDICTED in one.reason
