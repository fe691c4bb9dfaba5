"""From linear light to what a screen or a press shows: a stretch that is measured on the picture, not fixed."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

SKY_ABOVE_BLACK = 6.0  # sigmas of the background: grain stays quiet, also where fewer frames reach
SKY_TONE = 0.10  # of 0 (black) to 1 (white): a dark grey, so that faint stars have a ground to stand on
WHITE_TONE = 0.97
FAINT_TONE = 0.45  # where the faintest body that must be seen goes


@dataclass(frozen=True)
class Stretch:
    """How values become tones between 0 and 1.

    `kind`: `linear` (tones proportional to light), `srgb` (proportional, then encoded as sRGB does) or `asinh`
    (inverse hyperbolic sine of Lupton et al. 1999, AJ 118, 1406, already a display tone). `softening`: value above
    black where the curve turns from linear to logarithmic.
    """

    kind: str
    black: float
    white: float
    softening: float = 1.0

    def tones(self, image: np.ndarray) -> np.ndarray:
        """Return display tones in 0..1, float32; where the picture is empty (NaN) the tone is 0."""
        value = np.nan_to_num(np.asarray(image, np.float32), nan=self.black)
        share = np.clip((value - self.black) / (self.white - self.black), 0.0, 1.0)
        if self.kind == "asinh":
            steep = (self.white - self.black) / self.softening
            return (np.arcsinh(share * steep) / np.arcsinh(steep)).astype(np.float32)
        return srgb_encoded(share) if self.kind == "srgb" else share.astype(np.float32)

    def sentence(self) -> str:
        """Return what was done, for the statement of truth."""
        how = {
            "linear": "tones proportional to light",
            "srgb": "tones proportional to light, sRGB encoded",
            "asinh": f"inverse hyperbolic sine, softening {self.softening:.4g}",
        }[self.kind]
        return f"{how}, black at {self.black:.6g}, white at {self.white:.6g}"


def srgb_encoded(light: np.ndarray) -> np.ndarray:
    """Return sRGB tones of linear light in 0..1 (IEC 61966-2-1)."""
    light = np.asarray(light, np.float32)
    return np.where(light <= 0.0031308, 12.92 * light, 1.055 * np.maximum(light, 1e-9) ** (1 / 2.4) - 0.055)


def background(image: np.ndarray) -> tuple[float, float]:
    """Return the background's level and noise: median and spread, clipped at 2.5 sigma until it settles."""
    values = _sample(image)
    center, sigma = float(np.median(values)), float(np.std(values))
    for _ in range(20):
        kept = values[np.abs(values - center) < 2.5 * sigma] if sigma > 0 else values
        if kept.size < 16:
            break
        before = sigma
        center, sigma = float(np.median(kept)), float(1.4826 * np.median(np.abs(kept - np.median(kept))))
        if abs(sigma - before) < 1e-3 * before:
            break
    return center, sigma


def measured_stretch(image: np.ndarray, tone: str, faintest: float = np.inf) -> Stretch:
    """Return the stretch for a picture, measured on it.

    `tone`: `stars`: the background goes to a dark grey, the brightest pixels (0.05 %) to white. `merged`: the same, but
    the brightest pixel of all to white. `disc`: what lies off the disc goes to black, the brightest hundredth of the
    disc to just under white; where a body of peak value `faintest` would be lost beside it, the curve bends until it is
    seen. `photograph` keeps its own tones. `linear`: tones proportional to light.
    """
    values = _sample(image)
    if not values.size:
        return Stretch("linear", 0.0, 1.0)
    top = float(np.percentile(values, 99.95 if tone in ("stars", "merged") else 99.98))
    level, sigma = background(image)
    if tone == "photograph":
        return Stretch("srgb", 0.0, 1.0)
    if tone == "linear":
        return Stretch("linear", min(0.0, float(values.min())), max(float(values.max()), 1e-6))
    if tone == "disc":
        black = _sky_beside(values, top)
        half = black + 0.25 * (top - black)
        lit = values[values > half]
        bright = float(np.percentile(lit, 99.0)) if lit.size else top
        white = black + (bright - black) / _light_of(WHITE_TONE)
        white = max(white, black + 1e-6)
        share = (faintest - black) / (white - black)
        if not 0 < share < _light_of(FAINT_TONE):
            return Stretch("srgb", black, white)
        return Stretch("asinh", black, white, _softening(faintest - black, white - black, FAINT_TONE))
    black = level - SKY_ABOVE_BLACK * max(sigma, 1e-6 * abs(level), 1e-9)
    # what short exposures kept from burning out must not burn out in the tones
    bright = float(np.nanmax(image)) if tone == "merged" else top
    white = max(bright, level + 50 * max(sigma, 1e-9))
    return Stretch("asinh", black, white, _softening(level - black, white - black))


def _sky_beside(values: np.ndarray, top: float) -> float:
    """Return the level of the sky beside a disc: where the darkest tenth of the tones crowds."""
    low = float(np.percentile(values, 1.0))
    dark = values[values < low + 0.05 * (top - low)]
    return float(np.median(dark)) if dark.size > 100 else low


def _softening(value: float, span: float, wanted: float = SKY_TONE) -> float:
    """Return the softening that gives a value this tone; the curve is monotonic in it."""
    low, high = value * 1e-3, span * 1e3
    for _ in range(80):
        middle = np.sqrt(low * high)
        tone = np.arcsinh(value / middle) / np.arcsinh(span / middle)
        low, high = (middle, high) if tone > wanted else (low, middle)
    return float(np.sqrt(low * high))


def _light_of(tone: float) -> float:
    return ((tone + 0.055) / 1.055) ** 2.4


def _sample(image: np.ndarray) -> np.ndarray:
    plane = image.mean(axis=2) if image.ndim == 3 else image
    step = max(1, int(np.sqrt(plane.size / 2_000_000)))
    values = plane[::step, ::step]
    return values[np.isfinite(values)]
