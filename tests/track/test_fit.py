"""The global fit gives back what was put in, and its stated sigmas are true."""

from __future__ import annotations

import numpy as np
import pytest

from imaging.track.fit import Priors, along_across, fit_track
from tests.track.synthetic import T0, chord_path, disc_sightings, star_sightings, stars_path

CROSSING_S = np.linspace(-7500, 7500, 41)


def test_clock_rotation_and_scale_come_back():
    rng = np.random.default_rng(1)
    path = chord_path()
    frames = disc_sightings(path, T0 + CROSSING_S, rng, clock_s=7.3, rotation_deg=14.0, scale=1.01)
    fit = fit_track(frames, path)
    assert abs(fit.value["clock_s"] - 7.3) < 3 * fit.sigma["clock_s"] < 1.0
    assert fit.value["rotation_deg"] == pytest.approx(14.0, abs=3 * fit.sigma["rotation_deg"])
    assert fit.value["log_scale"] == pytest.approx(np.log(1.01), abs=3 * fit.sigma["log_scale"])
    assert fit.used.all()


def test_clock_error_comes_back_from_a_path_among_stars():
    rng = np.random.default_rng(2)
    path = stars_path()
    frames = star_sightings(path, T0 + np.arange(60) * 86400.0, rng, clock_s=-120.0)
    fit = fit_track(frames, path)
    assert abs(fit.value["clock_s"] + 120.0) < 3 * fit.sigma["clock_s"] < 40.0


def test_the_bound_is_reached_when_noise_is_known():
    """Cramér-Rao: with camera held, sigma of the clock is sigma of a place over speed times root of n."""
    rng = np.random.default_rng(3)
    path = chord_path()
    frames = disc_sightings(path, T0 + CROSSING_S, rng, sigma_arcsec=0.05)
    held = Priors(rotation_deg=0, log_scale=0)
    fit = fit_track(frames, path, held, fixed_jitter_arcsec=0.0)
    assert fit.sigma["clock_s"] == pytest.approx(0.05 / 0.098 / np.sqrt(41), rel=0.01)


def test_one_frame_in_six_far_off_changes_nothing():
    rng = np.random.default_rng(4)
    path = chord_path()
    frames = disc_sightings(path, T0 + CROSSING_S, rng, clock_s=7.3)
    frames.east_arcsec[::6] += rng.normal(0, 300, len(frames.east_arcsec[::6]))
    fit = fit_track(frames, path)
    assert abs(fit.value["clock_s"] - 7.3) < 3 * fit.sigma["clock_s"] < 1.0
    assert not fit.used[::6].any()
    assert fit.used.sum() == 34


def test_scatter_beyond_the_stated_sigmas_is_found_and_carried():
    rng = np.random.default_rng(5)
    path = chord_path()
    frames = disc_sightings(path, T0 + np.linspace(-7500, 7500, 400), rng, jitter_arcsec=0.5)
    fit = fit_track(frames, path)
    assert fit.jitter_arcsec == pytest.approx(0.5, rel=0.1)


@pytest.mark.parametrize(
    ("frames_n", "jitter", "runs"),
    [
        (10, 0.5, 200),
        pytest.param(10, 0.5, 2000, marks=pytest.mark.slow),
        pytest.param(10, 0.0, 2000, marks=pytest.mark.slow),
        pytest.param(40, 0.5, 2000, marks=pytest.mark.slow),
    ],
)
def test_pulls_of_every_stated_number_have_unit_variance(frames_n, jitter, runs):
    """Ten frames of a transit with 0.5 arcsec of seeing: stated sigmas are true to 10 % (200 runs know them to 5 %)."""
    rng = np.random.default_rng(6)
    path = chord_path()
    truth = {"clock_s": 7.3, "rotation_deg": 3.0, "log_scale": 1e-4}
    pulls = {name: [] for name in truth}
    for _ in range(runs):
        times = T0 + np.sort(rng.uniform(-7500, 7500, frames_n))
        frames = disc_sightings(
            path,
            times,
            rng,
            7.3,
            3.0,
            np.exp(1e-4),
            sigma_arcsec=0.05,
            jitter_arcsec=jitter,
            scale_sigma=1e-4,
        )
        fit = fit_track(frames, path)
        for name, value in truth.items():
            pulls[name].append((fit.value[name] - value) / fit.sigma[name])
    for name, values in pulls.items():
        assert np.std(values) == pytest.approx(1.0, abs=0.1), name
        assert abs(np.mean(values)) < 0.2, name


def test_clock_drift_comes_back_when_asked_for():
    rng = np.random.default_rng(7)
    path = chord_path()
    frames = disc_sightings(path, T0 + CROSSING_S, rng, drift=2e-3)
    fit = fit_track(frames, path, Priors(drift=0.01))
    assert fit.value["drift"] == pytest.approx(2e-3, abs=3 * fit.sigma["drift"])


def test_along_and_across_are_axes_of_the_motion():
    """Moving to the north, a place to the east of the prediction lies across, not along."""
    along, across, sigma_along, sigma_across = along_across(
        np.array([[2.0, 1.0]]), np.diag([4.0, 9.0])[None], np.array([[0.0, 0.1]])
    )
    assert (along[0], across[0], sigma_along[0], sigma_across[0]) == pytest.approx((1.0, 2.0, 3.0, 2.0))
