"""The statement of truth: what went into a picture, how far each element is from the sky, what is exaggerated."""

from __future__ import annotations

import json
import math
from collections.abc import Sequence
from pathlib import Path
from typing import Any

import numpy as np

from imaging.compose.material import Material, Registered
from imaging.compose.picture import Picture
from planner.outputs import whole_file
from planner.provenance import content_hash, versions
from planner.sky.timescale import utc_iso


def statement(material: Material, picture: Picture, stretch: str | None = None) -> dict[str, Any]:
    """Return the statement of truth as plain data; lengths in arcseconds and canvas pixels, NaN as null."""
    scale = picture.canvas.scale_arcsec_px
    apart = np.array([item.displacement_arcsec for item in picture.drawn], float)
    known = np.isfinite(apart)
    largest = float(apart[known].max()) if known.any() else None
    every = np.array([frame.displacement_arcsec for frame, _ in _once(picture.used)], float)
    rms = float(np.sqrt(np.nanmean(every**2))) if np.isfinite(every).any() else None
    aside = [{"file": Path(item.path).name, "reason": item.reason} for item in material.set_aside]
    aside += [{"file": name, "reason": reason} for name, reason in picture.left_out]
    return _plain(
        {
            "title": material.plan.title,
            "picture": picture.kind,
            "registered_on": picture.registered_on,
            "registration": registration_sentence(picture),
            "registration_error_arcsec": rms,
            "registration_error_px": None if rms is None else rms / scale,
            "registration_error_is": (
                "rms distance of the measured target from its prediction over the frames used: an upper limit, for it "
                "holds the error of measuring the target too"
            ),
            "blend": picture.blend,
            "scale_arcsec_px": scale,
            "up_position_angle_deg": picture.canvas.up_pa_deg,
            "size_px": [picture.canvas.width_px, picture.canvas.height_px],
            "reference_utc": utc_iso(picture.reference_tt_s, 1),
            "largest_displacement_arcsec": largest,
            "largest_displacement_px": None if largest is None else largest / scale,
            "exaggeration": (
                "none: every body is drawn at its true size"
                if picture.enlargement == 1
                else f"bodies are drawn {picture.enlargement:g} times their true size"
            ),
            "enlargement": picture.enlargement,
            "stretch": stretch,
            "clock_correction_s": material.meta.get("clock_correction_s", 0.0),
            "conventions": {
                "places": "topocentric, light-time applied, neither aberration nor deflection; ICRS",
                "up": "position angle of the picture's up direction, from ICRS north through east",
                "discs": "refraction is taken out: a low Sun or Moon is drawn round, as without air",
            },
            "notes": [*material.notes, *picture.notes],
            "drawn": [_drawn(item, scale) for item in picture.drawn],
            "frames": [_frame(frame, role) for frame, role in _once(picture.used)],
            "set_aside": aside,
            "provenance": {
                **versions(),
                "plan_hash": content_hash(material.plan.model_dump_json()),
                "track_hash": content_hash(material.track_path.read_bytes()),
                **{
                    f"track_hash_{number}": content_hash(path.read_bytes())
                    for number, path in enumerate(material.other_tracks, 2)
                },
            },
        }
    )


def registration_sentence(picture: Picture) -> str:
    """Return how frames were laid on each other."""
    how = sorted({frame.solved_by for frame, _ in picture.used})
    names = {
        "stars": "plate solutions",
        "sun-limb": "fits of the Sun's limb",
        "moon-limb": "fits of the Moon's limb",
        "planets": "the planets in short exposures, at their predicted places",
    }
    return " and ".join(names.get(item, item) for item in how)


def write_statement(path: Path, data: dict[str, Any], force: bool = False) -> None:
    """Write the statement as JSON; raises OutputExistsError."""
    with whole_file(path, force) as part:
        part.write_text(json.dumps(data, indent=1, ensure_ascii=False) + "\n", encoding="utf-8")


def caption(material: Material, picture: Picture) -> str:
    """Return the caption that goes with the picture: what it shows, how true it is, what is exaggerated."""
    first, last = picture.used[0][0].tt_s, picture.used[0][0].tt_s
    for frame, _ in picture.used:
        first, last = min(first, frame.tt_s), max(last, frame.tt_s)
    names = {"sun": "the Sun", "moon": "the Moon", "stars": "the stars", "horizon": "the horizon"}
    start, end = utc_iso(first, 0), utc_iso(last, 0)
    span = f"{start[:10]} {start[11:16]} to {end[11:16] if end[:10] == start[:10] else end[:10] + ' ' + end[11:16]} UTC"
    apart = [item.displacement_arcsec for item in picture.drawn if math.isfinite(item.displacement_arcsec)]
    count = len({(frame.path, frame.frame_index) for frame, _ in picture.used})
    how = f"registered on {names.get(picture.registered_on, picture.registered_on.capitalize())}"
    if picture.kind == "sky-series":
        how = f"registered on the limb of {names[material.reference]}, laid where it stood among the stars"
    pieces = [f"{material.plan.title}.", f"{material.plan.site.name}, {span}.", f"{count} frames {how}."]
    if picture.kind == "two-sites":
        pieces.append(picture.notes[-1][0].upper() + picture.notes[-1][1:] + ".")
    geometry = material.geometry
    if picture.kind == "sky-path" and material.target not in geometry.discs and picture.drawn:
        where = _side(
            picture.drawn[0].x_px / picture.canvas.width_px, picture.drawn[0].y_px / picture.canvas.height_px
        )
        pieces.append(
            f"The star covered, {material.target}, stands {where}; what covers it is too faint to be drawn."
        )
    if apart:
        pieces.append(f"No position is drawn more than {_arcsec(max(apart))} from its predicted place.")
    bar = "the landscape's scale" if picture.kind == "arc" else "their scale"
    pieces.append(
        "Nothing is enlarged."
        if picture.enlargement == 1
        else f"Bodies are drawn {picture.enlargement:g} times their true size; the bar is at {bar}."
    )
    return " ".join(pieces)


def _side(right: float, up: float) -> str:
    """Return where in the picture a place is, from its shares of width and height."""
    rows = "top" if up > 2 / 3 else "bottom" if up < 1 / 3 else ""
    columns = "left" if right < 1 / 3 else "right" if right > 2 / 3 else ""
    return f"at the {rows} {columns}".replace("  ", " ").strip() if rows or columns else "in the middle"


def _arcsec(value: float) -> str:
    return f"{value:.2f}″" if value < 10 else f"{value:.0f}″" if value < 600 else f"{value / 60:.0f}′"


def _drawn(item: Any, scale: float) -> dict[str, Any]:
    return {
        "file": item.frame.path.name,
        "utc": utc_iso(item.frame.tt_s, 3),
        "x_px": item.x_px,
        "y_px": item.y_px,
        "displacement_arcsec": item.displacement_arcsec,
        "displacement_px": item.displacement_arcsec / scale,
        "sigma_arcsec": item.frame.sigma_arcsec,
        "place": "measured" if math.isfinite(item.displacement_arcsec) else "predicted",
    }


def _frame(frame: Registered, role: str) -> dict[str, Any]:
    return {
        "file": frame.path.name,
        "frame_index": frame.frame_index,
        "utc_mid": utc_iso(frame.tt_s, 3),
        "role": role,
        "registered_by": frame.solved_by,
        "pointing_sigma_arcsec": frame.registration_sigma_arcsec,
        "verdict": frame.verdict,
        "displacement_arcsec": frame.displacement_arcsec,
        "sigma_arcsec": frame.sigma_arcsec,
    }


def _once(used: Sequence[tuple[Registered, str]]) -> list[tuple[Registered, str]]:
    """Return every frame once, its roles joined."""
    roles: dict[tuple[Path, int], tuple[Registered, list[str]]] = {}
    for frame, role in used:
        roles.setdefault((frame.path, frame.frame_index), (frame, []))[1].append(role)
    ordered = sorted(roles.values(), key=lambda item: item[0].tt_s)
    return [(frame, " and ".join(dict.fromkeys(names))) for frame, names in ordered]


def _plain(value: Any) -> Any:
    if isinstance(value, dict):
        return {key: _plain(item) for key, item in value.items()}
    if isinstance(value, list | tuple):
        return [_plain(item) for item in value]
    if isinstance(value, float | np.floating):
        return float(f"{value:.9g}") if math.isfinite(value) else None
    return value
