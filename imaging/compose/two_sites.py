"""One transit from two sites on one disc: the planet's two tracks lie apart by its parallax."""

from __future__ import annotations

from dataclasses import replace

import numpy as np

from imaging.compose.choices import Choices
from imaging.compose.disc_path import SAME_INSTANT_S, disc_anchor, disc_path, lay_target, survey
from imaging.compose.light import Light
from imaging.compose.material import Material
from imaging.compose.picture import Picture
from imaging.compose.plane import sky_to_plane
from planner.errors import InputError


def two_sites(material: Material, other: Material, choices: Choices, light: Light) -> Picture:
    """Return the first site's picture with the second site's target laid in, at the same instants where it can be.

    Raises InputError when the events differ, or no frame of the second site fits.
    """
    if (other.plan.event.family, other.plan.event.body) != (
        material.plan.event.family,
        material.plan.event.body,
    ):
        raise InputError(
            f"--second-site: found {other.plan.event.family} of {other.plan.event.body}; the first plan has "
            f"{material.plan.event.family} of {material.plan.event.body}"
        )
    body = material.reference
    frames, levels, _, left_out = survey(other, light, body, choices)
    measured = np.array([frame.measured for frame in frames])
    tt_s = np.array([frame.tt_s for frame in frames])
    if not measured.any():
        raise InputError(f"{other.track_path}: the target was measured in no frame of the second site")
    first_tt_s = np.array([frame.tt_s for frame in material.frames if frame.measured])
    if np.abs(first_tt_s[:, None] - tt_s[measured]).min(initial=np.inf) >= SAME_INSTANT_S:
        raise InputError(
            f"{other.track_path}: no frame of the second site lies within {SAME_INSTANT_S:.0f} s of one of the first's"
        )
    picture = disc_path(material, choices, light, tt_s[measured])
    image = picture.image.copy()
    drawn, used, apart = list(picture.drawn), list(picture.used), []
    for item in picture.drawn:
        near = np.flatnonzero(measured & (np.abs(tt_s - item.frame.tt_s) < SAME_INSTANT_S))
        if not near.size:
            continue
        index = int(near[np.argmin(np.abs(tt_s[near] - item.frame.tt_s))])
        frame = frames[index]
        drawn.append(lay_target(image, other, frame, levels[index], picture.canvas, light, body))
        used.append((frame, f"target from {other.plan.site.name}"))
        here = np.array(
            sky_to_plane(*disc_anchor(item.frame), item.frame.target_ra_deg, item.frame.target_dec_deg)
        )
        there = np.array(sky_to_plane(*disc_anchor(frame), frame.target_ra_deg, frame.target_dec_deg))
        drift = _motion(material, item.frame.tt_s, frame.tt_s)
        apart.append(float(np.hypot(*(there - here - drift))))
    if not apart:
        raise InputError(
            f"{other.track_path}: at no instant do frames of both sites show the target on the disc"
        )
    note = (
        f"the two tracks lie {np.mean(apart):.1f} arcsec apart (mean of {len(apart)} instants): the parallax of "
        f"{material.plan.event.body.capitalize()} against the {body.capitalize()} "
        f"between {material.plan.site.name} and {other.plan.site.name}"
    )
    return replace(
        picture,
        kind="two-sites",
        image=image,
        drawn=tuple(drawn),
        used=tuple(used),
        notes=(*picture.notes, note),
        left_out=(*picture.left_out, *left_out),
    )


def _motion(material: Material, from_tt_s: float, to_tt_s: float) -> np.ndarray:
    """Return how far the target moves over the disc between two instants at the first site, (east, north) arcsec."""
    geometry = material.geometry_at(np.array([from_tt_s, to_tt_s]))
    target, disc = geometry.discs[geometry.target], geometry.discs[geometry.reference]
    places = [
        np.array(sky_to_plane(disc.ra_deg[i], disc.dec_deg[i], target.ra_deg[i], target.dec_deg[i]))
        for i in (0, 1)
    ]
    return places[1] - places[0]
