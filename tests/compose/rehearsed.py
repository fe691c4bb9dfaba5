"""A track as a perfect `check` would write it, made from the truth of a rehearsal, with noise where a test wants it."""

from __future__ import annotations

from pathlib import Path

import numpy as np
from astropy.io import fits
from astropy.table import Table
from astropy.wcs import WCS

from imaging.track.path import as_seen, target_place
from imaging.track.table import TrackRow, write_track
from planner.events.catalogue import family
from planner.sequence.documents import event_spec, observer_of
from planner.sky.timescale import tt_s_from_iso


def track_from_truth(plan, folder: Path, out: Path, sigma_px: float = 0.0, seed: int = 1, clock_offset_s=0.0):
    """Write `track.ecsv` and the plate solutions of a rehearsed folder into `out`; returns the track's path."""
    truth = Table.read(folder.with_name(folder.name + ".truth.ecsv"))
    kind = family(plan.event.family)
    event = kind.nearest(event_spec(plan.event))
    observer = observer_of(plan.site)
    times = np.array([tt_s_from_iso(str(text)) for text in truth["true_utc_mid"]], float)
    geometry = kind.geometry(event, observer, times)
    rng = np.random.default_rng(seed)
    ra, dec, _ = target_place(geometry)
    out.mkdir(parents=True, exist_ok=True)
    rows = []
    for i, row in enumerate(truth):
        header = fits.getheader(folder / row["file"])
        height, width = header["NAXIS2"], header["NAXIS1"]
        x, y = (row["target_x_px"], row["target_y_px"]) + rng.normal(0, 1, 2) * sigma_px
        inside = bool(0 < x < width - 1 and 0 < y < height - 1)
        # the optics' own scale: the truth's is that of the sky behind the refracting air
        scale = plan.rig.scale_arcsec_px * int(header.get("XBINNING", 1))
        common = {
            "file": str(row["file"]),
            "passage": _passage(plan, times[i]),
            "utc_mid": str(row["stamped_utc_mid"]),
            "exposure_s": float(header["EXPTIME"]),
            "x_px": float(x),
            "y_px": float(y),
            "scale_arcsec_px": scale,
            "rotation_deg": float(row["rotation_deg"]),
            "parity": int(row["parity"]),
            "sigma_along_arcsec": max(sigma_px, 0.02) * scale,
            "sigma_across_arcsec": max(sigma_px, 0.02) * scale,
            "along_arcsec": 0.0,
            "across_arcsec": 0.0,
            "verdict": "on-track" if inside else "unmeasured",
        }
        if geometry.reference == "stars":
            wcs = _wcs(row, width, height, float(row["scale_arcsec_px"]))
            name = f"{Path(row['file']).stem}.wcs"
            (out / name).write_text(wcs.to_header(relax=True).tostring(sep="\n"), encoding="ascii")
            sky = wcs.all_pix2world(x, y, 0)
            rows.append(
                TrackRow(
                    **common,
                    solved_by="stars",
                    wcs_file=name,
                    measured_ra_deg=float(sky[0]) if inside else np.nan,
                    measured_dec_deg=float(sky[1]) if inside else np.nan,
                    predicted_ra_deg=float(ra[i]),
                    predicted_dec_deg=float(dec[i]),
                )
            )
            continue
        disc = geometry.discs[geometry.reference]
        one = slice(i, i + 1)
        seen = as_seen(
            (ra[one], dec[one]), (disc.ra_deg[one], disc.dec_deg[one]),
            geometry.altitude_deg[one], geometry.zenith_pa_deg[one], observer,
        )  # fmt: skip
        seen = float(seen[0][0]), float(seen[1][0])
        away = np.hypot(*seen)
        hidden = geometry.reference == "moon" and away < disc.semidiameter_arcsec[i]
        beside = geometry.reference == "sun" and away > disc.semidiameter_arcsec[i]
        found = _offset(row, x, y, scale)
        measured = inside and not hidden and not beside
        rows.append(
            TrackRow(
                **{**common, "verdict": "on-track" if measured else "unmeasured"},
                solved_by=f"{geometry.reference}-limb",
                reference_x_px=float(row["reference_x_px"]),
                reference_y_px=float(row["reference_y_px"]),
                reference_radius_px=float(row["reference_radius_px"]),
                measured_east_arcsec=found[0] if measured else np.nan,
                measured_north_arcsec=found[1] if measured else np.nan,
                predicted_east_arcsec=float(seen[0]),
                predicted_north_arcsec=float(seen[1]),
            )
        )
    meta = {"plan": plan.title, "clock_offset_s": clock_offset_s, "clock_offset_sigma_s": 0.1}
    write_track(out / "track.ecsv", rows, meta)
    return out / "track.ecsv"


def _passage(plan, tt_s: float) -> str:
    starts = [
        (min(float(tt_s_from_iso(s.start_utc.isoformat())) for s in p.shots), p.name) for p in plan.passages
    ]
    return max((start, name) for start, name in starts if start <= tt_s + 1)[1]


def _offset(row, x: float, y: float, scale: float) -> tuple[float, float]:
    dx, dy = x - row["reference_x_px"], y - row["reference_y_px"]
    sin, cos = np.sin(np.radians(row["rotation_deg"])), np.cos(np.radians(row["rotation_deg"]))
    parity = row["parity"]
    return float(scale * (dy * sin - parity * dx * cos)), float(scale * (dy * cos + parity * dx * sin))


def _wcs(row, width: int, height: int, scale: float) -> WCS:
    wcs = WCS(naxis=2)
    wcs.wcs.ctype = ["RA---TAN", "DEC--TAN"]
    wcs.wcs.crval = [row["center_ra_deg"], row["center_dec_deg"]]
    wcs.wcs.crpix = [(width - 1) / 2 + 1, (height - 1) / 2 + 1]
    sin, cos = np.sin(np.radians(row["rotation_deg"])), np.cos(np.radians(row["rotation_deg"]))
    wcs.wcs.cd = np.array([[-row["parity"] * cos, sin], [row["parity"] * sin, cos]]) * scale / 3600
    wcs.wcs.set()
    return wcs
