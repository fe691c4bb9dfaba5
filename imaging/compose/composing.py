"""From a plan and its track to the files a client sees: picture, path plots, statement of truth."""

from __future__ import annotations

from dataclasses import dataclass, replace
from pathlib import Path
from typing import Any

import numpy as np

from imaging.compose import files, truth
from imaging.compose.arc import Landscape, arc_over_landscape
from imaging.compose.choices import Choices
from imaging.compose.disc_path import disc_path
from imaging.compose.light import Light
from imaging.compose.material import Material
from imaging.compose.page import write_page
from imaging.compose.palette import DARK, LIGHT
from imaging.compose.pathdata import PathData
from imaging.compose.pathplot import write_path_plot
from imaging.compose.phase_series import phase_series
from imaging.compose.picture import Picture
from imaging.compose.sky_path import sky_path
from imaging.compose.sky_series import sky_series
from imaging.compose.stretch import Stretch, measured_stretch
from imaging.compose.two_sites import two_sites
from planner.errors import InputError
from planner.outputs import refuse_existing

PICTURE_FORMATS = ("fits", "tiff", "png", "jpg")


@dataclass(frozen=True)
class Outputs:
    """Where results go and in which formats."""

    folder: Path
    picture_formats: tuple[str, ...] = ("fits", "png")
    plot_formats: tuple[str, ...] = ("png", "svg")
    linear: bool = False
    caption: bool = True
    page: bool = True
    dpi: int = 300
    force: bool = False

    def picture(self, suffix: str) -> Path:
        """Return the path of the composite in a format."""
        return self.folder / f"composite.{suffix}"

    def plot(self, version: str, suffix: str) -> Path:
        """Return the path of a path plot."""
        return self.folder / f"path_{version}.{suffix}"

    @property
    def statement(self) -> Path:
        """The path of the statement of truth."""
        return self.folder / "composite.truth.json"

    @property
    def html(self) -> Path:
        """The path of the interactive page."""
        return self.folder / "composite.html"

    def refuse_existing(self) -> None:
        """Refuse, before any work, what would overwrite a file; raises OutputExistsError."""
        for suffix in self.picture_formats:
            refuse_existing(self.picture(suffix), self.force)
        for suffix in self.plot_formats:
            for version in ("light", "dark"):
                refuse_existing(self.plot(version, suffix), self.force)
        refuse_existing(self.statement, self.force)
        if self.page:
            refuse_existing(self.html, self.force)


def compose_picture(
    material: Material, choices: Choices, other: Material | None = None, landscape: Landscape | None = None
) -> Picture:
    """Return the composite that suits the event, or the registration the user chose; raises InputError.

    `other`: the same event from a second site, laid into the first one's picture. `landscape`: what to lay a campaign's
    target over.
    """
    registration = material.reference if choices.registration == "auto" else choices.registration
    light = Light(
        colour=choices.colour,
        ringless=registration == "stars" or landscape is not None,
        threads=choices.threads,
        calibration=choices.calibration,
        calibrated=material.plan.rig.name,
    )
    picture = _picture(material, registration, choices, light, other, landscape)
    if choices.calibration is not None:
        used = ", ".join(f"{name} ({what})" for name, what in choices.calibration.provenance().items())
        picture = replace(picture, notes=(f"frames were calibrated: {used}", *picture.notes))
    if len(light.filters) > 1:
        mixed = f"frames through different filters ({', '.join(sorted(light.filters))}) are combined as one"
        picture = replace(picture, notes=(*picture.notes, mixed))
    return picture


def _picture(
    material: Material,
    registration: str,
    choices: Choices,
    light: Light,
    other: Material | None,
    landscape: Landscape | None,
) -> Picture:
    if landscape is not None:
        return arc_over_landscape(material, landscape, choices, light)
    if registration == "target":
        return phase_series(material, choices, light)
    if registration == "stars" and material.reference != "stars":
        return sky_series(material, choices, light)
    if registration == "stars":
        return sky_path(material, choices, light)
    if registration != material.reference:
        raise InputError(
            f"--register: found {registration!r}; this event can be registered on "
            f"{' or '.join(dict.fromkeys((material.reference, 'stars', 'target')))}"
        )
    if other is not None:
        return two_sites(material, other, choices, light)
    return disc_path(material, choices, light)


def write_picture(
    material: Material, picture: Picture, outputs: Outputs, data: PathData | None = None
) -> tuple[list[Path], dict[str, Any]]:
    """Write the composite in its formats and the statement of truth; returns the paths and the statement.

    With the path plot's `data`, and where the path can be drawn on the picture, the interactive page too.
    """
    stretch: Stretch = measured_stretch(
        picture.image, "linear" if outputs.linear else picture.tone, picture.faintest_peak()
    )
    statement = truth.statement(material, picture, stretch.sentence())
    caption = truth.caption(material, picture)
    statement["caption"] = caption
    written = []
    has_sky = bool(np.isfinite(picture.anchor_ra_deg))
    tones = files.tones(picture, stretch)
    for suffix in outputs.picture_formats:
        path = outputs.picture(suffix)
        if suffix == "fits":
            files.write_fits(path, picture, statement, outputs.force)
        elif suffix in ("tif", "tiff"):
            files.write_tiff(path, tones, stretch, caption, outputs.force)
        else:
            shown = tones
            if outputs.caption:
                shown = files.captioned(
                    files.labelled(tones, picture.labels),
                    caption,
                    picture.canvas.up_pa_deg if has_sky else None,
                    picture.canvas.scale_arcsec_px,
                )
            files.write_raster(path, shown, stretch, material.plan.title, caption, outputs.force)
        written.append(path)
    if outputs.page and data is not None and picture.holds_path_about(data.on_disc):
        write_page(outputs.html, material, picture, tones, data, caption, outputs.force)
        written.append(outputs.html)
    truth.write_statement(outputs.statement, statement, outputs.force)
    return [*written, outputs.statement], statement


def write_plots(data: PathData, outputs: Outputs) -> list[Path]:
    """Write the path plots, light and dark, in their formats."""
    written = []
    for suffix in outputs.plot_formats:
        for version, palette in (("light", LIGHT), ("dark", DARK)):
            path = outputs.plot(version, suffix)
            write_path_plot(path, data, palette, outputs.force, outputs.dpi)
            written.append(path)
    return written
