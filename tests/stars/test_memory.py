"""A frame that clouds thin out is solved with stars learned from the frames before it; hot pixels are not learned."""

from __future__ import annotations

from dataclasses import fields, replace

import numpy as np
import pytest

from imaging.stars.memory import LEARNED
from imaging.stars.solve import Hint, solve_detections
from planner.errors import NoSolutionError

SHIFTS = ((0.0, 0.0), (20.0, -15.0), (41.0, -25.0), (60.0, -40.0))


@pytest.fixture(scope="module")
def sequence(drawn):
    """A field of a telescope of 1000 mm, its hot pixels, and a way to shift one and not the other."""
    rig = drawn.RIGS["1000 mm, APS-C"]
    rng = np.random.default_rng([3, 5])
    field = drawn.draw(rig, rng)
    stars = drawn.detections_of(field)
    hot = rng.uniform(0, 1, (25, 2)) * (field.width_px, field.height_px)

    def frame(shift, seen):
        x, y = stars.x_px + shift[0], stars.y_px + shift[1]
        on = (x > 3) & (x < field.width_px - 4) & (y > 3) & (y < field.height_px - 4) & seen
        x, y = x + rng.normal(0, stars.sigma_x_px), y + rng.normal(0, stars.sigma_y_px)
        moved = replace(stars, x_px=x, y_px=y).take(np.flatnonzero(on))
        still = replace(stars.take(np.arange(len(hot))), x_px=hot[:, 0], y_px=hot[:, 1])
        names = [one.name for one in fields(moved) if np.ndim(getattr(moved, one.name)) == 1]
        both = {name: np.concatenate([getattr(moved, name), getattr(still, name)]) for name in names}
        return replace(moved, **both).take(np.argsort(-both["flux_adu"]))

    near = tuple(float(v) for v in np.degrees([np.arctan2(*field.center[1::-1]), np.arcsin(field.center[2])]))
    everything = np.ones(len(stars), dtype=bool)
    solution = None
    for shift in SHIFTS[:3]:
        hint = Hint((near[0] % 360, near[1]), rig.scale_arcsec_px) if solution is None else Hint()
        solution = solve_detections(frame(shift, everything), drawn.TT_S, "bottom", hint, solution)
    matched = np.column_stack([solution.matched.x_px, solution.matched.y_px]) - SHIFTS[2]
    places = np.column_stack([stars.x_px, stars.y_px])
    known = (np.linalg.norm(places[:, None] - matched[None], axis=2) < 2).any(axis=1)
    clouded = (rng.random(len(stars)) < 0.5) & ~known
    clouded[np.flatnonzero(known)[:2]] = True  # two stars of the catalogue shine through
    return field, solution, frame(SHIFTS[3], clouded), hot


def test_without_them_two_catalogue_stars_are_too_few(drawn, sequence):
    _, before, frame, _ = sequence
    with pytest.raises(NoSolutionError, match="from the previous frame"):
        solve_detections(frame, drawn.TT_S, "bottom", Hint(), replace(before, memory=None))


def test_with_them_it_points_where_the_sequence_points(drawn, sequence):
    field, before, frame, _ = sequence
    solution = solve_detections(frame, drawn.TT_S, "bottom", Hint(), before)
    assert solution.how == "previous"
    assert (solution.matched.index == LEARNED).sum() > 50
    assert solution.matched.name.count("learned") == (solution.matched.index == LEARNED).sum()
    truth = replace(field, axis_px=(field.axis_px[0] + SHIFTS[3][0], field.axis_px[1] + SHIFTS[3][1]))
    assert drawn.model_error_px(solution, truth)[0] < 0.3
    # what was learned is no better known than the frames that taught it
    assert solution.sigma_px_at(3000, 2000) >= 0.5 * before.sigma_px_at(3000, 2000)


def test_what_stands_still_on_the_sensor_is_no_star(sequence):
    _, before, _, hot = sequence
    sure = before.memory.first_px[before.memory.moved]
    near_hot = (np.linalg.norm(sure[:, None] - hot[None], axis=2) < 0.5).any(axis=1)
    assert before.memory.moved.sum() > 100
    assert near_hot.sum() <= 1
