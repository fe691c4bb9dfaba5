"""What goes together in one picture: frames through one filter, frames of several rigs."""

from __future__ import annotations

from collections import Counter
from dataclasses import replace
from pathlib import Path

from imaging.compose.material import Material, Registered
from planner.errors import InputError

EVERY = "all"


def through_filter(material: Material, wanted: str | None = None) -> Material:
    """Return the frames taken through one filter, the others kept apart and counted in a note.

    `wanted`: a filter's name, `all` for no distinction, None for the filter of most frames. Filters are read from FITS
    headers; files of other kinds and frames without the key belong to every filter.
    Raises InputError when no frame was taken through it.
    """
    if wanted == EVERY:
        return material
    names = [filter_of(frame.path) for frame in material.frames]
    counts = Counter(name for name in names if name is not None)
    if not counts and wanted is None:
        return material
    chosen = wanted or counts.most_common(1)[0][0]
    by_name = {name.casefold(): name for name in counts}
    if chosen.casefold() not in by_name:
        known = ", ".join(sorted(counts)) or "no frame that names its filter"
        raise InputError(f"--filter: found {wanted!r}; the frames were taken through {known}; or all")
    chosen = by_name[chosen.casefold()]
    kept = tuple(f for f, name in zip(material.frames, names, strict=True) if name in (None, chosen))
    others = {name: number for name, number in sorted(counts.items()) if name != chosen}
    if not others:
        return material
    apart = ", ".join(f"{number} through {name}" for name, number in others.items())
    note = f"only frames through {chosen} were used; kept apart: {apart} (--filter)"
    return replace(material, frames=kept, notes=(*material.notes, note))


def filter_of(path: Path) -> str | None:
    """Return the FILTER of a FITS file's header, None where there is none or the file cannot be read."""
    if path.suffix.lower() not in (".fits", ".fit", ".fts"):
        return None
    from astropy.io import fits

    try:
        name = str(fits.getheader(path).get("FILTER", "")).strip()
    except Exception:  # what cannot be read is set aside, with its reason, when its pixels are wanted
        return None
    return name or None


def joined(first: Material, others: list[Material]) -> Material:
    """Return the frames of several rigs on one event as one material, in time order.

    Visits of different rigs stay apart. Raises InputError when another plan has another event.
    """
    if not others:
        return first
    event = first.plan.event.family, first.plan.event.body
    frames = list(_marked(first, 0))
    for number, other in enumerate(others, 1):
        if (other.plan.event.family, other.plan.event.body) != event or other.target != first.target:
            raise InputError(
                f"--also: found {other.plan.title!r} of {other.target}; the first plan has {first.plan.title!r} of "
                f"{first.target}"
            )
        frames += _marked(other, number)
    frames.sort(key=lambda frame: frame.tt_s)
    rigs = " and ".join(dict.fromkeys(each.plan.rig.name for each in (first, *others)))
    return replace(
        first,
        frames=tuple(frames),
        set_aside=tuple(item for each in (first, *others) for item in each.set_aside),
        notes=(*(note for each in (first, *others) for note in each.notes), f"frames of {rigs} are combined"),
        other_tracks=tuple(each.track_path for each in others),
    )


def _marked(material: Material, number: int) -> list[Registered]:
    """Return the frames with the rig's number in the name of their passage."""
    return [replace(f, passage=f"{f.passage}, rig {number + 1}") for f in material.frames]
