"""One camera: image size, intrinsic matrix and lens model; where points fall and along which rays pixels look.

Pixel (0, 0) is the centre of the top-left pixel. Camera axes: x right, y down, z forward.

The pinhole model with 0, 4, 5, 8, 12 or 14 distortion coefficients is Brown's (1966, radial and decentring) with the
rational, thin-prism and tilt terms in the order and with the signs that OpenCV documents for ``calibrateCamera``; the
fisheye model is the equidistant one with four coefficients of Kannala and Brandt (2006).
"""

from __future__ import annotations

from dataclasses import dataclass, field
from functools import cached_property
from typing import Literal, get_args

import numpy as np
from numpy.typing import ArrayLike, NDArray

from .errors import CalibrationError

FloatArray = NDArray[np.float64]
LensModel = Literal["pinhole", "fisheye"]

COEFFICIENT_COUNTS: dict[str, tuple[int, ...]] = {"pinhole": (0, 4, 5, 8, 12, 14), "fisheye": (0, 4)}

_NEWTON_STEPS = 50
_NEWTON_TOLERANCE = 1e-12
"""Step in normalised coordinates at which the inverse lens model has settled: far below any pixel."""

_FIELD_SAMPLES = 2048


def frozen_array(value: ArrayLike, shape: tuple[int, ...], name: str) -> FloatArray:
    """Copy to a read-only float64 array of the given shape; refuse other shapes and non-finite values."""
    try:
        array = np.array(value, dtype=np.float64)
    except (TypeError, ValueError) as exc:
        raise CalibrationError(f"{name} is {value!r}, which is no array of numbers; expected shape {shape}") from exc
    if array.shape != shape:
        raise CalibrationError(f"{name} has shape {array.shape}; expected {shape}")
    if not np.isfinite(array).all():
        raise CalibrationError(f"{name} holds {array[~np.isfinite(array)][0]}; expected finite numbers only")
    array.setflags(write=False)
    return array


@dataclass(frozen=True, eq=False, kw_only=True)
class Camera:
    """Intrinsics of one camera at one image size.

    Parameters
    ----------
    width, height : int
        Image size in pixels.
    K : array_like of shape (3, 3)
        Intrinsic matrix in pixels, zero skew, last row (0, 0, 1).
    distortion : array_like of shape (n,)
        Lens coefficients in OpenCV's order; n is 0, 4, 5, 8, 12 or 14 for ``pinhole``, 0 or 4 for ``fisheye``.
    model : {"pinhole", "fisheye"}
        Lens model.

    Raises
    ------
    CalibrationError
        Where a value is out of the range that the model allows.
    """

    width: int
    height: int
    K: FloatArray
    distortion: FloatArray = field(default_factory=lambda: np.zeros(0))
    model: LensModel = "pinhole"

    def __post_init__(self) -> None:
        for name in ("width", "height"):
            value = getattr(self, name)
            if isinstance(value, bool) or not isinstance(value, (int, np.integer)) or value < 1:
                raise CalibrationError(f"camera {name} is {value!r}; expected a whole number of pixels, 1 or more")
            object.__setattr__(self, name, int(value))
        if self.model not in get_args(LensModel):
            raise CalibrationError(f"lens model is {self.model!r}; expected one of {', '.join(get_args(LensModel))}")
        object.__setattr__(self, "K", frozen_array(self.K, (3, 3), "intrinsic matrix K"))
        if self.K[0, 0] <= 0 or self.K[1, 1] <= 0 or not np.array_equal(self.K[2], (0, 0, 1)):
            raise CalibrationError(
                f"intrinsic matrix K is {self.K.tolist()}; expected positive focal lengths and a last row of 0 0 1"
            )
        if self.K[0, 1] != 0 or self.K[1, 0] != 0:
            raise CalibrationError(f"intrinsic matrix K has skew {self.K[0, 1]}, {self.K[1, 0]}; expected 0, 0")
        count = np.size(self.distortion)
        if count not in COEFFICIENT_COUNTS[self.model]:
            allowed = ", ".join(map(str, COEFFICIENT_COUNTS[self.model]))
            raise CalibrationError(f"{count} distortion coefficients for the {self.model} model; expected {allowed}")
        flat = frozen_array(np.reshape(self.distortion, -1), (count,), "distortion")
        object.__setattr__(self, "distortion", flat)

    @property
    def size(self) -> tuple[int, int]:
        """Image size (width, height) in pixels."""
        return self.width, self.height

    @property
    def focal_px(self) -> float:
        """Mean of the two focal lengths, in pixels."""
        return float(self.K[0, 0] + self.K[1, 1]) / 2

    def project(self, points: ArrayLike) -> FloatArray:
        """Project points of the camera frame into the image.

        Parameters
        ----------
        points : array_like of shape (N, 3)
            Points before the camera, in metres (any unit will do).

        Returns
        -------
        ndarray of shape (N, 2)
            Pixels; NaN for points behind the camera and for those outside the cone in which the lens model is
            one to one, where a polynomial would fold a far-off point back into the picture.
        """
        xyz = np.asarray(points, dtype=np.float64).reshape(-1, 3)
        normalised = np.full((len(xyz), 2), np.nan)
        if self.model == "fisheye":
            radius = np.hypot(xyz[:, 0], xyz[:, 1])
            theta = np.arctan2(radius, xyz[:, 2])
            seen = theta <= self.field_limit
            scale = np.where(radius > 0, _theta_distorted(theta, self.distortion) / np.maximum(radius, 1e-300), 0.0)
            normalised[seen] = xyz[seen, :2] * scale[seen, None]
        else:
            ahead = xyz[:, 2] > 0
            flat = xyz[ahead, :2] / xyz[ahead, 2:]
            inside = np.einsum("ij,ij->i", flat, flat) <= self.field_limit**2
            flat[~inside] = np.nan
            normalised[ahead] = _distort(flat, self.distortion)
        pixels: FloatArray = normalised @ self.K[:2, :2].T + self.K[:2, 2]
        return pixels

    def undistort(self, pixels: ArrayLike) -> FloatArray:
        """Take pixels to normalised, undistorted image coordinates (x/z, y/z).

        Parameters
        ----------
        pixels : array_like of shape (N, 2)

        Returns
        -------
        ndarray of shape (N, 2)
            Without unit; NaN where no ray of the lens model falls on the pixel, or for a fisheye where the ray does not
            lead forward.
        """
        rays = self.rays(pixels)
        with np.errstate(divide="ignore", invalid="ignore"):
            flat: FloatArray = np.where(rays[:, 2:] > 0, rays[:, :2] / rays[:, 2:], np.nan)
        return flat

    def rays(self, pixels: ArrayLike) -> FloatArray:
        """Give the unit vector in the camera frame along which each pixel looks.

        Parameters
        ----------
        pixels : array_like of shape (N, 2)

        Returns
        -------
        ndarray of shape (N, 3)
            Unit vectors; NaN where no ray of the lens model falls on the pixel.
        """
        distorted = (np.asarray(pixels, dtype=np.float64).reshape(-1, 2) - self.K[:2, 2]) / np.diag(self.K)[:2]
        if self.model == "fisheye":
            return _fisheye_rays(distorted, self.distortion, self.field_limit)
        flat = _invert_distortion(distorted, self.distortion)
        flat[np.einsum("ij,ij->i", flat, flat) > self.field_limit**2] = np.nan
        rays = np.column_stack([flat, np.ones(len(flat))])
        units: FloatArray = rays / np.linalg.norm(rays, axis=1, keepdims=True)
        return units

    @cached_property
    def field_limit(self) -> float:
        """Where the radial lens model stops being one to one.

        For ``pinhole`` the largest undistorted radius x/z up to which the distorted radius still grows; for
        ``fisheye`` the largest angle from the axis, in radians. Infinite, or pi, where it always grows.
        """
        if self.model == "fisheye":
            theta = np.linspace(0.0, np.pi, _FIELD_SAMPLES)
            return _end_of_growth(theta, _theta_distorted(theta, self.distortion), beyond=np.pi)
        # tan of 89 degrees: no pinhole lens reaches further
        radius = np.tan(np.linspace(0.0, np.deg2rad(89.0), _FIELD_SAMPLES))
        return _end_of_growth(radius, radius * _radial_factor(radius**2, self.distortion), beyond=np.inf)

    def border_pixels(self, per_side: int = 33) -> FloatArray:
        """Give pixels evenly spaced along the image border, shape (4 * per_side, 2)."""
        x = np.linspace(-0.5, self.width - 0.5, per_side)
        y = np.linspace(-0.5, self.height - 0.5, per_side)
        sides = [(x, np.full_like(x, y[0])), (x, np.full_like(x, y[-1]))]
        sides += [(np.full_like(y, x[0]), y), (np.full_like(y, x[-1]), y)]
        return np.concatenate([np.column_stack(side) for side in sides])

    def grid_pixels(self, columns: int = 49, rows: int = 37) -> FloatArray:
        """Give pixels on a regular grid from edge to edge of the image, shape (columns * rows, 2)."""
        x, y = np.meshgrid(np.linspace(-0.5, self.width - 0.5, columns), np.linspace(-0.5, self.height - 0.5, rows))
        return np.column_stack([x.ravel(), y.ravel()])

    def contains(self, pixels: FloatArray) -> NDArray[np.bool_]:
        """Tell which pixels, shape (N, 2), lie inside the image; NaN does not."""
        x, y = pixels[:, 0], pixels[:, 1]
        return (x >= -0.5) & (x <= self.width - 0.5) & (y >= -0.5) & (y <= self.height - 0.5)


def _padded(distortion: FloatArray) -> FloatArray:
    """Give all 14 coefficients k1 k2 p1 p2 k3 k4 k5 k6 s1 s2 s3 s4 tx ty."""
    return np.concatenate([distortion, np.zeros(14 - len(distortion))])


def _radial_factor(r2: FloatArray, distortion: FloatArray) -> FloatArray:
    k1, k2, _, _, k3, k4, k5, k6 = _padded(distortion)[:8]
    with np.errstate(divide="ignore", invalid="ignore"):
        factor: FloatArray = (1 + r2 * (k1 + r2 * (k2 + r2 * k3))) / (1 + r2 * (k4 + r2 * (k5 + r2 * k6)))
    return factor


def _distort(flat: FloatArray, distortion: FloatArray) -> FloatArray:
    """Apply the pinhole lens model to normalised coordinates of shape (N, 2)."""
    if not distortion.any():
        return flat.copy()
    _, _, p1, p2, _, _, _, _, s1, s2, s3, s4, tau_x, tau_y = _padded(distortion)
    x, y = flat[:, 0], flat[:, 1]
    r2 = x * x + y * y
    radial = _radial_factor(r2, distortion)
    xd = x * radial + 2 * p1 * x * y + p2 * (r2 + 2 * x * x) + s1 * r2 + s2 * r2 * r2
    yd = y * radial + p1 * (r2 + 2 * y * y) + 2 * p2 * x * y + s3 * r2 + s4 * r2 * r2
    if tau_x or tau_y:
        xd, yd = _tilt(xd, yd, tau_x, tau_y)
    return np.column_stack([xd, yd])


def _tilt(x: FloatArray, y: FloatArray, tau_x: float, tau_y: float) -> tuple[FloatArray, FloatArray]:
    """Apply the tilted-sensor homography (Louhichi et al. 2007), as OpenCV writes it."""
    cx, sx, cy, sy = np.cos(tau_x), np.sin(tau_x), np.cos(tau_y), np.sin(tau_y)
    turn = np.array([[cy, 0, -sy], [0, 1, 0], [sy, 0, cy]]) @ np.array([[1, 0, 0], [0, cx, sx], [0, -sx, cx]])
    onto = np.array([[turn[2, 2], 0, -turn[0, 2]], [0, turn[2, 2], -turn[1, 2]], [0, 0, 1]])
    u, v, w = onto @ turn @ np.vstack([x, y, np.ones_like(x)])
    return u / w, v / w


def _invert_distortion(distorted: FloatArray, distortion: FloatArray) -> FloatArray:
    """Undo :func:`_distort` by Newton's method with a difference Jacobian; NaN where it does not settle."""
    if not distortion.any():
        return distorted.copy()
    flat = distorted.copy()
    h = 1e-7
    dx, dy = np.array([h, 0.0]), np.array([0.0, h])
    with np.errstate(all="ignore"):
        for _ in range(_NEWTON_STEPS):
            error = _distort(flat, distortion) - distorted
            jx = (_distort(flat + dx, distortion) - _distort(flat - dx, distortion)) / (2 * h)
            jy = (_distort(flat + dy, distortion) - _distort(flat - dy, distortion)) / (2 * h)
            det = jx[:, 0] * jy[:, 1] - jx[:, 1] * jy[:, 0]
            step = np.column_stack(
                [
                    (jy[:, 1] * error[:, 0] - jy[:, 0] * error[:, 1]) / det,
                    (jx[:, 0] * error[:, 1] - jx[:, 1] * error[:, 0]) / det,
                ]
            )
            flat = flat - step
            size = np.abs(step).max(axis=1, initial=0.0)
            if not (size > _NEWTON_TOLERANCE).any():
                break
        # The last step's size and the forward model both have to agree, else a far root could pass for an answer.
        settled = (size < 1e-9) & (np.abs(_distort(flat, distortion) - distorted).max(axis=1, initial=0.0) < 1e-9)
    flat[~settled] = np.nan
    return flat


def _theta_distorted(theta: FloatArray, distortion: FloatArray) -> FloatArray:
    """Kannala and Brandt (2006), eq. 6 with the first factor 1: the distorted angle."""
    k = np.concatenate([distortion, np.zeros(4 - len(distortion))])
    t2 = theta * theta
    result: FloatArray = theta * (1 + t2 * (k[0] + t2 * (k[1] + t2 * (k[2] + t2 * k[3]))))
    return result


def _fisheye_rays(distorted: FloatArray, distortion: FloatArray, limit: float) -> FloatArray:
    """Undo the fisheye model: a table of the growing part of the angle gives the start, Newton the rest."""
    radius = np.hypot(distorted[:, 0], distorted[:, 1])
    table = np.linspace(0.0, limit, _FIELD_SAMPLES)
    reach = _theta_distorted(table, distortion)
    theta = np.interp(radius, reach, table, right=np.nan)
    h = 1e-7
    for _ in range(5):
        slope = (_theta_distorted(theta + h, distortion) - _theta_distorted(theta - h, distortion)) / (2 * h)
        theta = theta - (_theta_distorted(theta, distortion) - radius) / slope
    with np.errstate(divide="ignore", invalid="ignore"):
        direction = np.where(radius[:, None] > 0, distorted / radius[:, None], 0.0)
    return np.column_stack([direction * np.sin(theta)[:, None], np.cos(theta)])


def _end_of_growth(x: FloatArray, y: FloatArray, *, beyond: float) -> float:
    """Find the first x at which the sampled y stops growing; ``beyond`` where it never does."""
    falls = np.flatnonzero(~(np.diff(y) > 0))
    return float(x[falls[0]]) if len(falls) else beyond
