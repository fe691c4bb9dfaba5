"""From measurements to sightings, and from a diagnosis back to rows."""

from __future__ import annotations

from collections.abc import Sequence
from typing import Any

import numpy as np

from imaging.track.findings import Diagnosis
from imaging.track.fit import along_across, motion, turn
from imaging.track.measurement import Measurement
from imaging.track.path import PredictedPath
from imaging.track.sightings import Sightings, among_stars
from imaging.track.table import TrackRow

OFF_TRACK_SIGMA = 5.0


def sightings_of(measured: Sequence[Measurement], path: PredictedPath, limb_sigma_arcsec: float) -> Sightings:
    """Return the sightings of measurements that all hold a place against the same kind of reference."""
    tt_s = np.array([m.time.middle_tt_s for m in measured])
    exposure_s = np.array([m.exposure_s for m in measured])
    if measured[0].stars is not None:
        places = [m.stars for m in measured if m.stars is not None]
        return among_stars(
            tt_s,
            exposure_s,
            np.array([place.ra_deg for place in places]),
            np.array([place.dec_deg for place in places]),
            np.stack([place.covariance_arcsec2 for place in places]),
        )
    discs = [m.disc for m in measured if m.disc is not None]
    pairs = list(zip(measured, discs, strict=True))
    offsets = np.array([m.nominal.to_sky(*map(np.asarray, m.offset_px)) for m in measured])
    covariance = np.stack(
        [m.nominal.covariance_to_sky(m.covariance_px2 + disc.covariance_px2) for m, disc in pairs]
    )
    semidiameter = path.at(tt_s).reference_semidiameter_arcsec
    radius = np.array([disc.radius_px * m.nominal.scale_arcsec_px for m, disc in pairs])
    sigma = np.array([disc.radius_sigma_px / disc.radius_px for disc in discs])
    return Sightings(
        tt_s=tt_s,
        exposure_s=exposure_s,
        east_arcsec=offsets[:, 0],
        north_arcsec=offsets[:, 1],
        covariance_arcsec2=covariance,
        log_scale=np.log(semidiameter / radius),
        log_scale_sigma=sigma,
        limb_sigma_arcsec=limb_sigma_arcsec,
        semidiameter_arcsec=semidiameter,
    )


def rows_of(
    measurements: Sequence[Measurement],
    used: np.ndarray,
    path: PredictedPath,
    sightings: Sightings | None,
    diagnosis: Diagnosis | None,
) -> list[TrackRow]:
    """Return one row a measurement, in the same order.

    `used`: indices of the measurements that became `sightings`, in their order. `path` is the plan's own:
    predictions in the table are the plan's, at the stamped times, whatever reading is believed.
    """
    from planner.sky.timescale import utc_iso

    if not measurements:
        return []
    tt_s = np.array([m.time.middle_tt_s for m in measurements])
    stamped = np.atleast_1d(utc_iso(tt_s, 3))
    expected = path.at(tt_s)
    places = _measured_places(sightings, diagnosis, path) if sightings is not None and diagnosis else {}
    position = {int(index): number for number, index in enumerate(used)}
    rows = []
    for index, m in enumerate(measurements):
        values: dict[str, Any] = {
            "file": m.file,
            "frame_index": m.frame_index,
            "passage": m.nominal.passage,
            "utc_mid": str(stamped[index]),
            "utc_sigma_s": m.time.sigma_s,
            "exposure_s": m.exposure_s,
            "solved_by": m.solved_by,
            "reason": m.reason,
            "x_px": m.x_px,
            "y_px": m.y_px,
            "sigma_x_px": float(np.sqrt(m.covariance_px2[0, 0])),
            "sigma_y_px": float(np.sqrt(m.covariance_px2[1, 1])),
            "scale_arcsec_px": m.nominal.scale_arcsec_px,
            "rotation_deg": m.nominal.rotation_deg,
            "parity": m.nominal.parity,
            "predicted_ra_deg": float(expected.ra_deg[index]),
            "predicted_dec_deg": float(expected.dec_deg[index]),
            "predicted_east_arcsec": float(expected.east_arcsec[index]),
            "predicted_north_arcsec": float(expected.north_arcsec[index]),
        }
        if m.disc is not None:
            values |= {
                "reference_x_px": m.disc.x_px,
                "reference_y_px": m.disc.y_px,
                "reference_radius_px": m.disc.radius_px,
                "reference_sigma_px": float(np.sqrt(np.trace(m.disc.covariance_px2) / 2)),
            }
        if m.stars is not None:
            values |= {
                "measured_ra_deg": m.stars.ra_deg if m.measured else float("nan"),
                "measured_dec_deg": m.stars.dec_deg if m.measured else float("nan"),
                "scale_arcsec_px": m.stars.scale_arcsec_px,
                "rotation_deg": m.stars.rotation_deg,
                "parity": m.stars.parity,
            }
        if index in position and places and diagnosis is not None:
            values |= {name: column[position[index]] for name, column in places.items() if name != "off"}
            values |= _camera_of(m, diagnosis, position[index])
            off = bool(places["off"][position[index]])
            values["verdict"] = "off-track" if off else "on-track"
            if off:
                values["reason"] = _join(m.reason, _off_reason(diagnosis, position[index]))
        rows.append(TrackRow(**values))
    return rows


def _camera_of(m: Measurement, diagnosis: Diagnosis, number: int) -> dict[str, float | int]:
    """Return scale, rotation and parity of a disc frame as the fit has them."""
    if m.disc is None:
        return {}
    reading = diagnosis.reading
    value = reading.fit.value
    flipped = reading.name == "mirrored"
    rolled = reading.sightings.rolled_deg
    nominal_deg = m.nominal.rotation_deg + (0.0 if rolled is None else float(rolled[number]))
    return {
        "scale_arcsec_px": m.nominal.scale_arcsec_px * float(np.exp(value["log_scale"])),
        "rotation_deg": _rotation(nominal_deg, value["rotation_deg"], flipped),
        "parity": -m.nominal.parity if flipped else m.nominal.parity,
    }


def _rotation(nominal_deg: float, fitted_deg: float, flipped: bool) -> float:
    """Return the position angle of +y: a flip of east and west mirrors its angle before it is turned."""
    return ((-nominal_deg if flipped else nominal_deg) + fitted_deg) % 360.0


def _measured_places(sightings: Sightings, diagnosis: Diagnosis, path: PredictedPath) -> dict[str, list]:  # type: ignore[type-arg]
    """Return the columns that the fit decides, a list a column, aligned with the sightings."""
    reading, fit = diagnosis.reading, diagnosis.reading.fit
    value = fit.value
    columns: dict[str, list] = {}  # type: ignore[type-arg]
    measured = reading.sightings.places - np.array([value["east_arcsec"], value["north_arcsec"]])
    if sightings.on_disc:
        measured = turn(measured, np.radians(value["rotation_deg"])) * np.exp(value["log_scale"])
        columns["measured_east_arcsec"] = measured[:, 0].tolist()
        columns["measured_north_arcsec"] = measured[:, 1].tolist()
    residual = measured - sightings.expected(path, sightings.tt_s)
    covariance = reading.sightings.covariance_arcsec2 + fit.jitter_arcsec**2 * np.eye(2)
    along, across, sigma_along, sigma_across = along_across(
        residual, covariance, motion(sightings, path, sightings.tt_s)
    )
    off = ~(
        (np.abs(fit.along_arcsec) < OFF_TRACK_SIGMA * fit.sigma_along_arcsec)
        & (np.abs(fit.across_arcsec) < OFF_TRACK_SIGMA * fit.sigma_across_arcsec)
    )
    if not diagnosis.explained or reading.name == "wrong-body":
        off[:] = True
    columns |= {
        "along_arcsec": along.tolist(),
        "across_arcsec": across.tolist(),
        "sigma_along_arcsec": sigma_along.tolist(),
        "sigma_across_arcsec": sigma_across.tolist(),
        "off": off.tolist(),
    }
    return columns


def _off_reason(diagnosis: Diagnosis, number: int) -> str:
    fit = diagnosis.reading.fit
    if not diagnosis.explained or diagnosis.reading.name == "wrong-body":
        return "the track as a whole does not follow the prediction"
    away = np.hypot(fit.along_arcsec[number], fit.across_arcsec[number])
    return f"{away:.1f} arcsec from where the other frames put it"


def _join(*texts: str) -> str:
    return "; ".join(text for text in texts if text)
