"""The Moon's lit limb: crescent to gibbous, held to the predicted radius, and the eclipsed Moon."""

from __future__ import annotations

import numpy as np
import pytest

from imaging.discs.limb import fit_limb
from imaging.frames.render_discs import Ball, draw_moon
from imaging.frames.render_light import PointSpread
from imaging.frames.render_pointing import Pointing, unit_vector
from planner.errors import NoSolutionError
from tests.discs.simulated import recorded

SCALE = 3.0  # arcsec a pixel


def moon(phase_angle_deg, lit_pa_deg, seed=0, electrons_s=4e8, shift=(0.31, -0.42), texture=0.0):
    """A frame of the Moon in the middle, and where its centre is drawn."""
    pointing = Pointing(unit_vector(80.0, 20.0), 0.0, 1, SCALE, 800, 760)
    east, north = (value * SCALE / 3600 for value in shift)
    ball = Ball(
        "moon",
        unit_vector(80.0 - east / np.cos(np.radians(20.0)), 20.0 + north),
        930.0,
        0.0,
        0.0,
        phase_angle_deg,
        lit_pa_deg,
        -10.0,
    )
    rate = np.full((760, 800), 200.0, np.float32)
    draw_moon(rate, pointing, ball, electrons_s, PointSpread.seeing(2.6), None)
    if texture:
        from scipy.ndimage import gaussian_filter

        field = gaussian_filter(np.random.default_rng(5).standard_normal(rate.shape), 15)
        rate = 200 + (rate - 200) * (1 + texture * field / field.std()).clip(0.3, 1.7).astype(np.float32)
    x, y = pointing.project(ball.vector)
    # position angles count toward east, which is to the left of north up
    return recorded(rate, np.random.default_rng(seed)), float(x), float(y), 90.0 + lit_pa_deg, 930.0 / SCALE


@pytest.mark.parametrize("phase", [10.0, 60.0, 96.0, 140.0])
@pytest.mark.parametrize("lit_pa", [75.0, 260.0])
def test_lit_limb_gives_the_centre_to_a_fiftieth_of_a_pixel_and_the_radius_too(phase, lit_pa):
    image, x, y, lit_angle, radius = moon(phase, lit_pa)
    fit = fit_limb(image, radius, 0.1, lit_angle_deg=lit_angle, lit_half_deg=80.0, phase_angle_deg=phase)
    away = np.hypot(fit.x_px - x, fit.y_px - y)
    # a mean profile for all of the limb would lie 0.09 px to the dark side
    assert away < 0.02
    assert away < 3 * np.hypot(*fit.sigma_px)
    assert fit.radius_px == pytest.approx(radius, abs=0.03)


@pytest.mark.parametrize("phase", [30.0, 96.0])
def test_another_law_of_scattering_is_covered_by_the_stated_error(phase, monkeypatch):
    monkeypatch.setattr("imaging.frames.render_light.disc_law", lambda body: "lambert")
    image, x, y, lit_angle, radius = moon(phase, 260.0)
    fit = fit_limb(image, radius, 0.1, lit_angle_deg=lit_angle, lit_half_deg=80.0, phase_angle_deg=phase)
    away = np.array([fit.x_px - x, fit.y_px - y])
    assert np.hypot(*away) < 0.04
    assert away @ np.linalg.inv(fit.covariance[:2, :2]) @ away < 9


def test_lit_limb_without_a_phase_is_good_to_a_tenth_of_a_pixel():
    image, x, y, lit_angle, radius = moon(60.0, 75.0)
    fit = fit_limb(image, radius, 0.1, lit_angle_deg=lit_angle, lit_half_deg=80.0)
    assert np.hypot(fit.x_px - x, fit.y_px - y) < 0.12


def test_mountains_and_valleys_are_in_the_stated_error():
    """Relief of 0.8 arcsec rms, alike over 3 degrees of limb, as a real limb leaves about its circle (1.45 km)."""
    from scipy.ndimage import gaussian_filter1d, map_coordinates

    pulls = []
    for seed in range(6):
        image, x, y, lit_angle, radius = moon(60.0, 260.0, seed)
        relief = gaussian_filter1d(np.random.default_rng(seed).standard_normal(3600), 15, mode="wrap")
        relief *= 0.8 / SCALE / relief.std()
        v, u = np.mgrid[: image.shape[0], : image.shape[1]].astype(float)
        turn = np.arctan2(v - y, u - x)
        height = np.interp(turn, np.linspace(-np.pi, np.pi, 3600), relief)
        rough = map_coordinates(image, [v - height * np.sin(turn), u - height * np.cos(turn)], order=1)
        fit = fit_limb(rough, radius, 0.1, lit_angle_deg=lit_angle, lit_half_deg=80.0, phase_angle_deg=60.0)
        away = np.array([fit.x_px - x, fit.y_px - y])
        assert np.hypot(*away) < 0.5
        pulls += list(away / np.array(fit.sigma_px))
    assert np.sqrt(np.mean(np.square(pulls))) < 1.8


def test_maria_do_not_pull_the_centre():
    image, x, y, lit_angle, radius = moon(60.0, 260.0, texture=0.15)
    fit = fit_limb(image, radius, 0.1, lit_angle_deg=lit_angle, lit_half_deg=80.0, phase_angle_deg=60.0)
    assert np.hypot(fit.x_px - x, fit.y_px - y) < 0.06


def test_terminator_is_not_taken_for_the_limb_when_the_light_is_not_told():
    image, x, y, _, radius = moon(60.0, 260.0)
    fit = fit_limb(image, radius, 0.1)
    assert np.hypot(fit.x_px - x, fit.y_px - y) < 0.3


def test_faint_eclipsed_moon_with_a_bright_side():
    image, x, y, _, radius = moon(1.0, 260.0, electrons_s=3e7)
    _, columns = np.mgrid[: image.shape[0], : image.shape[1]]
    shaded = 200 + (image - 200) * (0.15 + 0.85 * np.clip((columns - 150) / 500, 0, 1) ** 2)
    noisy = recorded(np.clip(shaded, 1, None), np.random.default_rng(1))
    fit = fit_limb(noisy, radius, 0.2)
    assert np.hypot(fit.x_px - x, fit.y_px - y) < 0.3


def test_saturated_moon_says_so():
    image, x, y, lit_angle, radius = moon(60.0, 260.0, electrons_s=4e9)
    clipped = np.minimum(image, 5000.0)
    fit = fit_limb(clipped, radius, 0.5, lit_angle_deg=lit_angle, lit_half_deg=80.0, saturation=5000.0)
    assert fit.saturated
    assert any("saturated" in note for note in fit.notes)
    assert np.hypot(fit.x_px - x, fit.y_px - y) < 1.5


def test_thin_crescent_without_a_radius_is_not_guessed():
    image, *_ = moon(150.0, 260.0)
    with pytest.raises(NoSolutionError):
        fit_limb(image[:, :330])
