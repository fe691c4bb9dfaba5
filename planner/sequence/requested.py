"""What an event request may hold beside names: a small body's elements or their file, files of the Moon's limb."""

from __future__ import annotations

from pydantic import Field

from planner.sequence.strictmodel import Model


class ElementSigma(Model):
    """1-sigma of each element of an orbit, uncorrelated."""

    semi_major_axis_au: float = Field(ge=0)
    eccentricity: float = Field(ge=0)
    inclination_deg: float = Field(ge=0)
    ascending_node_deg: float = Field(ge=0)
    perihelion_argument_deg: float = Field(ge=0)
    mean_anomaly_deg: float = Field(ge=0)


class SmallBody(Model):
    """What is known of a small body beside its orbit; a diameter or an absolute magnitude is needed."""

    name: str
    absolute_magnitude: float | None = Field(default=None, ge=-2, le=35)
    slope: float = Field(default=0.15, ge=-1, le=1)
    diameter_km: float | None = Field(default=None, gt=0, le=6000)
    diameter_sigma_km: float | None = Field(default=None, gt=0)
    sigma_along_arcsec: float | None = Field(
        default=None, gt=0, description="1-sigma of the place along its motion"
    )
    sigma_across_arcsec: float | None = Field(default=None, gt=0, description="and across it")
    source: str = ""
    notes: list[str] = Field(default=[])


class OrbitElements(SmallBody):
    """Osculating elements of a small body: heliocentric, ecliptic and equinox J2000."""

    epoch_jd_tdb: float = Field(ge=2000000, le=3000000, description="Julian day of the elements, TDB")
    semi_major_axis_au: float = Field(gt=0.1, le=2000)
    eccentricity: float = Field(ge=0, lt=1)
    inclination_deg: float = Field(ge=0, le=180)
    ascending_node_deg: float
    perihelion_argument_deg: float
    mean_anomaly_deg: float
    sigma: ElementSigma | None = None


class OrbitFile(SmallBody):
    """A small body whose places are in an SPK file."""

    spk: str = Field(description="path of the .bsp file, from the folder of this document")
    spk_target: int | None = Field(
        default=None, description="number of the body where the file holds several"
    )


class LimbFiles(Model):
    """The Moon's real limb: files that the user has; paths count from the brief's folder."""

    elevation: str = Field(description="PDS elevation grid: its label (.LBL) or image (.IMG)")
    orientation: str | None = Field(
        default=None, description="lunar orientation kernel (.bpc); default: analytic"
    )
    frame: str | None = Field(default=None, description="its frame kernel (.tf)")
