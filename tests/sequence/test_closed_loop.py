"""What a plan promises of its frames, the rehearsed frames hold: peak signal within 15 %, trails within 0.3 pixel."""

import numpy as np
import pytest

from imaging.frames.render import Cut, Scene, without_noise
from planner.sequence.builder import build_plan
from planner.sequence.frametimes import frame_starts
from tests.sequence.briefs import CAMPAIGN, OCCULTATION, TRANSIT, changed, example, example_plan


def middles(plan, wanted=lambda shot: True) -> np.ndarray:
    """Return the middle frame of each shot."""
    passage, shot, _, _ = frame_starts(plan)
    rows = []
    for p, each in enumerate(plan.passages):
        for s, one in enumerate(each.shots):
            if wanted(one):
                own = np.flatnonzero((passage == p) & (shot == s))
                rows.append(own[len(own) // 2])
    return np.sort(rows)


@pytest.mark.parametrize(
    ("name", "crop"),
    [(TRANSIT, 2700), (OCCULTATION, 2600), ("moon_occults_star_2027", 2600), ("planets_meet_2028", 3600)],
)
def test_discs_peak_as_promised(name, crop):
    plan = example_plan(name)
    rows = middles(
        plan, lambda shot: name != "planets_meet_2028" or shot.name.endswith((", disc", ", disc 1"))
    )[::4]
    scene = Scene.of(plan, rows, cut=Cut(crop_px=(crop, crop)))
    assert len(rows)
    for position in range(len(rows)):
        peak = float(without_noise(scene, position).max())
        assert peak == pytest.approx(scene.shot(position).peak_e, rel=0.15)


def test_a_planet_among_stars_peaks_as_promised():
    """On coarse pixels a peak depends on where in a pixel the planet falls: the promise is the mean over places."""
    plan = build_plan(
        changed(example(CAMPAIGN), wish={"planet_frames": 2, "visits": 6, "frames_per_visit": 2})
    )
    rows = middles(plan, lambda shot: shot.name == "planet")
    scene = Scene.of(plan, rows)
    ratios = np.array(
        [without_noise(scene, position).max() / scene.shot(position).peak_e for position in range(len(rows))]
    )
    assert ratios.mean() == pytest.approx(1.0, abs=0.15)
    assert (ratios > 0.5).all()
    assert (ratios < 1.6).all()


def test_a_star_peaks_as_promised():
    """Before the shadow comes: the approach of the example of a minor planet (invented)."""
    plan = example_plan("asteroid_occults_star_2028")
    rows = middles(plan, lambda shot: shot.name == "approach")
    scene = Scene.of(plan, rows, cut=Cut(crop_px=(400, 400)))
    assert without_noise(scene, 0).max() == pytest.approx(scene.shot(0).peak_e, rel=0.15)


@pytest.mark.parametrize(
    ("kind", "exposure_s"), [("equatorial", None), ("fixed", None), ("fixed", 0.3), ("fixed", 2.0)]
)
def test_trails_are_as_long_as_promised(kind, exposure_s):
    wish = {"visits": 6, "frames_per_visit": 1, "exposure_s": exposure_s}
    plan = build_plan(changed(example(CAMPAIGN), mount={"kind": kind}, wish=wish))
    rows = middles(plan)
    scene = Scene.of(plan, rows)
    for position in range(len(rows)):
        shot = scene.shot(position)
        drawn = float(np.hypot(*scene._trail_px(scene.pointing(position), shot)))
        assert drawn == pytest.approx(shot.trail_px, abs=0.3)
