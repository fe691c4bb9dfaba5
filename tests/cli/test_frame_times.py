"""Stamps without a zone take the one that the rig's clock keeps, and a file's own date counts only when asked for."""

from __future__ import annotations

import os
import shutil

import numpy as np
import pytest
import yaml
from astropy import units as u
from astropy.io import fits
from astropy.table import Table
from astropy.time import Time

from planner.cli.main import run_with
from planner.sequence.equipment import Clock

TIMES = ("DATE-OBS", "DATE-BEG", "DATE-AVG", "DATE-END", "TIMESYS")


@pytest.fixture(scope="module")
def rehearsed(tmp_path_factory, root):
    folder = tmp_path_factory.mktemp("times")
    plan, frames = folder / "plan.yaml", folder / "frames"
    assert run_with(["plan", str(root / "configs" / "mercury_transit_2032.yaml"), "-o", str(plan)]) == 0
    cut = ["--frames", "4", "--binning", "12", "--jobs", "1", "--quiet"]
    assert run_with(["rehearse", str(plan), "-o", str(frames), *cut]) == 0
    return plan, frames


def changed(frames, folder, change):
    """A copy of the frames with other times in their headers, and the true middles by name."""
    shutil.copytree(frames, folder)
    middles = {}
    for path in folder.glob("*.fits"):
        with fits.open(path, mode="update") as hdus:
            header = hdus[0].header
            begin = Time(header["DATE-BEG"])
            middles[path.name] = Time(header["DATE-AVG"])
            for key in TIMES:
                header.remove(key, ignore_missing=True)
            change(header, begin)
    return middles


def told(track):
    return {row["file"]: Time(row["utc_mid"].rstrip("Z")) for row in Table.read(track, format="ascii.ecsv")}


@pytest.mark.slow
def test_the_zone_of_the_rigs_clock_is_used_for_local_stamps(rehearsed, tmp_path, capsys):
    plan, frames = rehearsed

    def local(header, begin):
        header["DATE-OBS"] = ((begin + 2 * u.hour).isot, "start of exposure, local time")

    middles = changed(frames, tmp_path / "local", local)
    assert (
        run_with(["check", str(plan), str(tmp_path / "local"), "-o", str(tmp_path / "a"), "--no-pictures"])
        == 1
    )
    assert "--zone" in capsys.readouterr().out  # nothing is guessed
    text = yaml.safe_load(plan.read_text())
    text["rig"]["clock"]["zone"] = "+02:00"
    (tmp_path / "plan.yaml").write_text(yaml.safe_dump(text, sort_keys=False, allow_unicode=True))
    run_with(
        [
            "check",
            str(tmp_path / "plan.yaml"),
            str(tmp_path / "local"),
            "-o",
            str(tmp_path / "b"),
            "--no-pictures",
        ]
    )
    found = told(tmp_path / "b" / "track.ecsv")
    assert set(found) == set(middles)
    assert max(abs((found[name] - middles[name]).sec) for name in middles) < 0.01


@pytest.mark.slow
def test_a_files_own_date_counts_only_when_asked_for(rehearsed, tmp_path, capsys):
    plan, frames = rehearsed
    middles = changed(frames, tmp_path / "dated", lambda header, begin: None)
    for path in (tmp_path / "dated").glob("*.fits"):
        end = middles[path.name] + fits.getval(path, "EXPTIME") / 2 * u.s
        os.utime(path, (end.unix, end.unix))
    run_with(
        ["check", str(plan), str(tmp_path / "dated"), "-o", str(tmp_path / "a"), "--no-pictures", "--json"]
    )
    assert "no DATE-OBS" in capsys.readouterr().out
    run_with(
        [
            "check",
            str(plan),
            str(tmp_path / "dated"),
            "-o",
            str(tmp_path / "b"),
            "--no-pictures",
            "--file-time",
        ]
    )
    found = told(tmp_path / "b" / "track.ecsv")
    assert np.max([abs((found[name] - middles[name]).sec) for name in middles]) < 0.01


def test_a_clocks_zone_must_be_one():
    assert Clock(zone="+02:00").zone == "+02:00"
    assert Clock(zone="Europe/Madrid").zone == "Europe/Madrid"
    with pytest.raises(ValueError, match="IANA"):
        Clock(zone="Olympus")
