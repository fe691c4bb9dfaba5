"""The false-alarm probability that is stated is true: counted on points strewn at random."""

from __future__ import annotations

import re
from dataclasses import replace

import numpy as np
import pytest

from imaging.stars.brightness import fit_brightness
from imaging.stars.refine import field_of
from imaging.stars.solve import Hint, solve_detections
from imaging.stars.verify import Evidence, Tally
from planner.errors import NoSolutionError

SHAPE = (4000, 6000)


def chance_field(rng, count, clumped=False):
    places = rng.uniform(0, 1, (count, 2)) * SHAPE[::-1]
    if clumped:
        places[: count // 2] = np.array(SHAPE[::-1]) / 2 + rng.normal(0, 300, (count // 2, 2))
    magnitude = -rng.exponential(1.0, count)
    return field_of(*places.T, np.full(count, 0.05), magnitude, np.zeros(count, bool), SHAPE)


@pytest.mark.parametrize(("count", "clumped"), [(40, False), (400, False), (400, True)])
def test_stars_put_down_at_random_speak_for_nothing_on_average(count, clumped):
    """The mean of a likelihood ratio under chance is one at most, so that a product of them is a test martingale."""
    rng = np.random.default_rng(count)
    catalogue = rng.uniform(8, 11, 6)
    bright = fit_brightness(catalogue - 11.0 + rng.normal(0, 0.2, 6), catalogue, np.zeros(6, bool))
    ratios = []
    for _ in range(60):
        field = chance_field(rng, count, clumped)
        x, y = rng.uniform(0, SHAPE[1], 50), rng.uniform(0, SHAPE[0], 50)
        ratio, _, occupied = field.tested(
            x, y, np.full(50, 60.0), bright, rng.uniform(8, 11, 50), np.arange(3)
        )
        ratios.append(ratio[~occupied].mean())
    assert np.mean(ratios) < 1.0 + 3 * np.std(ratios) / np.sqrt(len(ratios))
    assert np.mean(ratios) > 0.2  # and it is no empty test: something is met


def test_hypotheses_that_agree_add_up_and_others_do_not():
    class Match:
        def __init__(self, pairs, log_ratio):
            self.detection, self.star = np.arange(pairs), np.arange(pairs)
            self.evidence = Evidence()
            self.evidence.log_ratio = self.evidence.log_ratio + log_ratio

    names = np.arange(100)
    tally, share = Tally(), np.log(0.1)
    first, _ = tally.add(Match(4, 10.0), names, share)
    again, best = tally.add(Match(5, 10.0), names, share)
    other, _ = tally.add(Match(5, 10.0), names + 1000, share)
    assert again == pytest.approx(first - np.log10(2.0))
    assert other == pytest.approx(first)
    assert len(best.star) in (4, 5)


@pytest.mark.slow
def test_of_many_random_frames_few_state_a_small_probability(drawn):
    """Of N frames of random points at most t N may have a pointing that states less than t; none is accepted."""
    rig = drawn.RIGS["1000 mm, APS-C"]
    template = drawn.detections_of(drawn.draw(drawn.RIGS["400 mm, 36x24"], np.random.default_rng(1)))
    stated = []
    for seed in range(40):
        rng = np.random.default_rng([seed, 4])
        count = int(rng.integers(8, 120))
        places = rng.uniform(0, 1, (count, 2)) * (rig.width_px, rig.height_px)
        flux = np.sort(10 ** rng.uniform(2, 5, count))[::-1]
        found = replace(
            template.take(np.arange(count)), x_px=places[:, 0], y_px=places[:, 1], flux_adu=flux, width_px=rig.width_px,
            height_px=rig.height_px,
        )  # fmt: skip
        near = rng.uniform(0, 360), float(np.degrees(np.arcsin(rng.uniform(-1, 1))))
        with pytest.raises(NoSolutionError) as none:
            solve_detections(found, drawn.TT_S, "bottom", Hint(near, rig.scale_arcsec_px, 0.005, parity=1))
        stated.append(min(int(power) for power in re.findall(r"best chance 1e(-?\d+)", str(none.value))))
    for power in (1, 2, 3):  # told to the nearest power of ten
        limit = 10 ** -(power - 0.5)
        most = len(stated) * limit
        assert np.sum(np.array(stated) <= -power) <= most + 3 * np.sqrt(most) + 1
