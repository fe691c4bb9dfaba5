"""A place and the gear that stands there: site, sensor, optics, filters, mount, guiding, power, clock; the rig of them.

Units are in the keys; every value but the essential has a default, and a plan lists which defaults it assumed.
"""

from __future__ import annotations

import re
from typing import Annotated, Literal

from pydantic import AfterValidator, Field

from planner.sequence.strictmodel import Model


def _known_zone(name: str) -> str:
    from zoneinfo import ZoneInfo, ZoneInfoNotFoundError

    try:
        ZoneInfo(name)
    except (ZoneInfoNotFoundError, ValueError, OSError):
        raise ValueError("an IANA time zone is needed, such as Europe/Berlin or UTC") from None
    return name


def _offset_or_zone(name: str) -> str:
    if re.fullmatch(r"[+-]\d{1,2}(:?\d{2})?|Z|UTC", name.strip()):
        return name.strip()
    return _known_zone(name)


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
    rolling_from: Literal["top", "bottom"] = Field(
        default="top", description="edge of the picture, as it is looked at, whose row is exposed first"
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
    focus_offset_steps: int = Field(
        default=0, description="focuser steps from the focus of the rig's first filter"
    )
    refocus: bool = Field(
        default=False, description="whether it must be focused anew after each change to it"
    )


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
    faintest_mag: float = Field(default=9.0, ge=-2, le=16, description="V of the faintest star it holds")
    reach_deg: float = Field(
        default=0.5, gt=0, le=10, description="how far from the middle of the frame a guide star may stand"
    )


class Power(Model):
    """Where the current comes from; without a battery the mains are assumed."""

    battery_wh: float | None = Field(default=None, gt=0)
    draw_w: float = Field(default=20.0, ge=0, description="mount, camera and computer together")
    dew_heater_w: float = Field(default=0.0, ge=0)


class Clock(Model):
    """What stamps the frames."""

    source: str = "computer"
    sigma_s: float = Field(default=0.5, gt=0)
    zone: Annotated[str, AfterValidator(_offset_or_zone)] | None = Field(
        default=None, description="of stamps that name none: an offset such as +02:00, UTC, or an IANA name"
    )


class Rig(Model):
    """A camera, its optics and its mount."""

    name: str
    sensor: Sensor
    optics: Optics
    mount: Mount = Mount()
    guiding: Guiding = Guiding()
    filters: list[Filter] = Field(default=[])
    solar_filter: SolarFilter | None = None
    filter_change_s: float = Field(default=10.0, ge=0)
    focus_move_s: float = Field(default=2.0, ge=0, description="moving the focuser by a filter's offset")
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
    lens: str | None = Field(
        default=None,
        description="file of the lens that `solve --learn` learned; default: RIG.lens.yaml beside the rig",
    )
    catalogue: str | None = Field(
        default=None,
        description="file of a star catalogue deeper than the installed one, in the rig's folder",
    )

    @property
    def scale_arcsec_px(self) -> float:
        """Scale in the middle of the field."""
        return 206264.806 * self.sensor.pixel_um * 1e-3 / (self.optics.focal_length_mm * self.optics.reducer)

    def filter_step_s(self, before: str | None, after: str | None) -> float:
        """Return the time a change of filter takes: the wheel, the focuser's move, a new focus where one is stated."""
        if before == after:
            return 0.0
        known = {each.name: each for each in self.filters}
        offsets = [known[name].focus_offset_steps if name in known else 0 for name in (before, after)]
        fresh = after in known and known[after].refocus
        moved_s = self.refocus_s if fresh else self.focus_move_s if offsets[0] != offsets[1] else 0.0
        return self.filter_change_s + moved_s
