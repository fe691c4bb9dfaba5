"""The target before, on or beside the Sun's or Moon's disc: one clean disc, and the target at evenly spaced instants.

The ground is a blend of frames registered on the disc: the target moves over it from frame to frame, so that a
clipped blend leaves it out. Each instant is then laid in from its own frame, where that frame has it.
"""

from __future__ import annotations

import numpy as np

from imaging.compose.canvas import Canvas
from imaging.compose.choices import Choices
from imaging.compose.choose import evenly_spaced, spacing_sentence
from imaging.compose.light import Level, Light, disc_level, limb_steepness
from imaging.compose.matching import edge_weight
from imaging.compose.material import Material, Registered
from imaging.compose.orientation import up_pa_deg
from imaging.compose.patch import lay_patch, patch_box
from imaging.compose.picture import Drawn, Picture
from imaging.compose.plane import sky_to_plane
from imaging.compose.stack import new_stack
from imaging.compose.sun_surface import sun_view
from planner.errors import FrameSetAside, InputError

DISC_MARGIN, WIDEST_MARGIN = (
    1.12,
    1.45,
)  # radii shown about the disc: at least, and at most where the target stands off it
# Surface drift allowed in the Moon's ground, in canvas pixels: its topocentric libration reaches half a degree an hour
# (8 arcsec in the middle of the disc), by the observer's own motion of 1500 km an hour at 380 000 km.
DRIFT_PX = 0.7
GROUND_TURNS = 24
DRIFT_ARCSEC_S = 8.0 / 3600.0


SAME_INSTANT_S = 60.0


def disc_path(
    material: Material, choices: Choices, light: Light, only_near_tt_s: np.ndarray | None = None
) -> Picture:
    """Return the composite registered on the Sun or Moon; raises InputError when no frame is left.

    `only_near_tt_s`: the target is drawn at instants within a minute of these only.
    """
    body = material.reference
    frames, levels, sharpness, left_out = survey(material, light, body, choices)
    tt_s = np.array([frame.tt_s for frame in frames])
    middle = float(0.5 * (tt_s[0] + tt_s[-1]))
    disc = material.geometry_at(np.array([middle])).discs[body]
    anchor = float(disc.ra_deg[0]), float(disc.dec_deg[0])
    semidiameter = float(disc.semidiameter_arcsec[0])
    away = _distances(material, frames, body)
    seen = away[np.array([frame.measured for frame in frames]) & (away < WIDEST_MARGIN)]
    margin = max(DISC_MARGIN, float(seen.max()) + 0.04) if seen.size else DISC_MARGIN
    canvas = _disc_canvas(material, choices, frames, semidiameter * margin, anchor, middle)
    choices.require_room(canvas.width_px, canvas.height_px)
    inside = away < margin - 0.01
    if only_near_tt_s is not None and only_near_tt_s.size:
        inside &= np.abs(tt_s[:, None] - only_near_tt_s).min(axis=1) < SAME_INSTANT_S
    shown = _instants(material, frames, sharpness, choices, inside)
    sun = None
    if body == "sun":
        sun = sun_view(semidiameter, float(disc.pole_pa_deg[0]), *anchor, middle)
    base = _ground_frames(material, frames, sharpness, canvas, body)
    planes = (3,) if light.colour else ()
    shape = (canvas.height_px, canvas.width_px, *planes)
    stack = new_stack(choices.blend, shape, len(base), choices.scratch, again=True)
    total = len(base) + len(shown)
    used: list[tuple[Registered, str]] = []
    for turn in stack.turns():
        for done in turn:
            frame = frames[base[done]]
            choices.tick(len(frames) + done, len(frames) + total)
            surface = None if sun is None else sun.turned(frame.tt_s - middle)
            image = light.on_canvas(
                light.read(frame), frame, canvas, disc_anchor(frame), levels[base[done]], surface=surface
            )
            stack.add(image, edge_weight(image))
    used += [(frames[index], "ground") for index in base]
    image, count = stack.result()
    if not np.isfinite(image).any():
        raise InputError("no frame reaches the picture: the track and the frames do not belong together")
    drawn = []
    for done, index in enumerate(shown):
        frame = frames[index]
        choices.tick(len(frames) + len(base) + done, len(frames) + total)
        drawn.append(lay_target(image, material, frame, levels[index], canvas, light, body))
        used.append((frame, "target"))
    choices.tick(len(frames) + total, len(frames) + total)
    return Picture(
        kind="disc-path",
        registered_on=body,
        blend=choices.blend,
        image=image,
        count=count,
        canvas=canvas,
        anchor_ra_deg=anchor[0],
        anchor_dec_deg=anchor[1],
        reference_tt_s=middle,
        drawn=tuple(drawn),
        used=tuple(used),
        tone="disc",
        notes=(
            f"the {body.capitalize()} is a {choices.blend} blend of {len(base)} frames",
            stack.how,
            "the target is laid in at its own place from one frame an instant, with a soft edge",
            *filter(None, [spacing_sentence(tt_s[shown])]),
            *(
                ["the Sun's rotation was undone: spots are where they were at the reference instant"]
                if sun
                else []
            ),
        ),
        left_out=tuple(left_out),
    )


def disc_anchor(frame: Registered) -> tuple[float, float]:
    """Return the direction of the reference disc at a frame's time."""
    return frame.reference_ra_deg, frame.reference_dec_deg


def survey(
    material: Material, light: Light, body: str, choices: Choices
) -> tuple[list[Registered], list[Level], np.ndarray, list[tuple[str, str]]]:
    """Read every frame once: its level, its sharpness, or why it cannot be used."""
    frames, levels, sharpness = [], [], []
    left_out: list[tuple[str, str]] = []
    candidates = [frame for frame in material.frames if frame.solved_by.startswith(body)]
    for done, frame in enumerate(candidates):
        choices.tick(done, 2 * len(candidates))
        try:
            pixels = light.read(frame)
            level = disc_level(pixels, frame.limb_px, body)
        except FrameSetAside as problem:
            left_out.append((frame.path.name, problem.reason))
            continue
        frames.append(frame)
        levels.append(level)
        sharpness.append(limb_steepness(pixels, frame.limb_px, level))
    if not frames:
        why = f"; the first: {left_out[0][0]} {left_out[0][1]}" if left_out else ""
        raise InputError(f"no frame registered on the {body.capitalize()} is left{why}")
    return frames, levels, np.array(sharpness), left_out


def _disc_canvas(
    material: Material,
    choices: Choices,
    frames: list[Registered],
    reach_arcsec: float,
    anchor: tuple[float, float],
    tt_s: float,
) -> Canvas:
    scale = choices.scale_arcsec_px or min(frame.scale_arcsec_px for frame in frames)
    side = int(np.ceil(2 * reach_arcsec / scale)) | 1
    if side > choices.largest_px:
        raise InputError(
            f"the picture would be {side} pixels wide; allowed are {choices.largest_px}: choose a larger --scale"
        )
    up = up_pa_deg(material, choices.orientation, anchor, tt_s, on_disc=True)
    return Canvas(side, side, scale, (side - 1) / 2, (side - 1) / 2, up)


def _distances(material: Material, frames: list[Registered], body: str) -> np.ndarray:
    """Return how far the target is from the disc's centre in each frame, in radii of the disc."""
    radius = material.geometry_at(np.array([frame.tt_s for frame in frames])).discs[body].semidiameter_arcsec
    offsets = [
        sky_to_plane(*disc_anchor(frame), frame.target_ra_deg, frame.target_dec_deg) for frame in frames
    ]
    return np.hypot(*np.array(offsets, float).T) / radius


def _instants(
    material: Material, frames: list[Registered], sharpness: np.ndarray, choices: Choices, inside: np.ndarray
) -> np.ndarray:
    """Return the frames in which the target is drawn: measured there, and inside the picture.

    Where it hides for a while, the spacing is made finer until as many instants as wished are found, but not so fine
    that the target would overlap itself.
    """
    tt_s = np.array([frame.tt_s for frame in frames])
    measured = np.array([frame.measured for frame in frames])
    usable = inside & measured
    if not usable.any() and any(frame.verdict == "off-track" for frame in frames):
        raise InputError(
            f"{material.track_path}: the target is off its track in every frame, so that a picture would be wrong; "
            "read the check's report, or draw it all the same with --keep-off-track"
        )
    chosen = evenly_spaced(tt_s, choices.instants, sharpness, usable)
    seen_s = tt_s[usable]
    if seen_s.size < 2 or np.diff(seen_s).max() < 1.6 * np.ptp(seen_s) / max(choices.instants - 1, 1):
        return chosen  # it hides nowhere: fewer instants are the more even ones
    clear_s = 0.4 * _time_to_clear_s(material, frames)
    for wanted in range(choices.instants + 1, 4 * choices.instants):
        finer = evenly_spaced(tt_s, wanted, sharpness, usable)
        too_close = finer.size > 1 and float(np.diff(tt_s[finer]).min()) < clear_s
        if chosen.size >= choices.instants or finer.size > choices.instants or too_close:
            break
        chosen = finer
    return chosen


def _ground_frames(
    material: Material, frames: list[Registered], sharpness: np.ndarray, canvas: Canvas, body: str
) -> list[int]:
    """Return the frames of the ground: near enough in time that the surface stands still, the sharpest of each turn.

    The stretch of time is cut into turns and each gives its sharpest frame: seeing is rejected, and the target, which
    moves by several of its diameters, is somewhere else in each.
    """
    tt_s = np.array([frame.tt_s for frame in frames])
    known = np.nan_to_num(sharpness, nan=-np.inf)
    length_s = 2 * DRIFT_PX * canvas.scale_arcsec_px / DRIFT_ARCSEC_S
    # the Sun's surface is turned back, so that all frames serve
    length_s = float("inf") if body == "sun" else max(length_s, _time_to_clear_s(material, frames))
    length_s = min(length_s, tt_s[-1] - tt_s[0] + 1.0)
    turn_s = length_s / GROUND_TURNS
    last = np.searchsorted(tt_s, tt_s + length_s, side="right")
    turns = [np.unique(((tt_s[i:end] - tt_s[i]) // turn_s).astype(int)).size for i, end in enumerate(last)]
    first = int(np.argmax(turns))
    window = np.arange(first, last[first])
    if turns[first] < 5:  # sparse frames: drift is the lesser evil, the statement of truth tells
        middle = 0.5 * (tt_s[window[0]] + tt_s[window[-1]])
        return sorted(int(i) for i in np.argsort(np.abs(tt_s - middle), kind="stable")[:9])
    turn = ((tt_s[window] - tt_s[first]) // turn_s).astype(int)
    best = [window[turn == number][np.argmax(known[window[turn == number]])] for number in np.unique(turn)]
    return sorted(int(index) for index in best)


def _time_to_clear_s(material: Material, frames: list[Registered]) -> float:
    """Return how long the target needs to move by five of its diameters over the disc."""
    first, last = frames[0], frames[-1]
    if last.tt_s == first.tt_s:
        return 0.0
    path = [
        np.array(sky_to_plane(*disc_anchor(f), f.predicted_ra_deg, f.predicted_dec_deg))
        for f in (first, last)
    ]
    rate = float(np.hypot(*(path[1] - path[0]))) / (last.tt_s - first.tt_s)
    target = material.geometry.discs.get(material.target)
    diameter = 2 * float(target.semidiameter_arcsec[0]) if target is not None else 2.0
    return 5 * max(diameter, 4.0) / rate if rate > 0 else 0.0


def lay_target(
    image: np.ndarray,
    material: Material,
    frame: Registered,
    level: Level,
    canvas: Canvas,
    light: Light,
    body: str,
) -> Drawn:
    """Lay the target of one frame into the picture, in place, and return where."""
    geometry = material.geometry_at(np.array([frame.tt_s]))
    x_px, y_px = canvas.from_sky(*disc_anchor(frame), frame.target_ra_deg, frame.target_dec_deg)
    predicted = canvas.from_sky(*disc_anchor(frame), frame.predicted_ra_deg, frame.predicted_dec_deg)
    semidiameter = (
        float(geometry.discs[material.target].semidiameter_arcsec[0])
        if material.target in geometry.discs
        else 0.0
    )
    radius_px = semidiameter / canvas.scale_arcsec_px
    reach_px = radius_px + max(3.0, 0.35 * radius_px, 4.0 / canvas.scale_arcsec_px)
    feather_px = max(2.0, 0.4 * radius_px)
    box = patch_box(image.shape, float(x_px), float(y_px), reach_px + feather_px + 1)
    if box is not None:
        piece = light.on_canvas(light.read(frame), frame, canvas.window(*box), disc_anchor(frame), level)
        lay_patch(
            image[box],
            piece,
            float(x_px) - box[1].start,
            float(y_px) - box[0].start,
            reach_px,
            feather_px,
            "darker" if body == "sun" else "lighter",
        )
    return Drawn(
        frame,
        float(x_px),
        float(y_px),
        float(predicted[0]),
        float(predicted[1]),
        frame.displacement_arcsec,
        radius_px,
    )
