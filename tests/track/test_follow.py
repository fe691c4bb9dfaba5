"""Following a folder: complete frames are measured, growing ones waited for, broken ones set aside in the end."""

from __future__ import annotations

import json
import shutil
import threading
import time

import pytest

from imaging.track.follow import Pending
from planner.cli.main import run_with
from tests.conftest import ROOT


def test_a_growing_file_is_waited_for_and_taken_once(tmp_path):
    now = [0.0]
    pending = Pending(quiet_s=1.0, patience_s=10.0, clock=lambda: now[0])
    path = tmp_path / "a.fits"
    path.write_bytes(b"x" * 10)
    pending.look([path])
    now[0] = 0.9
    assert pending.complete() == []
    path.write_bytes(b"x" * 20)
    pending.look([path])
    now[0] = 1.8
    assert pending.complete() == []
    now[0] = 2.0
    assert pending.complete() == [path]
    assert not pending.given_up(path)
    now[0] = 11.0
    assert pending.given_up(path)
    pending.finish(path)
    pending.look([path])
    assert pending.complete() == []


def test_an_empty_file_is_not_complete(tmp_path):
    now = [0.0]
    pending = Pending(clock=lambda: now[0])
    (tmp_path / "a.fits").touch()
    pending.look([tmp_path / "a.fits"])
    now[0] = 99.0
    assert pending.complete() == []


def test_a_file_that_vanished_is_forgotten(tmp_path):
    pending = Pending(clock=lambda: 0.0)
    path = tmp_path / "a.fits"
    path.write_bytes(b"x")
    pending.look([path])
    path.unlink()
    pending.look([path])
    assert pending.seen == {}


@pytest.mark.slow
def test_frames_that_arrive_are_measured_and_the_report_renewed(tmp_path, capsys):
    plan, frames, incoming = tmp_path / "p.plan.yaml", tmp_path / "frames", tmp_path / "incoming"
    assert run_with(["plan", str(ROOT / "configs" / "mercury_transit_2032.yaml"), "-o", str(plan)]) == 0
    command = ["rehearse", str(plan), "-o", str(frames), "--frames", "7", "--binning", "8"]
    assert run_with([*command, "--clock-offset", "7.3", "--quiet"]) == 0
    incoming.mkdir()
    files = sorted(frames.glob("*.fits"))
    shutil.copy(files[0], incoming)

    def arrive():
        for path in files[1:]:
            data = path.read_bytes()
            with open(incoming / path.name, "wb") as file:  # written in two parts, as a slow camera does
                file.write(data[: len(data) // 2])
                file.flush()
                time.sleep(0.4)
                file.write(data[len(data) // 2 :])

    writer = threading.Thread(target=arrive)
    capsys.readouterr()
    writer.start()
    out = tmp_path / "out"
    code = run_with(["check", str(plan), str(incoming), "-o", str(out), "--follow", "--idle", "6", "--json"])
    writer.join()
    told = json.loads(capsys.readouterr().out)
    assert code == 0
    assert told["measured"] >= 4
    assert told["frames"] == 7
    assert told["set_aside"] == []
    assert (out / "report.html").is_file()
    assert (out / "track.ecsv").is_file()
