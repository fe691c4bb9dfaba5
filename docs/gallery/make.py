"""Make the pictures of docs/gallery.md from the example briefs: plan, rehearse, check, compose, film.

    python docs/gallery/make.py WORK_FOLDER [JOURNEY ...]

Steps whose output stands in WORK_FOLDER are not done again. All of it takes 40 minutes on two busy cores, 18 of
processor time, and 9 GB of disk.
"""

from __future__ import annotations

import json
import sys
import time
from dataclasses import dataclass, field
from pathlib import Path

import numpy as np
from PIL import Image, ImageDraw

from planner.cli.main import run_with

HERE = Path(__file__).resolve().parent
CONFIGS = HERE.parent.parent / "configs"
MOST_FILM_BYTES = 300_000
SHOWN_CLOSE = ("transit", "moon", "mars", "meet")


@dataclass(frozen=True)
class Journey:
    """A brief, options of `rehearse`, pictures (name: options of `compose`), options of `timelapse`.

    `site`, `rig`: others than the brief's. `path`: which version of the path plot is kept.
    """

    name: str
    brief: Path
    rehearsal: tuple[str, ...]
    pictures: dict[str, tuple[str, ...]]
    film: tuple[str, ...] = ()
    site: Path | None = None
    rig: Path | None = None
    path: str = "light"
    needs: tuple[str, ...] = field(default=())


JOURNEYS = (
    Journey(
        "transit",
        CONFIGS / "mercury_transit_2032.yaml",
        ("--frames", "40", "--clock-offset", "7.3"),
        {"transit": (), "transit_zenith": ("--up", "zenith", "--instants", "16")},
        ("--pace", "1800", "--size", "640x640", "--fps", "15"),
    ),
    Journey(
        "far",
        CONFIGS / "mercury_transit_2032.yaml",
        ("--frames", "120", "--binning", "2"),
        {"two_sites": ("--second-site", "{transit.plan}", "{transit.track}", "{transit.frames}", "--instants", "21")},
        site=HERE / "far_shore.yaml",
        needs=("transit",),
    ),
    Journey(
        "moon",
        CONFIGS / "moon_occults_planet_2030.yaml",
        ("--frames", "18", "--clock-offset", "7.3"),
        {"moon": (), "moon_among_stars": ("--register", "stars", "--instants", "4", "--scale", "2")},
        ("--pace", "400", "--size", "640x480", "--fps", "15"),
        path="dark",
    ),
    Journey(
        "star",
        CONFIGS / "moon_occults_star_2027.yaml",
        ("--frames", "48", "--binning", "2"),
        {"star": ("--up", "zenith",), "star_horizon": ("--grid", "altaz", "--instants", "5")},
        ("--pace", "400", "--size", "640x480", "--fps", "15", "--up", "zenith"),
    ),
    Journey(
        "mars",
        CONFIGS / "mars_retrograde_2027.yaml",
        ("--frames", "80", "--binning", "2"),
        {"mars": ()},
        ("--fps", "8", "--size", "480x270"),
    ),
    Journey(
        "meet",
        CONFIGS / "planets_meet_2028.yaml",
        ("--frames", "24", "--binning", "2", "--rotation", "78"),
        {"meet": ()},
        ("--fps", "10", "--size", "480x640"),
    ),
    Journey(
        "asteroid",
        CONFIGS / "asteroid_occults_star_2028.yaml",
        ("--frames", "40", "--binning", "2"),
        {"asteroid": ()},
        ("--fps", "10", "--size", "480x360"),
    ),
    Journey(
        "arc",
        CONFIGS / "apparition_arc_2027.yaml",
        ("--frames", "32", "--binning", "2"),
        {"arc": ("--landscape", "{work}/plate.png", "--view", "245,40,1015", "--instants", "16", "--grid", "altaz",
                 "--enlarge", "6")},
        ("--fps", "8", "--size", "480x270"),
    ),
    Journey(
        "venus",
        HERE / "venus_phases.yaml",
        (),
        {"venus": ("--register", "target", "--enlarge", "3", "--instants", "12")},
        site=CONFIGS / "sites" / "kestrel_ridge.yaml",
        rig=HERE / "refractor_500mm.yaml",
    ),
)  # fmt: skip


def step(output: Path, *arguments: str) -> None:
    """Run a command unless its output stands."""
    if output.exists():
        return
    print("syzygraph", *arguments, flush=True)
    began = time.monotonic()
    if run_with([*arguments, "--force"]) not in (0, 1):
        raise SystemExit(f"failed: {arguments}")
    print(f"  took {time.monotonic() - began:.0f} s", flush=True)


def shown(picture: Path, name: str, longest_px: int, quality: int = 88) -> None:
    """Keep a reduced copy for the page."""
    with Image.open(picture) as image:
        image = image.convert("RGB")
        image.thumbnail((longest_px, longest_px), Image.Resampling.LANCZOS)
        image.save(HERE / f"{name}.jpg", quality=quality, optimize=True)


def shown_film(film: Path) -> None:
    """Keep a copy for the page, compressed until it is small."""
    import av

    with av.open(str(film)) as source:
        rate = source.streams.video[0].average_rate
        pictures = [frame.to_ndarray(format="gray") for frame in source.decode(video=0)]
    copy = HERE / film.name
    for quality in range(23, 46, 3):
        with av.open(str(copy), "w", options={"movflags": "+faststart"}) as target:
            stream = target.add_stream("libx264", rate=rate, options={"crf": str(quality), "preset": "slow"})
            stream.height, stream.width = pictures[0].shape
            stream.pix_fmt = "yuv420p"
            for picture in pictures:
                frame = av.VideoFrame.from_ndarray(picture, format="gray").reformat(format="yuv420p")
                target.mux(stream.encode(frame))
            target.mux(stream.encode())
        if copy.stat().st_size <= MOST_FILM_BYTES:
            return


def detail(folder: Path, name: str, half_px: int = 110) -> None:
    """Keep pieces of the picture at 100 %: about three of the places drawn."""
    drawn = json.loads((folder / "composite.truth.json").read_text())
    with Image.open(folder / "composite.png") as image:
        picture = image.convert("RGB")
    width, height = drawn["size_px"]
    chosen = [drawn["drawn"][i] for i in np.unique(np.linspace(0, len(drawn["drawn"]) - 1, 3).astype(int))]
    sheet = Image.new("RGB", (len(chosen) * (2 * half_px + 10) - 10, 2 * half_px))
    for number, item in enumerate(chosen):
        x = int(np.clip(item["x_px"], half_px, max(width - half_px, half_px)))
        y = int(np.clip(height - 1 - item["y_px"], half_px, max(height - half_px, half_px)))
        piece = picture.crop((x - half_px, y - half_px, x + half_px, y + half_px))
        sheet.paste(piece, (number * (2 * half_px + 10), 0))
    sheet.save(HERE / f"{name}_detail.jpg", quality=90, optimize=True)


def plate(path: Path, width: int = 1800, height: int = 1100, horizon: int = 1015) -> None:
    """Draw an invented landscape at dusk, for want of a photograph: a sky that darkens upward, and hills."""
    if path.exists():
        return
    rng = np.random.default_rng(8)
    up = np.clip((horizon - np.arange(height)) / horizon, 0, 1)[:, None, None]
    low, high = np.array([214, 132, 84.0]), np.array([22, 34, 66.0])
    sky = high + (low - high) * np.exp(-3.2 * up) + rng.normal(0, 1.0, (height, width, 1))
    image = Image.fromarray(np.clip(sky, 0, 255).astype(np.uint8))
    draw = ImageDraw.Draw(image)
    x = np.arange(width)
    for tone, base, rough in (((38, 34, 44), 12, 26), ((20, 18, 24), -22, 18), ((9, 9, 12), -58, 12)):
        ridge = sum(
            rough / (k + 1) * np.sin(x / width * 2 * np.pi * (k + 1) + rng.uniform(0, 6.3)) for k in range(7)
        )
        line = [(int(a), float(horizon - base - b)) for a, b in zip(x, ridge, strict=True)]
        draw.polygon([*line, (width, height), (0, height)], fill=tone)
    image.save(path)


def make(journey: Journey, work: Path) -> None:
    """Go one journey and keep what the page shows."""
    plan, track, frames = _files(work, journey.name)
    place = ["--site", str(journey.site)] if journey.site else []
    place += ["--rig", str(journey.rig)] if journey.rig else []
    step(plan, "plan", str(journey.brief), "-o", str(plan), *place)
    step(
        frames.with_name(f"{frames.name}.truth.ecsv"),
        "rehearse",
        str(plan),
        "-o",
        str(frames),
        *journey.rehearsal,
    )
    step(track, "check", str(plan), str(frames), "-o", str(track.parent))
    common = [str(plan), str(track), "--frames", str(frames)]
    words = {"{work}": str(work)}
    for other in journey.needs:
        kinds = zip(("plan", "track", "frames"), _files(work, other), strict=True)
        words |= {f"{{{other}.{kind}}}": str(path) for kind, path in kinds}
    for picture, options in journey.pictures.items():
        folder = work / f"{picture}_pic"
        asked = [words.get(option, option.replace("{work}", str(work))) for option in options]
        asked += ["--formats", "png", "--plots", "png", "--dpi", "160", "--no-page"]
        step(folder / "composite.truth.json", "compose", *common, "-o", str(folder), *asked)
        shown(folder / "composite.png", picture, 1400)
        statement = json.loads((folder / "composite.truth.json").read_text())
        statement["frames"] = f"{len(statement['frames'])} frames, listed in the full statement"
        text = json.dumps(statement, indent=1, ensure_ascii=False)
        (HERE / f"{picture}.truth.json").write_text(text + "\n", encoding="utf-8")
        shown(folder / f"path_{journey.path}.png", f"{picture}_path", 1100)
    if journey.name in SHOWN_CLOSE:
        detail(work / f"{journey.name}_pic", journey.name)
    if journey.film:
        film = work / f"{journey.name}.mp4"
        step(film, "timelapse", *common, "-o", str(film), *journey.film)
        shown_film(film)


def _files(work: Path, name: str) -> tuple[Path, Path, Path]:
    return work / f"{name}.plan.yaml", work / f"{name}_chk" / "track.ecsv", work / f"{name}_frames"


def main(work: Path, wanted: list[str]) -> None:
    """Go the journeys asked for, or all."""
    work.mkdir(parents=True, exist_ok=True)
    plate(work / "plate.png")
    began = time.monotonic()
    for journey in JOURNEYS:
        if not wanted or journey.name in wanted:
            make(journey, work)
    print(f"all of it took {(time.monotonic() - began) / 60:.0f} min", flush=True)


if __name__ == "__main__":
    main(Path(sys.argv[1]), sys.argv[2:])
