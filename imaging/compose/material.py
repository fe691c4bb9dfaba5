"""What a picture is made of: the frames that the track names, each with its place on the sky and its time."""

from __future__ import annotations

from collections.abc import Callable, Iterator
from dataclasses import dataclass, replace
from functools import cached_property
from pathlib import Path
from typing import TYPE_CHECKING, Any

import numpy as np

from imaging.compose.plane import plane_to_sky, sky_to_plane
from imaging.compose.pointing import Air, DiscPointing, Pointing, StarPointing
from planner.errors import FrameSetAside, InputError
from planner.sky.refraction import true_altitude_deg

if TYPE_CHECKING:
    from imaging.track.table import Track
    from planner.events.family import Geometry
    from planner.sequence.models import Plan
    from planner.sky.observer import Observer


@dataclass(frozen=True)
class Camera:
    """What a frame's values need: name of the rig, bias, value of saturation, light lost in the corner (0..1)."""

    name: str = ""
    bias_adu: float = 0.0
    saturation_adu: float = np.inf
    vignetting: float = 0.0

    @classmethod
    def of(cls, plan: Plan) -> Camera:
        """Return the camera of a plan's rig."""
        sensor = plan.rig.sensor
        full = min(2.0**sensor.bit_depth - 1, sensor.full_well_e / sensor.gain_e_adu + sensor.bias_adu)
        return cls(plan.rig.name, sensor.bias_adu, full, plan.rig.optics.vignetting)


@dataclass(frozen=True)
class Registered:
    """One frame with its registration; places are ICRS, topocentric, un-aberrated.

    `tt_s`: mid-exposure, with the clock offset that the check found taken off. `reference_*`: predicted place of the
    Sun or Moon then (NaN when stars are the reference). `measured_*`: where the target was found, NaN when it was
    not; `sigma_along_arcsec`, `sigma_across_arcsec`: its 1-sigma. `limb_px`: centre and radius of the disc.
    `registration_sigma_arcsec`: of the pointing an axis, where a neighbour's was borrowed.
    """

    path: Path
    frame_index: int
    passage: str
    tt_s: float
    solved_by: str
    pointing: Pointing
    scale_arcsec_px: float
    reference_ra_deg: float
    reference_dec_deg: float
    predicted_ra_deg: float
    predicted_dec_deg: float
    measured_ra_deg: float
    measured_dec_deg: float
    sigma_along_arcsec: float
    sigma_across_arcsec: float
    limb_px: tuple[float, float, float]
    exposure_s: float
    verdict: str
    believed: bool = True
    camera: Camera = Camera()
    registration_sigma_arcsec: float = float("nan")

    @property
    def measured(self) -> bool:
        """True when the target was measured in this frame, and the measurement is believed."""
        return self.believed and bool(np.isfinite([self.measured_ra_deg, self.measured_dec_deg]).all())

    @property
    def target_ra_deg(self) -> float:
        """Where the target lies: measured, else predicted."""
        return self.measured_ra_deg if self.measured else self.predicted_ra_deg

    @property
    def target_dec_deg(self) -> float:
        """Where the target lies: measured, else predicted."""
        return self.measured_dec_deg if self.measured else self.predicted_dec_deg

    @property
    def sigma_arcsec(self) -> float:
        """1-sigma of the measured place: the larger of along and across the motion."""
        return float(np.fmax(self.sigma_along_arcsec, self.sigma_across_arcsec))

    @property
    def displacement_arcsec(self) -> float:
        """How far from its predicted place at that time the target was found; NaN when it was not measured."""
        if not self.measured:
            return float("nan")
        east, north = sky_to_plane(
            self.predicted_ra_deg, self.predicted_dec_deg, self.measured_ra_deg, self.measured_dec_deg
        )
        return float(np.hypot(east, north))


@dataclass(frozen=True)
class Starless:
    """A frame that was not solved: what may still be known of it, when its planets show."""

    path: Path
    frame_index: int
    passage: str
    tt_s: float
    exposure_s: float


@dataclass(frozen=True)
class Material:
    """A plan, its track, and the frames that can be used, in time order.

    `geometry_at(tt_s)` is the family's prediction for the plan's site; `set_aside` lists what cannot be used.
    `notes`: what was chosen among the frames. `other_tracks`: of further rigs. `starless`: frames set aside because
    they were not solved; see `bright`.
    """

    plan: Plan
    track_path: Path
    meta: dict[str, Any]
    frames: tuple[Registered, ...]
    set_aside: tuple[FrameSetAside, ...]
    geometry_at: Callable[[np.ndarray], Geometry]
    observer: Observer | None
    notes: tuple[str, ...] = ()
    other_tracks: tuple[Path, ...] = ()
    starless: tuple[Starless, ...] = ()

    @cached_property
    def geometry(self) -> Geometry:
        """The prediction at the frames' times."""
        return self.geometry_at(np.array([frame.tt_s for frame in self.frames]))

    @property
    def target(self) -> str:
        """Name of the moving point."""
        return self.geometry.target

    @property
    def reference(self) -> str:
        """`sun`, `moon` or `stars`."""
        return self.geometry.reference

    def passages(self) -> Iterator[tuple[str, list[Registered]]]:
        """Yield (name, frames) of each passage in time order."""
        names = dict.fromkeys(frame.passage for frame in self.frames)
        for name in names:
            yield name, [frame for frame in self.frames if frame.passage == name]


def gather(
    plan: Plan,
    track_path: str | Path,
    frames_folder: str | Path | None = None,
    geometry_at: Callable[[np.ndarray], Geometry] | None = None,
    keep_off_track: bool = False,
) -> Material:
    """Return what a picture can be made of.

    `frames_folder`: where the frames are now; default: where the track says, else beside it. `geometry_at`: default
    is the plan's family at the plan's site. `keep_off_track`: believe measurements that the check found off the track.
    Frames that are missing or were not solved are set aside with a reason.
    Raises InputError when the track is wrong or no frame is left.
    """
    from imaging.track.table import read_track
    from planner.sequence.documents import observer_of
    from planner.sky.timescale import tt_s_from_iso

    track = read_track(track_path)
    meta = dict(track.meta)
    observer = observer_of(plan.site)
    if geometry_at is None:
        geometry_at = planned_geometry(plan, observer)
    offset, sigma = float(meta.get("clock_offset_s") or 0), float(meta.get("clock_offset_sigma_s") or np.inf)
    meta["clock_correction_s"] = correction = offset if abs(offset) > 3 * sigma else 0.0
    folder = _Folder(track.path, frames_folder, meta)
    rows, aside = [], []
    starless: list[Starless] = []
    for index, name in enumerate(track["file"].tolist()):
        try:
            if track["solved_by"][index] == "none":
                starless += _starless(track, index, folder, correction)
                raise FrameSetAside(name, f"was not solved: {track['reason'][index] or 'no reason given'}")
            path = folder.find(name)
            rows.append((float(tt_s_from_iso(str(track["utc_mid"][index]))) - correction, index, path))
        except FrameSetAside as problem:
            aside.append(problem)
    rows.sort(key=lambda item: item[0])
    frames, camera = [], Camera.of(plan)
    if rows:
        sky = _Sky(geometry_at(np.array([tt_s for tt_s, _, _ in rows])), observer)
        for place, (tt_s, index, path) in enumerate(rows):
            try:
                frame = _registered(track, index, path, tt_s, sky, place, keep_off_track)
                frames.append(replace(frame, camera=camera))
            except FrameSetAside as problem:
                aside.append(problem)
    if not frames:
        first = f"; the first: {aside[0]}" if aside else ""
        raise InputError(f"{track.path}: no frame is left to compose ({len(aside)} set aside{first})")
    return Material(
        plan, track.path, meta, tuple(frames), tuple(aside), geometry_at, observer, starless=tuple(starless)
    )


def planned_geometry(plan: Plan, observer: Observer | None) -> Callable[[np.ndarray], Geometry]:
    """Return the prediction of a plan's event for an observer, as a function of `tt_s` (n,)."""
    from planner.events.catalogue import family
    from planner.sequence.documents import event_spec

    kind = family(plan.event.family)
    event = kind.nearest(event_spec(plan.event))
    return lambda tt_s: kind.geometry(event, observer, np.atleast_1d(tt_s))


class _Folder:
    """Finds frames by the name the track gives, also after their folder was moved."""

    def __init__(self, track_path: Path, folder: str | Path | None, meta: dict[str, Any]):
        if folder is not None and not Path(folder).is_dir():
            raise InputError(f"--frames: {folder} is no folder")
        stated = meta.get("frames_folder")
        self.folders = (
            [Path(folder)]
            if folder is not None
            else ([Path(stated)] if stated else []) + [track_path.parent, track_path.parent.parent]
        )
        self.index: dict[str, Path] | None = None

    def find(self, name: str) -> Path:
        for folder in self.folders:
            if (folder / name).is_file():
                return folder / name
        if self.index is None:
            self.index = {path.name: path for path in sorted(self.folders[0].rglob("*")) if path.is_file()}
        try:
            return self.index[Path(name).name]
        except KeyError:
            raise FrameSetAside(name, f"is not in {self.folders[0]}; say where with --frames") from None


def _starless(track: Track, index: int, folder: _Folder, correction_s: float) -> list[Starless]:
    """Return a frame that was not solved, where it is there and has a time."""
    from planner.sky.timescale import tt_s_from_iso

    try:
        path = folder.find(str(track["file"][index]))
        tt_s = float(tt_s_from_iso(str(track["utc_mid"][index]))) - correction_s
    except (FrameSetAside, InputError, ValueError):
        return []
    numbers = int(track["frame_index"][index]), str(track["passage"][index])
    return [Starless(path, *numbers, tt_s, float(track["exposure_s"][index]))]


class _Sky:
    """The prediction at the frames' times, with offsets from the disc both true and as seen through the air."""

    def __init__(self, geometry: Geometry, observer: Observer | None):
        from imaging.track.path import as_seen, tangent_offsets, target_place, toward, unit_vectors

        self.discs, self.observer = geometry.discs, observer
        place = target_place(geometry)[:2]
        self.ra_deg, self.dec_deg = place
        direction = unit_vectors(*place)
        self.true, self.seen = {}, {}
        for body in {"sun", "moon"} & set(self.discs):
            reference = self.discs[body].ra_deg, self.discs[body].dec_deg
            self.true[body] = np.stack(tangent_offsets(*reference, direction))
            seen = as_seen(place, reference, geometry.altitude_deg, geometry.zenith_pa_deg, observer)
            self.seen[body] = np.stack(seen)
        self.zenith = None
        if observer is not None and observer.pressure_here_hpa > 0:
            altitude = np.radians(true_altitude_deg(geometry.altitude_deg, observer))[:, None]
            up = toward(direction, self.ra_deg, geometry.zenith_pa_deg)
            self.zenith = np.sin(altitude) * direction + np.cos(altitude) * up

    def air(self, place: int) -> Air | None:
        """Return the air over one frame; None without any, or with the target below the horizon."""
        if self.zenith is None or not np.isfinite(self.zenith[place]).all():
            return None
        return Air(tuple(self.zenith[place].tolist()), self.observer)  # type: ignore[arg-type]


def _registered(
    track: Track, index: int, path: Path, tt_s: float, sky: _Sky, place: int, keep_off_track: bool
) -> Registered:
    def number(name: str) -> float:
        return float(track[name][index])

    scale = number("scale_arcsec_px")
    if not (np.isfinite(scale) and scale > 0):
        raise FrameSetAside(path, "has no scale in the track")
    solved_by = str(track["solved_by"][index])
    limb = number("reference_x_px"), number("reference_y_px"), number("reference_radius_px")
    reference = measured = float("nan"), float("nan")
    if solved_by == "stars":
        pointing: Pointing = StarPointing(_wcs(track.path.parent / str(track["wcs_file"][index])), scale)
        measured = number("measured_ra_deg"), number("measured_dec_deg")
    else:
        body = solved_by.split("-")[0]
        if body not in sky.seen:
            raise FrameSetAside(path, f"was solved by {solved_by!r}, but the plan has no {body}")
        reference = float(sky.discs[body].ra_deg[place]), float(sky.discs[body].dec_deg[place])
        rotation = number("rotation_deg")
        if not np.isfinite([*limb[:2], rotation]).all():
            raise FrameSetAside(path, "has no limb or no rotation in the track")
        pointing = DiscPointing(
            *limb[:2], scale, rotation, int(track["parity"][index]), *reference, sky.air(place)
        )
        found = np.array([number("measured_east_arcsec"), number("measured_north_arcsec")])
        found += sky.true[body][:, place] - sky.seen[body][:, place]
        if np.isfinite(found).all():
            ra, dec = plane_to_sky(*reference, *found)
            measured = float(ra), float(dec)
    return Registered(
        path=path,
        frame_index=int(track["frame_index"][index]),
        passage=str(track["passage"][index]),
        tt_s=tt_s,
        solved_by=solved_by,
        pointing=pointing,
        scale_arcsec_px=scale,
        reference_ra_deg=reference[0],
        reference_dec_deg=reference[1],
        predicted_ra_deg=float(sky.ra_deg[place]),
        predicted_dec_deg=float(sky.dec_deg[place]),
        measured_ra_deg=measured[0],
        measured_dec_deg=measured[1],
        sigma_along_arcsec=number("sigma_along_arcsec"),
        sigma_across_arcsec=number("sigma_across_arcsec"),
        limb_px=limb,
        exposure_s=number("exposure_s"),
        verdict=str(track["verdict"][index]),
        believed=keep_off_track or str(track["verdict"][index]) != "off-track",
    )


def _wcs(path: Path):
    from astropy.io import fits
    from astropy.wcs import WCS

    try:
        text = path.read_bytes()
        header = (
            fits.Header.fromstring(text.decode("ascii"), sep="\n" if b"\n" in text else "")
            if not text.startswith(b"SIMPLE")
            else fits.getheader(path)
        )
        wcs = WCS(header, naxis=2)
    except FileNotFoundError:
        raise FrameSetAside(path, "the plate solution that the track names is missing") from None
    except Exception as error:
        raise FrameSetAside(path, f"is no plate solution: {' '.join(str(error).split())[:120]}") from None
    if not wcs.has_celestial:
        raise FrameSetAside(path, "is no plate solution: it has no celestial axes")
    return wcs
