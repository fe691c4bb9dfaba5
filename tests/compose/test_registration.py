"""Registration of every single star within 0.05 px rms of the injected truth, solved by the real check.

Two figures, kept apart: where the map of each frame puts a star against where the renderer drew it, and where a bright
star of the stack is measured, which holds the error of measuring too. The lens is soft here (stars 2.4 px wide), so
that a centroid means something; the map does not depend on it.
"""

from __future__ import annotations

import numpy as np
import pytest
from astropy.table import Table
from scipy.spatial import cKDTree

from imaging.compose.canvas import Canvas
from imaging.compose.light import Light, exposure_level
from imaging.compose.material import gather
from imaging.compose.plane import plane_to_sky
from imaging.compose.stack import new_stack
from imaging.compose.visit import without_sky
from imaging.compose.warp import GRID_PX, _between_nodes, gridded_map
from imaging.frames.render import Cut, Faults, Scene
from imaging.frames.render_pointing import unit_vector
from imaging.stars.detection import detect
from planner.cli.main import run_with
from planner.sequence.documents import load_plan
from planner.sky.stars import stars_in_field

CROP_PX = 1300, 900


@pytest.fixture(scope="module")
def visit(tmp_path_factory, root):
    """Six frames of one visit to Mars, each aimed anew by up to a hundred arcseconds, checked by their stars."""
    folder = tmp_path_factory.mktemp("visit")
    plan, frames = folder / "plan.yaml", folder / "frames"
    site = (root / "configs" / "sites" / "kestrel_ridge.yaml").read_text()
    lines = [line for line in site.splitlines() if not line.startswith("seeing_arcsec")]
    (folder / "site.yaml").write_text("\n".join([*lines, "seeing_arcsec: 12.0"]) + "\n")
    brief = str(root / "configs" / "mars_retrograde_2027.yaml")
    assert run_with(["plan", brief, "--site", str(folder / "site.yaml"), "-o", str(plan)]) in (0, 1)
    name = load_plan(plan).passages[8].name
    crop = f"{CROP_PX[0]}x{CROP_PX[1]}"
    options = ["--passage", name, "--frames", "6", "--crop", crop, "--jitter", "60", "--quiet", "--jobs", "1"]
    assert run_with(["rehearse", str(plan), "-o", str(frames), *options]) == 0
    checked = folder / "checked"
    assert run_with(["check", str(plan), str(frames), "-o", str(checked), "--no-pictures"]) in (0, 1)
    material = gather(load_plan(plan), checked / "track.ecsv", frames)
    truth = Table.read(folder / "frames.truth.ecsv")
    chosen = np.array([int(name.split("_")[1].split(".")[0]) for name in truth["file"]])
    scene = Scene.of(load_plan(plan), chosen, Faults(jitter_arcsec=60.0), Cut(1, CROP_PX), 1)
    return material, scene, [str(name) for name in truth["file"]]


def canvas_of(material):
    middle = material.frames[0].pointing.pixel_to_sky(np.array(CROP_PX[0] / 2), np.array(CROP_PX[1] / 2))
    anchor = float(middle[0]), float(middle[1])
    scale = material.frames[0].scale_arcsec_px
    return anchor, Canvas(1500, 1100, scale, 749.6, 549.3, 12.0)


def test_the_map_puts_every_star_where_it_was_drawn(visit):
    """The map as the warp uses it, interpolated between nodes, against the renderer's own projection."""
    material, scene, names = visit
    anchor, canvas = canvas_of(material)
    frames = {frame.path.name: frame for frame in material.frames}
    assert len(frames) == len(names)
    for position, name in enumerate(names):
        pointing = scene.pointing(position)
        stars = stars_in_field(*anchor, 1.6, float(scene.geometry.tt_s[position]))
        x, y = pointing.project(unit_vector(stars.ra_deg, stars.dec_deg))
        seen = (x > 0) & (x < CROP_PX[0] - 1) & (y > 0) & (y < CROP_PX[1] - 1)
        cx, cy = canvas.from_sky(*anchor, stars.ra_deg[seen], stars.dec_deg[seen])
        frame = frames[name]

        def to_frame(px, py, frame=frame):
            return frame.pointing.sky_to_pixel(*plane_to_sky(*anchor, *canvas.to_plane(px, py)))

        nodes = gridded_map(canvas, to_frame)
        found = [
            _at(_between_nodes(node, 0, canvas.height_px, canvas.width_px, GRID_PX), cx, cy) for node in nodes
        ]
        off = np.concatenate([found[0] - x[seen], found[1] - y[seen]])
        assert seen.sum() > 25
        assert np.sqrt(np.nanmean(off**2)) < 0.05
        assert np.nanmax(np.abs(off)) < 0.15


def _at(values, x, y):
    """Bilinear value between canvas pixels."""
    i, j = np.floor(y).astype(int), np.floor(x).astype(int)
    inside = (i >= 0) & (j >= 0) & (i < values.shape[0] - 1) & (j < values.shape[1] - 1)
    i, j, fy, fx = i[inside], j[inside], (y - np.floor(y))[inside], (x - np.floor(x))[inside]
    found = np.full(x.shape, np.nan)
    low = values[i, j] * (1 - fx) + values[i, j + 1] * fx
    high = values[i + 1, j] * (1 - fx) + values[i + 1, j + 1] * fx
    found[inside] = low * (1 - fy) + high * fy
    return found


def test_each_bright_star_of_the_stack_is_measured_at_its_catalogue_place(visit):
    """Stars whose own centroid error is under 0.02 px; the catalogue holds true places at the visit's date."""
    material, *_ = visit
    anchor, canvas = canvas_of(material)
    light = Light(ringless=True, threads=1)
    stack = new_stack("clipped", (canvas.height_px, canvas.width_px), len(material.frames))
    for frame in material.frames:
        pixels = light.read(frame)
        level = exposure_level(pixels, frame)
        stack.add(light.on_canvas(without_sky(pixels, level.dark), frame, canvas, anchor, level))
    image, _ = stack.result()
    found = detect(np.nan_to_num(image))
    field = stars_in_field(*anchor, 1.6, material.frames[0].tt_s)
    x, y = canvas.from_sky(*anchor, field.ra_deg, field.dec_deg)
    sure = (np.maximum(found.sigma_x_px, found.sigma_y_px) < 0.02) & ~found.saturated
    places = np.column_stack([found.x_px, found.y_px])[sure]
    away, which = cKDTree(np.column_stack([x, y])).query(places, k=2)
    mars = canvas.from_sky(*anchor, material.frames[0].target_ra_deg, material.frames[0].target_dec_deg)
    planet = np.hypot(*(places - mars).T) < 40
    own = (away[:, 0] < 1) & (away[:, 1] > 12) & ~planet
    off = places[own] - np.column_stack([x, y])[which[own, 0]]
    assert own.sum() > 15
    assert np.sqrt(np.mean(off**2)) < 0.05
    assert np.abs(np.median(off, axis=0)).max() < 0.02
