"""Detection on 24 megapixels against photutils (Background2D and DAOStarFinder), both routes in one run.

python benchmarks/bench_detect.py
"""

from __future__ import annotations

import sys
import tracemalloc
from pathlib import Path
from time import process_time

import numpy as np
from measured import machine, table
from scipy.spatial import cKDTree

sys.path.insert(0, str(Path(__file__).resolve().parent.parent / "tests" / "stars"))
from test_detection import bound_px, render

SHAPE, FWHM, SKY, READ = (4000, 6000), 2.6, 200.0, 3.0


def main() -> None:
    print(machine())
    rng = np.random.default_rng(1)
    count = 3000
    x, y = rng.uniform(15, SHAPE[1] - 15, count), rng.uniform(15, SHAPE[0] - 15, count)
    flux = 10 ** rng.uniform(2.6, 5.5, count)
    frame = render(SHAPE, x, y, flux, FWHM, SKY, READ)
    yy, xx = np.mgrid[0 : SHAPE[0], 0 : SHAPE[1]]
    frame += (0.004 * xx + 0.003 * yy).astype("float32")
    del xx, yy
    from imaging.stars.detection import detect

    detect(frame[:500, :500].copy())  # imports
    began = process_time()
    found = detect(frame, gain_e_adu=1.0)
    ours = process_time() - began
    tracemalloc.start()
    detect(frame, gain_e_adu=1.0)
    grown = tracemalloc.get_traced_memory()[1] / 1e6
    tracemalloc.stop()
    places = np.column_stack([found.x_px, found.y_px])

    from astropy.stats import SigmaClip
    from photutils.background import Background2D, MedianBackground
    from photutils.detection import DAOStarFinder

    began = process_time()
    sky = Background2D(
        frame, (64, 64), filter_size=(3, 3), sigma_clip=SigmaClip(3.0), bkg_estimator=MedianBackground()
    )
    clean = frame - sky.background
    sources = DAOStarFinder(5.0 * float(np.median(sky.background_rms)), FWHM)(clean)
    theirs = process_time() - began
    names = [next(n for n in (f"{a}_centroid", f"{a}centroid") if n in sources.colnames) for a in "xy"]
    reference = np.column_stack([np.asarray(sources[name]) for name in names])

    print(f"CPU: {ours:.2f} s; photutils {theirs:.2f} s; ratio {theirs / ours:.1f}")
    print(f"memory: {grown:.0f} MB beyond the frame's own {frame.nbytes / 1e6:.0f} MB")
    rows = []
    for low, high in ((2.6, 2.8), (2.8, 3.0), (3.0, 3.5), (3.5, 4.0), (4.0, 4.5), (4.5, 5.0), (5.0, 5.5)):
        group = (np.log10(flux) >= low) & (np.log10(flux) < high)
        bound = np.mean([bound_px(f, FWHM, SKY + 20, READ) for f in flux[group][:25]])
        ours_here = judged(places, x[group], y[group], flux[group])
        theirs_here = judged(reference, x[group], y[group], flux[group])
        rows.append([f"{10**low:.0f} to {10**high:.0f}", f"{bound:.4f}", *ours_here, *theirs_here])
    print(
        table(
            ["flux, e", "bound, px", "complete", "error / bound", "photutils complete", "error / bound"], rows
        )
    )
    for name, one in (("ours", places), ("photutils", reference)):
        distance, _ = cKDTree(np.column_stack([x, y])).query(one)
        print(f"{name}: {len(one)} detections, {(distance > 2).sum()} of them no star")


def judged(places, x, y, flux) -> tuple[str, str]:
    """Completeness, and the robust error over each star's own bound."""
    distance, index = cKDTree(places).query(np.column_stack([x, y]))
    ok = distance < 1.5
    bounds = np.interp(np.log(flux[ok]), GRID, BOUNDS)
    error = np.concatenate([(places[index[ok], 0] - x[ok]) / bounds, (places[index[ok], 1] - y[ok]) / bounds])
    return f"{100 * ok.mean():.1f} %", f"{1.4826 * np.median(np.abs(error)):.2f}"


GRID = np.log(10 ** np.linspace(2.5, 5.6, 32))
BOUNDS = np.array([bound_px(float(np.exp(g)), FWHM, SKY + 20, READ) for g in GRID])


if __name__ == "__main__":
    main()
