"""Where tests find what is not part of the tree."""

from __future__ import annotations

from pathlib import Path

import pytest
from hypothesis import settings

# no test is timed: a busy machine is no defect
settings.register_profile("house", deadline=None)
settings.load_profile("house")

ROOT = Path(__file__).resolve().parent.parent
SHARED = ROOT.parent / "shared"


@pytest.fixture(scope="session")
def root() -> Path:
    """The project's own folder."""
    return ROOT


@pytest.fixture(scope="session")
def real_frames() -> Path:
    """Real frames that are not ours; absent on most machines, and then said so."""
    folder = SHARED / "frames"
    if not folder.is_dir():
        pytest.skip("real frames absent: ../shared/frames is not on this machine")
    return folder


@pytest.fixture(scope="session")
def lunar_data() -> Path:
    """Public lunar elevation and orientation data; absent on most machines, and then said so."""
    folder = SHARED / "data"
    if not folder.is_dir():
        pytest.skip("lunar data absent: ../shared/data is not on this machine")
    return folder


def pytest_terminal_summary(terminalreporter) -> None:
    """Say at the end which outside data were absent, so that a green run does not hide it."""
    absent = [name for name in ("frames", "data") if not (SHARED / name).is_dir()]
    if absent:
        terminalreporter.write_line(
            f"checks on {' and '.join(absent)} from outside the tree were left out: absent"
        )
