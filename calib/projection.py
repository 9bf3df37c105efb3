"""Where points of the camera frame fall, and how that answers to the points and to every intrinsic parameter.

The models are those of :mod:`.camera`; here they come with their derivatives, for solvers, and without the checks of
what a camera can see. Intrinsics are one vector: fx, fy, cx, cy, then the lens coefficients in OpenCV's order.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from .camera import (
    Camera,
    FloatArray,
    LensModel,
    _bend,
    _bend_jacobian,
    _padded,
    _radial_factor,
    _theta_distorted,
    _theta_slope,
)

_PINHOLE_NAMES = ("k1", "k2", "p1", "p2", "k3", "k4", "k5", "k6", "s1", "s2", "s3", "s4", "tau_x", "tau_y")

_NEAR_AXIS = 1e-4
"""Tangent of the angle below which the fisheye's derivatives are taken from their series: its error there is 1e-8."""


@dataclass(frozen=True, eq=False)
class Projected:
    """Pixels and their derivatives.

    Attributes
    ----------
    pixels : ndarray of shape (N, 2)
    by_point : ndarray of shape (N, 2, 3)
        Pixels a metre, in the camera frame.
    by_intrinsics : ndarray of shape (N, 2, 4 + n)
    """

    pixels: FloatArray
    by_point: FloatArray
    by_intrinsics: FloatArray


def intrinsics_of(camera: Camera) -> FloatArray:
    """Give fx, fy, cx, cy and the lens coefficients as one vector, shape (4 + n,)."""
    K = camera.K
    return np.array([K[0, 0], K[1, 1], K[0, 2], K[1, 2], *camera.distortion])


def camera_from(intrinsics: FloatArray, size: tuple[int, int], model: LensModel) -> Camera:
    """Make the camera of an intrinsics vector."""
    fx, fy, cx, cy = intrinsics[:4]
    K = np.array([[fx, 0, cx], [0, fy, cy], [0, 0, 1]])
    return Camera(width=size[0], height=size[1], K=K, distortion=intrinsics[4:], model=model)


def intrinsic_names(coefficients: int, model: LensModel) -> tuple[str, ...]:
    """Name the entries of an intrinsics vector."""
    lens = _PINHOLE_NAMES if model == "pinhole" else ("k1", "k2", "k3", "k4")
    return ("fx", "fy", "cx", "cy", *lens[:coefficients])


def project_points(points: FloatArray, intrinsics: FloatArray, model: LensModel) -> Projected:
    """Project points of the camera frame, with derivatives.

    Parameters
    ----------
    points : ndarray of shape (N, 3)
        In the camera frame, in metres, before the camera (a fisheye may see sideways).
    intrinsics : ndarray of shape (4 + n,)
        fx, fy, cx, cy and the lens coefficients.
    model : {"pinhole", "fisheye"}

    Returns
    -------
    Projected
    """
    bent, by_point, by_lens = (_fisheye if model == "fisheye" else _pinhole)(points, intrinsics[4:])
    focal = intrinsics[:2]
    by_intrinsics = np.zeros((len(points), 2, len(intrinsics)))
    by_intrinsics[:, 0, 0], by_intrinsics[:, 1, 1] = bent[:, 0], bent[:, 1]
    by_intrinsics[:, 0, 2] = by_intrinsics[:, 1, 3] = 1.0
    by_intrinsics[:, :, 4:] = by_lens * focal[:, None]
    return Projected(bent * focal + intrinsics[2:4], by_point * focal[:, None], by_intrinsics)


def _pinhole(points: FloatArray, distortion: FloatArray) -> tuple[FloatArray, FloatArray, FloatArray]:
    """Give normalised image points (N, 2) and their derivatives by point (N, 2, 3) and by coefficient (N, 2, n)."""
    flat = points[:, :2] / points[:, 2:]
    bent, by_lens = _bend(flat, distortion), _bend_by_coefficients(flat, distortion)
    by_flat = np.stack(_bend_jacobian(flat, distortion), axis=1).reshape(-1, 2, 2)
    if len(distortion) == 14:
        bent, onward, by_tilt = _tilted(bent, *distortion[12:])
        by_flat, by_lens = onward @ by_flat, np.concatenate([onward @ by_lens[:, :, :12], by_tilt], axis=2)
    inverse_depth = 1 / points[:, 2, None, None]
    by_depth = -(by_flat @ flat[:, :, None])
    return bent, np.concatenate([by_flat, by_depth], axis=2) * inverse_depth, by_lens


def _bend_by_coefficients(flat: FloatArray, distortion: FloatArray) -> FloatArray:
    """Give the derivatives of the lens model, but for the tilt, by its coefficients, shape (N, 2, n)."""
    _, _, _, _, _, k4, k5, k6 = _padded(distortion)[:8]
    x, y = flat[:, 0], flat[:, 1]
    r2 = x * x + y * y
    r4 = r2 * r2
    radial = _radial_factor(r2, distortion)
    below = 1 + r2 * (k4 + r2 * (k5 + r2 * k6))
    above = np.stack([r2, r4, r4 * r2]) / below  # d radial / d(k1, k2, k3)
    k_upper, k_lower = above[:, None] * flat.T, -(above * radial)[:, None] * flat.T  # (3, 2, N)
    zero = np.zeros_like(x)
    p1, p2 = np.stack([2 * x * y, r2 + 2 * y * y]), np.stack([r2 + 2 * x * x, 2 * x * y])
    prism = [np.stack(pair) for pair in ((r2, zero), (r4, zero), (zero, r2), (zero, r4))]
    tilt = [np.stack([zero, zero])] * 2
    columns = [k_upper[0], k_upper[1], p1, p2, k_upper[2], *k_lower, *prism, *tilt]
    return np.array(columns)[: len(distortion)].transpose(2, 1, 0)


def _tilted(bent: FloatArray, tau_x: float, tau_y: float) -> tuple[FloatArray, FloatArray, FloatArray]:
    """Take points through the sensor's tilt: points, derivatives by point (N, 2, 2) and by the two angles (N, 2, 2)."""
    cx, sx, cy, sy = np.cos(tau_x), np.sin(tau_x), np.cos(tau_y), np.sin(tau_y)
    about_y, about_x = (
        np.array([[cy, 0, -sy], [0, 1, 0], [sy, 0, cy]]),
        np.array([[1, 0, 0], [0, cx, sx], [0, -sx, cx]]),
    )
    slope_y, slope_x = (
        np.array([[-sy, 0, -cy], [0, 0, 0], [cy, 0, -sy]]),
        np.array([[0, 0, 0], [0, -sx, cx], [0, -cx, -sx]]),
    )
    turn = about_y @ about_x
    homography = _onto(turn, 1.0) @ turn
    homogeneous = np.column_stack([bent, np.ones(len(bent))])
    u, v, w = homography @ homogeneous.T
    tilted = np.column_stack([u / w, v / w])

    def carry(change: FloatArray) -> FloatArray:
        """Turn changes of (u, v, w), shape (..., 3, k), into changes of the point."""
        changes: FloatArray = (change[:, :2] - tilted[:, :, None] * change[:, 2:]) / w[:, None, None]
        return changes

    onward = carry(np.broadcast_to(homography[:, :2], (len(bent), 3, 2)))
    slopes = [_onto(slope, 0.0) @ turn + _onto(turn, 1.0) @ slope for slope in (about_y @ slope_x, slope_y @ about_x)]
    return tilted, onward, carry(np.stack([homogeneous @ slope.T for slope in slopes], axis=2))


def _onto(turn: FloatArray, last: float) -> FloatArray:
    """Give the matrix that brings turned points back onto the plane z = 1; linear in the turn but for the last entry."""
    return np.array([[turn[2, 2], 0, -turn[0, 2]], [0, turn[2, 2], -turn[1, 2]], [0, 0, last]])


def _fisheye(points: FloatArray, distortion: FloatArray) -> tuple[FloatArray, FloatArray, FloatArray]:
    """Give normalised image points (N, 2) and their derivatives by point (N, 2, 3) and by coefficient (N, 2, n)."""
    across, z = points[:, :2], points[:, 2]
    radius = np.hypot(across[:, 0], across[:, 1])
    square = radius**2 + z**2
    theta = np.arctan2(radius, z)
    bent_angle, slope = _theta_distorted(theta, distortion), _theta_slope(theta, distortion)
    near = radius < _NEAR_AXIS * z
    safe = np.where(near, 1.0, radius)
    k1 = distortion[0] if len(distortion) else 0.0
    scale = np.where(near, (1 + (k1 - 1 / 3) * (radius / z) ** 2) / z, bent_angle / safe)
    # d(scale)/d(radius) over the radius
    growth = np.where(near, 2 * (k1 - 1 / 3) / z**3, (slope * z / square - bent_angle / safe) / safe**2)
    by_point = np.empty((len(points), 2, 3))
    by_point[:, :, :2] = growth[:, None, None] * across[:, :, None] * across[:, None, :]
    by_point[:, (0, 1), (0, 1)] += scale[:, None]
    by_point[:, :, 2] = -across * (slope / square)[:, None]
    per_angle = np.where(near, 1 / z, theta / safe)[:, None] * across
    powers = theta[:, None] ** (2 * np.arange(1, len(distortion) + 1))
    return across * scale[:, None], by_point, per_angle[:, :, None] * powers[:, None, :]
