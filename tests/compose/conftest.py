"""Small rehearsals of the example briefs, drawn once for the session, with the track of a perfect check."""

from __future__ import annotations

from dataclasses import dataclass
from pathlib import Path

import pytest

from planner.cli.main import run_with
from planner.sequence.documents import load_plan
from tests.compose.rehearsed import track_from_truth
from tests.conftest import ROOT


@dataclass(frozen=True)
class Rehearsal:
    """A rehearsed plan: what `rehearse` and a perfect `check` leave."""

    plan: Path
    frames: Path
    track: Path

    @property
    def arguments(self) -> list[str]:
        """Arguments of `compose` and `timelapse`."""
        return [str(self.plan), str(self.track), "--frames", str(self.frames)]


def rehearse(folder: Path, brief: str, *options: str) -> Rehearsal:
    """Plan and rehearse an example brief, and write its track."""
    plan, frames = folder / "plan.yaml", folder / "frames"
    if not plan.exists():
        assert run_with(["plan", str(ROOT / "configs" / f"{brief}.yaml"), "-o", str(plan)]) == 0
    assert run_with(["rehearse", str(plan), "-o", str(frames), "--quiet", "--jobs", "1", *options]) == 0
    return Rehearsal(plan, frames, track_from_truth(load_plan(plan), frames, folder / "checked"))


@pytest.fixture(scope="session")
def transit(tmp_path_factory) -> Rehearsal:
    """Mercury before the Sun, 2032, at 6.3 arcsec a pixel."""
    return rehearse(
        tmp_path_factory.mktemp("transit"), "mercury_transit_2032", "--binning", "8", "--frames", "16"
    )


@pytest.fixture(scope="session")
def occultation(tmp_path_factory) -> Rehearsal:
    """The Moon covers Uranus, 2030, at 6.3 arcsec a pixel."""
    return rehearse(
        tmp_path_factory.mktemp("moon"), "moon_occults_planet_2030", "--binning", "8", "--frames", "16"
    )


@pytest.fixture(scope="session")
def loop(tmp_path_factory) -> Rehearsal:
    """Mars among the stars, 2026-27, a patch of the middle of each frame."""
    return rehearse(
        tmp_path_factory.mktemp("loop"), "mars_retrograde_2027", "--binning", "6", "--frames", "12"
    )
