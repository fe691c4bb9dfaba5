"""Warp of 24-megapixel frames against `reproject_interp`, memory of 1000-frame stacks, and a 300-frame film at 1080p.

Run alone: python benchmarks/bench_compose_warp.py [--quick]. Both routes run on one thread in the same process.
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
import numpy as np
from imaging.compose.stack import new_stack
blend, frames, rows, columns, scratch = sys.argv[1], *map(int, sys.argv[2:5]), sys.argv[5]
stack = new_stack(blend, (rows, columns), frames, scratch)
image = np.random.default_rng(0).normal(100, 3, (rows, columns)).astype(np.float32)
begun = time.perf_counter()
for _ in range(frames):
    stack.add(image)
stack.result()
peak = re.search(r"VmHWM:\\s+(\\d+)", open("/proc/self/status").read())  # ru_maxrss would be the parent's
print(time.perf_counter() - begun, int(peak[1]) / 1e6)
"""


def bench_memory(quick: bool) -> None:
    print("memory of a stack (peak of the process), a fresh process each")
    cases = [(blend, frames, SHAPE) for blend in ("mean", "min", "max") for frames in (10, 1000)]
    # 1000 frames of a scratch file would be 96 GB at 24 megapixels: by bands on 1.5 megapixels
    cases += [
        (blend, frames, (1000, 1500))
        for blend in ("median", "clipped")
        for frames in (10, 100 if quick else 1000)
    ]
    for blend, frames, shape in cases:
        if quick and frames == 1000:
            frames = 50
        with tempfile.TemporaryDirectory() as scratch:
            out = subprocess.run(
                [sys.executable, "-c", STACK_CHILD, blend, str(frames), *map(str, shape), scratch],
                capture_output=True, text=True, check=True,
            ).stdout.split()  # fmt: skip
        print(
            f"  {blend:8s} {frames:5d} frames of {shape[0] * shape[1] / 1e6:4.1f} megapixels  {float(out[0]):7.1f} s"
            f"  {float(out[1]):5.2f} GB (under 3 wanted)"
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
    quick = "--quick" in sys.argv
    bench_warp((2000, 3000) if quick else SHAPE)
    bench_film(60 if quick else 300)
    bench_memory(quick)
