"""What is kept beside a rig, a learned lens and a deeper catalogue, is used by `check` as it is by `solve`."""

from __future__ import annotations

import json
import re
import shutil

import pytest
from astropy.table import Table

from imaging.frames.reading import read_frame
from imaging.stars.lens import learn_lens, write_lens
from imaging.stars.solve import solve_frame
from planner.cli.main import run_with
from planner.sequence.documents import lens_path, load_plan, load_rig
from tests.conftest import ROOT


@pytest.fixture(scope="module")
def night(tmp_path_factory):
    """A folder of one's own: a brief, a plan of it, and three rehearsed frames, once rich in stars and once not."""
    folder = tmp_path_factory.mktemp("night")
    shutil.copytree(ROOT / "configs", folder / "configs")
    made = [
        "plan",
        str(folder / "configs" / "mars_retrograde_2027.yaml"),
        "-o",
        str(folder / "before.plan.yaml"),
    ]
    assert run_with(made) == 0
    plan = folder / "before.plan.yaml"
    draw = ["--passage", "visit 1", "--frames", "3", "--binning", "8", "--jobs", "1", "--quiet"]
    assert run_with(["rehearse", str(plan), "-o", str(folder / "deep"), *draw]) == 0
    # so short that a few dozen stars show: more would tell the lens themselves
    short = re.sub(r"exposure_s: [\d.]+", "exposure_s: 0.006", plan.read_text(encoding="utf-8"))
    plan.write_text(short, encoding="utf-8")
    assert run_with(["rehearse", str(plan), "-o", str(folder / "frames"), *draw]) == 0
    return folder


def checked(night, capsys, plan, *options):
    capsys.readouterr()
    out = night / f"out-{len(list(night.iterdir()))}"
    command = ["check", str(night / plan), str(night / "frames"), "-o", str(out), "--json", "--no-pictures"]
    code = run_with([*command, *options])
    printed = capsys.readouterr()
    return code, json.loads(printed.out) if printed.out else printed.err


def solutions(night):
    truth = Table.read(night / "deep.truth.ecsv")
    scale = 8 * load_rig(night / "configs" / "rigs" / "lens_135mm.yaml").scale_arcsec_px
    return [
        solve_frame(
            read_frame(night / "deep" / row["file"]), (row["center_ra_deg"], row["center_dec_deg"]), scale
        )
        for row in truth
    ]


def test_a_lens_learned_after_the_plan_is_held_with_the_rig_named_and_by_later_plans(night, capsys):
    rig = night / "configs" / "rigs" / "lens_135mm.yaml"
    lens = lens_path(rig)
    write_lens(learn_lens(solutions(night)), "Lens 135 mm (invented)", lens)
    words = "learned from 3 frames, held in 3 of 3 solutions"
    code, told = checked(night, capsys, "before.plan.yaml", "--rig", str(rig))
    assert code == 0
    assert told["provenance"]["lens"] == words
    assert told["on_track"] == 3
    later = night / "later.plan.yaml"
    assert run_with(["plan", str(night / "configs" / "mars_retrograde_2027.yaml"), "-o", str(later)]) == 0
    assert load_plan(later).rig.lens == str(lens.resolve())
    assert checked(night, capsys, later.name)[1]["provenance"]["lens"] == words


def test_a_lens_of_another_camera_does_no_harm(night, capsys):
    """Distortion that is not there, and held: the frames are solved without it."""
    text = (ROOT / "configs" / "rigs" / "lens_135mm.yaml").read_text(encoding="utf-8")
    folder = night / "other"
    folder.mkdir()
    (folder / "rig.yaml").write_text(text + "lens: bent.lens.yaml\n", encoding="utf-8")
    nothing, known = [0.0] * 7, [[1e-12 * (i == j) for j in range(14)] for i in range(14)]
    bent = {
        "format": 1, "rig": "bent", "frames": 3, "width_px": 6000, "height_px": 4000, "scale_arcsec_px": 9.17,
        "scale_sigma_relative": 1e-4, "parity": 1, "projection": "TAN", "axis": [0.0, 0.0], "axis_sigma": [1e-4, 1e-4],
        "terms": [[2, 0], [1, 1], [0, 2], [3, 0], [2, 1], [1, 2], [0, 3]],
        "coefficients_u": [*nothing[:3], 0.05, 0.0, 0.05, 0.0], "coefficients_v": [*nothing[:4], 0.05, 0.0, 0.05],
        "covariance": known,
    }  # fmt: skip
    (folder / "bent.lens.yaml").write_text(json.dumps(bent), encoding="utf-8")
    code, told = checked(night, capsys, "before.plan.yaml", "--rig", str(folder / "rig.yaml"))
    assert code == 0
    assert told["provenance"]["lens"] == "learned from 3 frames, held in 0 of 3 solutions"
    assert told["on_track"] == 3


def test_a_catalogue_named_by_the_rig_is_used_and_one_that_is_gone_is_one_line(night, capsys):
    field = night / "field.csv"
    field.write_text("ra,dec,mag\n150.0,12.0,12.5\n150.1,12.1,12.9\n", encoding="utf-8")
    text = (night / "before.plan.yaml").read_text(encoding="utf-8")
    plan = night / "catalogue.plan.yaml"
    plan.write_text(text.replace("rig:\n", f"rig:\n  catalogue: {field}\n", 1), encoding="utf-8")
    code, told = checked(night, capsys, plan.name)
    assert code == 0
    assert told["provenance"]["catalogue"] == str(field)
    field.rename(night / "elsewhere.csv")
    code, told = checked(night, capsys, plan.name)
    line = next(n for n, row in enumerate(plan.read_text().splitlines(), 1) if "catalogue:" in row)
    assert code == 2
    assert f"catalogue.plan.yaml:{line}: rig.catalogue: found" in told
    assert "--catalogue" in told
    assert len(told.strip().splitlines()) == 1


def test_files_of_a_rig_count_from_its_folder_and_may_not_leave_it(night, capsys):
    rig = night / "configs" / "rigs" / "refractor_1000mm.yaml"
    text = rig.read_text(encoding="utf-8")
    rig.write_text(text + "catalogue: ../field.csv\n", encoding="utf-8")
    made = ["plan", str(night / "configs" / "mercury_transit_2032.yaml"), "-o", str(night / "x.plan.yaml")]
    assert run_with(made) == 2
    said = capsys.readouterr().err
    assert f"refractor_1000mm.yaml:{len(text.splitlines()) + 1}: catalogue: found '../field.csv'" in said
    assert "may not leave the folder of refractor_1000mm.yaml" in said
    (rig.parent / "deep.csv").write_text("ra,dec,mag\n150.0,12.0,12.5\n", encoding="utf-8")
    rig.write_text(text + "catalogue: deep.csv\n", encoding="utf-8")
    assert run_with(made) == 0
    assert load_plan(night / "x.plan.yaml").rig.catalogue == str((rig.parent / "deep.csv").resolve())
