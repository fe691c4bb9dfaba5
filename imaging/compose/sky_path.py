"""The target's path among the stars: stars from all visits, the target of each visit at its measured place.

Each visit's frames are first stacked twice: on the stars, and on the target (so that it does not smear); outliers
are rejected in both, so that satellites, aircraft and hot pixels vanish. The visits' star stacks are blended into
the ground, from which the target vanishes because it stands elsewhere each time; then it is laid in.
"""

from __future__ import annotations

from dataclasses import replace

import numpy as np

from imaging.compose.bodies import PATCH_MOST_PX, BodyPatch, Place
from imaging.compose.canvas import Canvas, canvas_around
from imaging.compose.choices import Choices
from imaging.compose.ground import sky_surface
from imaging.compose.light import Light
from imaging.compose.matching import Matching, edge_weight
from imaging.compose.material import Material, Registered
from imaging.compose.orientation import up_pa_deg
from imaging.compose.patch import lay_patch, patch_box
from imaging.compose.picture import Drawn, Picture
from imaging.compose.plane import sky_to_plane
from imaging.compose.stack import new_stack
from imaging.compose.visit import Visit, learnt_flats, stacked
from planner.errors import FrameSetAside, InputError
from planner.sky.discs import SkyDisc

PATCH_LEAST_PX = 5.0


def sky_path(material: Material, choices: Choices, light: Light) -> Picture:
    """Return the composite registered on stars; raises InputError when no frame is left."""
    anchor, canvas = _canvas(material, choices, light)
    choices.require_room(canvas.width_px, canvas.height_px)
    groups = list(material.passages())
    shape = (canvas.height_px, canvas.width_px, *((3,) if light.colour else ()))
    ground = new_stack(choices.blend, shape, len(groups), choices.scratch)
    flats, matching = learnt_flats(material.frames, light), Matching()
    others = _others(material)
    left_out: list[tuple[str, str]] = []
    visits: list[Visit] = []
    done = 0

    def tick() -> None:
        nonlocal done
        choices.tick(done, len(material.frames))
        done += 1

    for _, frames in groups:
        visit = stacked(frames, canvas, anchor, choices, light, flats, left_out, tick, others)
        if visit is not None:
            stars = np.full(shape, np.nan, np.float32)
            stars[visit.box] = _level(visit.stars)
            stars, gain = matching.matched(stars)
            weight = np.zeros(shape[:2], np.float32)
            weight[visit.box] = edge_weight(stars[visit.box])
            ground.add(stars, weight)
            companions = {name: patch.brightened(gain) for name, patch in visit.companions.items()}
            target = visit.target.brightened(gain)
            visits.append(
                replace(visit, stars=np.zeros((0, 0), np.float32), target=target, companions=companions)
            )
    if not visits:
        why = f"; the first: {left_out[0][0]} {left_out[0][1]}" if left_out else ""
        raise InputError(f"no frame registered on stars is left{why}")
    image, count = ground.result()
    image, count, canvas = _inner_crop(image, count, canvas, visits, anchor, _companions(material))
    drawn = [_drawn(image, canvas, anchor, visit) for visit in visits if visit.holds_target]
    for visit in visits:
        for patch in visit.companions.values():
            _lay(image, canvas, anchor, patch)
    choices.tick(len(material.frames), len(material.frames))
    middle = 0.5 * (material.frames[0].tt_s + material.frames[-1].tt_s)
    notes = [
        f"the stars are a {choices.blend} blend of {len(visits)} visits",
        "the target of each visit is stacked on itself and laid in at its measured place, with a soft edge",
        "values are counts a second above a smooth background, which was taken off every frame",
        *(
            f"vignetting {100 * (flat.a + flat.b):.0f} % in the corner, {flat.source}, was divided out"
            for flat in flats.values()
        ),
        f"starlight of each visit was brought to that of the first where they overlap: factors "
        f"{min(matching.gains):.2f} to {max(matching.gains):.2f}; their edges are feathered",
    ]
    if max(visit.merged for visit in visits) > 1:
        notes.append(
            "what long exposures burnt out in "
            + " and ".join(name.capitalize() for name in (material.target, *others))
            + " is taken from shorter ones, in linear light"
        )
    return Picture(
        kind="sky-path",
        registered_on="stars",
        blend=choices.blend,
        image=image,
        count=count,
        canvas=canvas,
        anchor_ra_deg=anchor[0],
        anchor_dec_deg=anchor[1],
        reference_tt_s=float(middle),
        drawn=tuple(item for item in drawn if item is not None),
        used=tuple((frame, _role(frame)) for visit in visits for frame in visit.frames),
        tone="merged" if max(visit.merged for visit in visits) > 1 else "stars",
        notes=tuple(notes),
        left_out=tuple(left_out),
    )


def _role(frame: Registered) -> str:
    if frame.solved_by == "planets":
        return "target"
    return "stars and target" if frame.measured else "stars"


def _level(stars: np.ndarray) -> np.ndarray:
    """Return a visit's stack with what is left of its background taken off, colour by colour."""
    planes = stars[..., None] if stars.ndim == 2 else stars
    planes = np.stack([p - sky_surface(p, order=2) for p in np.moveaxis(planes, 2, 0)], axis=2)
    return planes[..., 0] if stars.ndim == 2 else planes


def _inner_crop(
    image: np.ndarray,
    count: np.ndarray,
    canvas: Canvas,
    visits: list[Visit],
    anchor: tuple[float, float],
    companions: list[tuple[float, float]],
) -> tuple[np.ndarray, np.ndarray, Canvas]:
    """Return the picture without its empty corners, as far as the path allows with a margin of 4 % of its length.

    What meets the target (`companions`, ICRS degrees) stays in it where a frame reaches.
    """
    covered = np.isfinite(image if image.ndim == 2 else image.sum(axis=2))
    places = np.array([canvas.from_sky(*anchor, *visit.target.place_deg) for visit in visits], float)
    for companion in companions:
        x, y = (float(value) for value in canvas.from_sky(*anchor, *companion))
        if 0 <= x < covered.shape[1] and 0 <= y < covered.shape[0] and covered[int(y), int(x)]:
            places = np.append(places, [(x, y)], axis=0)
    margin = 0.04 * max(float(np.ptp(places, axis=0).max()), 200.0)
    keep = (
        max(0, int(places[:, 1].min() - margin)),
        min(covered.shape[0], int(places[:, 1].max() + margin) + 1),
        max(0, int(places[:, 0].min() - margin)),
        min(covered.shape[1], int(places[:, 0].max() + margin) + 1),
    )
    low, high, left, right = full_rectangle(covered, keep)
    rows, columns = slice(low, high), slice(left, right)
    return image[rows, columns].copy(), count[rows, columns].copy(), canvas.window(rows, columns)


def _companions(material: Material) -> list[tuple[float, float]]:
    """Return where the other planets and stars of the event stand in the middle of the frames' times."""
    geometry, middle = material.geometry, len(material.frames) // 2
    found = [
        (float(disc.ra_deg[middle]), float(disc.dec_deg[middle]))
        for name, disc in geometry.discs.items()
        if name not in ("sun", "moon", material.target)
    ]
    return found + [(float(ra[middle]), float(dec[middle])) for _, ra, dec, _ in geometry.stars]


def full_rectangle(covered: np.ndarray, keep: tuple[int, int, int, int]) -> tuple[int, int, int, int]:
    """Return a rectangle (low, high, left, right) without holes, or nearly, that contains `keep`.

    The edge with the largest share of empty pixels moves inward until no edge has any, or would cut into `keep`.
    """
    low, high, left, right = 0, covered.shape[0], 0, covered.shape[1]
    step = max(1, min(covered.shape) // 400)
    while True:
        shares = {
            "low": 1 - covered[low, left:right].mean() if low < keep[0] else 0.0,
            "high": 1 - covered[high - 1, left:right].mean() if high > keep[1] else 0.0,
            "left": 1 - covered[low:high, left].mean() if left < keep[2] else 0.0,
            "right": 1 - covered[low:high, right - 1].mean() if right > keep[3] else 0.0,
        }
        worst = max(shares, key=lambda name: shares[name])
        if shares[worst] <= 0.001:
            return low, high, left, right
        low += step * (worst == "low")
        high -= step * (worst == "high")
        left += step * (worst == "left")
        right -= step * (worst == "right")


def _canvas(material: Material, choices: Choices, light: Light) -> tuple[tuple[float, float], Canvas]:
    """Return the anchor and the canvas: the path with a margin of a fifth of it, the mosaic, or the field of a frame.

    A path that is short in its frames is shown in the whole of a frame, for what it passes by.
    """
    frames = [frame for frame in material.frames if frame.solved_by == "stars"]
    if not frames:
        raise InputError("no frame was solved by its stars; registration on stars is not possible")
    ra = np.array([frame.target_ra_deg for frame in frames])
    dec = np.array([frame.target_dec_deg for frame in frames])
    vectors = np.array(
        [
            np.cos(np.radians(dec)) * np.cos(np.radians(ra)),
            np.cos(np.radians(dec)) * np.sin(np.radians(ra)),
            np.sin(np.radians(dec)),
        ]
    ).mean(axis=1)
    anchor = (
        float(np.degrees(np.arctan2(vectors[1], vectors[0])) % 360.0),
        float(np.degrees(np.arctan2(vectors[2], np.hypot(vectors[0], vectors[1])))),
    )
    scale = choices.scale_arcsec_px or min(frame.scale_arcsec_px for frame in frames)
    east, north = sky_to_plane(*anchor, ra, dec)
    length = max(float(np.ptp(east)), float(np.ptp(north)))
    extent = max(length, 200 * scale)
    middle = frames[len(frames) // 2]
    up = up_pa_deg(material, choices.orientation, anchor, middle.tt_s, on_disc=False)
    if any(passage.panel for passage in material.plan.passages):
        fields = [_field(group[0], anchor, light) for _, group in material.passages()]
        known = [np.array(field) for field in fields if field is not None]
        if known:  # a mosaic is shown whole, also beside the path
            corners = np.concatenate(known, axis=1)
            return anchor, canvas_around(corners[0], corners[1], 0.0, scale, up, choices.largest_px)
    field = _field(middle, anchor, light)
    if field is not None and length < 0.35 * min(np.ptp(field[0]), np.ptp(field[1])):
        return anchor, canvas_around(*field, 0.0, scale, up, choices.largest_px)
    return anchor, canvas_around(east, north, 0.22 * extent, scale, up, choices.largest_px)


def _field(
    frame: Registered, anchor: tuple[float, float], light: Light
) -> tuple[np.ndarray, np.ndarray] | None:
    """Return the corners of a frame as offsets (east, north) from the anchor; None when it cannot be read."""
    try:
        rows, columns = light.read(frame).data.shape
    except FrameSetAside:
        return None
    corners = frame.pointing.pixel_to_sky(np.array([0, columns, columns, 0]), np.array([0, 0, rows, rows]))
    return sky_to_plane(*anchor, *corners)


def _others(material: Material) -> dict[str, Place]:
    """Return the planets that the target meets, each with where it is predicted in a frame."""
    geometry = material.geometry
    at = {(frame.path, frame.frame_index): number for number, frame in enumerate(material.frames)}

    def place_of(disc: SkyDisc) -> Place:
        def place(frame: Registered) -> tuple[float, float]:
            number = at[frame.path, frame.frame_index]
            return float(disc.ra_deg[number]), float(disc.dec_deg[number])

        return place

    stand_apart = ("sun", "moon", material.target)
    if material.target not in geometry.discs:  # a star that is covered: what covers it is not seen beside it
        return {}
    return {name: place_of(disc) for name, disc in geometry.discs.items() if name not in stand_apart}


def _lay(
    image: np.ndarray, canvas: Canvas, anchor: tuple[float, float], patch: BodyPatch
) -> tuple[float, float, float] | None:
    """Lay a body into the picture; returns where (canvas pixels) and the radius of its glow, None when outside."""
    x_px, y_px = (float(value) for value in canvas.from_sky(*anchor, *patch.place_deg))
    row, column = round(y_px), round(x_px)
    half = patch.canvas.width_px // 2
    box = patch_box(image.shape, column, row, half)
    if box is None:
        return None
    cut = (
        slice(box[0].start - row + half, box[0].stop - row + half),
        slice(box[1].start - column + half, box[1].stop - column + half),
    )
    radius_px = glow_radius_px(patch.image, patch.canvas.anchor_x_px, patch.canvas.anchor_y_px)
    # the feather lies about the end of the glow: a ground without the target has none of it further in
    x, y = x_px - box[1].start, y_px - box[0].start
    # where the target stood in every frame of a visit there are no stars to see, only its own frames
    hole = ~np.isfinite(image[box])
    image[box][hole] = patch.image[cut][hole]
    lay_patch(image[box], patch.image[cut], x, y, 0.85 * radius_px, 0.3 * radius_px)
    return x_px, y_px, radius_px


def _drawn(image: np.ndarray, canvas: Canvas, anchor: tuple[float, float], visit: Visit) -> Drawn | None:
    """Lay the target of a visit into the picture."""
    laid = _lay(image, canvas, anchor, visit.target)
    if laid is None:
        return None
    x_px, y_px, radius_px = laid
    measured = [frame for frame in visit.frames if frame.measured]
    places = [canvas.from_sky(*anchor, f.predicted_ra_deg, f.predicted_dec_deg) for f in measured]
    predicted = np.array(places, float).mean(axis=0) if places else np.array([x_px, y_px])
    apart = float(np.hypot(x_px - predicted[0], y_px - predicted[1])) * canvas.scale_arcsec_px
    shown = measured or list(visit.frames)
    return Drawn(
        shown[len(shown) // 2],
        x_px,
        y_px,
        float(predicted[0]),
        float(predicted[1]),
        apart if places else float("nan"),
        radius_px,
    )


def glow_radius_px(patch: np.ndarray, x_px: float, y_px: float) -> float:
    """Return the radius at which the target's glow sinks into the noise of its patch."""
    plane = patch.mean(axis=2) if patch.ndim == 3 else patch
    y, x = np.indices(plane.shape)
    away = np.hypot(x - x_px, y - y_px)
    outer = plane[(away > 0.7 * PATCH_MOST_PX) & np.isfinite(plane)]
    if outer.size < 50:
        return PATCH_LEAST_PX
    level = float(np.median(outer))
    noise = float(1.4826 * np.median(np.abs(outer - level)))
    for radius in np.arange(PATCH_LEAST_PX, 0.66 * PATCH_MOST_PX):
        ring = plane[(away >= radius - 0.5) & (away < radius + 0.5)]
        if np.nanmedian(ring) - level < 0.5 * noise:
            return float(radius + 1)
    return float(0.66 * PATCH_MOST_PX)
