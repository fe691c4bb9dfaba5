"""What a brief and a plan are: models with units in their keys, and their JSON Schema; site and rig are equipment.

Unknown keys are errors. Times are ISO 8601 with `Z` or an offset. Longitudes are east positive.
"""

from __future__ import annotations

from datetime import date
from typing import Any, Literal

from pydantic import Field, model_validator

from planner.sequence.equipment import GainSetting, Mount, Rig, Sensor, Site
from planner.sequence.requested import ElementSigma, LimbFiles, OrbitElements, OrbitFile, SmallBody
from planner.sequence.strictmodel import Model, Utc

__all__ = [
    "Brief",
    "CalibrationSet",
    "ElementSigma",
    "EventRequest",
    "Finding",
    "GainSetting",
    "Grid",
    "LimbFiles",
    "Mount",
    "OrbitElements",
    "OrbitFile",
    "Passage",
    "Plan",
    "PredictedPoint",
    "Rig",
    "Sensor",
    "Shot",
    "Site",
    "SmallBody",
    "Step",
    "Wish",
]


class EventRequest(Model):
    """Which event: the one of this family nearest to the date."""

    family: str
    body: str = ""
    date: date | Utc
    other_body: str | None = None
    star: str | None = None
    orbit: str | OrbitElements | OrbitFile | None = Field(
        default=None,
        description="a file of elements (.yaml, .json), of one-line orbits (.txt), or the elements themselves",
    )
    radii: str | None = None
    limb: LimbFiles | None = None


class Grid(Model):
    """Panels of a mosaic, as the frame looks: columns from left to right, rows from top to bottom."""

    columns: int = Field(ge=1, le=12)
    rows: int = Field(ge=1, le=12)


class Wish(Model):
    """What the pictures are for; everything here has a sensible default."""

    filter: str | None = Field(
        default=None, description="one of the rig's filters, at contacts too; default: the rig's first"
    )
    filters: list[str] = Field(
        default=[],
        max_length=12,
        description="of the rig's, stepped through in turn, each with its own exposure",
    )
    exposure_s: float | None = Field(default=None, gt=0, description="default: from the brightness")
    gain: float | None = Field(default=None, ge=0, description="default: chosen among the sensor's gains")
    well_fraction: float = Field(default=0.5, gt=0, lt=1, description="peak signal over saturation")
    signal_to_noise: float | None = Field(
        default=None,
        gt=0,
        le=10000,
        description="wanted of a disc's brightest pixel or of a star; no longer exposure is made than it needs",
    )
    trail_px: float = Field(default=1.0, gt=0, description="longest trail borne in a frame")
    cadence_s: float | None = Field(
        default=None, gt=0, description="of regular frames; default: from the motion"
    )
    burst_cadence_s: float | None = Field(
        default=None, gt=0, description="around contacts; default: as fast as needed"
    )
    burst_s: float | None = Field(
        default=None, gt=0, description="before and after a contact; default: from its uncertainty"
    )
    lead_s: float | None = Field(
        default=None, ge=0, description="of frames before the first and after the last contact"
    )
    separate_discs: bool = Field(
        default=False, description="regular frames so far apart that discs do not touch"
    )
    timing_s: float | None = Field(default=None, gt=0, description="1-sigma wanted of a contact's time")
    camera_angle: Literal["rig", "best"] = Field(
        default="rig", description="`best`: turn the camera to the track"
    )
    mosaic: Literal["track"] | Grid | None = Field(
        default=None,
        description="`track`: panels over the whole track at each visit, or so many; default: the pointing follows",
    )
    mosaic_overlap: float = Field(default=0.15, ge=0.02, le=0.6, description="of a panel's side")
    calibration: bool = Field(default=True, description="list the calibration frames")
    visits: int | None = Field(default=None, ge=1, le=1000, description="nights of a campaign")
    reserves: int = Field(default=1, ge=0, le=5, description="reserve nights named for each visit")
    frames_per_visit: int = Field(default=8, ge=1, le=1000)
    planet_frames: int = Field(
        default=0, ge=0, le=1000, description="short exposures a visit, for the planet's disc"
    )
    deep_frames: int = Field(default=0, ge=0, le=1000, description="long exposures a visit, for faint stars")
    visit_when: Literal["highest", "sidereal-time", "solar-depression"] | None = Field(
        default=None, description="default: highest; 8 degrees of solar depression for an apparition arc"
    )
    sidereal_time_h: float | None = Field(
        default=None, ge=0, lt=24, description="local, for visits at fixed sidereal time"
    )
    solar_depression_deg: float | None = Field(
        default=None, ge=0, le=30, description="for visits at a fixed one"
    )
    twilight: Literal["evening", "morning", "either"] = "either"
    darkness_deg: float = Field(
        default=-12.0, ge=-18, le=0, description="the Sun's altitude below which it is night"
    )
    most_airmass: float = Field(default=4.0, ge=1, le=40)
    moon_distance_deg: float = Field(
        default=15.0, ge=0, le=180, description="least distance of the Moon on a visit"
    )

    @model_validator(mode="after")
    def _complete(self) -> Wish:
        if self.visit_when == "sidereal-time" and self.sidereal_time_h is None:
            raise ValueError("visit_when: sidereal-time needs sidereal_time_h")
        if self.visit_when == "solar-depression" and self.solar_depression_deg is None:
            raise ValueError("visit_when: solar-depression needs solar_depression_deg")
        if len(set(self.filters)) < len(self.filters):
            raise ValueError("filters: each filter once")
        return self


class Brief(Model):
    """What the user wants: which event, from where, with what, for which result."""

    title: str
    site: str | Site
    rig: str | Rig
    event: EventRequest
    other_rigs: list[str | Rig] = Field(
        default=[], description="more cameras at the same site: paths or inline"
    )
    wish: Wish = Wish()


class Shot(Model):
    """One exposure recipe: `count` frames that begin at `start_utc` and then every `cadence_s`."""

    name: str
    start_utc: Utc
    cadence_s: float = Field(gt=0)
    count: int = Field(ge=1)
    exposure_s: float = Field(gt=0)
    gain: float = Field(default=0, ge=0)
    filter: str | None = None
    tracking: Literal["sidereal", "solar", "lunar", "none"] = "sidereal"
    peak_of: str | None = Field(default=None, description="whose brightest pixel `peak_e` is")
    peak_e: float | None = Field(
        default=None,
        ge=0,
        description="electrons expected there, at the middle of the shot; over saturation where it is clipped",
    )
    trail_px: float | None = Field(default=None, ge=0, description="longest trail expected in a frame")


class Passage(Model):
    """A stretch of a plan with one purpose, in which the camera has one aim.

    `aim`: what the middle of the frame follows: a disc of the geometry (`sun`, `moon`, `mars`), the middle of two
    (`venus+jupiter`), `field` with `aim_ra_deg`, `aim_dec_deg` (ICRS), or `ground` with `aim_altitude_deg`,
    `aim_azimuth_deg`, which follows nothing.
    """

    name: str
    purpose: str
    visit: int | None = None
    panel: str | None = Field(
        default=None, description="of a mosaic: column letter from the left, row number from the top"
    )
    holds_target: bool = Field(default=True, description="false for panels of a mosaic beside the target")
    aim: str
    aim_ra_deg: float | None = None
    aim_dec_deg: float | None = None
    aim_altitude_deg: float | None = None
    aim_azimuth_deg: float | None = None
    flipped: bool = Field(default=False, description="past the meridian flip: the camera is upside down")
    stars_expected: int | None = Field(
        default=None, description="stars in the frame good enough for a plate solution"
    )
    guide: str | None = Field(default=None, description="what to guide on, where the rig guides")
    slack_s: float | None = Field(default=None, description="time left after it before the next passage")
    reserve_utc: list[Utc] = Field(default=[], description="nights to fall back on, best first")
    done: bool = Field(default=False, description="taken already; kept by a new plan")
    shots: list[Shot]


class Step(Model):
    """Something to be done between frames, by hand or by the rig."""

    kind: Literal["set-up", "solar-filter", "focus", "filter", "flip", "slew", "take-down"]
    start_utc: Utc
    duration_s: float = Field(ge=0)
    text: str


class CalibrationSet(Model):
    """Calibration frames to take with the plan's."""

    kind: Literal["bias", "dark", "flat"]
    count: int = Field(ge=1)
    exposure_s: float | None = Field(default=None, description="None: whatever half fills the range")
    gain: float = 0
    filter: str | None = None
    text: str


class PredictedPoint(Model):
    """One point of the predicted track: offsets are from the reference disc, None where stars are the reference."""

    utc: Utc
    ra_deg: float
    dec_deg: float
    east_arcsec: float | None = None
    north_arcsec: float | None = None
    altitude_deg: float


class Finding(Model):
    """What a feasibility rule found: where, how much, and what would cure it."""

    rule: str
    level: Literal["error", "caution", "note"]
    where: str
    sentence: str
    cure: str


class Plan(Model):
    """A generated sequence plan for one camera."""

    format: Literal[1] = 1
    title: str
    event: EventRequest
    site: Site
    rig: Rig
    companions: list[str] = Field(default=[], description="names of the other rigs planned with this one")
    circumstances: dict[str, Any]
    passages: list[Passage]
    steps: list[Step] = Field(default=[])
    calibration: list[CalibrationSet] = Field(default=[])
    track: list[PredictedPoint]
    frames_total: int
    storage_gb: float
    assumptions: list[str] = Field(default=[])
    findings: list[Finding] = Field(default=[])
    cautions: list[str] = Field(default=[])
    provenance: dict[str, str]

    def visits(self) -> list[list[Passage]]:
        """Return the passages of each visit together, in time order; nothing for a plan of hours."""
        groups: dict[int, list[Passage]] = {}
        for passage in self.passages:
            if passage.visit is not None:
                groups.setdefault(passage.visit, []).append(passage)
        return list(groups.values())
