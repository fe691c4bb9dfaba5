"""A rig's lens, learned once from many frames and then held, so that sparse fields solve with it.

Kept as YAML beside the rig (`planner.sequence.documents.lens_path`). Linear terms are not kept, because refraction
changes them with altitude.
"""

from __future__ import annotations

from dataclasses import dataclass
from pathlib import Path

import numpy as np

from imaging.stars.camera import AFFINE_PRIOR, Lens
from imaging.stars.solution import PlateSolution
from planner.errors import DocumentError, InputError

FORMAT = 1
LEAST_FRAMES = 3
_FLOOR = (
    2e-5  # of half-diagonals: focus and temperature move a lens by about as much (common practice, no source)
)


@dataclass(frozen=True)
class LearnedLens:
    """A lens with the scale and parity of its rig; `parity` as in DEVELOPERS.md, of arrays with row 0 as stated."""

    lens: Lens
    scale_arcsec_px: float
    scale_sigma: float
    parity: int
    frames: int
    width_px: int
    height_px: int

    def scale_of(self, width_px: int, height_px: int) -> float | None:
        """Return the scale of a frame of this size, binned or not, in arcsec/px; None for a part of the sensor."""
        if abs(width_px * self.height_px / (height_px * self.width_px) - 1.0) > 0.002:
            return None
        return self.scale_arcsec_px * self.width_px / width_px


def learn_lens(solutions: list[PlateSolution]) -> LearnedLens:
    """Return the lens on which solved frames of one rig agree; raises InputError for fewer than three.

    Coefficients are the mean of the frames weighted by their covariances; what is left of scatter from frame to frame
    widens the result. Only frames with the most distortion terms among them count.
    """
    usable = [one for one in solutions if one.fit is not None and one.fit.camera.coefficients is not None]
    if usable:
        most = max(len(one.fit.camera.terms) for one in usable)  # type: ignore[union-attr]
        usable = [one for one in usable if len(one.fit.camera.terms) == most]  # type: ignore[union-attr]
        shape = (usable[0].width_px, usable[0].height_px)
        usable = [one for one in usable if (one.width_px, one.height_px) == shape]
    if len(usable) < LEAST_FRAMES:
        raise InputError(
            f"lens: found {len(usable)} solved frames of one size; allowed are {LEAST_FRAMES} or more"
        )
    cameras = [one.fit.camera for one in usable]  # type: ignore[union-attr]
    terms = cameras[0].terms
    middle = np.array([(usable[0].width_px - 1) / 2, (usable[0].height_px - 1) / 2])
    values, precisions = [], []
    for one, camera in zip(usable, cameras, strict=True):
        axis = (np.array([camera.axis_x_px, camera.axis_y_px]) - middle) / camera.half_diagonal_px
        values.append(np.concatenate([axis, np.asarray(camera.coefficients).ravel()]))
        block = one.fit.covariance[4:, 4:]  # type: ignore[union-attr]
        precisions.append(np.linalg.inv(block + _FLOOR**2 * np.eye(len(block))))
    total = np.linalg.inv(sum(precisions))
    mean = total @ sum(p @ v for p, v in zip(precisions, values, strict=True))
    scatter = np.array(values) - mean
    chi2 = np.mean([v @ p @ v for v, p in zip(scatter, precisions, strict=True)]) / len(mean)
    covariance = total * max(1.0, chi2) + _FLOOR**2 * np.eye(len(mean))
    coefficients = mean[2:].reshape(2, len(terms))
    inner = covariance[2:, 2:]
    for i, (p, q) in enumerate(terms):
        if p + q == 1:
            for row in (i, len(terms) + i):
                inner[row, :] = inner[:, row] = 0.0
                inner[row, row] = AFFINE_PRIOR**2
            coefficients[:, i] = 0.0
    scales = np.array([one.scale_arcsec_px for one in usable])
    lens = Lens(terms, coefficients, inner, mean[:2], np.sqrt(np.diag(covariance)[:2]), cameras[0].projection)
    return LearnedLens(
        lens,
        float(scales.mean()),
        float(max(scales.std(ddof=1) / scales.mean(), 2e-5)),
        cameras[0].parity,
        len(usable),
        usable[0].width_px,
        usable[0].height_px,
    )


def write_lens(learned: LearnedLens, rig_name: str, path: Path, force: bool = False) -> None:
    """Write a lens as YAML; raises OutputExistsError."""
    import yaml

    from planner.outputs import whole_file

    lens = learned.lens
    document = {
        "format": FORMAT,
        "rig": rig_name,
        "frames": learned.frames,
        "width_px": learned.width_px,
        "height_px": learned.height_px,
        "scale_arcsec_px": learned.scale_arcsec_px,
        "scale_sigma_relative": learned.scale_sigma,
        "parity": learned.parity,
        "projection": lens.projection,
        "axis": [float(value) for value in lens.axis],
        "axis_sigma": [float(value) for value in lens.axis_sigma],
        "terms": [list(term) for term in lens.terms],
        "coefficients_u": [float(value) for value in lens.coefficients[0]],
        "coefficients_v": [float(value) for value in lens.coefficients[1]],
        "covariance": [[float(f"{value:.6e}") for value in row] for row in lens.covariance],
    }
    with whole_file(path, force) as part:
        part.write_text(
            "# Lens learned by `syzygraph solve --learn`; u and v in half-diagonals of the frame.\n"
            + yaml.safe_dump(document, sort_keys=False, default_flow_style=None),
            encoding="utf-8",
        )


def read_lens(path: Path) -> LearnedLens:
    """Return a lens from its file; raises DocumentError when it is not one."""
    import yaml

    try:
        found = yaml.safe_load(path.read_text(encoding="utf-8"))
        terms = tuple((int(p), int(q)) for p, q in found["terms"])
        covariance = np.array(found["covariance"], dtype=float)
        coefficients = np.array([found["coefficients_u"], found["coefficients_v"]], dtype=float)
        if found["format"] != FORMAT or covariance.shape != (2 * len(terms),) * 2:
            raise ValueError("format or size")
        lens = Lens(
            terms,
            coefficients.reshape(2, len(terms)),
            covariance,
            np.array(found["axis"], dtype=float),
            np.array(found["axis_sigma"], dtype=float),
            str(found["projection"]),
        )
        return LearnedLens(
            lens,
            float(found["scale_arcsec_px"]),
            float(found["scale_sigma_relative"]),
            int(found["parity"]),
            int(found["frames"]),
            int(found["width_px"]),
            int(found["height_px"]),
        )
    except (OSError, yaml.YAMLError, KeyError, TypeError, ValueError) as error:
        raise DocumentError(
            path, None, "lens", str(error)[:80], "allowed is a file of `solve --learn`"
        ) from None
