"""Pictures as files: FITS in linear light, TIFF, PNG and JPEG in tones, each with what is needed to trust it."""

from __future__ import annotations

import textwrap
from pathlib import Path
from typing import Any

import numpy as np

from imaging.compose.colourspace import profile
from imaging.compose.picture import Picture
from imaging.compose.stretch import Stretch
from planner.outputs import whole_file


def write_fits(path: Path, picture: Picture, truth: dict[str, Any], force: bool = False) -> None:
    """Write 32-bit linear light with WCS and provenance, and every frame used in a table extension (FITS 4.0).

    Colour pictures have three planes (red, green, blue) along the third axis.
    """
    from astropy.io import fits
    from astropy.table import Table

    data = picture.image if picture.image.ndim == 2 else np.moveaxis(picture.image, 2, 0)
    header = fits.Header()
    if np.isfinite(picture.anchor_ra_deg):
        header = picture.canvas.wcs_header(picture.anchor_ra_deg, picture.anchor_dec_deg)
    header["OBJECT"] = truth["title"][:68]
    header["DATE-OBS"] = (truth["frames"][0]["utc_mid"].rstrip("Z"), "mid-exposure of the first frame used")
    header["DATE-END"] = (truth["frames"][-1]["utc_mid"].rstrip("Z"), "mid-exposure of the last frame used")
    header["DATE-AVG"] = (truth["reference_utc"].rstrip("Z"), "instant the sky coordinates are for")
    header["TIMESYS"] = "UTC"
    header["NCOMBINE"] = (len(truth["frames"]), "frames used")
    header["REGISTER"] = (truth["registered_on"], "what frames were registered on")
    header["BLEND"] = truth["blend"]
    header["ENLARGE"] = (truth["enlargement"], "bodies are drawn this many times true size")
    largest = truth["largest_displacement_arcsec"]
    if largest is not None:
        header["MAXDISP"] = (largest, "[arcsec] largest drawn minus predicted")
    if truth["registration_error_arcsec"] is not None:
        header["REGERR"] = (
            truth["registration_error_arcsec"],
            "[arcsec] rms, an upper limit",
        )
    header["CREATOR"] = truth["provenance"]["syzygraph"]
    for key, value in truth["provenance"].items():
        header.add_history(f"{key}: {value}")
    for note in truth["notes"]:
        header.add_history(note)
    table = Table(rows=[{key: _cell(value) for key, value in row.items()} for row in truth["frames"]])
    frames = fits.table_to_hdu(table)
    frames.name = "FRAMES"
    hdus = fits.HDUList([fits.PrimaryHDU(data.astype(np.float32), header), frames])
    with whole_file(path, force) as part:
        hdus.writeto(part, overwrite=True, checksum=True)


def _cell(value: Any) -> Any:
    return float("nan") if value is None else value


def tones(picture: Picture, stretch: Stretch) -> np.ndarray:
    """Return display tones, float32 in 0..1, first row at the top as rasters have it."""
    return np.flip(stretch.tones(picture.image), axis=0)


def write_tiff(
    path: Path, image: np.ndarray, stretch: Stretch, description: str, force: bool = False
) -> None:
    """Write tones (first row at the top) as 16-bit TIFF, deflated, with a colour profile."""
    import tifffile

    colours = 3 if image.ndim == 3 else 1
    with whole_file(path, force) as part:
        tifffile.imwrite(
            part,
            np.round(image * 65535).astype(np.uint16),
            photometric="rgb" if colours == 3 else "minisblack",
            compression="zlib",
            predictor=True,
            iccprofile=profile(colours, stretch.kind == "linear"),
            description=_ascii(description),
            software="Syzygraph",
            metadata=None,
        )


def write_raster(
    path: Path, image: np.ndarray, stretch: Stretch, title: str, description: str, force: bool = False
) -> None:
    """Write tones (first row at the top) as PNG or JPEG by the suffix, 8 bits, with profile and caption inside."""
    from PIL import Image
    from PIL.PngImagePlugin import PngInfo

    pixels = np.round(image * 255).astype(np.uint8)
    icc = profile(3 if image.ndim == 3 else 1, stretch.kind == "linear")
    picture = Image.fromarray(np.ascontiguousarray(pixels))
    with whole_file(path, force) as part:
        if path.suffix.lower() == ".png":
            info = PngInfo()
            info.add_itxt("Title", title)
            info.add_itxt("Description", description)
            info.add_text("Software", "Syzygraph")
            picture.save(part, pnginfo=info, icc_profile=icc, optimize=False, compress_level=6)
        else:
            exif = Image.Exif()
            exif[0x010E] = _ascii(description)
            exif[0x0131] = "Syzygraph"
            picture.save(part, quality=94, subsampling=0, icc_profile=icc, exif=exif, optimize=True)


def _ascii(text: str) -> str:
    plain = text.replace("″", " arcsec").replace("′", " arcmin").replace("−", "-").replace("°", " deg")
    return plain.encode("ascii", "replace").decode()


def labelled(image: np.ndarray, labels: tuple[tuple[float, float, str], ...]) -> np.ndarray:
    """Return tones (first row at the top) with words in them, each centred on canvas pixels (x_px, y_px)."""
    if not labels:
        return image
    from PIL import Image, ImageDraw

    words = Image.new("L", (image.shape[1], image.shape[0]))
    draw, font = ImageDraw.Draw(words), _font(_type_size(image.shape[1]))
    for x_px, y_px, text in labels:
        draw.text((x_px, image.shape[0] - 1 - y_px), text, fill=255, font=font, anchor="mm")
    share = np.asarray(words, np.float32) / 255
    if image.ndim == 3:
        share = share[..., None]
    return np.asarray(image + share * (BRIGHT / 255 - image), np.float32)


def captioned(image: np.ndarray, caption: str, up_pa_deg: float | None, scale_arcsec_px: float) -> np.ndarray:
    """Return tones with a band below that holds the caption, north and east arrows, and a scale bar."""
    from PIL import Image, ImageDraw

    short = NARROWEST_PX - image.shape[1]
    if short > 0:  # room for words beside a small picture
        sides = ((0, 0), (short // 2, short - short // 2), *([(0, 0)] if image.ndim == 3 else []))
        image = np.pad(image, sides, constant_values=18 / 255)
    width = image.shape[1]
    size = _type_size(width)
    font = _font(size)
    length, label = round_length(0.22 * width * scale_arcsec_px)
    bar_px = length / scale_arcsec_px
    arrows_px = 0 if up_pa_deg is None else int(6.5 * size)  # a landscape and a sheet have no celestial north
    columns = max(20, int((width - bar_px - arrows_px - 4 * size) / (0.56 * size)))
    lines = textwrap.wrap(caption, columns)
    band = max(int((len(lines) + 1.4) * 1.35 * size), int(5.6 * size))
    strip = Image.new("L", (width, band), 18)
    draw = ImageDraw.Draw(strip)
    for number, line in enumerate(lines):
        draw.text((size, int((0.7 + 1.35 * number) * size)), line, fill=BRIGHT, font=font)
    if up_pa_deg is not None:
        _arrows(draw, font, width - 4.0 * size, band / 2, 1.7 * size, up_pa_deg)
    _scale_bar(draw, font, size, (width - arrows_px - size, band / 2 + 0.7 * size), bar_px, label)
    strip_array = np.asarray(strip, np.float32) / 255
    if image.ndim == 3:
        strip_array = np.repeat(strip_array[..., None], 3, axis=2)
    return np.concatenate([image, strip_array])


def _type_size(width: int) -> int:
    return max(11, min(round(width / 62), 44))


def _font(size: int) -> Any:
    from matplotlib import font_manager
    from PIL import ImageFont

    return ImageFont.truetype(font_manager.findfont("DejaVu Sans"), size)


def _arrows(draw: Any, font: Any, x: float, y: float, length: float, up_pa_deg: float) -> None:
    for label, pa in (("N", 0.0), ("E", 90.0)):
        angle = np.radians(pa - up_pa_deg)
        dx, dy = -np.sin(angle) * length, -np.cos(angle) * length
        draw.line([(x, y), (x + dx, y + dy)], fill=BRIGHT, width=max(1, int(length / 14)))
        draw.text((x + 1.42 * dx, y + 1.42 * dy), label, fill=BRIGHT, font=font, anchor="mm")


NARROWEST_PX = 480
BRIGHT = 225  # of 255: words and marks
ROUND_LENGTHS_ARCSEC = (
    0.1,
    0.2,
    0.5,
    1,
    2,
    5,
    10,
    20,
    30,
    60,
    120,
    300,
    600,
    1200,
    1800,
    3600,
    7200,
    18000,
    36000,
)


def round_length(arcsec: float) -> tuple[float, str]:
    """Return the largest round length not above `arcsec`, with its label."""
    best = max((value for value in ROUND_LENGTHS_ARCSEC if value <= arcsec), default=0.1)
    label = f"{best:g}″" if best < 60 else f"{best // 60}′" if best < 3600 else f"{best // 3600}°"
    return float(best), label


def _scale_bar(
    draw: Any, font: Any, size: int, right_end: tuple[float, float], length_px: float, label: str
) -> None:
    right, line = right_end
    draw.line([(right - length_px, line), (right, line)], fill=BRIGHT, width=max(1, size // 9))
    for x in (right - length_px, right):
        draw.line([(x, line - size // 3), (x, line + size // 3)], fill=BRIGHT, width=max(1, size // 9))
    draw.text((right - length_px / 2, line - size * 0.35), label, fill=BRIGHT, font=font, anchor="mb")
