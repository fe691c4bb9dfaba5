"""What a plan takes for granted: every value of site, rig and wish that the user did not give, and the models used."""

from __future__ import annotations

from pydantic import BaseModel

from planner.sequence.radiometry import BAYER_NM, UNFILTERED_NM
from planner.sequence.setting import Setting

_QUIET = {"horizon", "filters", "gains", "solar_filter", "mirrored", "guiding", "power", "bayer", "shutter"}


def assumptions_of(setting: Setting) -> list[str]:
    """Return one line for each part of site and rig with the values assumed, and one for each model."""
    lines = []
    rig = setting.rig
    parts = [
        ("site", setting.site),
        ("rig", rig),
        ("sensor", rig.sensor),
        ("optics", rig.optics),
        ("mount", rig.mount),
        ("clock", rig.clock),
    ]
    for name, part in parts:
        assumed = _defaults(part)
        if assumed:
            lines.append(f"{name}: not given, so assumed: {', '.join(assumed)}")
    if setting.through.name == "none":
        width = BAYER_NM if rig.sensor.bayer else UNFILTERED_NM
        lines.append(f"no filter: the sensor is taken to see {width:g} nm about 545 nm")
    lines.append(
        "exposures: V magnitude zero gives 996 photons a second in a square centimetre and an angstrom; "
        f"{setting.site.extinction_mag:g} mag an airmass are lost; "
        f"seeing {setting.site.seeing_arcsec:g} arcsec at the zenith"
    )
    if setting.family.reference == "stars":
        lines.append(
            "sky: dark-sky and moonlight model of Krisciunas & Schaefer 1991, twilight of Patat et al. 2006"
        )
    elif setting.rig.guiding.on == "none" and setting.rig.mount.kind != "fixed":
        disc = {"sun": "the Sun's limb", "moon": "the Moon's limb"}[setting.family.reference]
        lines.append(f"guiding: none; if any is used, guide on {disc}, not on a star")
    lines.append("storage: frames without compression, calibration frames included")
    return lines


def _defaults(part: BaseModel) -> list[str]:
    """Return `key value` for the plain values that a model has by default."""
    texts = []
    for name in type(part).model_fields:
        value = getattr(part, name)
        given = name in part.model_fields_set
        if given or name in _QUIET or value is None or isinstance(value, BaseModel | list | bool):
            continue
        texts.append(f"{name} {value:g}" if isinstance(value, float) else f"{name} {value}")
    return texts
