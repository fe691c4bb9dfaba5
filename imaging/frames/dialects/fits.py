"""FITS: images, planes of cubes, tile compression, any BITPIX, blanks; keywords of the standard and of its dialects."""

from __future__ import annotations

import warnings
from collections.abc import Iterator
from pathlib import Path
from typing import Any

import numpy as np

from imaging.frames.frame import Frame
from imaging.frames.reading import ReadOptions, check_size
from imaging.frames.times import NoTimeError, exposure_s, time_from_fits, time_of_fits_plane
from planner.errors import FrameSetAside

_BAYER = ("BAYERPAT", "COLORTYP", "CFA-PAT", "MOSAIC")
_PATTERNS = ("RGGB", "BGGR", "GRBG", "GBRG")


def recognises(head: bytes, path: Path) -> bool:
    """Say whether the file begins as FITS does (also inside gzip)."""
    if head[:2] == b"\x1f\x8b":
        import gzip

        try:
            with gzip.open(path, "rb") as file:
                head = file.read(32)
        except OSError:
            return False
    return head.startswith(b"SIMPLE  =")


def count(path: Path) -> int:
    """Return how many planes the first image of the file has."""
    with warnings.catch_warnings():
        warnings.simplefilter("ignore")
        from astropy.io import fits

        with fits.open(path, memmap=False) as hdus:
            hdu = _first_image(path, hdus)
            return (
                int(np.prod(hdu.shape[:-2], dtype=int)) if len(hdu.shape) > 2 and not _is_colour(hdu) else 1
            )


def frames(path: Path, options: ReadOptions, start: int = 0, stop: int | None = None) -> Iterator[Frame]:
    """Yield the planes of the first image of the file."""
    from astropy.io import fits
    from astropy.utils.exceptions import AstropyWarning

    with warnings.catch_warnings():
        warnings.simplefilter("ignore", AstropyWarning)
        warnings.simplefilter("ignore", UserWarning)
        with fits.open(path, memmap=False) as hdus:
            hdu = _first_image(path, hdus)
            header = _merged(hdus, hdu)
            shape = hdu.shape
            check_size(path, shape[-1], shape[-2])
            _check_length(path, hdu)
            if len(shape) == 2:
                if start == 0:
                    yield _frame(path, _plane(hdu, ...), header, options, 0, 1)
            elif _is_colour(hdu):
                if start == 0:
                    yield _frame(
                        path, np.stack([_plane(hdu, i) for i in range(3)], -1), header, options, 0, 1
                    )
            else:
                total = int(np.prod(shape[:-2], dtype=int))
                for index in range(start, total if stop is None else min(stop, total)):
                    at = np.unravel_index(index, shape[:-2])
                    yield _frame(path, _plane(hdu, at), header, options, index, total)


def _first_image(path: Path, hdus: Any) -> Any:
    for hdu in hdus:
        if getattr(hdu, "is_image", False) and len(hdu.shape) >= 2 and min(hdu.shape[-2:]) > 0:
            return hdu
        if type(hdu).__name__ == "CompImageHDU" and len(hdu.shape) >= 2:
            return hdu
    raise FrameSetAside(path, "is FITS but holds no image of two dimensions")


def _is_colour(hdu: Any) -> bool:
    return (
        len(hdu.shape) == 3
        and hdu.shape[0] == 3
        and not hdu.header.get("CTYPE3", "").startswith(("TIME", "UTC"))
    )


def _merged(hdus: Any, hdu: Any) -> Any:
    """Return the image's header, with what only the primary header tells (times of compressed files)."""
    header = hdu.header.copy()
    if hdu is not hdus[0]:
        header.extend(hdus[0].header, unique=True, strip=True)
    return header


def _check_length(path: Path, hdu: Any) -> None:
    """Refuse a file shorter than its header says, before the missing pixels are touched."""
    if type(hdu).__name__ == "CompImageHDU" or path.suffix.lower() == ".gz":
        return
    header = hdu.header
    need = abs(int(header["BITPIX"])) // 8 * int(np.prod(hdu.shape, dtype=np.int64))
    info = hdu.fileinfo()
    have = path.stat().st_size - (info["datLoc"] if info else 0)
    if have < need:
        raise FrameSetAside(
            path, f"is cut short: its header promises {need} bytes of pixels, {max(have, 0)} are there"
        )


def _plane(hdu: Any, at: Any) -> np.ndarray:
    """Return one plane as float32; blank integers become NaN. `section` reads that plane alone."""
    return np.array(hdu.section[at if at is not ... else (slice(None), slice(None))], dtype=np.float32)


def _frame(path: Path, plane: np.ndarray, header: Any, options: ReadOptions, index: int, total: int) -> Frame:
    time, missing = None, None
    try:
        if total > 1:
            time = time_of_fits_plane(header, index, total, options.zone)
        else:
            time = time_from_fits(header, options.zone)
    except NoTimeError as error:
        missing = str(error)
    colour, mosaic, luminance = None, _mosaic(header), plane
    if plane.ndim == 3:
        colour, mosaic, luminance = (
            plane if options.colour else None,
            None,
            plane.mean(axis=-1, dtype=np.float32),
        )
    elif mosaic is not None and not options.as_recorded:
        from imaging.frames.mosaic import green_luminance, half_size_colour

        colour = half_size_colour(plane, mosaic) if options.colour else None
        luminance = green_luminance(plane, mosaic)
    return Frame(
        path=path,
        data=luminance,
        time=time,
        time_missing=missing,
        exposure_s=exposure_s(header),
        row_zero="top" if str(header.get("ROWORDER", "")).strip().upper() == "TOP-DOWN" else "bottom",
        colour=colour,
        mosaic=mosaic,
        binning=int(_float(header, "XBINNING") or 1),
        saturation_adu=_saturation(header),
        gain_e_adu=_positive(header, "EGAIN") or _positive(header, "GAIN_E"),
        read_noise_e=_positive(header, "RDNOISE") or _positive(header, "READNOIS"),
        camera=_text(header, "INSTRUME") or _text(header, "CAMERA"),
        filter=_text(header, "FILTER"),
        site=_site(header),
        scale_hint_arcsec_px=_scale(header),
        header={key: header[key] for key in header if key and key not in ("COMMENT", "HISTORY")},
        frame_index=index,
    )


def _saturation(header: Any) -> float | None:
    for key in ("SATURATE", "SATLEVEL", "DATAMAX"):
        value = _positive(header, key)
        if value is not None:
            return value
    bitpix = int(header.get("ZBITPIX", header.get("BITPIX", -32)))
    if bitpix == 16:
        return 65535.0 if float(header.get("BZERO", 0) or 0) == 32768 else 32767.0
    return 255.0 if bitpix == 8 else None


def _mosaic(header: Any) -> str | None:
    for key in _BAYER:
        text = str(header.get(key, "") or "").strip().upper()
        if text in _PATTERNS:
            x, y = int(_float(header, "XBAYROFF") or 0) % 2, int(_float(header, "YBAYROFF") or 0) % 2
            cells = [text[:2], text[2:]]
            return "".join(cells[(row + y) % 2][(column + x) % 2] for row in (0, 1) for column in (0, 1))
    return None


def _site(header: Any) -> tuple[float, float, float] | None:
    x, y, z = (_float(header, f"OBSGEO-{axis}") for axis in "XYZ")
    if x is not None and y is not None and z is not None and 6.2e6 < (x * x + y * y + z * z) ** 0.5 < 6.5e6:
        from astropy import units as u
        from astropy.coordinates import EarthLocation

        place = EarthLocation.from_geocentric(x, y, z, unit=u.m).to_geodetic("WGS84")
        return float(place.lat.deg), float(place.lon.deg), float(place.height.to_value(u.m))
    lat, lon, height = (_float(header, f"OBSGEO-{axis}") for axis in "BLH")
    if lat is None or lon is None:
        lat, lon = _sexagesimal(header.get("SITELAT")), _sexagesimal(header.get("SITELONG"))
        height = _float(header, "SITEELEV")
    if lat is None or lon is None or abs(lat) > 90 or abs(lon) > 360:
        return None
    return lat, lon, height or 0.0


def _scale(header: Any) -> float | None:
    for key in ("SCALE", "PIXSCALE", "SECPIX", "SECPIX1"):
        value = _positive(header, key)
        if value is not None and 1e-3 < value < 2000:
            return value
    focal, pixel = _positive(header, "FOCALLEN"), _positive(header, "XPIXSZ")
    return None if not focal or not pixel else 206264.806 * pixel * 1e-3 / focal


def _float(header: Any, key: str) -> float | None:
    try:
        value = float(header.get(key))
    except (TypeError, ValueError):
        return None
    return value if np.isfinite(value) else None


def _positive(header: Any, key: str) -> float | None:
    value = _float(header, key)
    return value if value is not None and value > 0 else None


def _sexagesimal(value: Any) -> float | None:
    try:
        return float(value)
    except (TypeError, ValueError):
        pass
    try:
        parts = [float(part) for part in str(value).replace(":", " ").split()]
    except ValueError:
        return None
    if not 1 <= len(parts) <= 3:
        return None
    size = abs(parts[0]) + sum(part / 60 ** (i + 1) for i, part in enumerate(parts[1:]))
    return -size if str(value).strip().startswith("-") else size


def _text(header: Any, key: str) -> str | None:
    text = str(header.get(key) or "").strip()
    return text or None
