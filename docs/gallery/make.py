"""Make the pictures of docs/gallery.md from the example briefs: plan, rehearse, check, compose, film.

    python docs/gallery/make.py WORK_FOLDER

Steps whose output stands in WORK_FOLDER are not done again. Takes half an hour on two cores and 2 GB of disk.
"""

from __future__ import annotations

import json
import sys
from pathlib import Path

import numpy as np
from PIL import Image

from planner.cli.main import run_with

HERE = Path(__file__).resolve().parent
CONFIGS = HERE.parent.parent / "configs"
# name, brief, options of rehearse, pictures (name: options of compose), options of timelapse
JOURNEYS = (
    (
        "transit",
        "mercury_transit_2032",
        ["--frames", "22", "--clock-offset", "7.3"],
        {"transit": [], "transit_zenith": ["--up", "zenith"]},
        ["--pace", "1200", "--size", "1280x720"],
    ),
    (
        "moon",
        "moon_occults_planet_2030",
        ["--frames", "18", "--clock-offset", "7.3"],
        {"moon": [], "moon_among_stars": ["--register", "stars", "--instants", "4", "--scale", "2"]},
        ["--pace", "300", "--size", "1280x720"],
    ),
    (
        "mars",
        "mars_retrograde_2027",
        ["--frames", "80", "--binning", "2"],
        {"mars": []},
        ["--fps", "8", "--size", "640x360"],
    ),
)


def step(output: Path, *arguments: str) -> None:
    """Run a command unless its output stands."""
    if output.exists():
        return
    print("syzygraph", *arguments, flush=True)
    if run_with(list(arguments)) not in (0, 1):
        raise SystemExit(f"failed: {arguments}")


def shown(picture: Path, name: str, longest_px: int, quality: int = 88) -> None:
    """Keep a reduced copy for the page."""
    with Image.open(picture) as image:
        image = image.convert("RGB")
        image.thumbnail((longest_px, longest_px), Image.Resampling.LANCZOS)
        image.save(HERE / f"{name}.jpg", quality=quality, optimize=True)


def detail(folder: Path, name: str, half_px: int = 130) -> None:
    """Keep pieces of the picture at 100 %: about three of the places drawn."""
    drawn = json.loads((folder / "composite.truth.json").read_text())
    with Image.open(folder / "composite.png") as image:
        grey = image.convert("RGB")
    height = drawn["size_px"][1]
    chosen = [drawn["drawn"][i] for i in np.linspace(0, len(drawn["drawn"]) - 1, 3).astype(int)]
    sheet = Image.new("RGB", (6 * half_px + 20, 2 * half_px))
    for number, item in enumerate(chosen):
        x, y = int(item["x_px"]), int(height - 1 - item["y_px"])
        piece = grey.crop((x - half_px, y - half_px, x + half_px, y + half_px))
        sheet.paste(piece, (number * (2 * half_px + 10), 0))
    sheet.save(HERE / f"{name}_detail.png")


def main(work: Path) -> None:
    """Go every journey and keep what the page shows."""
    work.mkdir(parents=True, exist_ok=True)
    for name, brief, rehearsal, pictures, film in JOURNEYS:
        plan, frames = work / f"{name}.plan.yaml", work / f"{name}_frames"
        checked = work / f"{name}_chk"
        step(plan, "plan", str(CONFIGS / f"{brief}.yaml"), "-o", str(plan))
        step(frames, "rehearse", str(plan), "-o", str(frames), *rehearsal)
        step(checked / "track.ecsv", "check", str(plan), str(frames), "-o", str(checked))
        common = [str(plan), str(checked / "track.ecsv"), "--frames", str(frames)]
        for picture, options in pictures.items():
            folder = work / f"{picture}_pic"
            step(folder / "composite.png", "compose", *common, "-o", str(folder), *options)
            shown(folder / "composite.png", picture, 1400)
            statement = json.loads((folder / "composite.truth.json").read_text())
            statement["frames"] = f"{len(statement['frames'])} frames, listed in the full statement"
            text = json.dumps(statement, indent=1, ensure_ascii=False)
            (HERE / f"{picture}.truth.json").write_text(text + "\n", encoding="utf-8")
        detail(work / f"{name}_pic", name)
        shown(work / f"{name}_pic" / "path_light.png", f"{name}_path_light", 1100)
        shown(work / f"{name}_pic" / "path_dark.png", f"{name}_path_dark", 1100)
        step(
            work / f"{name}.mp4",
            "timelapse",
            *common,
            "-o",
            str(work / f"{name}.mp4"),
            *film,
        )
        (HERE / f"{name}.mp4").write_bytes((work / f"{name}.mp4").read_bytes())


if __name__ == "__main__":
    main(Path(sys.argv[1]))
