"""One camera: image size, intrinsic matrix and lens model; where points fall and along which rays pixels look.

Pixel (0, 0) is the centre of the top-left pixel. Camera axes: x right, y down, z forward.

The pinhole model with 0, 4, 5, 8, 12 or 14 distortion coefficients is Brown's (1966, radial and decentring) with the
rational, thin-prism and tilt terms in the order and with the signs that OpenCV documents for ``calibrateCamera``; the
fisheye model is the equidistant one with four coefficients of Kannala and Brandt (2006).
"""

from __future__ import annotations

import reprlib
from dataclasses import dataclass, field
from functools import cached_property
from typing import Any, Literal, get_args

import numpy as np
from numpy.polynomial import Polynomial
from numpy.typing import ArrayLike, NDArray

from .errors import CalibrationError

FloatArray = NDArray[np.float64]
LensModel = Literal["pinhole", "fisheye"]

COEFFICIENT_COUNTS: dict[str, tuple[int, ...]] = {"pinhole": (0, 4, 5, 8, 12, 14), "fisheye": (0, 4)}

_NEWTON_STEPS = 50
_NEWTON_TOLERANCE = 1e-12
"""Step in normalised coordinates at which the inverse lens model has settled: far below any pixel."""

_TABLE_LENGTH = 2048
"""Samples of the radial model from which the inverse takes its start."""

_quiet = np.errstate(all="ignore")
"""For arithmetic on points at infinity, at the camera or of no value: they come out as NaN, which is the answer."""

_WIDEST_PINHOLE = float(np.tan(np.deg2rad(89.0)))
"""Undistorted radius x/z that no pinhole lens passes."""


def numbers(value: Any, name: str) -> FloatArray:
    """Copy to a float64 array; refuse what holds anything but finite numbers, such as text or null from a file."""
    try:
        array = np.asarray(value)
    except ValueError as exc:
        raise CalibrationError(f"{name} is {reprlib.repr(value)}; expected rows of equal length") from exc
    if array.dtype.kind not in "iuf":
        raise CalibrationError(f"{name} is {reprlib.repr(value)}; expected numbers only")
    array = array.astype(np.float64)
    if not np.isfinite(array).all():
        raise CalibrationError(f"{name} holds {array[~np.isfinite(array)].flat[0]}; expected finite numbers only")
    return array


def frozen_array(value: Any, shape: tuple[int, ...], name: str) -> FloatArray:
    """Copy to a read-only float64 array of the given shape; refuse other shapes and non-finite values."""
    array = numbers(value, name)
    if array.shape != shape:
        raise CalibrationError(f"{name} has shape {array.shape}; expected {shape}")
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
        coefficients = numbers(self.distortion, "distortion").reshape(-1)
        count = len(coefficients)
        if count not in COEFFICIENT_COUNTS[self.model]:
            allowed = ", ".join(map(str, COEFFICIENT_COUNTS[self.model]))
            raise CalibrationError(f"{count} distortion coefficients for the {self.model} model; expected {allowed}")
        object.__setattr__(self, "distortion", frozen_array(coefficients, (count,), "distortion"))

    @property
    def size(self) -> tuple[int, int]:
        """Image size (width, height) in pixels."""
        return self.width, self.height

    @property
    def focal_px(self) -> float:
        """Mean of the two focal lengths, in pixels."""
        return float(self.K[0, 0] + self.K[1, 1]) / 2

    @_quiet
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
        xyz = _rows(points, 3, "points")
        normalised = np.full((len(xyz), 2), np.nan)
        if self.model == "fisheye":
            radius = np.hypot(xyz[:, 0], xyz[:, 1])
            theta = np.arctan2(radius, xyz[:, 2])
            # Neither the camera's own centre nor a point straight behind it has a direction in the picture.
            seen = (theta <= self.field_limit) & ((radius > 0) | (xyz[:, 2] > 0))
            scale = np.divide(
                _theta_distorted(theta, self.distortion), radius, out=np.zeros_like(radius), where=radius > 0
            )
            normalised[seen] = xyz[seen, :2] * scale[seen, None]
        else:
            flat = xyz[:, :2] / xyz[:, 2:]
            seen = (xyz[:, 2] > 0) & (np.einsum("ij,ij->i", flat, flat) <= self.field_limit**2)
            normalised[seen] = _distort(flat[seen], self.distortion)
        pixels: FloatArray = normalised @ self.K[:2, :2].T + self.K[:2, 2]
        return pixels

    @_quiet
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
        flat: FloatArray = np.where(rays[:, 2:] > 0, rays[:, :2] / rays[:, 2:], np.nan)
        return flat

    @_quiet
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
        distorted = (_rows(pixels, 2, "pixels") - self.K[:2, 2]) / np.diag(self.K)[:2]
        if self.model == "fisheye":
            return _fisheye_rays(distorted, self.distortion, self.field_limit)
        flat = _invert_distortion(distorted, self.distortion, self.field_limit)
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
            slope = Polynomial([1.0, *(self.distortion * (3, 5, 7, 9)[: len(self.distortion)])])
            return float(min(np.sqrt(_first_root(slope)), np.pi))
        k1, k2, _, _, k3, k4, k5, k6 = _padded(self.distortion)[:8]
        above, below = Polynomial([1.0, k1, k2, k3]), Polynomial([1.0, k4, k5, k6])
        r2 = Polynomial([0.0, 1.0])
        # d(r above / below)/dr, times below squared
        slope = above * below + 2 * r2 * (above.deriv() * below - above * below.deriv())
        limit = np.sqrt(min(_first_root(slope), _first_root(below)))
        return float(limit) if limit < _WIDEST_PINHOLE else float("inf")

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


def _rows(value: ArrayLike, columns: int, name: str) -> FloatArray:
    """Give float64 rows of so many columns; refuse other shapes, which would be cut up into the wrong rows."""
    array = np.asarray(value, dtype=np.float64)
    if array.ndim == 0 or array.shape[-1] != columns:
        raise CalibrationError(f"{name} have shape {array.shape}; expected (N, {columns})")
    return array.reshape(-1, columns)


def _first_root(polynomial: Polynomial) -> float:
    """Give the smallest positive real root, or infinity."""
    roots = polynomial.trim().roots()
    real = np.real(roots[np.abs(np.imag(roots)) < 1e-9 * np.abs(roots)])
    return float(min(real[real > 0], default=np.inf))


def _padded(distortion: FloatArray) -> FloatArray:
    """Give all 14 coefficients k1 k2 p1 p2 k3 k4 k5 k6 s1 s2 s3 s4 tx ty."""
    return np.concatenate([distortion, np.zeros(14 - len(distortion))])


def _radial_factor(r2: FloatArray, distortion: FloatArray) -> FloatArray:
    k1, k2, _, _, k3, k4, k5, k6 = _padded(distortion)[:8]
    factor: FloatArray = (1 + r2 * (k1 + r2 * (k2 + r2 * k3))) / (1 + r2 * (k4 + r2 * (k5 + r2 * k6)))
    return factor


def _distort(flat: FloatArray, distortion: FloatArray) -> FloatArray:
    """Apply the pinhole lens model to normalised coordinates of shape (N, 2)."""
    if not distortion.any():
        return flat.copy()
    bent = _bend(flat, distortion)
    tau_x, tau_y = _padded(distortion)[12:]
    return _through(_tilt(tau_x, tau_y), bent) if tau_x or tau_y else bent


def _bend(flat: FloatArray, distortion: FloatArray) -> FloatArray:
    """Apply the lens model but for the sensor's tilt."""
    _, _, p1, p2, _, _, _, _, s1, s2, s3, s4, _, _ = _padded(distortion)
    x, y = flat[:, 0], flat[:, 1]
    r2 = x * x + y * y
    radial = _radial_factor(r2, distortion)
    xd = x * radial + 2 * p1 * x * y + p2 * (r2 + 2 * x * x) + r2 * (s1 + s2 * r2)
    yd = y * radial + p1 * (r2 + 2 * y * y) + 2 * p2 * x * y + r2 * (s3 + s4 * r2)
    return np.column_stack([xd, yd])


def _bend_jacobian(flat: FloatArray, distortion: FloatArray) -> tuple[FloatArray, FloatArray, FloatArray, FloatArray]:
    """Give the derivatives (dx_x, dx_y, dy_x, dy_y) of :func:`_bend`, each of shape (N,)."""
    k1, k2, p1, p2, k3, k4, k5, k6, s1, s2, s3, s4, _, _ = _padded(distortion)
    x, y = flat[:, 0], flat[:, 1]
    r2 = x * x + y * y
    radial = _radial_factor(r2, distortion)
    below = 1 + r2 * (k4 + r2 * (k5 + r2 * k6))
    # twice the derivative of the radial factor by r2: d(radial)/dx = x * growth
    growth = 2 * (k1 + r2 * (2 * k2 + 3 * r2 * k3) - radial * (k4 + r2 * (2 * k5 + 3 * r2 * k6))) / below
    prism_x, prism_y = 2 * (s1 + 2 * s2 * r2), 2 * (s3 + 2 * s4 * r2)
    cross = x * y * growth + 2 * p1 * x + 2 * p2 * y
    return (
        radial + x * x * growth + 2 * p1 * y + 6 * p2 * x + prism_x * x,
        cross + prism_x * y,
        cross + prism_y * x,
        radial + y * y * growth + 6 * p1 * y + 2 * p2 * x + prism_y * y,
    )


def _tilt(tau_x: float, tau_y: float) -> FloatArray:
    """Give the homography of a tilted sensor (Louhichi et al. 2007), as OpenCV writes it."""
    cx, sx, cy, sy = np.cos(tau_x), np.sin(tau_x), np.cos(tau_y), np.sin(tau_y)
    turn = np.array([[cy, 0, -sy], [0, 1, 0], [sy, 0, cy]]) @ np.array([[1, 0, 0], [0, cx, sx], [0, -sx, cx]])
    onto = np.array([[turn[2, 2], 0, -turn[0, 2]], [0, turn[2, 2], -turn[1, 2]], [0, 0, 1]])
    homography: FloatArray = onto @ turn
    return homography


def _through(homography: FloatArray, flat: FloatArray) -> FloatArray:
    """Take points of shape (N, 2) through a homography."""
    u, v, w = homography @ np.vstack([flat.T, np.ones(len(flat))])
    return np.column_stack([u / w, v / w])


def _invert_distortion(distorted: FloatArray, distortion: FloatArray, limit: float) -> FloatArray:
    """Undo :func:`_distort` up to the radius ``limit``; NaN where no point within it leads there.

    The tilt is undone in closed form, a table of the radial part gives the start, and Newton's method the rest for
    those points that have not settled yet.
    """
    if not distortion.any():
        return distorted.copy()
    tau_x, tau_y = _padded(distortion)[12:]
    if tau_x or tau_y:
        level: FloatArray = np.linalg.inv(_tilt(tau_x, tau_y)).astype(np.float64)
        distorted = _through(level, distorted)
    flat = _radial_start(distorted, distortion, limit)
    moving = np.arange(len(flat))
    for _ in range(_NEWTON_STEPS):
        step = _newton_step(flat[moving], distorted[moving], distortion)
        flat[moving] -= step
        size = np.abs(step).max(axis=1, initial=0.0)
        moving = moving[size > _NEWTON_TOLERANCE * (1 + np.abs(flat[moving]).max(axis=1, initial=0.0))]
        if not len(moving):
            break
    # A step may settle on a far root or, at a fold, on none: the model itself has the last word.
    off = np.abs(_bend(flat, distortion) - distorted).max(axis=1, initial=0.0)
    flat[~((off < 1e-9) & (np.einsum("ij,ij->i", flat, flat) <= limit**2))] = np.nan
    return flat


def _radial_start(distorted: FloatArray, distortion: FloatArray, limit: float) -> FloatArray:
    """Invert the radial part alone, by a table."""
    # Evenly spaced angles: fine where pictures are, coarse where hardly any lens reaches; up to just short of a pole.
    widest = min(limit * (1 - 1e-6), _WIDEST_PINHOLE)
    table = np.tan(np.linspace(0.0, np.arctan(widest), _TABLE_LENGTH))
    reach = table * _radial_factor(table**2, distortion)
    radius = np.hypot(distorted[:, 0], distorted[:, 1])
    scale = np.divide(np.interp(radius, reach, table), radius, out=np.ones_like(radius), where=radius > 0)
    return distorted * scale[:, None]


def _newton_step(flat: FloatArray, distorted: FloatArray, distortion: FloatArray) -> FloatArray:
    error = _bend(flat, distortion) - distorted
    dx_x, dx_y, dy_x, dy_y = _bend_jacobian(flat, distortion)
    step = np.column_stack([dy_y * error[:, 0] - dx_y * error[:, 1], dx_x * error[:, 1] - dy_x * error[:, 0]])
    result: FloatArray = step / (dx_x * dy_y - dx_y * dy_x)[:, None]
    return result


def _theta_distorted(theta: FloatArray, distortion: FloatArray) -> FloatArray:
    """Kannala and Brandt (2006), eq. 6 with the first factor 1: the distorted angle."""
    k1, k2, k3, k4 = _four(distortion)
    t2 = theta * theta
    result: FloatArray = theta * (1 + t2 * (k1 + t2 * (k2 + t2 * (k3 + t2 * k4))))
    return result


def _theta_slope(theta: FloatArray, distortion: FloatArray) -> FloatArray:
    k1, k2, k3, k4 = _four(distortion)
    t2 = theta * theta
    result: FloatArray = 1 + t2 * (3 * k1 + t2 * (5 * k2 + t2 * (7 * k3 + t2 * 9 * k4)))
    return result


def _four(distortion: FloatArray) -> FloatArray:
    return np.concatenate([distortion, np.zeros(4 - len(distortion))])


def _fisheye_rays(distorted: FloatArray, distortion: FloatArray, limit: float) -> FloatArray:
    """Undo the fisheye model: a table of the growing part of the angle gives the start, Newton the rest."""
    radius = np.hypot(distorted[:, 0], distorted[:, 1])
    table = np.linspace(0.0, limit, _TABLE_LENGTH)
    reach = _theta_distorted(table, distortion)
    theta = np.interp(radius, reach, table, right=np.nan)
    for _ in range(5):
        step = (_theta_distorted(theta, distortion) - radius) / _theta_slope(theta, distortion)
        theta = np.clip(theta - step, 0.0, limit)
    direction = np.where(radius[:, None] > 0, distorted / radius[:, None], 0.0)
    return np.column_stack([direction * np.sin(theta)[:, None], np.cos(theta)])
