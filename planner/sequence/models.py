"""What a site, a rig, a brief and a plan are: models with units in their keys, and their JSON Schema.

Unknown keys are errors. Times are ISO 8601 with `Z` or an offset. Longitudes are east positive.
"""

from __future__ import annotations

from datetime import UTC, date
from typing import Annotated, Any, Literal

from pydantic import AfterValidator, AwareDatetime, BaseModel, ConfigDict, Field, model_validator


class Model(BaseModel):
    """A strict, immutable model: unknown keys and infinite numbers are refused."""

    model_config = ConfigDict(extra="forbid", frozen=True, allow_inf_nan=False, str_strip_whitespace=True)


Utc = Annotated[AwareDatetime, AfterValidator(lambda moment: moment.astimezone(UTC))]


def _known_zone(name: str) -> str:
    from zoneinfo import ZoneInfo, ZoneInfoNotFoundError

    try:
        ZoneInfo(name)
    except (ZoneInfoNotFoundError, ValueError, OSError):
        raise ValueError("an IANA time zone is needed, such as Europe/Berlin or UTC") from None
    return name


class Site(Model):
    """A place to observe from."""

    name: str
    latitude_deg: float = Field(ge=-90, le=90)
    longitude_deg: float = Field(ge=-180, le=360, description="east positive")
    height_m: float = Field(ge=-500, le=9000, description="above the WGS 84 ellipsoid")
    timezone: Annotated[str, AfterValidator(_known_zone)] = Field(
        default="UTC", description="IANA name, for civil times"
    )
    horizon: list[tuple[Annotated[float, Field(ge=0, le=360)], Annotated[float, Field(ge=-10, le=90)]]] = (
        Field(default=[], description="[azimuth_deg, altitude_deg] pairs of what hides the sky")
    )
    position_sigma_m: float = Field(default=15.0, gt=0)
    height_sigma_m: float = Field(default=20.0, gt=0)
    pressure_hpa: float | None = Field(
        default=None, ge=0, description="default: standard atmosphere at the height"
    )
    temperature_c: float = Field(default=10.0, ge=-90, le=60)
    seeing_arcsec: float = Field(default=2.0, gt=0, le=20, description="FWHM at the zenith")
    extinction_mag: float = Field(default=0.2, ge=0, le=2, description="V magnitudes an airmass")
    sky_brightness_mag_arcsec2: float = Field(
        default=20.5, ge=10, le=22.5, description="V, dark, at the zenith"
    )


class GainSetting(Model):
    """What a sensor does at one of its gain settings."""

    gain: float = Field(ge=0, description="as the camera names it")
    e_adu: float = Field(gt=0)
    read_noise_e: float = Field(ge=0)
    full_well_e: float = Field(gt=0)


class Sensor(Model):
    """A camera's sensor; `full_well_e`, `read_noise_e` and `gain_e_adu` hold at gain setting 0."""

    width_px: int = Field(ge=16, le=40000)
    height_px: int = Field(ge=16, le=40000)
    pixel_um: float = Field(gt=0.5, le=50)
    full_well_e: float = Field(default=50000, gt=100)
    read_noise_e: float = Field(default=3.0, ge=0)
    gain_e_adu: float = Field(default=1.0, gt=0, description="at gain setting 0")
    gains: list[GainSetting] = Field(default=[], description="measured settings, for a choice of gain")
    bit_depth: int = Field(default=16, ge=8, le=32)
    bias_adu: float = Field(default=200, ge=0)
    dark_e_s: float = Field(default=0.02, ge=0)
    quantum_efficiency: float = Field(default=0.6, gt=0, le=1)
    readout_s: float = Field(default=0.3, ge=0, description="from the end of one exposure to the next start")
    shutter: Literal["global", "rolling"] = "global"
    rolling_readout_s: float = Field(
        default=0.0, ge=0, description="from the first row's start to the last row's"
    )
    bayer: Literal["RGGB", "BGGR", "GRBG", "GBRG"] | None = None
    min_exposure_s: float = Field(default=1e-4, gt=0)
    max_exposure_s: float = Field(default=3600, gt=0)
    buffer_frames: int | None = Field(
        default=None, ge=1, description="frames the camera holds before it stalls"
    )
    drain_frames_s: float | None = Field(
        default=None, gt=0, description="frames a second that leave the buffer"
    )


class Optics(Model):
    """A lens or telescope."""

    focal_length_mm: float = Field(gt=0, le=100000)
    aperture_mm: float = Field(gt=0, le=20000)
    obstruction: float = Field(
        default=0.0, ge=0, lt=1, description="diameter of the obstruction over the aperture"
    )
    transmission: float = Field(default=0.85, gt=0, le=1)
    vignetting: float = Field(default=0.15, ge=0, lt=1, description="loss of light in the corner")
    reducer: float = Field(default=1.0, gt=0, description="factor on the focal length")


class Filter(Model):
    """A filter in the wheel."""

    name: str
    transmission: float = Field(default=1.0, gt=0, le=1, description="in its band")
    optical_density: float = Field(default=0.0, ge=0, le=8, description="on top of the transmission")
    bandwidth_nm: float = Field(default=90.0, gt=0)


class SolarFilter(Model):
    """A filter over the front of the aperture, without which no plan may point at the Sun."""

    optical_density: float = Field(ge=2, le=8)
    mounting: Literal["front"] = "front"


class Mount(Model):
    """What carries the camera; cameras whose mounts have one name sit on one mount."""

    name: str = "mount"
    kind: Literal["equatorial", "altazimuth", "fixed"] = "equatorial"
    rates: list[Literal["sidereal", "solar", "lunar"]] = Field(
        default=["sidereal", "solar", "lunar"], description="tracking rates it can run at"
    )
    tracking_error_arcsec: float = Field(
        default=2.0, ge=0, description="rms over an exposure of some seconds, unguided"
    )
    periodic_error_arcsec: float = Field(default=0.0, ge=0, description="peak to peak, unguided")
    periodic_error_period_s: float = Field(default=480.0, gt=0)
    pointing_error_arcsec: float = Field(default=60.0, ge=0)
    settle_s: float = Field(default=5.0, ge=0)
    slew_deg_s: float = Field(default=2.0, gt=0)
    min_altitude_deg: float = Field(default=5.0, ge=-5, le=90)
    max_altitude_deg: float = Field(default=90.0, ge=0, le=90)
    meridian_flip: bool = Field(default=True, description="equatorial: must turn over past the meridian")
    meridian_limit_deg: float = Field(
        default=5.0, ge=0, le=90, description="hour angle it tracks to before it must flip"
    )
    flip_s: float = Field(default=180.0, ge=0, description="time of a flip, centring included")


class Guiding(Model):
    """What keeps the mount on target."""

    on: Literal["none", "star", "sun", "moon"] = "none"
    error_arcsec: float = Field(default=1.0, ge=0, description="rms while guiding")


class Power(Model):
    """Where the current comes from; without a battery the mains are assumed."""

    battery_wh: float | None = Field(default=None, gt=0)
    draw_w: float = Field(default=20.0, ge=0, description="mount, camera and computer together")
    dew_heater_w: float = Field(default=0.0, ge=0)


class Clock(Model):
    """What stamps the frames."""

    source: str = "computer"
    sigma_s: float = Field(default=0.5, gt=0)


class Rig(Model):
    """A camera, its optics and its mount."""

    name: str
    sensor: Sensor
    optics: Optics
    mount: Mount = Mount()
    guiding: Guiding = Guiding()
    filters: list[Filter] = []
    solar_filter: SolarFilter | None = None
    filter_change_s: float = Field(default=10.0, ge=0)
    refocus_s: float = Field(default=60.0, ge=0)
    clock: Clock = Clock()
    camera_angle_deg: float = Field(
        default=0.0,
        ge=-360,
        le=360,
        description="of the frame's up direction, counted like a position angle: from north on an equatorial mount, "
        "from the zenith on an alt-azimuth mount and a tripod",
    )
    mirrored: bool = False
    storage_gb: float = Field(default=64.0, gt=0)
    power: Power = Power()

    @property
    def scale_arcsec_px(self) -> float:
        """Scale in the middle of the field."""
        return 206264.806 * self.sensor.pixel_um * 1e-3 / (self.optics.focal_length_mm * self.optics.reducer)


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
    notes: list[str] = []


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


class Wish(Model):
    """What the pictures are for; everything here has a sensible default."""

    filter: str | None = Field(default=None, description="one of the rig's filters; default: the rig's first")
    exposure_s: float | None = Field(default=None, gt=0, description="default: from the brightness")
    gain: float | None = Field(default=None, ge=0, description="default: chosen among the sensor's gains")
    well_fraction: float = Field(default=0.5, gt=0, lt=1, description="peak signal over saturation")
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
        default=None, ge=0, description="electrons expected there, at the middle of the shot"
    )
    trail_px: float | None = Field(default=None, ge=0, description="longest trail expected in a frame")


class Passage(Model):
    """A stretch of a plan with one purpose, in which the camera has one aim.

    `aim`: what the middle of the frame follows: a disc of the geometry (`sun`, `moon`, `mars`), `field` with
    `aim_ra_deg`, `aim_dec_deg` (ICRS), or `ground` with `aim_altitude_deg`, `aim_azimuth_deg`, which follows nothing.
    """

    name: str
    purpose: str
    visit: int | None = None
    aim: str
    aim_ra_deg: float | None = None
    aim_dec_deg: float | None = None
    aim_altitude_deg: float | None = None
    aim_azimuth_deg: float | None = None
    flipped: bool = Field(default=False, description="past the meridian flip: the camera is upside down")
    stars_expected: int | None = Field(
        default=None, description="stars in the frame good enough for a plate solution"
    )
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
    steps: list[Step] = []
    calibration: list[CalibrationSet] = []
    track: list[PredictedPoint]
    frames_total: int
    storage_gb: float
    assumptions: list[str] = []
    findings: list[Finding] = []
    cautions: list[str] = []
    provenance: dict[str, str]
