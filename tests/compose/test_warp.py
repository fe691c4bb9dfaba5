"""The warp puts light where the map says, keeps its amount, and is what astropy and reproject say it should be."""

from __future__ import annotations

import numpy as np
import pytest
from astropy.wcs import WCS

from imaging.compose.canvas import Canvas, canvas_around
from imaging.compose.plane import plane_to_sky, sky_to_plane
from imaging.compose.pointing import DiscPointing, StarPointing
from imaging.compose.warp import warp
from planner.errors import InputError


def star_image(shape, x_px, y_px, fwhm_px=3.0, flux=1000.0):
    """Gaussian stars sampled at pixel centres."""
    sigma = fwhm_px / 2.3548
    y, x = np.mgrid[: shape[0], : shape[1]]
    image = np.zeros(shape, np.float32)
    for cx, cy in zip(x_px, y_px, strict=True):
        image += flux / (2 * np.pi * sigma**2) * np.exp(-((x - cx) ** 2 + (y - cy) ** 2) / (2 * sigma**2))
    return image


def moments(image, x_px, y_px, half=9):
    """Flux and centre of a lone star near a place."""
    col, row = round(float(x_px)), round(float(y_px))
    cut = np.nan_to_num(image[row - half : row + half + 1, col - half : col + half + 1]).astype(float)
    y, x = np.mgrid[row - half : row + half + 1, col - half : col + half + 1]
    return cut.sum(), (cut * x).sum() / cut.sum(), (cut * y).sum() / cut.sum()


@pytest.mark.parametrize("shift", [0.0, 0.005, 0.0156, 0.25, 0.27, 0.5, 0.77])
@pytest.mark.parametrize("fwhm_px", [2.0, 3.0, 5.0])
def test_a_shifted_star_keeps_its_flux_and_lands_at_its_place(shift, fwhm_px):
    frame = star_image((64, 64), [32.0], [30.0], fwhm_px)
    canvas = Canvas(64, 64, 1.0, 0.0, 0.0)
    out = warp(frame, canvas, lambda x, y: (x + shift, y - shift))
    flux, x, y = moments(out, 32 - shift, 30 + shift)
    assert flux == pytest.approx(1000, rel=2e-4)
    assert x == pytest.approx(32 - shift, abs=1e-3)
    assert y == pytest.approx(30 + shift, abs=1e-3)


@pytest.mark.parametrize("scale", [0.4, 0.8, 1.0, 1.3, 2.0, 3.7])
def test_flux_is_conserved_within_half_a_percent_at_any_scale(scale):
    frame = star_image((200, 200), [90.3], [110.8], 4.0)
    canvas = Canvas(int(200 / scale), int(200 / scale), scale, 0.0, 0.0)
    out = warp(frame, canvas, lambda x, y: ((x + 0.5) * scale - 0.5, (y + 0.5) * scale - 0.5))
    flux, x, y = moments(out, 90.8 / scale - 0.5, 111.3 / scale - 0.5, half=int(12 / scale) + 2)
    assert flux == pytest.approx(1000, rel=5e-3)
    assert (x, y) == pytest.approx((90.8 / scale - 0.5, 111.3 / scale - 0.5), abs=0.02)


def test_no_overlap_gives_nothing_and_a_mask_stays_a_hole():
    frame = np.ones((40, 50), np.float32)
    canvas = Canvas(50, 40, 1.0, 0.0, 0.0)
    assert np.isnan(warp(frame, canvas, lambda x, y: (x + 1000, y))).all()
    good = np.ones_like(frame, bool)
    good[20, 25] = False
    out = warp(frame, canvas, lambda x, y: (x, y), good)
    assert np.isnan(out[20, 25])
    assert np.isnan(out).sum() == 1
    assert np.nanmax(np.abs(out - 1)) < 1e-5


def test_strips_and_threads_do_not_show():
    rng = np.random.default_rng(1)
    frame = rng.normal(100, 5, (300, 200)).astype(np.float32)
    canvas = Canvas(210, 290, 1.0, 0.0, 0.0)

    def turned(x, y):
        return 3.3 + 0.99 * x + 0.1 * y, 5.1 - 0.1 * x + 0.99 * y

    assert np.array_equal(warp(frame, canvas, turned), warp(frame, canvas, turned, threads=3), equal_nan=True)


def tan_wcs(ra_deg, dec_deg, scale_arcsec, angle_deg, shape, sip=0.0):
    wcs = WCS(naxis=2)
    suffix = "-SIP" if sip else ""
    wcs.wcs.ctype = [f"RA---TAN{suffix}", f"DEC--TAN{suffix}"]
    wcs.wcs.crval = [ra_deg, dec_deg]
    wcs.wcs.crpix = [shape[1] / 2 + 0.5, shape[0] / 2 + 0.5]
    sin, cos = np.sin(np.radians(angle_deg)), np.cos(np.radians(angle_deg))
    wcs.wcs.cd = np.array([[-cos, sin], [sin, cos]]) * scale_arcsec / 3600
    if sip:
        from astropy.wcs import Sip

        a = np.zeros((4, 4))
        b = np.zeros((4, 4))
        a[3, 0] = a[1, 2] = b[0, 3] = b[2, 1] = sip
        wcs.sip = Sip(a, b, None, None, wcs.wcs.crpix)
    wcs.wcs.set()
    return wcs


@pytest.mark.parametrize("sip", [0.0, 2e-8])
def test_star_frames_land_where_astropy_projects_them_with_distortion_removed(sip):
    shape = (240, 320)
    wcs = tan_wcs(150.0, 12.0, 9.2, 17.0, shape, sip)
    rng = np.random.default_rng(4)
    x_px, y_px = rng.uniform(30, 290, 8), rng.uniform(30, 210, 8)
    keep = [i for i in range(8) if all(np.hypot(x_px[i] - x_px[j], y_px[i] - y_px[j]) > 22 for j in range(i))]
    x_px, y_px = x_px[keep], y_px[keep]
    frame = star_image(shape, x_px, y_px)
    ra, dec = wcs.all_pix2world(x_px, y_px, 0)
    canvas = canvas_around(*sky_to_plane(150.02, 12.03, ra, dec), 400, 9.2)
    pointing = StarPointing(wcs, 9.2)
    out = warp(
        frame,
        canvas,
        lambda x, y: pointing.sky_to_pixel(*plane_to_sky(150.02, 12.03, *canvas.to_plane(x, y))),
    )
    expected = WCS(canvas.wcs_header(150.02, 12.03)).all_world2pix(ra, dec, 0)
    for cx, cy in zip(*expected, strict=True):
        _, x, y = moments(out, cx, cy)
        assert (x, y) == pytest.approx((cx, cy), abs=0.01)


def test_the_warp_agrees_with_reproject():
    """Oracle: reproject_interp (biquadratic), reproject project, on the same WCS pair."""
    reproject = pytest.importorskip("reproject")
    shape = (240, 320)
    wcs = tan_wcs(80.0, -30.0, 3.0, -40.0, shape)
    frame = star_image(shape, [100.4, 200.2, 160.0], [120.7, 80.1, 200.5], 4.0)
    canvas = Canvas(300, 260, 3.0, 150.0, 130.0)
    pointing = StarPointing(wcs, 3.0)
    ours = warp(
        frame, canvas, lambda x, y: pointing.sky_to_pixel(*plane_to_sky(80, -30, *canvas.to_plane(x, y)))
    )
    theirs, _ = reproject.reproject_interp(
        (frame, wcs), WCS(canvas.wcs_header(80, -30)), shape_out=(260, 300), order=3
    )
    for ra, dec in zip(*wcs.all_pix2world([100.4, 200.2, 160.0], [120.7, 80.1, 200.5], 0), strict=True):
        cx, cy = canvas.from_sky(80, -30, ra, dec)
        flux, x, y = moments(ours, cx, cy)
        flux_r, x_r, y_r = moments(theirs, cx, cy)
        assert flux == pytest.approx(flux_r, rel=2e-3)
        assert (x, y) == pytest.approx((x_r, y_r), abs=0.005)


@pytest.mark.parametrize("parity", [1, -1])
@pytest.mark.parametrize("rotation_deg", [0.0, 30.0, 137.0, 250.0])
def test_a_disc_frame_is_turned_right_side_up(parity, rotation_deg):
    """A spot 20 arcsec east and 40 north of the disc's centre lies left of and above it on the canvas."""
    pointing = DiscPointing(52.0, 47.0, 2.0, rotation_deg, parity, 200.0, -8.0)
    spot = pointing.sky_to_pixel(*plane_to_sky(200.0, -8.0, 20.0, 40.0))
    frame = star_image((100, 110), [float(spot[0])], [float(spot[1])])
    canvas = Canvas(101, 101, 2.0, 50.0, 50.0)
    out = warp(
        frame, canvas, lambda x, y: pointing.sky_to_pixel(*plane_to_sky(200, -8, *canvas.to_plane(x, y)))
    )
    flux, x, y = moments(out, 40, 70)
    assert (x, y) == pytest.approx((40, 70), abs=2e-3)
    assert flux == pytest.approx(1000, rel=1e-3)


@pytest.mark.parametrize("up_pa_deg", [0.0, 45.0, 200.0])
def test_canvas_and_plane_are_inverse_and_the_wcs_says_the_same(up_pa_deg):
    canvas = Canvas(400, 300, 5.0, 120.0, 80.0, up_pa_deg)
    east, north = canvas.to_plane(33.0, 211.0)
    assert canvas.from_plane(east, north) == pytest.approx((33.0, 211.0), abs=1e-9)
    ra, dec = WCS(canvas.wcs_header(10.0, 60.0)).all_pix2world(33.0, 211.0, 0)
    assert plane_to_sky(10.0, 60.0, east, north) == pytest.approx((float(ra), float(dec)), abs=1e-9)


def test_a_picture_too_large_is_refused_with_its_size():
    with pytest.raises(InputError, match="choose a larger --scale"):
        canvas_around(np.array([0.0, 9000.0]), np.array([0.0, 0.0]), 10, 0.1)


@pytest.mark.parametrize(("fwhm_px", "cost"), [(1.5, 0.02), (2.0, 0.005), (2.5, 0.001), (4.0, 0.001)])
def test_taking_out_dark_rings_costs_little_flux(fwhm_px, cost):
    """Mean over 25 places within a pixel; below 2 pixels of width photometry is better done on the frames."""
    flux = []
    for dx in np.linspace(0, 0.8, 5):
        for dy in np.linspace(0, 0.8, 5):
            frame = star_image((64, 64), [32.0], [30.0], fwhm_px, 20000.0)
            frame += np.random.default_rng(1).normal(0, 1, frame.shape).astype(np.float32)
            canvas = Canvas(64, 64, 1.0, 0.0, 0.0)
            out = warp(frame, canvas, lambda x, y, dx=dx, dy=dy: (x + dx, y + dy), ringless=True)
            flux.append(moments(out, 32 - dx, 30 - dy)[0])
            assert np.nanmin(out) > -6.0
    assert np.mean(flux) == pytest.approx(20000, rel=cost)


def test_a_star_narrower_than_a_pixel_has_no_bright_ring():
    """Beyond 2.5 px the plain spline of such a star rings by a hundredth of its light; a fifth of that is left."""
    most = {}
    for ringless in (False, True):
        rings = []
        for dx in np.linspace(0, 0.8, 5):
            frame = star_image((64, 64), [32.3], [30.4], 0.9, 20000.0)
            frame += np.random.default_rng(1).normal(0, 1, frame.shape).astype(np.float32)
            canvas = Canvas(64, 64, 1.0, 0.0, 0.0)
            out = warp(frame, canvas, lambda x, y, dx=dx: (x + dx, y + 0.3), ringless=ringless)
            y, x = np.mgrid[:64, :64]
            away = np.hypot(x - (32.3 - dx), y - 30.1)
            rings.append(np.nanmax(out[(away > 2.5) & (away < 8)]))
        most[ringless] = max(rings) / 20000
    assert most[False] > 0.008
    assert most[True] < 0.002
