"""What the frames say about the path, as arrays that a fit can work on."""

from __future__ import annotations

from dataclasses import dataclass, replace

import numpy as np

from imaging.track.path import PredictedPath, tangent_offsets, unit_vectors

VELOCITY_STEP_S = 1.0


@dataclass(frozen=True)
class Sightings:
    """Measured places of the target in n frames; every array has first dimension n.

    `tt_s`: mid-exposure as stamped. `exposure_s`: for the hypothesis that a start was taken for a middle.
    On a disc, `east_arcsec` and `north_arcsec` are offsets from the reference disc's centre, turned to the sky with the
    *nominal* rotation, parity and scale; `log_scale`, `log_scale_sigma` is the logarithm of the true scale over the
    nominal one as the disc's radius tells it, and `limb_sigma_arcsec` what every radius may be off by in common;
    `semidiameter_arcsec` is what the disc was taken to be for it, at the stamped times from the plan's site.
    Among stars they are the measured directions relative to the anchors (`anchor_ra_deg`, `anchor_dec_deg`).
    `covariance_arcsec2`: (n, 2, 2), of (east, north). `rolled_deg`: what was added to the nominal rotation since.
    """

    tt_s: np.ndarray
    exposure_s: np.ndarray
    east_arcsec: np.ndarray
    north_arcsec: np.ndarray
    covariance_arcsec2: np.ndarray
    log_scale: np.ndarray
    log_scale_sigma: np.ndarray
    limb_sigma_arcsec: float = 0.0
    anchor_ra_deg: np.ndarray | None = None
    anchor_dec_deg: np.ndarray | None = None
    semidiameter_arcsec: np.ndarray | None = None
    rolled_deg: np.ndarray | None = None

    @property
    def on_disc(self) -> bool:
        """True when places are offsets from a disc."""
        return self.anchor_ra_deg is None

    @property
    def places(self) -> np.ndarray:
        """Measured (east, north) in arcseconds, shape (n, 2)."""
        return np.column_stack([self.east_arcsec, self.north_arcsec])

    def __len__(self) -> int:
        """Return the number of frames."""
        return len(self.tt_s)

    def expected(self, path: PredictedPath, tt_s: np.ndarray) -> np.ndarray:
        """Return the predicted (east, north) in arcseconds at instants aligned with the frames, shape (n, 2).

        Instants may also be (k n,), k times the frames in turn.
        """
        expected = path.at(tt_s)
        if self.anchor_ra_deg is None or self.anchor_dec_deg is None:
            return np.column_stack([expected.east_arcsec, expected.north_arcsec])
        turns = len(expected.tt_s) // len(self)
        anchors = np.tile(self.anchor_ra_deg, turns), np.tile(self.anchor_dec_deg, turns)
        return np.column_stack(tangent_offsets(*anchors, unit_vectors(expected.ra_deg, expected.dec_deg)))

    def expected_and_motion(self, path: PredictedPath, tt_s: np.ndarray) -> tuple[np.ndarray, np.ndarray]:
        """Return predicted (east, north) in arcseconds and their velocity in arcseconds a second, each (n, 2)."""
        step = VELOCITY_STEP_S
        n = len(self)
        places = self.expected(path, np.concatenate([tt_s, tt_s + step, tt_s - step]))
        return places[:n], (places[n : 2 * n] - places[2 * n :]) / (2 * step)

    def log_scale_by(self, path: PredictedPath, tt_s: np.ndarray) -> np.ndarray:
        """Return `log_scale` as it is when the frames were taken at other instants, or elsewhere: the disc differs."""
        if self.semidiameter_arcsec is None:
            return self.log_scale
        return self.log_scale + np.log(path.at(tt_s).reference_semidiameter_arcsec / self.semidiameter_arcsec)

    def mirrored(self) -> Sightings:
        """Return the same as the opposite parity would have it (any axis will do: rotation is fitted)."""
        flip = np.array([[-1.0, 0.0], [0.0, 1.0]])
        return replace(
            self,
            east_arcsec=-self.east_arcsec,
            covariance_arcsec2=flip @ self.covariance_arcsec2 @ flip,
        )

    def rolled(self, turn_deg: np.ndarray) -> Sightings:
        """Return the same as cameras turned by `turn_deg` (n,) against what was taken as their nominal roll saw it."""
        angle = np.radians(turn_deg)
        cos, sin = np.cos(angle), np.sin(angle)
        matrix = np.array([[cos, sin], [-sin, cos]]).transpose(2, 0, 1)  # position angles grow by the angle
        places = np.einsum("nij,nj->ni", matrix, self.places)
        return replace(
            self,
            east_arcsec=places[:, 0],
            north_arcsec=places[:, 1],
            covariance_arcsec2=matrix @ self.covariance_arcsec2 @ matrix.transpose(0, 2, 1),
            rolled_deg=turn_deg if self.rolled_deg is None else self.rolled_deg + turn_deg,
        )

    def part(self, keep: np.ndarray) -> Sightings:
        """Return the frames that a mask or an index selects."""
        return replace(
            self,
            **{
                name: getattr(self, name)[keep]
                for name in (
                    "tt_s",
                    "exposure_s",
                    "east_arcsec",
                    "north_arcsec",
                    "covariance_arcsec2",
                    "log_scale",
                    "log_scale_sigma",
                )
            },
            anchor_ra_deg=None if self.anchor_ra_deg is None else self.anchor_ra_deg[keep],
            anchor_dec_deg=None if self.anchor_dec_deg is None else self.anchor_dec_deg[keep],
            semidiameter_arcsec=None if self.semidiameter_arcsec is None else self.semidiameter_arcsec[keep],
            rolled_deg=None if self.rolled_deg is None else self.rolled_deg[keep],
        )


def among_stars(
    tt_s: np.ndarray,
    exposure_s: np.ndarray,
    ra_deg: np.ndarray,
    dec_deg: np.ndarray,
    covariance_arcsec2: np.ndarray,
) -> Sightings:
    """Return sightings of directions among stars (ICRS, degrees), anchored at the measured places themselves."""
    nothing = np.full(np.shape(tt_s), np.nan)
    zero = np.zeros(np.shape(tt_s))
    return Sightings(
        tt_s=np.asarray(tt_s, float),
        exposure_s=np.asarray(exposure_s, float),
        east_arcsec=zero,
        north_arcsec=zero,
        covariance_arcsec2=covariance_arcsec2,
        log_scale=nothing,
        log_scale_sigma=nothing,
        anchor_ra_deg=np.asarray(ra_deg, float),
        anchor_dec_deg=np.asarray(dec_deg, float),
    )
