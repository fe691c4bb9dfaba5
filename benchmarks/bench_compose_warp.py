"""Warp of 24-megapixel frames against `reproject_interp`, memory of 1000-frame stacks, and a 300-frame film at 1080p.

Run alone: python benchmarks/bench_compose_warp.py [--quick] [warp] [film] [memory]. Both routes of the warp run on one
thread in the same process.
"""

from __future__ import annotations

import subprocess
import sys
import tempfile
import time
import warnings
from pathlib import Path

import cv2
import numpy as np
from astropy.wcs import WCS, Sip

from imaging.compose.canvas import Canvas
from imaging.compose.plane import plane_to_sky
from imaging.compose.pointing import StarPointing
from imaging.compose.timelapse import _encode_mp4
from imaging.compose.warp import warp

SHAPE = (4000, 6000)
SCALE = 9.2


def lens_wcs(shape: tuple[int, int]) -> WCS:
    """A 135 mm lens with third-order distortion (5 px in the corner)."""
    wcs = WCS(naxis=2)
    wcs.wcs.ctype = ["RA---TAN-SIP", "DEC--TAN-SIP"]
    wcs.wcs.crval = [152.0, 14.0]
    wcs.wcs.crpix = [shape[1] / 2 + 0.5, shape[0] / 2 + 0.5]
    sin, cos = np.sin(np.radians(7)), np.cos(np.radians(7))
    wcs.wcs.cd = np.array([[-cos, sin], [sin, cos]]) * SCALE / 3600
    a, b = np.zeros((4, 4)), np.zeros((4, 4))
    a[3, 0] = a[1, 2] = b[0, 3] = b[2, 1] = 1.1e-10
    wcs.sip = Sip(a, b, None, None, wcs.wcs.crpix)
    wcs.wcs.set()
    return wcs


def star_frame(shape: tuple[int, int], count: int = 400) -> tuple[np.ndarray, np.ndarray, np.ndarray]:
    rng = np.random.default_rng(7)
    frame = np.zeros(shape, np.float32)
    x, y = rng.uniform(60, shape[1] - 60, count), rng.uniform(60, shape[0] - 60, count)
    gy, gx = np.mgrid[-9:10, -9:10]
    for cx, cy in zip(x, y, strict=True):
        row, column = round(cy), round(cx)
        frame[row - 9 : row + 10, column - 9 : column + 10] += 1000 * np.exp(
            -((gx + column - cx) ** 2 + (gy + row - cy) ** 2) / (2 * 1.3**2)
        )
    return frame, x, y


def places(image: np.ndarray, x: np.ndarray, y: np.ndarray) -> np.ndarray:
    """First moments in 13 x 13 pixels."""
    gy, gx = np.mgrid[-6:7, -6:7]
    found = []
    for cx, cy in zip(x, y, strict=True):
        row, column = round(float(cy)), round(float(cx))
        cut = image[row - 6 : row + 7, column - 6 : column + 7].astype(float)
        if cut.shape != (13, 13) or not np.isfinite(cut).all() or cut.sum() <= 0:
            found.append((np.nan, np.nan))
            continue
        found.append((column + (cut * gx).sum() / cut.sum(), row + (cut * gy).sum() / cut.sum()))
    return np.array(found)


def bench_warp(shape: tuple[int, int]) -> None:
    import reproject

    cv2.setNumThreads(1)
    frame, x, y = star_frame(shape)
    wcs = lens_wcs(shape)
    canvas = Canvas(shape[1], shape[0], SCALE, (shape[1] - 1) / 2, (shape[0] - 1) / 2)
    anchor = (152.05, 14.03)
    pointing = StarPointing(wcs, SCALE)

    def to_frame(cx, cy):
        return pointing.sky_to_pixel(*plane_to_sky(*anchor, *canvas.to_plane(cx, cy)))

    seconds = []
    for _ in range(3):
        begun = time.process_time()
        ours = warp(frame, canvas, to_frame)
        seconds.append(time.process_time() - begun)
    output = WCS(canvas.wcs_header(*anchor))
    begun = time.process_time()
    with warnings.catch_warnings():
        warnings.simplefilter("ignore")
        theirs, _ = reproject.reproject_interp((frame, wcs), output, shape_out=shape, order="bicubic")
    reference = time.process_time() - begun
    ra, dec = wcs.all_pix2world(x, y, 0)
    cx, cy = canvas.from_sky(*anchor, ra, dec)
    a, b, truth = places(ours, cx, cy), places(theirs, cx, cy), np.column_stack([cx, cy])
    lonely = np.array([np.sort(np.hypot(cx - i, cy - j))[1] > 25 for i, j in zip(cx, cy, strict=True)])
    known = np.isfinite(a).all(axis=1) & np.isfinite(b).all(axis=1) & lonely
    apart, off = np.hypot(*(a - b)[known].T), np.hypot(*(a - truth)[known].T)
    megapixels = shape[0] * shape[1] / 1e6
    print(f"warp, {megapixels:.0f} megapixels, one thread, {known.sum()} stars")
    print(f"  ours                 {min(seconds):7.2f} s CPU")
    print(
        f"  reproject_interp     {reference:7.2f} s CPU   ratio {reference / min(seconds):.1f} (at least 12 wanted)"
    )
    print(f"  place, ours - theirs {apart.max():.4f} px at most (under 0.01 wanted)")
    print(f"  place, ours - truth  {np.sqrt(np.mean(off**2)):.4f} px rms (0.05 wanted)")


STACK_CHILD = """
import re, sys, time
from pathlib import Path
import numpy as np
from imaging.compose.stack import new_stack
blend, again, scratch = sys.argv[1], sys.argv[2] == "again", sys.argv[6]
frames, rows, columns = map(int, sys.argv[3:6])
stack = new_stack(blend, (rows, columns), frames, None if again else Path(scratch), again=again)
rng = np.random.default_rng(0)
image = rng.normal(100, 3, (rows, columns)).astype(np.float32)
begun, added = time.process_time(), 0
for turn in stack.turns():
    for index in turn:
        image[0, 0] = index  # another frame each time, at the cost of none
        stack.add(image)
        added += 1
stack.result()
peak = re.search(r"VmHWM:\\s+(\\d+)", open("/proc/self/status").read())  # ru_maxrss would be the parent's
print(time.process_time() - begun, int(peak[1]) / 1e6, added, stack.how)
"""


def bench_memory(quick: bool) -> None:
    print(
        "memory of a stack (peak of the process), a fresh process each; seconds of CPU without reading and warping"
    )
    many = 50 if quick else 1000
    cases = [(blend, "once", frames, SHAPE) for blend in ("mean", "min", "max") for frames in (10, many)]
    # beyond 4 GB of values frames come round again: no scratch file of 96 GB for 1000 frames of 24 megapixels
    cases += [(blend, "again", frames, SHAPE) for blend in ("clipped", "median") for frames in (45, 60, 120)]
    # with --scratch every value is kept: exact, by bands
    cases += [
        (blend, "once", frames, (1000, 1500))
        for blend in ("median", "clipped")
        for frames in (10, min(many, 1000))
    ]
    for blend, again, frames, shape in cases:
        if quick and again == "again" and frames > 45:
            continue
        with tempfile.TemporaryDirectory() as scratch:
            out = subprocess.run(
                [sys.executable, "-c", STACK_CHILD, blend, again, str(frames), *map(str, shape), scratch],
                capture_output=True, text=True, check=True,
            ).stdout.split(maxsplit=3)  # fmt: skip
        print(
            f"  {blend:8s} {frames:5d} frames of {shape[0] * shape[1] / 1e6:4.1f} megapixels  {float(out[0]):7.1f} s"
            f"  {float(out[1]):5.2f} GB (under 3 wanted)  {out[2]} added; {out[3].strip()}",
            flush=True,
        )


def bench_film(pictures: int = 300) -> None:
    """Warp a 6-megapixel frame to 1080p and encode, as `timelapse` does; frames are in memory."""
    cv2.setNumThreads(2)
    frame = np.random.default_rng(0).normal(1000, 30, (2000, 3000)).astype(np.float32)
    y, x = np.ogrid[:2000, :3000]
    frame += 20000 * (np.hypot(x - 1500, y - 1000) < 800)
    canvas = Canvas(1620, 1080, 1.85, 809.5, 539.5)

    def shots():
        for number in range(pictures):
            shift = 3 * np.sin(number / 7)
            image = warp(frame, canvas, lambda cx, cy, s=shift: (cx * 1.85 + s, cy * 1.85), threads=2)
            yield np.nan_to_num(np.clip(image / 300, 0, 255)).astype(np.uint8)

    with tempfile.TemporaryDirectory() as folder:
        begun, worked = time.perf_counter(), time.process_time()
        _encode_mp4(Path(folder) / "film.mp4", shots(), 25)
        spent, worked = time.perf_counter() - begun, time.process_time() - worked
    print(f"film, {pictures} frames at 1080p, warp and H.264 (15 a second wanted)")
    print(
        f"  {pictures / spent:.1f} a second as the machine was; {2 * pictures / worked:.1f} on two cores for itself"
    )


if __name__ == "__main__":
    if {"-h", "--help"} & set(sys.argv):
        sys.exit(__doc__)
    quick = "--quick" in sys.argv
    parts = [part for part in ("warp", "film", "memory") if part in sys.argv] or ["warp", "film", "memory"]
    if "warp" in parts:
        bench_warp((2000, 3000) if quick else SHAPE)
    if "film" in parts:
        bench_film(60 if quick else 300)
    if "memory" in parts:
        bench_memory(quick)
