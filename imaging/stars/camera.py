"""The camera as physics has it: an orientation, a focal length, an optical axis, and a smooth distortion.

Pixels map to the tangent plane as in the SIP convention (Shupe et al. 2005, ASP Conf. 347, 491): u, v are offsets
from the optical axis in pixels, `u + sum a_pq u^p v^q` is the ideal plane, so that a fitted camera is written as
TAN-SIP without loss. Every distortion term has a prior width (a fraction of the frame, not zero), so few stars
leave them near zero, or near a lens learned before, and the covariance says what is not known.
"""

from __future__ import annotations

from dataclasses import dataclass, replace
from functools import cached_property, lru_cache
from typing import TYPE_CHECKING

import numpy as np

if TYPE_CHECKING:
    from astropy.wcs import WCS

ARCSEC_RAD = 206264.80624709636
AFFINE_PRIOR = 1.5e-3  # differential refraction, aberration and sensor tilt (common practice, no source)
AXIS_PRIOR = 0.02  # optical axis off the middle, in half-diagonals (common practice, no source)
RADIAL_PRIOR = {3: 1.2e-2, 5: 4e-3}  # radial displacement of the corner in half-diagonals, by order
OTHER_PRIOR = {2: 4e-4, 3: 4e-4, 4: 2e-4, 5: 2e-4}  # what is not radial: decentred or tilted elements


@dataclass(frozen=True)
class Camera:
    """Orientation and optics of one frame.

    `axes` (3, 3): rows are the ICRS unit vectors of the array's +x, of its +y, and of the optical axis.
    `focal_px`: focal length in pixels. `axis_x_px`, `axis_y_px`: where the optical axis meets the sensor.
    `terms`: exponents (p, q) of the distortion; `coefficients` (2, n): of u and v, with u and v in half-diagonals.
    `projection`: `TAN`, or `ARC` for fisheyes (equidistant). `half_diagonal_px` scales the terms.
    """

    axes: np.ndarray
    focal_px: float
    axis_x_px: float
    axis_y_px: float
    half_diagonal_px: float
    terms: tuple[tuple[int, int], ...] = ()
    coefficients: np.ndarray | None = None
    projection: str = "TAN"

    @property
    def parity(self) -> int:
        """+1 as the sky is seen in a FITS array, -1 when mirrored (DEVELOPERS.md, Orientation)."""
        return -1 if np.linalg.det(self.axes) > 0 else 1

    @property
    def scale_arcsec_px(self) -> float:
        """Scale on the optical axis."""
        return ARCSEC_RAD / self.focal_px

    def ideal(self, x_px: np.ndarray, y_px: np.ndarray) -> tuple[np.ndarray, np.ndarray]:
        """Return the undistorted offsets from the optical axis, in pixels."""
        u, v = np.asarray(x_px) - self.axis_x_px, np.asarray(y_px) - self.axis_y_px
        if not self.terms or self.coefficients is None:
            return u, v
        basis = monomials(u / self.half_diagonal_px, v / self.half_diagonal_px, self.terms)
        shift = self.half_diagonal_px * (self.coefficients @ basis)
        return u + shift[0], v + shift[1]

    def vectors(self, x_px: np.ndarray, y_px: np.ndarray) -> np.ndarray:
        """Return ICRS unit vectors (n, 3) of pixels."""
        return unproject(*self.ideal(x_px, y_px), self.focal_px, self.projection) @ self.axes

    def pixels(self, vectors: np.ndarray) -> tuple[np.ndarray, np.ndarray]:
        """Return pixels of ICRS unit vectors (n, 3); NaN for what lies behind the camera."""
        ideal_u, ideal_v = project(vectors @ self.axes.T, self.focal_px, self.projection)
        u, v = ideal_u, ideal_v
        if self.terms and self.coefficients is not None:
            far = 1.5 * self.half_diagonal_px
            with np.errstate(invalid="ignore"):
                beyond = ~(np.hypot(u, v) < far)  # there the polynomial means nothing
            ideal_u, ideal_v = np.where(beyond, np.nan, ideal_u), np.where(beyond, np.nan, ideal_v)
            u, v = ideal_u, ideal_v
            for _ in range(12):  # fixed point: the distortion is small and smooth
                x, y = self.ideal(u + self.axis_x_px, v + self.axis_y_px)
                du, dv = ideal_u - x, ideal_v - y
                u, v = np.clip(u + du, -2 * far, 2 * far), np.clip(v + dv, -2 * far, 2 * far)
                if np.nanmax(np.abs(du), initial=0) < 1e-4 and np.nanmax(np.abs(dv), initial=0) < 1e-4:
                    break
        return u + self.axis_x_px, v + self.axis_y_px


def monomials(u: np.ndarray, v: np.ndarray, terms: tuple[tuple[int, int], ...]) -> np.ndarray:
    """Return u^p v^q of every term, (terms, n)."""
    p, q = _exponents(terms)
    top = int(max(p.max(initial=0), q.max(initial=0)))
    return _powers(u, top)[p] * _powers(v, top)[q]


@lru_cache(maxsize=32)
def _exponents(terms: tuple[tuple[int, int], ...]) -> tuple[np.ndarray, np.ndarray]:
    table = np.array(terms, dtype=int).reshape(len(terms), 2)
    return table[:, 0], table[:, 1]


def _powers(base: np.ndarray, top: int) -> np.ndarray:
    out = np.empty((top + 1, *np.shape(base)))
    out[0] = 1.0
    for n in range(top):
        np.multiply(out[n], base, out=out[n + 1])
    return out


def unproject(
    u: np.ndarray, v: np.ndarray, focal_px: float | np.ndarray, projection: str = "TAN"
) -> np.ndarray:
    """Return unit vectors (n, 3) in camera axes of ideal offsets from the optical axis."""
    radius = np.hypot(u, v)
    theta = np.arctan(radius / focal_px) if projection == "TAN" else np.minimum(radius / focal_px, np.pi)
    factor = np.sinc(theta / np.pi) / focal_px if projection != "TAN" else np.cos(theta) / focal_px
    return np.stack([u * factor, v * factor, np.cos(theta)], axis=-1)


def project(vectors: np.ndarray, focal_px: float, projection: str = "TAN") -> tuple[np.ndarray, np.ndarray]:
    """Return ideal offsets of unit vectors (n, 3) in camera axes; NaN beyond 85 (TAN) or 175 degrees (ARC)."""
    x, y, z = vectors[..., 0], vectors[..., 1], vectors[..., 2]
    with np.errstate(divide="ignore", invalid="ignore"):
        if projection == "TAN":
            factor = np.where(z > 0.087, focal_px / z, np.nan)
        else:
            across = np.hypot(x, y)
            theta = np.arctan2(across, z)
            factor = np.where(theta < 3.05, focal_px * np.where(across > 1e-12, theta / across, 1.0), np.nan)
        return x * factor, y * factor


@dataclass(frozen=True)
class CameraFit:
    """A fitted camera, the covariance of its parameters, and what is needed to carry it to a place.

    Parameters: rotation (3, rad, about the camera's axes), ln focal length, axis (2, half-diagonals), distortion of u
    then v. `covariance` is scaled by `sigma_model_px`, the fitted scatter that the stated errors do not explain.
    """

    camera: Camera
    covariance: np.ndarray
    sigma_model_px: float
    residual_px: np.ndarray
    weight: np.ndarray

    def covariance_at(self, x_px: np.ndarray, y_px: np.ndarray) -> np.ndarray:
        """Return the (n, 2, 2) covariance in px^2 of where the camera puts a direction seen near these pixels."""
        vectors = self.camera.vectors(x_px, y_px)
        _, jacobian = linearised(self.camera, np.asarray(x_px, float), np.asarray(y_px, float), vectors)
        carried = jacobian.reshape(-1, jacobian.shape[2]) @ self.covariance
        return carried.reshape(jacobian.shape) @ jacobian.transpose(0, 2, 1)


@dataclass(frozen=True, eq=False)
class Lens:
    """What is known of a rig's optics before a frame is fitted: expected values and their widths.

    `axis`, `axis_sigma` in half-diagonals off the middle; `coefficients` (2, terms) and their `covariance`, with those
    of u before those of v.
    """

    terms: tuple[tuple[int, int], ...]
    coefficients: np.ndarray
    covariance: np.ndarray
    axis: np.ndarray
    axis_sigma: np.ndarray
    projection: str = "TAN"

    @cached_property
    def precision(self) -> np.ndarray:
        """The inverse covariance of all parameters of a fit; orientation and focal length are free."""
        size = 6 + 2 * len(self.terms)
        precision = np.zeros((size, size))
        precision[range(4), range(4)] = [1e-12, 1e-12, 1e-12, 1e-4]
        precision[[4, 5], [4, 5]] = 1 / np.maximum(self.axis_sigma, 1e-9) ** 2
        precision[6:, 6:] = np.linalg.inv(self.covariance)
        return precision


def radial_direction(terms: tuple[tuple[int, int], ...]) -> dict[int, np.ndarray]:
    """Return what u (u^2 + v^2)^((n - 1) / 2) and its like in v are in coefficients, by order n."""
    found = {}
    for n, pattern in ((3, (1, 1)), (5, (1, 2, 1))):
        if (n, 0) not in terms:
            continue
        direction = np.zeros(2 * len(terms))
        for k, factor in enumerate(pattern):
            direction[terms.index((n - 2 * k, 2 * k))] = factor
            direction[len(terms) + terms.index((2 * k, n - 2 * k))] = factor
        found[n] = direction
    return found


@lru_cache(maxsize=16)
def unknown_lens(order: int, projection: str = "TAN") -> Lens:
    """Return the prior of a lens never seen before, with distortion terms up to `order` (1 to 5).

    Lenses are round: radial distortion (r^3, r^5) is wide, everything else narrow.
    """
    terms = tuple((p, n - p) for n in range(1, order + 1) for p in range(n, -1, -1))
    count = len(terms)
    width = np.array([AFFINE_PRIOR if p + q == 1 else OTHER_PRIOR[p + q] for p, q in terms])
    covariance = np.diag(np.concatenate([width, width]) ** 2)
    for n, direction in radial_direction(terms).items():
        covariance += RADIAL_PRIOR[n] ** 2 * np.outer(direction, direction)
    return Lens(terms, np.zeros((2, count)), covariance, np.zeros(2), np.full(2, AXIS_PRIOR), projection)


def is_unknown(lens: Lens) -> bool:
    """Say whether this is the prior of a lens never seen before."""
    return any(lens is unknown_lens(order, lens.projection) for order in range(1, 6))


def order_for(stars: int) -> int:
    """Return the order of distortion that this many stars support."""
    return 3 if stars < 80 else 4 if stars < 250 else 5


def fit_camera(
    start: Camera,
    lens: Lens,
    x_px: np.ndarray,
    y_px: np.ndarray,
    vectors: np.ndarray,
    sigma_px: np.ndarray,
    shape: tuple[int, int],
    robust: bool = True,
    iterations: int = 8,
) -> CameraFit:
    """Return the most probable camera of matched stars.

    Iterated linear least squares with the lens as prior; outliers weigh as in Student's t of 4 degrees of freedom
    (Lange, Little & Taylor 1989). The scatter beyond the stated errors is fitted as `sigma_model_px`.
    """
    height, width = shape
    half = start.half_diagonal_px
    middle = np.array([(width - 1) / 2, (height - 1) / 2])
    terms = lens.terms
    coefficients = lens.coefficients.copy()
    for i, term in enumerate(start.terms):
        if term in terms and start.coefficients is not None:
            coefficients[:, terms.index(term)] = start.coefficients[:, i]
    camera = replace(start, terms=terms, coefficients=coefficients, projection=lens.projection)
    if not start.terms:
        x, y = middle + lens.axis * half
        camera = replace(camera, axis_x_px=float(x), axis_y_px=float(y))
    count = len(x_px)
    sigma_model, weight = 0.0, np.ones(count)
    prior = lens.precision
    robust = robust and count >= _ROBUST_STARS
    for iteration in range(iterations):
        residual, jacobian = linearised(camera, x_px, y_px, vectors)
        # a start without terms is a guess, whose residuals say nothing
        if robust and (iteration or start.terms):
            sigma_model = _extra_scatter(residual, sigma_px)
            weight = 6.0 / (4.0 + (residual**2).sum(axis=1) / (sigma_px**2 + sigma_model**2))
        root = np.sqrt(weight / (sigma_px**2 + sigma_model**2))[:, None, None]
        scaled = (jacobian * root).reshape(2 * count, -1)
        normal = scaled.T @ scaled + prior
        now = np.zeros(len(prior))
        now[4] = (camera.axis_x_px - middle[0]) / half - lens.axis[0]
        now[5] = (camera.axis_y_px - middle[1]) / half - lens.axis[1]
        now[6:] = (np.asarray(camera.coefficients) - lens.coefficients).ravel()
        right = scaled.T @ (residual * root[:, :, 0]).ravel()
        step = np.linalg.solve(normal, right - prior @ now)
        camera = stepped(camera, step)
        if iteration >= 2 and np.abs(step[3:]).max() < 1e-7:
            break
    residual = _residual(camera, x_px, y_px, vectors)
    if robust:
        sigma_model = _extra_scatter(residual, sigma_px)
    return CameraFit(camera, np.linalg.inv(normal), sigma_model, residual, weight)


_ROBUST_STARS = 6
_SCATTER_PX = np.concatenate([[0.0], np.geomspace(0.003, 10.0, 33)])
_SCATTER_PRIOR_PX = 0.1


def _extra_scatter(residual: np.ndarray, sigma_px: np.ndarray) -> float:
    """Return the scatter to add in quadrature so that the residuals are as large as their errors.

    The most probable one if each residual is Student's t of 4 degrees with its own stated error: a few stars whose
    motion is unknown do not spoil the weight of those that are known.
    """
    count = len(sigma_px)
    dof = max(2 * count - 4, 1) / (2 * count)
    chosen = slice(None, None, max(1, count // 400))
    r2 = (residual[chosen] ** 2).sum(axis=1) / dof
    variance = sigma_px[chosen] ** 2 + _SCATTER_PX[:, None] ** 2
    likely = -(np.log(variance) + 3 * np.log1p(r2 / (4 * variance))).sum(axis=1)
    likely -= np.log1p((_SCATTER_PX / _SCATTER_PRIOR_PX) ** 2)
    return float(_SCATTER_PX[likely.argmax()])


def _residual(camera: Camera, x_px: np.ndarray, y_px: np.ndarray, vectors: np.ndarray) -> np.ndarray:
    u, v = camera.ideal(x_px, y_px)
    pu, pv = project(vectors @ camera.axes.T, camera.focal_px, camera.projection)
    return np.stack([pu - u, pv - v], axis=-1)


def linearised(
    camera: Camera, x_px: np.ndarray, y_px: np.ndarray, vectors: np.ndarray
) -> tuple[np.ndarray, np.ndarray]:
    """Return projected direction minus ideal pixel (n, 2), and minus its derivatives (n, 2, parameters)."""
    half, focal = camera.half_diagonal_px, camera.focal_px
    cam = vectors @ camera.axes.T
    pu, pv = project(cam, focal, camera.projection)
    terms = len(camera.terms)
    out = np.zeros((len(pu), 2, 6 + 2 * terms))
    if camera.projection == "TAN":
        a, b = pu / focal, pv / focal
        out[:, 0, 0], out[:, 1, 0] = pu * b, focal + pv * b
        out[:, 0, 1], out[:, 1, 1] = -focal - pu * a, -pu * b
        out[:, 0, 2], out[:, 1, 2] = pv, -pu
    else:
        eps = 1e-6
        for axis in range(3):  # numerical: exact for every projection
            turn = np.zeros(3)
            turn[axis] = eps
            du, dv = project(cam + np.cross(turn, cam), focal, camera.projection)
            out[:, 0, axis], out[:, 1, axis] = -(du - pu) / eps, -(dv - pv) / eps
    out[:, 0, 3], out[:, 1, 3] = -pu, -pv
    out[:, 0, 4] = out[:, 1, 5] = -half
    u_px, v_px = x_px - camera.axis_x_px, y_px - camera.axis_y_px
    if not terms:
        return np.stack([pu - u_px, pv - v_px], axis=-1), out
    p, q = _exponents(camera.terms)
    top = int(max(p.max(), q.max()))
    power_u, power_v = _powers(u_px / half, top), _powers(v_px / half, top)
    basis = half * power_u[p] * power_v[q]
    coefficients = np.asarray(camera.coefficients)
    # moving the axis moves the distortion along with it
    by_u = p[:, None] * power_u[np.maximum(p - 1, 0)] * power_v[q]
    by_v = q[:, None] * power_u[p] * power_v[np.maximum(q - 1, 0)]
    out[:, :, 4] -= half * (coefficients @ by_u).T
    out[:, :, 5] -= half * (coefficients @ by_v).T
    out[:, 0, 6 : 6 + terms] = basis.T
    out[:, 1, 6 + terms :] = basis.T
    shift = coefficients @ basis
    return np.stack([pu - u_px - shift[0], pv - v_px - shift[1]], axis=-1), out


def stepped(camera: Camera, step: np.ndarray) -> Camera:
    """Return the camera with a step of its parameters added."""
    from scipy.spatial.transform import Rotation

    turn = Rotation.from_rotvec(step[:3]).as_matrix()
    terms = len(camera.terms)
    half = camera.half_diagonal_px
    return replace(
        camera,
        axes=turn @ camera.axes,
        focal_px=camera.focal_px * float(np.exp(np.clip(step[3], -0.3, 0.3))),
        axis_x_px=camera.axis_x_px + half * step[4],
        axis_y_px=camera.axis_y_px + half * step[5],
        coefficients=np.asarray(camera.coefficients) + step[6:].reshape(2, terms),
    )


def to_wcs(camera: Camera, width_px: int, height_px: int) -> WCS:
    """Return the camera as an astropy WCS: TAN or ARC, with SIP and fitted inverse terms where it distorts.

    Linear distortion goes into the CD matrix. The inverse is fitted on a grid to below 0.01 px.
    """
    from astropy.wcs import WCS, Sip

    pole = camera.axes[2]
    ra, dec = np.arctan2(pole[1], pole[0]), np.arcsin(np.clip(pole[2], -1, 1))
    east = np.array([-np.sin(ra), np.cos(ra), 0.0])
    north = np.array([-np.sin(dec) * np.cos(ra), -np.sin(dec) * np.sin(ra), np.cos(dec)])
    turn = np.array(
        [[camera.axes[0] @ east, camera.axes[1] @ east], [camera.axes[0] @ north, camera.axes[1] @ north]]
    )
    coefficients = camera.coefficients if camera.terms else None
    linear = np.eye(2)
    if coefficients is not None:
        for i, (p, q) in enumerate(camera.terms):
            if p + q == 1:
                linear[:, 0 if p else 1] += coefficients[:, i]
    wcs = WCS(naxis=2)
    wcs.wcs.ctype = [f"RA---{camera.projection}", f"DEC--{camera.projection}"]
    wcs.wcs.cunit = ["deg", "deg"]
    wcs.wcs.crpix = [camera.axis_x_px + 1, camera.axis_y_px + 1]
    wcs.wcs.crval = [np.degrees(ra) % 360, np.degrees(dec)]
    wcs.wcs.cd = np.degrees(turn @ linear / camera.focal_px)
    wcs.wcs.radesys = "ICRS"
    wcs.pixel_shape = (width_px, height_px)
    higher = [(i, p, q) for i, (p, q) in enumerate(camera.terms) if p + q >= 2]
    if higher and coefficients is not None:
        order = max(p + q for _, p, q in higher)
        half = camera.half_diagonal_px
        forward = np.zeros((2, order + 1, order + 1))
        inverse_linear = np.linalg.inv(linear)
        for i, p, q in higher:
            forward[:, p, q] = inverse_linear @ coefficients[:, i] * half ** (1 - p - q)
        wcs.wcs.ctype = [name + "-SIP" for name in wcs.wcs.ctype]
        axis = camera.axis_x_px, camera.axis_y_px
        back = inverse_sip(forward, order, axis, half, (width_px, height_px))
        wcs.sip = Sip(forward[0], forward[1], back[0], back[1], wcs.wcs.crpix)
    wcs.wcs.set()
    return wcs


def inverse_sip(
    forward: np.ndarray,
    order: int,
    axis_px: tuple[float, float],
    half_diagonal_px: float,
    size_px: tuple[int, int],
) -> np.ndarray:
    """Return the inverse terms (2, n, n) of forward SIP terms up to an order, fitted on a grid over the frame."""
    top = min(order + 2, 9)
    x, y = np.meshgrid(np.linspace(0, size_px[0] - 1, 31), np.linspace(0, size_px[1] - 1, 31))
    u, v = x.ravel() - axis_px[0], y.ravel() - axis_px[1]
    terms = tuple((p, q) for p in range(order + 1) for q in range(order + 1 - p) if p + q >= 2)
    shift = np.array([[forward[axis, p, q] for p, q in terms] for axis in (0, 1)]) @ monomials(u, v, terms)
    back_terms = tuple((p, q) for p in range(top + 1) for q in range(top + 1 - p) if p + q >= 1)
    half = half_diagonal_px
    basis = monomials((u + shift[0]) / half, (v + shift[1]) / half, back_terms)
    found = np.linalg.lstsq(basis.T, -shift.T, rcond=None)[0].T
    back = np.zeros((2, top + 1, top + 1))
    for i, (p, q) in enumerate(back_terms):
        back[:, p, q] = found[:, i] * half ** (-p - q)
    return back
