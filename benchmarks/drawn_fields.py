"""Star fields drawn from the catalogue with the nuisances of real frames, and their truth.

Shares no code with the solver: the projection below is its own (gnomonic or equidistant, radial distortion, optical
axis off the middle). What is drawn, field by field: colour term and scatter of magnitudes, errors of catalogue
positions as the star list states them, blends, stars fainter than the catalogue, distortion of up to 1 % in the corner,
vignetting and a gradient (both shift the limiting magnitude), hot pixels, three bright planets, clouds.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

TT_S = 27.0 * 365.25 * 86400.0  # 2027.0


@dataclass(frozen=True)
class DrawnRig:
    name: str
    focal_mm: float
    width_px: int
    height_px: int
    pixel_um: float
    limit_mag: float

    @property
    def focal_px(self) -> float:
        return self.focal_mm * 1e3 / self.pixel_um

    @property
    def scale_arcsec_px(self) -> float:
        return 206264.806 / self.focal_px


# limiting magnitudes: a few seconds to a minute under a dark sky (common practice, no source)
RIGS = {
    "35 mm, 36x24": DrawnRig("35 mm, 36x24", 35, 6000, 4000, 6.0, 10.5),
    "135 mm, 36x24": DrawnRig("135 mm, 36x24", 135, 6000, 4000, 6.0, 12.0),
    "400 mm, 36x24": DrawnRig("400 mm, 36x24", 400, 6000, 4000, 6.0, 13.0),
    "1000 mm, 36x24": DrawnRig("1000 mm, 36x24", 1000, 6000, 4000, 6.0, 14.0),
    "1000 mm, APS-C": DrawnRig("1000 mm, APS-C", 1000, 6240, 4160, 3.76, 14.0),
}


@dataclass(frozen=True)
class DrawnField:
    """Detections (brightest first) and truth; `catalogue_seen` counts detections that the catalogue holds."""

    x_px: np.ndarray
    y_px: np.ndarray
    flux_adu: np.ndarray
    sigma_px: np.ndarray
    width_px: int
    height_px: int
    axes: np.ndarray
    focal_px: float
    axis_px: tuple[float, float]
    k1: float
    catalogue_seen: int
    parity: int

    def pixels(self, vectors: np.ndarray) -> tuple[np.ndarray, np.ndarray]:
        return _pixels(vectors, self.axes, self.focal_px, self.axis_px, self.k1, self.half)

    @property
    def half(self) -> float:
        return float(np.hypot(self.width_px, self.height_px) / 2)

    @property
    def center(self) -> np.ndarray:
        """ICRS unit vector of the middle of the frame (by bisection of its own projection: a few Newton steps)."""
        x0, y0 = (self.width_px - 1) / 2, (self.height_px - 1) / 2
        vector = self.axes[2].copy()
        for _ in range(20):
            x, y = self.pixels(vector[None])
            vector = vector + ((x0 - x[0]) * self.axes[0] + (y0 - y[0]) * self.axes[1]) / self.focal_px
            vector /= np.linalg.norm(vector)
        return vector


def draw(
    rig: DrawnRig,
    rng: np.random.Generator,
    clouded: bool = False,
    parity: int | None = None,
    optics: tuple[float, tuple[float, float], float] | None = None,
) -> DrawnField:
    """Draw one field anywhere on the sky; `optics` (k1, axis, focal length in px) holds the lens of a rig."""
    from planner.sky.stars import all_stars

    stars = _stars(all_stars)
    half = float(np.hypot(rig.width_px, rig.height_px) / 2)
    axes = random_axes(rng, parity)
    focal = rig.focal_px * (1 + rng.uniform(-0.002, 0.002))
    axis = (
        (rig.width_px - 1) / 2 + rng.normal(0, 0.005) * half,
        (rig.height_px - 1) / 2 + rng.normal(0, 0.005) * half,
    )
    k1 = rng.uniform(-0.01, 0.01)
    if optics is not None:
        k1, axis, focal = optics
    radius = np.arctan(half / focal) * 1.1
    inside = np.flatnonzero(stars["vectors"] @ axes[2] > np.cos(radius))
    vectors = stars["vectors"][inside]
    sigma_rad = stars["sigma_mas"][inside] / 206264806.0
    true = vectors + rng.normal(size=vectors.shape) * sigma_rad[:, None]
    true /= np.linalg.norm(true, axis=1)[:, None]
    x, y = _pixels(true, axes, focal, axis, k1, half)
    colour = np.nan_to_num(stars["bp_rp"][inside], nan=0.8) - 0.8
    magnitude = (
        stars["magnitude"][inside] + rng.uniform(-0.4, 0.6) * colour + rng.normal(0, 0.12, len(inside))
    )
    known = np.ones(len(inside), dtype=bool)
    # stars that the catalogue lacks: counts grow 2.5 times a magnitude (Allen's Astrophysical Quantities, from memory)
    on = (x > 0) & (x < rig.width_px) & (y > 0) & (y < rig.height_px)
    number = min(rng.poisson(max(on.sum(), 3) * (2.5 ** max(rig.limit_mag - 10.0, 0) - 1)), 4500)
    bright, dim = 2.5**10.0, 2.5 ** max(rig.limit_mag, 10.0)
    faint = np.log(bright + rng.random(number) * (dim - bright)) / np.log(2.5)
    x, y = (
        np.append(x, rng.uniform(0, rig.width_px, number)),
        np.append(y, rng.uniform(0, rig.height_px, number)),
    )
    magnitude, known = np.append(magnitude, faint), np.append(known, np.zeros(number, bool))
    on = (x > 3) & (x < rig.width_px - 4) & (y > 3) & (y < rig.height_px - 4)
    x, y, magnitude, known = x[on], y[on], magnitude[on], known[on]
    # vignetting and a gradient of the sky move the limit
    r2 = ((x - axis[0]) ** 2 + (y - axis[1]) ** 2) / half**2
    slope = rng.uniform(0, 0.8)
    limit = rig.limit_mag - 0.6 * r2 - slope * x / rig.width_px
    seen = magnitude < limit
    if clouded:
        share = rng.uniform(0.5, 0.7)
        seen &= _cloud(rng, x, y, rig, share)
    x, y, magnitude, known, limit = x[seen], y[seen], magnitude[seen], known[seen], limit[seen]
    x, y, magnitude, known, limit = _blended(x, y, magnitude, known, limit)
    sigma = np.clip(0.15 * 10 ** (0.4 * (magnitude - limit)), 0.02, 0.3)
    sigma = np.where(magnitude < limit - 8.5, 0.1, sigma)  # saturated
    catalogue_seen = int(known.sum())
    extra = rng.integers(10, 40)  # hot pixels
    planets = 3
    x = np.concatenate(
        [x + rng.normal(0, 1, len(x)) * sigma, rng.uniform(5, rig.width_px - 5, extra + planets)]
    )
    y = np.concatenate(
        [y + rng.normal(0, 1, len(y)) * sigma, rng.uniform(5, rig.height_px - 5, extra + planets)]
    )
    magnitude = np.concatenate([magnitude, rng.uniform(4, rig.limit_mag, extra), rng.uniform(-2, 3, planets)])
    sigma = np.concatenate([sigma, np.full(extra, 0.02), np.full(planets, 0.1)])
    order = np.argsort(magnitude)[:5000]
    flux = 10 ** (-0.4 * (magnitude - 20))
    return DrawnField(
        x[order], y[order], flux[order], sigma[order], rig.width_px, rig.height_px, axes, focal, axis, k1,
        catalogue_seen, -1 if np.linalg.det(axes) > 0 else 1,
    )  # fmt: skip


def detections_of(field: DrawnField):
    """Return the field as the detector would hand it over."""
    from imaging.stars.detection import Detections

    count = len(field.x_px)
    return Detections(
        field.x_px, field.y_px, field.flux_adu, np.full(count, 20.0), field.sigma_px, field.sigma_px,
        np.zeros(count), np.full(count, 2.5), np.ones(count), np.zeros(count, bool),
        field.width_px, field.height_px, 2.5, 1.0,
    )  # fmt: skip


def model_error_px(solution, field: DrawnField) -> tuple[float, float]:
    """Return median and largest distance (px) between solution and truth over a grid of the frame."""
    x, y = np.meshgrid(np.linspace(0, field.width_px - 1, 12), np.linspace(0, field.height_px - 1, 9))
    ra, dec = solution.pixel_to_sky(x.ravel(), y.ravel())
    ra, dec = np.radians(ra), np.radians(dec)
    vectors = np.column_stack([np.cos(dec) * np.cos(ra), np.cos(dec) * np.sin(ra), np.sin(dec)])
    true_x, true_y = field.pixels(vectors)
    away = np.hypot(true_x - x.ravel(), true_y - y.ravel())
    away = np.where(np.isfinite(away), away, 1e6)
    return float(np.median(away)), float(away.max())


def random_axes(rng: np.random.Generator, parity: int | None = None) -> np.ndarray:
    from scipy.spatial.transform import Rotation

    axes = Rotation.random(random_state=rng).as_matrix()
    parity = rng.choice([-1, 1]) if parity is None else parity
    if parity == 1:
        axes[0] = -axes[0]  # left-handed: the sky as seen
    return axes


def _pixels(vectors, axes, focal, axis, k1, half):
    """Gnomonic, then ideal radius = observed radius times (1 + k1 (r / half)^2), solved for the observed radius."""
    x, y, z = (vectors @ axes.T).T
    with np.errstate(divide="ignore", invalid="ignore"):
        u, v = np.where(z > 0.1, focal * x / z, np.nan), np.where(z > 0.1, focal * y / z, np.nan)
    ideal = np.hypot(u, v)
    radius = ideal.copy()
    for _ in range(8):  # Newton
        radius -= (radius * (1 + k1 * (radius / half) ** 2) - ideal) / (1 + 3 * k1 * (radius / half) ** 2)
    with np.errstate(divide="ignore", invalid="ignore"):
        factor = np.where(ideal > 0, radius / ideal, 1.0)
    return axis[0] + u * factor, axis[1] + v * factor


def _cloud(rng, x, y, rig, share):
    """Keep 1 - share of the stars: at random, or where a smooth random field is thin."""
    if rng.random() < 0.5:
        return rng.random(len(x)) > share
    waves = np.zeros(len(x))
    for _ in range(6):
        kx, ky = rng.normal(0, 2.5, 2)
        waves += np.sin(
            2 * np.pi * (kx * x / rig.width_px + ky * y / rig.height_px) + rng.uniform(0, 2 * np.pi)
        )
    waves += rng.normal(0, 0.7, len(x))
    return waves > np.quantile(waves, share) if len(x) else np.zeros(0, bool)


def _blended(x, y, magnitude, known, limit, reach_px=2.5):
    """Merge stars closer than the profile separates: light added, place weighted by light."""
    from scipy.spatial import cKDTree

    if len(x) < 2:
        return x, y, magnitude, known, limit
    x, y, magnitude = x.copy(), y.copy(), magnitude.copy()
    keep = np.ones(len(x), dtype=bool)
    for i, j in cKDTree(np.column_stack([x, y])).query_pairs(reach_px):
        if not (keep[i] and keep[j]):
            continue
        i, j = (i, j) if magnitude[i] <= magnitude[j] else (j, i)
        share = 10 ** (-0.4 * (magnitude[j] - magnitude[i]))
        x[i], y[i] = (x[i] + share * x[j]) / (1 + share), (y[i] + share * y[j]) / (1 + share)
        magnitude[i] -= 2.5 * np.log10(1 + share)
        keep[j] = False
    return x[keep], y[keep], magnitude[keep], known[keep], limit[keep]


_CACHE: dict[str, np.ndarray] = {}


def _stars(all_stars):
    if not _CACHE:
        stars = all_stars(TT_S)
        ra, dec = np.radians(stars.ra_deg), np.radians(stars.dec_deg)
        _CACHE["vectors"] = np.column_stack([np.cos(dec) * np.cos(ra), np.cos(dec) * np.sin(ra), np.sin(dec)])
        _CACHE["magnitude"] = stars.magnitude
        _CACHE["sigma_mas"] = np.asarray(stars.sigma_mas)
        _CACHE["bp_rp"] = np.asarray(stars.bp_rp)
    return _CACHE
