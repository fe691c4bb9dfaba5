"""One frame measured: where the target is, against what, and how the frame was solved."""

from __future__ import annotations

from dataclasses import dataclass, field
from typing import TYPE_CHECKING

import numpy as np

from imaging.frames.frame import FrameTime
from imaging.track.cutout import Cutout
from imaging.track.nominal import Nominal

if TYPE_CHECKING:
    from imaging.track.starlight import StarPiece

NAN = float("nan")
LIGHT_ONLY = "its light is timed, its place is not measured: "  # of a frame too short to be solved
AS_PREDICTED = "is, as predicted,"  # marks the reason of a frame in which the target was not to be seen


@dataclass(frozen=True)
class DiscReference:
    """The fitted disc that positions count from; `covariance_px2` of its centre, (2, 2).

    `contrast_adu`: brightness of the limb above the sky, `seeing_fwhm_px` its blur; NaN when not known.
    """

    x_px: float
    y_px: float
    radius_px: float
    covariance_px2: np.ndarray
    radius_sigma_px: float
    contrast_adu: float = NAN
    seeing_fwhm_px: float = NAN


@dataclass(frozen=True)
class StarReference:
    """The plate solution as far as a track needs it.

    `ra_deg`, `dec_deg`: measured place of the target, with `covariance_arcsec2` of (east, north), plate included.
    `header`: the solution as the text of a FITS header. `rotation_deg` and `parity` are of the array, as in
    `Nominal`, in the middle of the frame; `local_rotation_deg` at the target, which differs in a wide field. `fwhm_px`
    is of the stars, `zero_point_adu` the light of a star of magnitude 0 by all but the target; NaN when not known.
    `by_lens`: the lens learned of the rig was held.
    """

    ra_deg: float
    dec_deg: float
    covariance_arcsec2: np.ndarray
    scale_arcsec_px: float
    rotation_deg: float
    parity: int
    local_rotation_deg: float
    stars: int
    rms_px: float
    header: str
    fwhm_px: float = NAN
    zero_point_adu: float = NAN
    by_lens: bool = False


@dataclass(frozen=True)
class Measurement:
    """What one frame gave. `solved_by` is `none` and `x_px` NaN where it gave nothing, with the reason.

    `covariance_px2`: (2, 2), of the target. `predicted_px`: where it was expected at the stamped time.
    `star`: the target star's light, in families that time it.
    `far`: found where it was not expected; `stray_rate_adu_s`: light of a point taken for the target there, else NaN.
    """

    file: str
    frame_index: int
    time: FrameTime
    exposure_s: float
    nominal: Nominal
    shape: tuple[int, int]
    solved_by: str = "none"
    x_px: float = NAN
    y_px: float = NAN
    covariance_px2: np.ndarray = field(default_factory=lambda: np.full((2, 2), NAN))
    disc: DiscReference | None = None
    stars: StarReference | None = None
    reason: str = ""
    predicted_px: tuple[float, float] = (NAN, NAN)
    camera: str | None = None
    site: tuple[float, float, float] | None = None
    row_zero: str = "bottom"
    digest: str = ""
    stray_rate_adu_s: float = NAN
    far: bool = False
    cutout: Cutout | None = None
    star: StarPiece | None = None

    @property
    def measured(self) -> bool:
        """True when the target has a place."""
        return bool(np.isfinite(self.x_px) and (self.disc is not None or self.stars is not None))

    @property
    def offset_px(self) -> tuple[float, float]:
        """Target minus the disc's centre."""
        assert self.disc is not None
        return self.x_px - self.disc.x_px, self.y_px - self.disc.y_px
