"""A star or a spot that is taken for the target in a few frames does not count; a slip moves it in all of them."""

from __future__ import annotations

from types import SimpleNamespace

import pytest

from imaging.track.checking import _without_lone_strays
from imaging.track.measurement import Measurement


def frames_of(near: int, far: int, lost: int = 0) -> list[Measurement]:
    kinds = ["near"] * near + ["far"] * far + ["lost"] * lost
    nominal, time, disc = SimpleNamespace(), SimpleNamespace(), SimpleNamespace()
    return [
        Measurement(
            f"{kind}_{number}.fits",
            0,
            time,
            0.1,
            nominal,
            (100, 100),
            "moon-limb",
            x_px=float("nan") if kind == "lost" else 50.0,
            y_px=50.0,
            far=kind == "far",
            disc=disc,
        )
        for number, kind in enumerate(kinds)
    ]


@pytest.mark.parametrize(("near", "far", "lost"), [(15, 3, 14), (4, 3, 0), (1, 0, 0)])
def test_a_point_elsewhere_is_not_taken_for_the_target_when_most_frames_have_it(near, far, lost):
    kept = _without_lone_strays(frames_of(near, far, lost))
    assert [m.file for m in kept if m.measured] == [f"near_{number}.fits" for number in range(near)]
    assert all("elsewhere" in m.reason for m in kept if m.file.startswith("far"))


@pytest.mark.parametrize(("near", "far"), [(0, 6), (2, 5), (3, 3)])
def test_what_most_frames_say_is_kept_even_far_from_the_prediction(near, far):
    assert all(m.measured for m in _without_lone_strays(frames_of(near, far)))
