"""Time-lapse: every frame registered on the canvas, at a stated pace, with gaps shown instead of hidden."""

from __future__ import annotations

from collections.abc import Callable, Iterator
from dataclasses import dataclass, replace
from fractions import Fraction
from pathlib import Path

import numpy as np

from imaging.compose.canvas import Canvas
from imaging.compose.ground import sky_surface
from imaging.compose.light import Light, disc_level, exposure_level
from imaging.compose.material import Material, Registered
from imaging.compose.orientation import position_angle_deg, up_pa_deg
from imaging.compose.plane import sky_to_plane
from imaging.compose.stack import require_room
from imaging.compose.stretch import Stretch, measured_stretch
from planner.errors import FrameSetAside, InputError
from planner.outputs import whole_file
from planner.sequence.frametimes import aim_place
from planner.sky.timescale import utc_iso

STEADY_ON = ("auto", "sun", "moon", "stars", "horizon")
FORMATS = (".mp4", ".gif", ".png")
MOST_GAP_CARDS = 6
MOST_ANIMATED = 240  # pictures in a GIF or animated PNG: beyond it a film is smaller and smoother
LONGEST_PICTURES = 20_000
DIM = 0.35
BYTES_A_PIXEL = {".mp4": 0.25, ".gif": 1.0, ".png": 1.0}  # of grainy sky; discs need less


@dataclass(frozen=True)
class Film:
    """How a time-lapse is made.

    `steady_on`: what stays still. `pace`: sky seconds a film second; None shows every exposure once. `fps`: pictures a
    second. `stamp`: time written into the picture. `size_px`: width and height at most.
    """

    steady_on: str = "auto"
    orientation: str = "north"
    pace: float | None = None
    fps: int = 25
    stamp: bool = True
    size_px: tuple[int, int] = (1920, 1080)
    threads: int = 2
    tick: Callable[[int, int], None] = lambda done, total: None


@dataclass(frozen=True)
class FilmReport:
    """What came out: pictures encoded, exposures shown, gaps (start and end as UTC text), exposures left out."""

    pictures: int
    exposures: int
    gaps: tuple[tuple[str, str], ...]
    left_out: tuple[tuple[str, str], ...]
    pace: str
    seconds: float


@dataclass(frozen=True)
class Shown:
    """What one picture of the film shows: an exposure, dimmed with `gap_tt_s` while there is none.

    `after_gap_s`: how long there was none before this exposure, where the film does not dwell on it.
    """

    index: int
    gap_tt_s: float | None = None
    after_gap_s: float = 0.0


def schedule(tt_s: np.ndarray, pace: float | None, fps: int) -> list[Shown]:
    """Return what each picture of the film shows.

    With a pace, picture k stands for the instant `tt_s[0] + k * pace / fps`; it shows the last exposure before it,
    unless none was made for more than 2.5 typical spacings: then it is a gap. Without a pace every exposure is one
    picture and a gap lasts half a second; where gaps are many, as between visits, they are written instead.
    """
    if len(tt_s) == 1:
        return [Shown(0)] * fps
    spacing = np.diff(tt_s)
    nearer = np.minimum(np.append(np.inf, spacing), np.append(spacing, np.inf))
    broken = spacing > np.maximum(2.5 * np.maximum(nearer[:-1], nearer[1:]), 1.0)
    if pace is None:
        dwell = max(1, fps // 2) if broken.sum() <= MOST_GAP_CARDS else 0
        plan = [Shown(0)]
        for index in range(1, len(tt_s)):
            if broken[index - 1]:
                plan += [Shown(index - 1, float(tt_s[index - 1] + 0.5 * spacing[index - 1]))] * dwell
            plan.append(
                Shown(index, None, float(spacing[index - 1]) if broken[index - 1] and not dwell else 0.0)
            )
        return plan
    step = pace / fps
    now = tt_s[0] + step * np.arange(int((tt_s[-1] - tt_s[0]) / step) + 1)
    index = np.searchsorted(tt_s, now + 1e-6, side="right") - 1
    gap = np.append(broken, False)[index] & (now - tt_s[index] > np.maximum(1.5 * nearer[index], step))
    return [Shown(int(i), float(t) if hole else None) for i, t, hole in zip(index, now, gap, strict=True)]


def make_film(path: Path, material: Material, film: Film, force: bool = False) -> FilmReport:
    """Write an MP4 (H.264, yuv420p), a GIF or an animated PNG by the suffix.

    Exposures that cannot be read are left out and reported. Raises InputError, OutputExistsError.
    """
    suffix = path.suffix.lower()
    if suffix not in FORMATS:
        raise InputError(f"{path}: a film's name ends in {', '.join(FORMATS)}")
    shots = _Shots(material, film)
    tt_s = np.array([frame.tt_s for frame in shots.frames])
    if film.pace is not None:
        count = int((tt_s[-1] - tt_s[0]) * film.fps / film.pace) + 1
        if count > LONGEST_PICTURES:
            raise InputError(
                f"--pace {film.pace:g} makes {count} pictures ({count / film.fps:.0f} s); allowed are "
                f"{LONGEST_PICTURES}: choose a larger pace"
            )
    plan = schedule(tt_s, film.pace, film.fps)
    if suffix != ".mp4" and len(plan) > MOST_ANIMATED:
        raise InputError(
            f"{path}: {len(plan)} pictures are too many for an animated picture (at most {MOST_ANIMATED}); "
            "choose .mp4, a larger --pace, or a lower --fps"
        )
    pixels = shots.canvas.width_px * shots.canvas.height_px * len(plan)
    require_room(
        path.parent, int(BYTES_A_PIXEL[suffix] * pixels), "the film", "a smaller --size, or another disk"
    )
    pictures = _pictures(shots, plan, film)
    with whole_file(path, force) as part:
        (_encode_mp4 if suffix == ".mp4" else _encode_animation)(part, pictures, film.fps)
    return FilmReport(
        pictures=len(plan),
        exposures=len(shots.frames) - len(shots.left_out),
        gaps=_gaps(plan, tt_s),
        left_out=tuple(shots.left_out),
        pace="every exposure once" if film.pace is None else f"{film.pace:g} times true speed",
        seconds=len(plan) / film.fps,
    )


def _gaps(plan: list[Shown], tt_s: np.ndarray) -> tuple[tuple[str, str], ...]:
    indices = dict.fromkeys(item.index for item in plan if item.gap_tt_s is not None)
    indices |= dict.fromkeys(item.index - 1 for item in plan if item.after_gap_s)
    return tuple((utc_iso(float(tt_s[i]), 0), utc_iso(float(tt_s[i + 1]), 0)) for i in indices)


class _Shots:
    """Exposures developed one at a time onto a canvas that keeps the chosen thing still."""

    def __init__(self, material: Material, film: Film):
        if film.steady_on not in STEADY_ON:
            raise InputError(f"--steady-on: found {film.steady_on!r}; allowed are {', '.join(STEADY_ON)}")
        self.material, self.film = material, film
        self.steady_on = material.reference if film.steady_on == "auto" else film.steady_on
        frames = material.frames
        if self.steady_on in ("sun", "moon"):
            frames = tuple(frame for frame in frames if frame.solved_by.startswith(self.steady_on))
            if not frames:
                raise InputError(f"--steady-on {self.steady_on}: no frame is registered on it")
        self.frames = frames
        # at a limb that the stretch makes bright, as at stars, the dark rings of a sharp filter would show
        self.light = Light(threads=film.threads, ringless=material.reference != "sun")
        self.left_out: list[tuple[str, str]] = []
        self.stretch: Stretch | None = None
        geometry = material.geometry_at(np.array([frame.tt_s for frame in frames]))
        self.zenith_pa, self.altitude = geometry.zenith_pa_deg, geometry.altitude_deg
        self.canvas = self._canvas()

    def _canvas(self) -> Canvas:
        """Return a canvas that holds what the frames show, as large as the film allows."""
        width, height = self.film.size_px
        reach_x, reach_y = [], []
        for index in np.unique(np.linspace(0, len(self.frames) - 1, 5).astype(int)).tolist():
            frame = self.frames[index]
            try:
                rows, columns = self.light.read(frame).data.shape
            except FrameSetAside:
                continue
            anchor, up = self.view(index)
            edge_x, edge_y = np.array([0, columns, columns, 0]), np.array([0, 0, rows, rows])
            corners = frame.pointing.pixel_to_sky(edge_x, edge_y)
            x, y = Canvas(1, 1, 1.0, 0.0, 0.0, up).from_sky(*anchor, *corners)
            reach_x.append(np.nanmax(np.abs(x)))
            reach_y.append(np.nanmax(np.abs(y)))
        if not reach_x:
            raise InputError("none of the frames that the track names can be read")
        # the horizon is seen whole, with all that moves over it; else half of the corners may stick out
        span = np.max if self.steady_on == "horizon" else np.median
        wide, tall = 2 * float(span(reach_x)), 2 * float(span(reach_y))
        if self.steady_on in ("sun", "moon"):
            disc = self.material.geometry.discs[self.steady_on]
            radius = float(disc.semidiameter_arcsec[0])
            beside = [
                np.hypot(
                    *sky_to_plane(f.reference_ra_deg, f.reference_dec_deg, f.target_ra_deg, f.target_dec_deg)
                )
                for f in self.frames
                if f.measured
            ]
            # the target beside the disc is shown too, up to half a radius off
            wide = tall = 2 * max(1.15 * radius, min(1.5 * radius, 1.06 * max(beside, default=0.0)))
        scale = max(wide / width, tall / height, min(frame.scale_arcsec_px for frame in self.frames))
        width, height = min(width, int(wide / scale)) // 2 * 2, min(height, int(tall / scale)) // 2 * 2
        if min(width, height) < 16:
            raise InputError(
                "the film would be smaller than 16 pixels; the track's scale is wrong, or --size is too small"
            )
        return Canvas(width, height, scale, (width - 1) / 2, (height - 1) / 2)

    def view(self, index: int) -> tuple[tuple[float, float], float]:
        """Return the anchor and the up direction for an exposure."""
        frame = self.frames[index]
        if self.steady_on == "horizon":
            return self._horizon_view(index)
        if self.steady_on in ("sun", "moon"):
            anchor = frame.reference_ra_deg, frame.reference_dec_deg
        else:
            middle = self.frames[len(self.frames) // 2]
            anchor = middle.target_ra_deg, middle.target_dec_deg
            aim = self.material.plan.passages[0].aim
            if "+" in aim:
                # two planets that meet: the frames are centred between them
                ra_deg, dec_deg = aim_place(self.material.geometry_at(np.array([middle.tt_s])), aim)
                anchor = float(ra_deg[0]), float(dec_deg[0])
        if self.film.orientation == "zenith":
            return anchor, float(self.zenith_pa[index])
        on_disc = self.steady_on in ("sun", "moon")
        return anchor, up_pa_deg(self.material, self.film.orientation, anchor, frame.tt_s, on_disc)

    def _horizon_view(self, index: int) -> tuple[tuple[float, float], float]:
        """Return the direction at the altitude and azimuth of the middle exposure's target, and its zenith."""
        zenith, first = _zenith(self, index), _zenith(self, len(self.frames) // 2)
        middle = self.frames[len(self.frames) // 2]
        aim = _vector(middle.target_ra_deg, middle.target_dec_deg)
        aim = _local(zenith).T @ (_local(first) @ aim)
        anchor = float(np.degrees(np.arctan2(aim[1], aim[0])) % 360), float(np.degrees(np.arcsin(aim[2])))
        zenith_place = np.degrees(np.arctan2(zenith[1], zenith[0])), np.degrees(np.arcsin(zenith[2]))
        return anchor, position_angle_deg(*anchor, float(zenith_place[0]), float(zenith_place[1]))

    def developed(self, index: int) -> np.ndarray:
        """Return tones (uint8, first row on top) of an exposure; raises FrameSetAside."""
        frame = self.frames[index]
        anchor, up = self.view(index)
        pixels = self.light.read(frame)
        if frame.solved_by == "stars":
            level = exposure_level(pixels, frame)
            pixels = replace(pixels, data=pixels.data - sky_surface(pixels.data - level.dark, order=2))
        else:
            level = disc_level(pixels, frame.limb_px, frame.solved_by.split("-")[0])
        image = self.light.on_canvas(pixels, frame, replace(self.canvas, up_pa_deg=up), anchor, level)
        if self.stretch is None:
            tone = "stars" if frame.solved_by == "stars" else "disc"
            self.stretch = measured_stretch(image, tone, self._peak(image, frame, anchor, up))
        return np.flip(np.round(self.stretch.tones(image) * 255).astype(np.uint8), axis=0)

    def _peak(self, image: np.ndarray, frame: Registered, anchor: tuple[float, float], up: float) -> float:
        """Return the peak of the target beside the Moon, so that the stretch shows it; infinity elsewhere."""
        if not (frame.measured and frame.solved_by == "moon-limb"):
            return float("inf")
        place = replace(self.canvas, up_pa_deg=up).from_sky(
            *anchor, frame.target_ra_deg, frame.target_dec_deg
        )
        column, row = (round(float(value)) for value in place)
        box = image[max(0, row - 3) : row + 4, max(0, column - 3) : column + 4]
        return float(np.nanmax(box)) if box.size and np.isfinite(box).any() else float("inf")


def _vector(ra_deg: float, dec_deg: float) -> np.ndarray:
    ra, dec = np.radians(ra_deg), np.radians(dec_deg)
    return np.array([np.cos(dec) * np.cos(ra), np.cos(dec) * np.sin(ra), np.sin(dec)])


def _zenith(shots: _Shots, index: int) -> np.ndarray:
    """Return the zenith (unit vector, ICRS axes) from the target's altitude and zenith angle."""
    from planner.sky.refraction import true_altitude_deg

    frame, altitude_seen = shots.frames[index], float(shots.altitude[index])
    if not np.isfinite(altitude_seen):
        raise InputError("--steady-on horizon: the plan has no site that a horizon could belong to")
    altitude = np.radians(float(true_altitude_deg(np.array(altitude_seen), shots.material.observer)))
    ra, pa = np.radians(frame.predicted_ra_deg), np.radians(float(shots.zenith_pa[index]))
    target = _vector(frame.predicted_ra_deg, frame.predicted_dec_deg)
    east = np.array([-np.sin(ra), np.cos(ra), 0.0])
    up = np.sin(pa) * east + np.cos(pa) * np.cross(target, east)
    return np.sin(altitude) * target + np.cos(altitude) * up


def _local(zenith: np.ndarray) -> np.ndarray:
    """Return the matrix from ICRS axes to (east, north, up) at a zenith; the pole of date is taken as ICRS's."""
    east = np.cross([0.0, 0.0, 1.0], zenith)
    east /= np.linalg.norm(east)
    return np.stack([east, np.cross(zenith, east), zenith])


def _pictures(shots: _Shots, plan: list[Shown], film: Film) -> Iterator[np.ndarray]:
    """Yield the pictures (uint8, rows x columns) one at a time; an exposure shown twice is developed once."""
    last_index = -1
    shown = np.zeros((shots.canvas.height_px, shots.canvas.width_px), np.uint8)
    for number, item in enumerate(plan):
        film.tick(number, len(plan))
        if item.index != last_index:
            last_index = item.index
            try:
                shown = shots.developed(item.index)
            except FrameSetAside as problem:
                shots.left_out.append((Path(problem.path).name, problem.reason))
        picture = shown if item.gap_tt_s is None else (shown * DIM).astype(np.uint8)
        yield _stamped(picture, item, shots.frames[item.index].tt_s, film)
    film.tick(len(plan), len(plan))


def _stamped(picture: np.ndarray, item: Shown, tt_s: float, film: Film) -> np.ndarray:
    words = []
    if film.stamp:
        words.append(
            utc_iso(tt_s if item.gap_tt_s is None else item.gap_tt_s, 0)
            .replace("T", " ")
            .replace("Z", " UTC")
        )
        words += [f"×{film.pace:g}"] if film.pace is not None else []
    if item.gap_tt_s is not None:
        words.append("no frame")
    if item.after_gap_s:
        days = item.after_gap_s / 86400
        words.append(f"after {days:.0f} d" if days >= 1 else f"after {item.after_gap_s / 60:.0f} min")
    if not words:
        return picture
    from matplotlib import font_manager
    from PIL import Image, ImageDraw, ImageFont

    size = max(10, picture.shape[0] // 42)
    font = ImageFont.truetype(font_manager.findfont("DejaVu Sans Mono"), size)
    image = Image.fromarray(picture)
    ImageDraw.Draw(image).text(
        (size, image.height - 1.9 * size), "  ".join(words), fill=235, font=font,
        stroke_width=max(1, size // 9), stroke_fill=0,
    )  # fmt: skip
    return np.asarray(image)


def _encode_mp4(path: Path, pictures: Iterator[np.ndarray], fps: int) -> None:
    import av

    with av.open(str(path), "w", options={"movflags": "+faststart"}) as container:
        stream = None
        for picture in pictures:
            if stream is None:
                stream = container.add_stream(
                    "libx264", rate=Fraction(fps), options={"crf": "17", "preset": "veryfast"}
                )
                stream.width, stream.height = picture.shape[1], picture.shape[0]
                stream.pix_fmt = "yuv420p"
            grey = av.VideoFrame.from_ndarray(np.ascontiguousarray(picture), format="gray")
            container.mux(stream.encode(grey.reformat(format="yuv420p")))
        if stream is not None:
            container.mux(stream.encode())


def _encode_animation(path: Path, pictures: Iterator[np.ndarray], fps: int) -> None:
    from PIL import Image

    images = [Image.fromarray(picture) for picture in pictures]
    milliseconds = round(1000 / fps)
    if path.suffix == ".gif":
        milliseconds = max(20, round(milliseconds / 10) * 10)  # GIF counts in hundredths of a second
        images[0].save(path, save_all=True, append_images=images[1:], duration=milliseconds, loop=0)
    else:
        images[0].save(
            path, save_all=True, append_images=images[1:], duration=milliseconds, loop=0, default_image=False
        )
