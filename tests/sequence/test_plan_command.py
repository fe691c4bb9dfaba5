"""The command writes plans where it is told, keeps what is there, and says by its exit code how it went."""

import json

import pytest
import yaml
from click.testing import CliRunner

from planner.cli.main import run_with
from planner.sequence import documents


@pytest.fixture
def folder(tmp_path, monkeypatch):
    monkeypatch.chdir(tmp_path)
    return tmp_path


@pytest.fixture
def transit(root):
    return str(root / "configs/mercury_transit_2032.yaml")


def edited(root, folder, name, **keys):
    """Return a copy of an example brief with keys added, its site and rig inline."""
    brief = documents.load_brief(root / "configs" / f"{name}.yaml")
    data = {**brief.model_dump(mode="json", exclude_unset=True), **keys}
    path = folder / f"{name}.yaml"
    path.write_text(yaml.safe_dump(data), encoding="utf-8")
    return str(path)


def test_a_plan_is_written_beside_the_user_under_the_briefs_name(folder, transit, capsys):
    assert run_with(["plan", transit]) == 0
    plan = documents.load_plan(folder / "mercury_transit_2032.plan.yaml")
    assert plan.frames_total > 1000
    told = capsys.readouterr().out
    assert "ingress" in told
    assert "without a filter" in told
    assert run_with(["plan", transit]) == 2
    assert "exists already and is kept" in capsys.readouterr().err
    assert run_with(["plan", transit, "--force"]) == 0


def test_errors_stop_and_nothing_is_written(root, folder, capsys):
    path = edited(root, folder, "mercury_transit_2032", wish={"cadence_s": 0.6})
    assert run_with(["plan", path, "-o", "x.plan.yaml"]) == 2
    told = capsys.readouterr().err
    assert "storage-short" in told
    assert told.count("\n") == 1
    assert not (folder / "x.plan.yaml").exists()


def test_strict_turns_cautions_into_an_exit_code(root, folder):
    path = edited(root, folder, "mercury_transit_2032", wish={"burst_s": 4.0})
    assert run_with(["plan", path, "-o", "a.plan.yaml"]) == 0
    assert run_with(["plan", path, "-o", "b.plan.yaml", "--strict"]) == 1
    assert (folder / "b.plan.yaml").exists()


def test_a_machine_reads_the_summary(folder, transit):
    from planner.cli.plan import command

    done = CliRunner().invoke(command, [transit, "--json"], standalone_mode=False)
    summary = json.loads(done.output)
    assert summary["frames"] == sum(passage["frames"] for passage in summary["passages"])
    assert [passage["name"] for passage in summary["passages"]][:2] == ["approach", "ingress"]


def test_two_cameras_give_two_plans(root, folder):
    brief = documents.load_brief(root / "configs/mars_retrograde_2027.yaml")
    wide = brief.rig.model_dump(mode="json", exclude_unset=True)
    wide |= {"name": "Wide one", "optics": {"focal_length_mm": 50, "aperture_mm": 18}}
    path = edited(root, folder, "mars_retrograde_2027", other_rigs=[wide], wish={"visits": 6})
    assert run_with(["plan", path, "-o", "mars.plan.yaml"]) == 0
    first = documents.load_plan(folder / "mars.plan.yaml")
    second = documents.load_plan(folder / "mars.wide-one.plan.yaml")
    assert second.companions == [first.rig.name]
    # one mount: the cameras point to one place at each visit
    assert [p.aim_ra_deg for p in first.passages] == [p.aim_ra_deg for p in second.passages]


def test_what_was_taken_is_kept(root, folder):
    from astropy.table import Table

    path = edited(root, folder, "mars_retrograde_2027", wish={"visits": 8})
    assert run_with(["plan", path, "-o", "old.plan.yaml"]) == 0
    Table({"passage": ["visit 1", "visit 2"], "verdict": ["on-track", "off-track"]}).write("track.ecsv")
    assert run_with(["plan", path, "-o", "new.plan.yaml", "--after", "track.ecsv"]) == 2
    assert (
        run_with(["plan", path, "-o", "new.plan.yaml", "--after", "track.ecsv", "--of", "old.plan.yaml"]) == 0
    )
    old, new = documents.load_plan(folder / "old.plan.yaml"), documents.load_plan(folder / "new.plan.yaml")
    assert [p.done for p in new.passages[:3]] == [True, True, False]
    assert new.passages[0].shots == old.passages[0].shots


def test_a_brief_without_a_solar_filter_is_refused_in_one_line(root, folder, capsys):
    brief = documents.load_brief(root / "configs/mercury_transit_2032.yaml")
    rig = brief.rig.model_dump(mode="json", exclude_unset=True)
    del rig["solar_filter"]
    path = edited(root, folder, "mercury_transit_2032", rig=rig)
    assert run_with(["plan", path]) == 2
    assert "solar_filter" in capsys.readouterr().err


def test_a_newcomer_who_copies_the_page_gets_a_plan_and_a_run_sheet(root, folder):
    """The files and the commands of docs/planning.md, as they stand there."""
    import re
    import textwrap

    page = (root / "docs/planning.md").read_text(encoding="utf-8").split("## What you may wish")[0]
    files = re.findall(r"`([\w/.]+\.yaml)`:\n\n((?:    .*\n)+)", page)
    assert len(files) == 3
    for name, text in files:
        (folder / name).parent.mkdir(exist_ok=True)
        (folder / name).write_text(textwrap.dedent(text), encoding="utf-8")
    for line in re.findall(r"^    syzygraph (\S.*?)(?:\s+#.*)?$", page, re.MULTILINE):
        assert run_with(line.split()) == 0, line
    assert (folder / "out" / "run_sheet.pdf").exists()
