"""The limb is that of the terrain: exact on made-up Moons, and in keeping with what is published of the real one."""

from __future__ import annotations

import dataclasses

import numpy as np
import pytest

from planner.errors import InputError
from planner.sky import moonlimb
from planner.sky.bodies import moon_orientation_deg
from planner.sky.elevation import ElevationGrid, elevation_grid
from planner.sky.moonorientation import MoonOrientation, moon_orientation
from planner.sky.observer import Observer
from planner.sky.places import direction, position_angle_deg
from planner.sky.timescale import tt_s_from_iso

NIGHT = tt_s_from_iso("2022-12-08T05:00:00Z")
SITE = Observer("", 48.137, 11.575, 520.0)


def made_up(path, height_km, resolution=4):
    """Return a grid whose heights are a function of latitude and longitude (degrees)."""
    edge = (np.arange(180 * resolution) + 0.5) / resolution
    longitude = (np.arange(360 * resolution) + 0.5) / resolution
    heights = height_km(90.0 - edge[:, None], longitude[None, :]) * np.ones((len(edge), len(longitude)))
    return ElevationGrid(path, heights, 1.0, 1737.4, float(resolution), 0.0, "made up")


def limb_of(grid):
    return moonlimb.LimbModel(grid, MoonOrientation())


def without_rise(model, *where):
    return moonlimb.limb_profile(*where, model)[1] - model.rise_km


def test_a_smooth_sphere_has_its_own_radius_everywhere(tmp_path):
    for height in (-3.0, 0.0, 2.5):
        model = limb_of(made_up(tmp_path, lambda lat, lon, h=height: h))
        for where in ((None, NIGHT), (SITE, NIGHT)):
            assert without_rise(model, *where) == pytest.approx(height, abs=1e-6)


@pytest.mark.parametrize("resolution", [2, 4, 16])
def test_a_sphere_off_its_centre_shows_the_shift_on_the_sky(tmp_path, resolution):
    shift = np.array([0.4, -1.2, 0.9])

    def height(latitude, longitude):
        lat, lon = np.radians(latitude), np.radians(longitude)
        return (
            shift[0] * np.cos(lat) * np.cos(lon)
            + shift[1] * np.cos(lat) * np.sin(lon)
            + shift[2] * np.sin(lat)
        )

    model = limb_of(made_up(tmp_path, height, resolution))
    angles, heights = moonlimb.limb_profile(SITE, NIGHT, model)
    moon = direction("moon", SITE, np.array([NIGHT]))
    moved = moon.vector_km + np.einsum(
        "nji,j->in", model.orientation.mean_earth_axes(np.array([NIGHT])), shift
    )
    east_north = [np.sin(np.radians(angles)), np.cos(np.radians(angles))]
    from planner.sky.places import offsets_arcsec, radec_deg

    east, north = offsets_arcsec(moon.ra_deg, moon.dec_deg, *radec_deg(moved))
    expected = (east * east_north[0] + north * east_north[1]) / 206264.806 * moon.distance_km
    # the shift towards the observer and the square of the shift are under 10 m
    assert heights - model.rise_km == pytest.approx(expected, abs=0.012)


def test_a_peak_stands_at_its_own_position_angle_and_no_other(tmp_path):
    axes = MoonOrientation().mean_earth_axes(np.array([NIGHT]))[0]
    moon = direction("moon", None, np.array([NIGHT]))
    east = np.array([-np.sin(np.radians(moon.ra_deg[0])), np.cos(np.radians(moon.ra_deg[0])), 0.0])
    # the point of the limb due ICRS east of the centre
    at = axes @ east
    latitude, longitude = np.degrees(np.arcsin(at[2])), np.degrees(np.arctan2(at[1], at[0]))

    def height(lat, lon):
        away = np.hypot(lat - latitude, (lon - longitude + 180) % 360 - 180)
        return np.where(away < 1.0, 5.0, 0.0)

    angles, heights = moonlimb.limb_profile(None, NIGHT, limb_of(made_up(tmp_path, height)))
    heights = heights - 0.32
    assert angles[np.argmax(heights)] == pytest.approx(90.0, abs=1.2)
    assert heights.max() == pytest.approx(5.0, abs=0.3)
    assert heights[(angles < 85) | (angles > 95)] == pytest.approx(0.0, abs=1e-6)


def test_a_peak_behind_the_limb_is_seen_when_it_is_high_enough(tmp_path):
    # seen over a smooth limb when (R + h) cos(x) > R: 5 km show up to x = 4.3 degrees beyond the limb
    axes = MoonOrientation().mean_earth_axes(np.array([NIGHT]))[0]
    moon = direction("moon", None, np.array([NIGHT]))
    sight = (moon.vector_km / moon.distance_km)[:, 0]
    east = np.array([-np.sin(np.radians(moon.ra_deg[0])), np.cos(np.radians(moon.ra_deg[0])), 0.0])
    for beyond_deg, expected in ((3.0, (1737.4 + 5) * np.cos(np.radians(3.0)) - 1737.4), (5.5, 0.0)):
        # the geometric limb lies a quarter of a degree this side of the terminator plane
        x = np.radians(beyond_deg - 0.2596)
        at = axes @ (east * np.cos(x) + sight * np.sin(x))
        latitude, longitude = np.degrees(np.arcsin(at[2])), np.degrees(np.arctan2(at[1], at[0]))

        def height(lat, lon, here=(latitude, longitude)):
            away = np.hypot(lat - here[0], (lon - here[1] + 180) % 360 - 180)
            return np.where(away < 0.4, 5.0, 0.0)

        heights = without_rise(limb_of(made_up(tmp_path, height)), None, NIGHT)
        assert heights.max() == pytest.approx(expected, abs=0.6)


def test_pairs_and_profiles_agree(lunar_data):
    model = moonlimb.limb_model(lunar_data / "LDEM_4.IMG")
    angles = np.array([12.3, 200.0, 359.9])
    _, profile = moonlimb.limb_profile(SITE, NIGHT, model, angles)
    pairs = moonlimb.limb_height_km(SITE, np.array([NIGHT, NIGHT + 7200, NIGHT]), angles[[0, 1, 2]], model)
    assert pairs[[0, 2]] == pytest.approx(profile[[0, 2]], abs=1e-6)
    assert pairs[1] != pytest.approx(profile[1], abs=1e-3)


def test_the_real_figure_is_the_published_one(lunar_data):
    # Smith et al. 2010, GRL 37, L18204: mean radius 1737.153 km, centre of figure (-1.7752, -0.7311, 0.2399) km
    grid = elevation_grid(lunar_data / "LDEM_4.LBL")
    latitude = np.radians(90 - (np.arange(720) + 0.5) / 4)[:, None]
    longitude = np.radians((np.arange(1440) + 0.5) / 4)[None, :]
    height = grid.samples * grid.scale_km
    weight = np.cos(latitude) * np.ones_like(longitude)
    mean = (height * weight).sum() / weight.sum()
    assert grid.radius_km + mean == pytest.approx(1737.153, abs=0.01)
    for axis, expected in zip(
        (np.cos(latitude) * np.cos(longitude), np.cos(latitude) * np.sin(longitude), np.sin(latitude)),
        (-1.7752, -0.7311, 0.2399),
        strict=True,
    ):
        assert 3 * (height * weight * axis).sum() / weight.sum() == pytest.approx(expected, abs=0.006)


def test_the_orientation_kernel_and_the_analytic_libration_agree_within_150_metres(lunar_data):
    kernel = moon_orientation(lunar_data / "moon_pa_de421_1900-2050.bpc", lunar_data / "moon_080317.tf")
    times = np.linspace(-3.1e9, 1.55e9, 2000)
    turned = kernel.mean_earth_axes(times) @ np.swapaxes(MoonOrientation().mean_earth_axes(times), 1, 2)
    tilt = np.stack([turned[:, 1, 2], turned[:, 2, 0], turned[:, 0, 1]]) * 1737.4
    assert np.abs(tilt).max() < 0.15
    # 12 m in the mean: the frame rotation (0.5 km) has its right sign
    assert np.abs(tilt.mean(axis=1)).max() < 0.012


def test_libration_of_the_handbook_example():
    # Meeus, example 53.a: 1992-04-12 0h TD, l = -1.23, b = +4.20, P = 15.08 degrees (from memory)
    tt_s = np.array([(2448724.5 - 2451545.0) * 86400.0])
    moon = direction("moon", None, tt_s)
    facing = MoonOrientation().mean_earth_axes(tt_s - moon.light_time_s)[0] @ -moon.vector_km[:, 0]
    longitude = np.degrees(np.arctan2(facing[1], facing[0]))
    latitude = np.degrees(np.arcsin(facing[2] / np.linalg.norm(facing)))
    # the example's axis of rotation is of IAU 1982: 0.02 degrees
    assert (longitude, latitude) == (pytest.approx(-1.23, abs=0.03), pytest.approx(4.20, abs=0.03))
    ra, dec, _ = moon_orientation_deg(tt_s)
    from planner.sky.places import north_of_date_pa_deg, unit_vector

    angle = position_angle_deg(moon.vector_km, unit_vector(ra, dec)) - north_of_date_pa_deg(
        moon.ra_deg, moon.dec_deg, tt_s
    )
    assert angle[0] == pytest.approx(15.08, abs=0.03)


def test_the_limbs_mean_radius_is_the_almanacs(lunar_data):
    # k = 0.2725076 (IAU 1982): 1738.09 km, from photographs of the limb
    model = moonlimb.limb_model(lunar_data / "LDEM_4.IMG")
    times = np.random.default_rng(8).uniform(-5e8, 1.2e9, 40)
    angles = np.arange(0.0, 360.0, 2.0)
    limbs = np.array([moonlimb.limb_profile(None, t, model, angles)[1] for t in times])
    assert 1737.4 + limbs.mean() == pytest.approx(1738.09, abs=0.25)
    # the smooth circle about the limb's centre leaves what the project states
    moon = direction("moon", None, times)
    centre = moonlimb.limb_centre_km(times)
    ra, dec = np.radians(moon.ra_deg), np.radians(moon.dec_deg)
    north = (centre * [-np.sin(dec) * np.cos(ra), -np.sin(dec) * np.sin(ra), np.cos(dec)]).sum(axis=0)
    east = (centre * [-np.sin(ra), np.cos(ra), 0 * ra]).sum(axis=0)
    circle = np.outer(north, np.cos(np.radians(angles))) + np.outer(east, np.sin(np.radians(angles)))
    left = (limbs - circle - limbs.mean()).std()
    assert left == pytest.approx(moonlimb.SMOOTH_LIMB_SIGMA_KM, abs=0.1)
    assert left < (limbs - limbs.mean()).std() - 0.1


def test_a_coarser_grid_is_off_by_what_it_says(lunar_data):
    fine = moonlimb.limb_model(lunar_data / "LDEM_4.IMG")
    blocks = fine.grid.samples.reshape(360, 2, 720, 2).mean(axis=(1, 3))
    coarse = moonlimb.LimbModel(
        dataclasses.replace(fine.grid, samples=blocks, pixels_per_degree=2.0), fine.orientation
    )
    times = np.random.default_rng(9).uniform(-5e8, 1.2e9, 30)
    angles = np.arange(0.0, 360.0, 2.0)
    difference = np.array(
        [
            moonlimb.limb_profile(None, t, coarse, angles)[1]
            - moonlimb.limb_profile(None, t, fine, angles)[1]
            for t in times
        ]
    )
    # the rise for finer relief brings both to the same mean limb
    assert abs(difference.mean()) < 0.05
    assert difference.std() < np.sqrt(coarse.sigma_km**2 - fine.sigma_km**2) * 1.1
    assert limb_of(dataclasses.replace(fine.grid, pixels_per_degree=64.0)).sigma_km == pytest.approx(0.07)


def test_a_date_outside_the_kernel_falls_back_and_says_so(lunar_data):
    model = moonlimb.limb_model(
        lunar_data / "LDEM_4.IMG", lunar_data / "moon_pa_de421_1900-2050.bpc", lunar_data / "moon_080317.tf"
    )
    assert "moon_pa_de421" in model.text(NIGHT)
    assert "analytic" not in model.text(NIGHT)
    late = tt_s_from_iso("2080-01-01T00:00:00Z")
    assert "analytic" in model.text(late)
    assert "does not reach" in model.text(late)
    assert np.isfinite(moonlimb.limb_profile(SITE, late, model)[1]).all()
    assert "analytic" in moonlimb.limb_model(lunar_data / "LDEM_4.IMG").text(NIGHT)


def test_without_a_frame_kernel_the_published_rotation_is_used(lunar_data):
    kernel = lunar_data / "moon_pa_de421_1900-2050.bpc"
    named, published = moon_orientation(kernel, lunar_data / "moon_080317.tf"), moon_orientation(kernel)
    assert named.mean_earth_axes(np.array([NIGHT])) == pytest.approx(
        published.mean_earth_axes(np.array([NIGHT]))
    )


LABEL = """PDS_VERSION_ID = "PDS3"
^IMAGE = "GRID.IMG"
LINES = 180
LINE_SAMPLES = 360
SAMPLE_TYPE = LSB_INTEGER
SAMPLE_BITS = 16
UNIT = METER
SCALING_FACTOR = 0.5
OFFSET = 1737400.
MAP_PROJECTION_TYPE = "SIMPLE CYLINDRICAL"
MAP_RESOLUTION = 1 <pix/deg>
POSITIVE_LONGITUDE_DIRECTION = "EAST"
WESTERNMOST_LONGITUDE = 0 <deg>
COORDINATE_SYSTEM_NAME = "MEAN EARTH/POLAR AXIS OF DE421"
END
"""


def write_grid(folder, label=LABEL, size=180 * 360 * 2):
    (folder / "GRID.LBL").write_text(label)
    (folder / "GRID.IMG").write_bytes(b"\x04\x00" * (size // 2))
    return folder / "GRID.IMG"


def test_a_label_is_read_with_its_units(tmp_path):
    grid = elevation_grid(write_grid(tmp_path))
    assert grid.height_km(np.array([10.0, 90.0, -90.0]), np.array([0.0, 359.9, -180.0])) == pytest.approx(
        0.002
    )
    assert (grid.pixels_per_degree, grid.radius_km) == (1.0, 1737.4)
    assert grid.pixel_km == pytest.approx(30.3, abs=0.1)


@pytest.mark.parametrize(
    ("old", "new", "said"),
    [
        ("SIMPLE CYLINDRICAL", "POLAR STEREOGRAPHIC", "MAP_PROJECTION_TYPE: found POLAR STEREOGRAPHIC"),
        ('= "EAST"', '= "WEST"', "POSITIVE_LONGITUDE_DIRECTION: found WEST"),
        ("LINES = 180", "LINES = 90", "MAP_RESOLUTION: found 1 with 90 x 360"),
        ("SAMPLE_BITS = 16", "SAMPLE_BITS = 8", "SAMPLE_TYPE: found LSB_INTEGER of 8 bits"),
        ("OFFSET = 1737400.\n", "", "OFFSET: found none"),
        ("SCALING_FACTOR = 0.5", "SCALING_FACTOR = half", "SCALING_FACTOR: found half"),
        ("UNIT = METER", "UNIT = FATHOM", "UNIT: found FATHOM"),
    ],
)
def test_a_label_that_does_not_fit_names_its_key(tmp_path, old, new, said):
    assert old in LABEL
    path = write_grid(tmp_path, LABEL.replace(old, new))
    with pytest.raises(InputError, match=said):
        elevation_grid(path)


def test_files_that_are_missing_or_cut_are_named(tmp_path, lunar_data):
    with pytest.raises(InputError, match=r"none\.LBL: found no readable label"):
        elevation_grid(tmp_path / "none.IMG")
    with pytest.raises(InputError, match=r"GRID\.IMG: found 1000 bytes; allowed are 129600"):
        elevation_grid(write_grid(tmp_path, size=1000))
    (tmp_path / "GRID.IMG").unlink()
    with pytest.raises(InputError, match=r"GRID\.IMG: found no image"):
        elevation_grid(tmp_path / "GRID.LBL")
    for content in (b"", b"no kernel", b"DAF/PCK " + bytes(2000)):
        (tmp_path / "bad.bpc").write_bytes(content)
        with pytest.raises(InputError, match=r"bad\.bpc: found no readable lunar orientation"):
            moon_orientation(tmp_path / "bad.bpc")
    kernel = lunar_data / "moon_pa_de421_1900-2050.bpc"
    with pytest.raises(InputError, match=r"missing\.tf: found no readable frame kernel"):
        moon_orientation(kernel, tmp_path / "missing.tf")
    (tmp_path / "other.tf").write_text("\\begindata\nFRAME_X = 1\n\\begintext\n")
    with pytest.raises(InputError, match=r"other\.tf: found no frame given by angles"):
        moon_orientation(kernel, tmp_path / "other.tf")
