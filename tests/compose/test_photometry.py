"""Light and places through the whole of a star picture: what was put into the frames comes out of the stack."""

from __future__ import annotations

from dataclasses import replace
from pathlib import Path

import numpy as np
import pytest

from imaging.compose.choices import Choices
from imaging.compose.material import gather
from imaging.compose.plane import plane_to_sky
from imaging.compose.pointing import DiscPointing
from imaging.compose.sky_path import sky_path
from imaging.frames.frame import Frame
from planner.sequence.documents import load_plan
from tests.compose.test_series import InMemory, a_frame

SKY_ADU, FWHM_PX = 120.0, 3.2
# rotation of the camera, its parity, scale, exposure
CAMERAS = [(0.0, 1, 1.0, 4.0), (31.0, 1, 1.0, 4.0), (200.0, -1, 1.12, 3.6), (97.0, 1, 0.9, 4.4)]


@pytest.fixture(scope="module")
def field():
    """Stars on a grid with random steps, arcseconds east and north of the middle, and their counts a second."""
    rng = np.random.default_rng(7)
    east, north = (axis.ravel() for axis in np.meshgrid(np.linspace(-110, 110, 6), np.linspace(-80, 80, 5)))
    return (
        east + rng.uniform(-4, 4, east.size),
        north + rng.uniform(-4, 4, east.size),
        10 ** rng.uniform(4.0, 5.0, east.size),
    )


def drawn(field, pointing, exposure_s, shape=(300, 380)):
    """Return a frame with round stars integrated over pixels, and no noise: errors are of the method alone."""
    from scipy.special import erf

    east, north, counts_s = field
    x, y = pointing.sky_to_pixel(*plane_to_sky(200.0, -8.0, east, north))
    sigma = FWHM_PX / 2.3548 / pointing.scale_arcsec_px
    edges = [np.arange(length + 1) - 0.5 for length in shape[::-1]]
    share = [
        np.diff(0.5 * (1 + erf((edge[None, :] - at[:, None]) / (np.sqrt(2) * sigma))), axis=1)
        for edge, at in zip(edges, (x, y), strict=True)
    ]
    return SKY_ADU + np.einsum("s,sy,sx->yx", counts_s * exposure_s, share[1], share[0])


@pytest.fixture(scope="module")
def picture(field, loop):
    material = gather(load_plan(loop.plan), loop.track, loop.frames)
    base = material.frames[0].tt_s
    frames, pixels = [], {}
    for number, (rotation, parity, scale, exposure_s) in enumerate(CAMERAS):
        pointing = DiscPointing(190.3, 149.6, scale, rotation, parity, 200.0, -8.0)
        name = f"{number}.fits"
        pixels[name] = Frame(
            Path(name), drawn(field, pointing, exposure_s).astype(np.float32), None, exposure_s
        )
        # the target is elsewhere: only stars are looked at here
        frames.append(
            a_frame(
                None,
                pointing,
                base + number,
                "visit 1",
                ra=200.0,
                dec=-8.01,
                name=name,
                exposure_s=exposure_s,
            )
        )
    light = InMemory(threads=1, ringless=True)
    object.__setattr__(light, "frames", pixels)
    return sky_path(replace(material, frames=tuple(frames)), Choices(scale_arcsec_px=1.0), light)


def test_light_is_conserved_to_half_a_per_cent_and_places_to_a_twentieth_of_a_pixel(field, picture):
    """Cameras of other angles, parities, scales and exposures, in one stack: counts a second of every star in it."""
    east, north, counts_s = field
    x, y = picture.canvas.from_sky(
        picture.anchor_ra_deg, picture.anchor_dec_deg, *plane_to_sky(200.0, -8.0, east, north)
    )
    target = picture.drawn[0]
    light, off = [], []
    for at_x, at_y, true in zip(x, y, counts_s, strict=True):
        row, column = round(float(at_y)), round(float(at_x))
        box = picture.image[row - 12 : row + 13, column - 12 : column + 13]
        near_target = np.hypot(at_x - target.x_px, at_y - target.y_px) < 60
        if box.shape != (25, 25) or not np.isfinite(box).all() or near_target:
            continue
        v, u = np.mgrid[row - 12 : row + 13, column - 12 : column + 13]
        away = np.hypot(u - at_x, v - at_y)
        signal = np.where(away < 9, box - np.median(box[away > 10]), 0.0)
        light.append(signal.sum() / true)
        off.append([(signal * u).sum() / signal.sum() - at_x, (signal * v).sum() / signal.sum() - at_y])
    assert len(light) >= 12
    assert np.median(light) == pytest.approx(1.0, abs=0.002)
    assert np.asarray(light) == pytest.approx(np.ones(len(light)), abs=0.005)
    assert np.sqrt(np.mean(np.square(off))) < 0.05
