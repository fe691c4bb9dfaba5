"""The Moon (or Sun) passing the target among fixed stars: the same sky, the disc at evenly spaced instants.

Every frame is registered on the disc's limb and laid where the disc stood on the sky at that instant; where discs
overlap the lighter one shows.
"""

from __future__ import annotations

import numpy as np

from imaging.compose.canvas import canvas_around
from imaging.compose.choices import Choices
from imaging.compose.choose import evenly_spaced
from imaging.compose.light import Light, disc_level
from imaging.compose.material import Material
from imaging.compose.orientation import up_pa_deg
from imaging.compose.patch import patch_box
from imaging.compose.picture import Drawn, Picture
from imaging.compose.plane import sky_to_plane
from planner.errors import FrameSetAside, InputError


def sky_series(material: Material, choices: Choices, light: Light) -> Picture:
    """Return the composite in which stars and target stand still; raises InputError when no frame is left."""
    body = material.reference
    frames = [frame for frame in material.frames if frame.solved_by.startswith(body)]
    if not frames:
        raise InputError(f"no frame is registered on the {body.capitalize()}")
    tt_s = np.array([frame.tt_s for frame in frames])
    chosen = [frames[index] for index in evenly_spaced(tt_s, choices.instants)]
    middle = frames[len(frames) // 2]
    anchor = middle.target_ra_deg, middle.target_dec_deg
    radius = float(material.geometry.discs[body].semidiameter_arcsec.max())
    places = np.array([sky_to_plane(*anchor, f.reference_ra_deg, f.reference_dec_deg) for f in chosen], float)
    scale = choices.scale_arcsec_px or min(frame.scale_arcsec_px for frame in frames)
    up = up_pa_deg(material, choices.orientation, anchor, middle.tt_s, on_disc=False)
    east, north = np.append(places[:, 0], 0.0), np.append(places[:, 1], 0.0)
    canvas = canvas_around(east, north, 1.15 * radius, scale, up, choices.largest_px)
    choices.require_room(canvas.width_px, canvas.height_px)
    image = np.full((canvas.height_px, canvas.width_px, *((3,) if light.colour else ())), np.nan, np.float32)
    count = np.zeros(image.shape, np.int32)
    drawn, used, left_out = [], [], []
    for done, frame in enumerate(chosen):
        choices.tick(done, len(chosen))
        try:
            pixels = light.read(frame)
            level = disc_level(pixels, frame.limb_px, body)
        except FrameSetAside as problem:
            left_out.append((frame.path.name, problem.reason))
            continue
        x_px, y_px = canvas.from_sky(*anchor, frame.reference_ra_deg, frame.reference_dec_deg)
        box = patch_box(image.shape, float(x_px), float(y_px), 1.7 * radius / scale)
        if box is None:
            continue
        piece = light.on_canvas(pixels, frame, canvas.window(*box), anchor, level)
        image[box] = np.fmax(image[box], piece)
        count[box] += np.isfinite(piece)
        used.append((frame, f"{body} at its instant"))
        at = canvas.from_sky(*anchor, frame.target_ra_deg, frame.target_dec_deg)
        predicted = canvas.from_sky(*anchor, frame.predicted_ra_deg, frame.predicted_dec_deg)
        drawn.append(
            Drawn(
                frame,
                float(at[0]),
                float(at[1]),
                float(predicted[0]),
                float(predicted[1]),
                frame.displacement_arcsec,
                0.0,
            )
        )
    choices.tick(len(chosen), len(chosen))
    if not used:
        raise InputError(f"no frame registered on the {body.capitalize()} is left; the first: {left_out[0]}")
    # off every frame there is sky: as dark as the frames have it beside the disc
    image = np.where(np.isfinite(image), image, 0.0).astype(np.float32)
    return Picture(
        kind="sky-series",
        registered_on="stars",
        blend="lighter, own place",
        image=image,
        count=count,
        canvas=canvas,
        anchor_ra_deg=anchor[0],
        anchor_dec_deg=anchor[1],
        reference_tt_s=middle.tt_s,
        drawn=tuple(drawn),
        used=tuple(used),
        tone="disc",
        notes=(
            f"each frame was registered on the limb of the {body.capitalize()} and laid where that stood on the sky",
            "where discs overlap the lighter shows",
        ),
        left_out=tuple(left_out),
    )
