"""The renderer: what it draws lies where the sky says, carries the light it should, and repeats."""

from __future__ import annotations

from datetime import UTC, datetime

import numpy as np
import pytest

from imaging.frames.render import Cut, Faults, Scene, choose, without_noise
from imaging.frames.render_camera import record
from imaging.frames.render_files import rehearse, truth_path
from imaging.frames.render_light import (
    PointSpread,
    blurred_sun,
    limb_darkening,
    mean_over_centre,
)
from imaging.frames.render_pointing import Air, PlaneMap, Pointing, moved, ra_dec_deg, unit_vector
from imaging.frames.render_seeing import LimbMotion, image_motion_arcsec
from imaging.frames.render_stars import draw_points
from planner.errors import OutputExistsError
from planner.sequence.documents import load_rig, load_site
from planner.sequence.models import EventRequest, Passage, Plan, Shot
from tests.conftest import ROOT


def plan_of(family, body, aim, start, rig, exposure_s=0.002, count=4, cadence_s=600.0, **shot):
    site, rig = (
        load_site(ROOT / "configs/sites/kestrel_ridge.yaml"),
        load_rig(ROOT / f"configs/rigs/{rig}.yaml"),
    )
    shots = [Shot(name="s", start_utc=start, cadence_s=cadence_s, count=count, exposure_s=exposure_s, **shot)]
    return Plan(
        title="a plan for tests",
        event=EventRequest(family=family, body=body, date=start),
        site=site,
        rig=rig,
        circumstances={},
        passages=[Passage(name="only", purpose="test", aim=aim, shots=shots)],
        track=[],
        frames_total=count,
        storage_gb=0.1,
        provenance={},
    )


@pytest.fixture(scope="module")
def transit():
    start = datetime(2032, 11, 13, 8, 0, tzinfo=UTC)
    return plan_of("solar-transit", "mercury", "sun", start, "refractor_1000mm", filter="V", tracking="solar")


@pytest.fixture(scope="module")
def stars():
    start = datetime(2027, 2, 19, 22, 0, tzinfo=UTC)
    return plan_of("retrograde-track", "mars", "mars", start, "lens_135mm", exposure_s=2.0, cadence_s=60.0)


def test_limb_darkening_coefficients_sum_to_one_and_have_the_published_mean():
    """Source: Neckel & Labs 1994, Solar Physics 153, 91: mean over central intensity 0.8061 at 559.950 nm."""
    assert limb_darkening(np.array([1.0]), 559.95) == pytest.approx(1.0, abs=2e-5)
    assert mean_over_centre(559.95) == pytest.approx(0.8061, abs=2e-4)
    assert mean_over_centre(401.97) == pytest.approx(0.7303, abs=2e-4)


def test_blurred_sun_agrees_with_brute_force():
    from scipy.ndimage import gaussian_filter

    radius, sigma, finer = 30.0, 1.3, 9
    line = (np.arange(90 * finer) + 0.5) / finer - 45
    x, y = np.meshgrid(line, line)
    r2 = (x**2 + y**2) / radius**2
    fine = np.where(r2 < 1, limb_darkening(np.sqrt(np.clip(1 - r2, 0, 1))), 0)
    coarse = gaussian_filter(fine, sigma * finer).reshape(90, finer, 90, finer).mean(axis=(1, 3))
    middle = np.arange(90) - 44.5
    distance = np.hypot(middle[None, :], middle[:, None])
    drawn = blurred_sun(radius, PointSpread(np.array([1.0]), np.array([sigma]))).at(distance)
    assert np.abs(drawn - coarse).max() < 0.004


def test_point_spread_has_the_width_asked_for_and_keeps_the_light():
    image = np.zeros((201, 201), np.float32)
    image[100, 100] = 1000.0
    spread = PointSpread.seeing(8.0)
    out = spread.blur(image)
    assert out.sum() == pytest.approx(1000.0, rel=2e-3)
    row = out[100] / out.max()
    width = np.interp(-0.5, -row[100:], np.arange(101)) * 2
    assert width == pytest.approx(8.0, rel=0.03)


def test_points_carry_their_light_and_lie_where_they_should():
    rate = np.zeros((80, 90), np.float32)
    draw_points(rate, np.array([40.3]), np.array([31.8]), np.array([5000.0]), PointSpread.gaussian(2.5), 1e-4)
    y, x = np.mgrid[:80, :90]
    assert rate.sum() == pytest.approx(5000.0, rel=1e-3)
    assert (rate * x).sum() / rate.sum() == pytest.approx(40.3, abs=2e-3)
    assert (rate * y).sum() / rate.sum() == pytest.approx(31.8, abs=2e-3)


@pytest.mark.parametrize("parity", [1, -1])
def test_projection_goes_there_and_back_and_agrees_with_the_standard(parity):
    """Against astropy's gnomonic WCS (FITS Paper II, Calabretta & Greisen 2002)."""
    from astropy.wcs import WCS

    axis = unit_vector(200.0, 35.0)
    pointing = Pointing(axis, 33.0, parity, 10.0, 1000, 800)
    wcs = WCS(naxis=2)
    wcs.wcs.ctype = ["RA---TAN", "DEC--TAN"]
    wcs.wcs.crval = [200.0, 35.0]
    wcs.wcs.crpix = [500.5, 400.5]
    right, up = pointing.pixel_steps()
    step = 10.0 / 3600
    wcs.wcs.cd = [[step * right[0], step * up[0]], [step * right[1], step * up[1]]]
    x, y = np.array([0.0, 311.0, 999.0]), np.array([799.0, 12.0, 400.0])
    ra, dec = ra_dec_deg(pointing.unproject(x, y))
    assert np.allclose(wcs.all_world2pix(ra, dec, 0), [x, y], atol=1e-6)
    assert np.allclose(pointing.project(unit_vector(ra, dec)), [x, y], atol=1e-8)


def test_north_is_up_and_east_left_in_a_frame_without_roll():
    pointing = Pointing(unit_vector(50.0, 20.0), 0.0, 1, 5.0, 200, 200)
    x, y = pointing.project(np.stack([moved(50.0, 20.0, 100.0, 0.0), moved(50.0, 20.0, 100.0, 90.0)], axis=1))
    assert np.allclose([x - 99.5, y - 99.5], [[0, -20], [20, 0]], atol=1e-3)


def test_refraction_lifts_by_what_the_planner_says_and_is_undone():
    zenith = unit_vector(0.0, 90.0)
    air = Air(zenith, lambda altitude: 60.0 / np.tan(np.radians(altitude)))
    low = unit_vector(10.0, 30.0)
    lifted = air.refracted(low)
    assert ra_dec_deg(lifted)[1] == pytest.approx(30 + 60 / np.tan(np.radians(30)) / 3600, abs=1e-9)
    assert np.allclose(air.unrefracted(lifted), low, atol=1e-12)


def test_plane_map_is_exact_to_a_milliarcsecond_over_a_low_sun():
    zenith = unit_vector(0.0, 90.0)
    air = Air(zenith, lambda altitude: 61.0 / np.tan(np.radians(altitude + 10.3 / (altitude + 5.11))))
    sun = unit_vector(40.0, 5.0)
    pointing = Pointing(air.refracted(sun), 20.0, 1, 1.0, 2200, 2200, air)
    plane = PlaneMap.about(pointing, sun, (0, 2200, 0, 2200))
    x, y = np.array([100.0, 1900.0, 1100.0]), np.array([300.0, 2100.0, 40.0])
    east, north = plane.points(x, y)
    grid_east, _ = plane.grid(x, y)
    back_x, back_y = pointing.project(
        np.stack([moved(40.0, 5.0, *_polar(e, n)) for e, n in zip(east, north, strict=True)], axis=1)
    )
    assert np.allclose([back_x, back_y], [x, y], atol=1e-3)
    assert np.allclose(np.diag(grid_east), east, atol=1e-9)


def _polar(east, north):
    # gnomonic offsets to an arc and a position angle
    size = np.hypot(east, north) * np.pi / 648000
    return np.degrees(np.arctan(size)) * 3600, np.degrees(np.arctan2(east, north))


def test_image_motion_follows_sarazin_and_roddier():
    """Sarazin & Roddier 1990: 0.7" for a 125 mm aperture in 2" seeing, less for long exposures (from memory)."""
    assert image_motion_arcsec(2.0, 125.0, 0.001) == pytest.approx(0.75, abs=0.08)
    assert image_motion_arcsec(2.0, 125.0, 3.0) == pytest.approx(0.075, abs=0.01)


def test_limb_motion_has_the_rms_and_the_correlation_asked_for():
    pointing = Pointing(unit_vector(0, 0), 0.0, 1, 1.0, 600, 500)
    field = LimbMotion.random(pointing, 0.7, 8.0, np.random.default_rng(0))
    dx, _ = field.at(np.arange(600), np.arange(500))
    assert dx.std() == pytest.approx(0.7, rel=0.1)
    assert np.mean(dx[:, :-8] * dx[:, 8:]) / np.mean(dx**2) == pytest.approx(np.exp(-1), abs=0.08)


def test_noise_is_that_of_photons_and_readout(transit):
    rig = transit.rig
    readout = record(np.full((400, 400), 900.0, np.float32), rig, 0, np.random.default_rng(0))
    electrons = (readout.adu - rig.sensor.bias_adu) * readout.gain_e_adu
    assert electrons.mean() == pytest.approx(900.0, abs=0.5)
    expected = 900 + rig.sensor.read_noise_e**2 + readout.gain_e_adu**2 / 12
    assert electrons.var() == pytest.approx(expected, rel=0.02)


def test_bleeding_keeps_the_charge_in_the_column():
    from imaging.frames.render_camera import _bleed

    charge = np.zeros((50, 3))
    charge[25, 1] = 500.0
    out = _bleed(charge, 100.0)
    assert out.sum() == pytest.approx(500.0)
    assert out.max() <= 100.0
    assert np.nonzero(out[:, 1])[0].tolist() == [23, 24, 25, 26, 27]


class TestTransit:
    def test_the_planet_is_dark_where_the_truth_says(self, transit):
        scene = Scene.of(transit, np.array([0]), cut=Cut(2))
        picture, expected = scene.draw(0), without_noise(scene, 0)
        truth = picture.truth
        x, y = round(truth.target_x_px), round(truth.target_y_px)
        beside = expected[y + 15, x]
        assert expected[y, x] < 0.2 * beside
        window = np.clip(beside - expected[y - 9 : y + 10, x - 9 : x + 10], 0, None)
        rows, columns = np.mgrid[y - 9 : y + 10, x - 9 : x + 10]
        assert (window * columns).sum() / window.sum() == pytest.approx(truth.target_x_px, abs=0.15)
        assert (window * rows).sum() / window.sum() == pytest.approx(truth.target_y_px, abs=0.15)

    def test_the_sun_carries_the_light_that_its_magnitude_says(self, transit):
        from planner.sequence import radiometry
        from planner.sky.photometry import airmass

        scene = Scene.of(transit, np.array([1]), cut=Cut(8))
        electrons = without_noise(scene, 0).sum()
        through = radiometry.band(scene.rig, "V", behind_solar_filter=True)
        dimmed = scene.geometry.discs["sun"].magnitude[0] + transit.site.extinction_mag * airmass(
            scene.geometry.altitude_deg[0]
        )
        assert electrons == pytest.approx(float(radiometry.rate_e_s(through, dimmed)) * 0.002, rel=0.01)

    def test_offset_between_planet_and_sun_is_the_planners_refracted(self, transit):
        from planner.sky.places import separation_arcsec

        bare = transit.model_copy(update={"site": transit.site.model_copy(update={"pressure_hpa": 0.0})})
        scene = Scene.of(bare, np.array([0]))
        truth, discs = scene.draw(0).truth, scene.geometry.discs
        away = np.hypot(truth.target_x_px - truth.reference_x_px, truth.target_y_px - truth.reference_y_px)
        vectors = [unit_vector(discs[name].ra_deg, discs[name].dec_deg) for name in ("sun", "mercury")]
        assert away * transit.rig.scale_arcsec_px == pytest.approx(
            float(separation_arcsec(*vectors)[0]), abs=0.02
        )

    def test_faults_do_what_they_say(self, transit):
        still = {"pointing_error_arcsec": 0.0, "jitter_arcsec": 0.0}
        plain = Scene.of(transit, np.array([1]), Faults(**still), Cut(4)).draw(0).truth
        late = Scene.of(transit, np.array([1]), Faults(clock_offset_s=7.3, **still), Cut(4)).draw(0).truth
        assert late.stamped_tt_s - late.true_tt_s == pytest.approx(7.3, abs=1e-6)
        assert (late.target_x_px, late.target_y_px) == (plain.target_x_px, plain.target_y_px)
        rolled = Scene.of(transit, np.array([1]), Faults(rotation_deg=5.0, **still), Cut(4)).draw(0).truth
        assert rolled.rotation_deg - plain.rotation_deg == pytest.approx(5.0, abs=1e-3)
        flipped = Scene.of(transit, np.array([1]), Faults(mirrored=True, **still), Cut(4)).draw(0).truth
        middle = (1200 - 1) / 2
        assert flipped.parity == -plain.parity
        assert flipped.target_x_px + plain.target_x_px == pytest.approx(2 * middle, abs=0.1)

    def test_drift_moves_the_frame_away_from_its_aim(self, transit):
        faults = Faults(pointing_error_arcsec=0, jitter_arcsec=0, drift_arcsec_h=360.0, drift_pa_deg=0.0)
        scene = Scene.of(transit, np.array([0, 3]), faults, Cut(4))
        first, last = scene.draw(0).truth, scene.draw(1).truth
        # half an hour at 360" an hour to the north: the Sun sinks by 180" in the frame
        scale, roll = scene.rig.scale_arcsec_px, np.radians(transit.rig.camera_angle_deg)
        assert last.reference_y_px - first.reference_y_px == pytest.approx(
            -180 / scale * np.cos(roll), abs=0.5
        )

    def test_files_repeat_and_are_never_overwritten(self, transit, tmp_path):
        from astropy.io import fits

        chosen, cut = np.array([0, 2]), Cut(8)
        one = rehearse(transit, tmp_path / "a", chosen, cut=cut, seed=3, with_wcs=True)
        two = rehearse(transit, tmp_path / "b", chosen[1:], cut=cut, seed=3)
        assert np.array_equal(fits.getdata(one[1]), fits.getdata(two[0]))
        assert truth_path(tmp_path / "a").is_file()
        header = fits.getheader(one[0])
        assert header["TIMESYS"] == "UTC"
        assert header["DATE-BEG"] < header["DATE-AVG"] < header["DATE-END"]
        assert header["XBINNING"] == 8
        assert header["CTYPE1"] == "RA---TAN"
        with pytest.raises(OutputExistsError):
            rehearse(transit, tmp_path / "a", chosen, cut=cut)

    def test_crop_keeps_the_middle(self, transit):
        picture = Scene.of(transit, np.array([0]), cut=Cut(4, (320, 200))).draw(0)
        assert picture.readout.adu.shape == (200, 320)


class TestStars:
    def test_catalogue_stars_are_drawn_where_the_catalogue_has_them(self, stars):
        from planner.sky.stars import stars_in_field

        scene = Scene.of(stars, np.array([0]), cut=Cut(2))
        pointing, expected = scene.pointing(0), without_noise(scene, 0)
        truth = scene.draw(0).truth
        field = stars_in_field(truth.center_ra_deg, truth.center_dec_deg, 5.0, truth.true_tt_s, 7.0)
        x, y = pointing.project(unit_vector(field.ra_deg, field.dec_deg))
        inside = (x > 20) & (x < 2980) & (y > 20) & (y < 1980)
        assert inside.sum() > 10
        sky = np.median(expected)
        for column, row in zip(x[inside], y[inside], strict=True):
            i, j = round(float(row)), round(float(column))
            part = expected[i - 4 : i + 5, j - 4 : j + 5] - sky
            rows, columns = np.mgrid[i - 4 : i + 5, j - 4 : j + 5]
            assert (part * columns).sum() / part.sum() == pytest.approx(float(column), abs=0.25)
            assert (part * rows).sum() / part.sum() == pytest.approx(float(row), abs=0.25)

    def test_the_planet_is_in_the_middle_and_its_light_is_right(self, stars):
        faults = Faults(pointing_error_arcsec=0, jitter_arcsec=0)
        scene = Scene.of(stars, np.array([0]), faults, Cut(2))
        truth = scene.draw(0).truth
        assert (truth.target_x_px, truth.target_y_px) == pytest.approx((1499.5, 999.5), abs=0.05)

    def test_a_camera_that_does_not_follow_draws_trails(self, stars):
        shots = [stars.passages[0].shots[0].model_copy(update={"tracking": "none", "exposure_s": 20.0})]
        passages = [stars.passages[0].model_copy(update={"shots": shots})]
        plan = stars.model_copy(update={"passages": passages})
        scene = Scene.of(plan, np.array([0]), Faults(pointing_error_arcsec=0, jitter_arcsec=0), Cut(4))
        expected, truth = without_noise(scene, 0), scene.draw(0).truth
        x, y = round(truth.target_x_px), round(truth.target_y_px)
        part = np.clip(expected[y - 12 : y + 13, x - 12 : x + 13] - np.median(expected), 0, None)
        rows, columns = np.mgrid[-12:13, -12:13]
        spread = [np.sqrt((part * axis**2).sum() / part.sum()) for axis in (columns, rows)]
        # 300" at 36.7"/px is 8 px, along x for a frame with north nearly up
        assert spread[0] > 2.0
        assert spread[1] < 1.6


@pytest.mark.parametrize(
    ("total", "thin", "count", "chosen"),
    [
        (10, 3, None, [0, 3, 6, 9]),
        (10, None, 3, [0, 4, 9]),
        (2, None, 9, [0, 1]),
        (5, None, None, [0, 1, 2, 3, 4]),
    ],
)
def test_choice_of_frames(total, thin, count, chosen):
    assert choose(total, thin, count).tolist() == chosen
