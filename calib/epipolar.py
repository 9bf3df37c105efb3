"""Two-view geometry of a known pose: pure functions of arrays.

Notation after Hartley and Zisserman, "Multiple View Geometry in Computer Vision", 2nd ed. 2003: for normalised image
points, ``x_b^T E x_a = 0``; for pixels of cameras without distortion, ``x_b^T F x_a = 0``.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from .camera import FloatArray
from .rig import Rig

_AT_INFINITY = 1e-12
"""Last homogeneous coordinate of a triangulated point of length 1 that rounding alone may leave."""


def cross_matrix(v: FloatArray) -> FloatArray:
    """Give the matrix, shape (3, 3), with ``cross_matrix(v) @ w == cross(v, w)``."""
    x, y, z = v
    return np.array([[0.0, -z, y], [z, 0.0, -x], [-y, x, 0.0]])


def homogeneous(points: FloatArray) -> FloatArray:
    """Give image points, shape (N, 2), as homogeneous ones, shape (N, 3), the last coordinate 1."""
    return np.column_stack([points, np.ones(len(points))])


def essential_matrix(R: FloatArray, t: FloatArray) -> FloatArray:
    """Give E = [t]x R, shape (3, 3), of the pose ``x_b = R x_a + t``; t scaled to length 1 (H&Z eq. 9.12)."""
    E: FloatArray = cross_matrix(t / np.linalg.norm(t)) @ R
    return E


def epipolar_distances(E: FloatArray, flat_a: FloatArray, flat_b: FloatArray) -> tuple[FloatArray, FloatArray]:
    """Give the distance of each point from the epipolar line of its partner, in both images.

    Parameters
    ----------
    E : ndarray of shape (3, 3)
    flat_a, flat_b : ndarray of shape (N, 2)
        Normalised, undistorted image points x/z, y/z.

    Returns
    -------
    distance_a, distance_b : ndarray of shape (N,)
        In normalised units: times the focal length they are pixels.
    """
    algebraic, line_a, line_b = _epipolar_terms(E, flat_a, flat_b)
    gap = np.abs(algebraic)
    return gap / np.hypot(line_a[:, 0], line_a[:, 1]), gap / np.hypot(line_b[:, 0], line_b[:, 1])


def sampson_distances(F: FloatArray, points_a: FloatArray, points_b: FloatArray) -> FloatArray:
    """Give each match's signed Sampson distance: how far, to first order, both points must move to satisfy ``F``.

    Parameters
    ----------
    F : ndarray of shape (3, 3)
        Fundamental matrix for pixels, or essential matrix for normalised points.
    points_a, points_b : ndarray of shape (N, 2)
        Matched pixels of undistorted images, or normalised points.

    Returns
    -------
    ndarray of shape (N,)
        In the unit of the points; its sign turns with that of ``F``. NaN where both points are epipoles.

    References
    ----------
    H&Z eq. 11.9, whose summands these are the roots of.
    """
    algebraic, line_a, line_b = _epipolar_terms(F, points_a, points_b)
    slope = np.sqrt((line_a[:, :2] ** 2).sum(axis=1) + (line_b[:, :2] ** 2).sum(axis=1))
    with np.errstate(invalid="ignore"):
        distances: FloatArray = algebraic / slope
    return distances


def _epipolar_terms(F: FloatArray, a: FloatArray, b: FloatArray) -> tuple[FloatArray, FloatArray, FloatArray]:
    """Give ``x_b^T F x_a`` of each match, and its points' epipolar lines in A's and in B's image."""
    from_a, from_b = homogeneous(a), homogeneous(b)
    line_b, line_a = from_a @ F.T, from_b @ F
    return np.einsum("ij,ij->i", from_b, line_b), line_a, line_b


def rig_epipolar_distances_px(rig: Rig, pixels_a: FloatArray, pixels_b: FloatArray) -> FloatArray:
    """Give the mean of both images' epipolar distances of matched pixels, in pixels, shape (N,)."""
    E = essential_matrix(rig.R, rig.t)
    distance_a, distance_b = epipolar_distances(E, rig.a.undistort(pixels_a), rig.b.undistort(pixels_b))
    return (distance_a * rig.a.focal_px + distance_b * rig.b.focal_px) / 2


def triangulate(flat_a: FloatArray, flat_b: FloatArray, R: FloatArray, t: FloatArray) -> FloatArray:
    """Find the points that matched image points show, by linear least squares of all four equations of each.

    Parameters
    ----------
    flat_a, flat_b : ndarray of shape (N, 2)
        Normalised, undistorted image points x/z, y/z.
    R : ndarray of shape (3, 3)
    t : ndarray of shape (3,)
        The pose ``x_b = R x_a + t``.

    Returns
    -------
    ndarray of shape (N, 3)
        In camera A's frame, in the unit of ``t``. Where the rays draw apart, the point in which they would meet behind
        the cameras, z below 0; where they are parallel, NaN: the point is at infinity.

    References
    ----------
    The linear method of H&Z section 12.2, with the points' homogeneous coordinates of length 1.
    """
    to_b = np.column_stack([R, t])
    equations = np.stack(
        [
            view[axis] - flat[:, axis, None] * view[2]
            for view, flat in ((np.eye(3, 4), flat_a), (to_b, flat_b))
            for axis in (0, 1)
        ],
        axis=1,
    )
    solution = np.linalg.svd(equations)[2][:, 3]
    scale = np.where(np.abs(solution[:, 3]) > _AT_INFINITY, solution[:, 3], np.nan)
    points: FloatArray = solution[:, :3] / scale[:, None]
    return points


@dataclass(frozen=True, eq=False, kw_only=True)
class SkewRays:
    """Where two viewing rays come nearest.

    Attributes
    ----------
    points_a : ndarray of shape (N, 3)
        Middle of the shortest line between the two rays, in camera A's frame, in metres.
    gaps_m : ndarray of shape (N,)
        Length of that line in metres.
    """

    points_a: FloatArray
    gaps_m: FloatArray


def meet_rays(rig: Rig, pixels_a: FloatArray, pixels_b: FloatArray) -> SkewRays:
    """Find the points nearest to both viewing rays of matched pixels, by least squares.

    Parameters
    ----------
    rig : Rig
    pixels_a, pixels_b : ndarray of shape (N, 2)
    """
    return nearest_to_rays(rig.a.rays(pixels_a), rig.b.rays(pixels_b), rig.R, rig.t)


def nearest_to_rays(rays_a: FloatArray, rays_b: FloatArray, R: FloatArray, t: FloatArray) -> SkewRays:
    """Find the points nearest to both of two rays, by least squares.

    Parameters
    ----------
    rays_a, rays_b : ndarray of shape (N, 3)
        Directions, of any length, from each camera's centre and in its own frame.
    R : ndarray of shape (3, 3)
    t : ndarray of shape (3,)
        The pose ``x_b = R x_a + t`` in metres; where it has length 1 instead, "metres" of the result are baselines.

    Returns
    -------
    SkewRays
        Where the rays draw apart, the place behind the cameras where they would meet; where they are parallel, NaN.
    """
    along_b = rays_b @ R
    across = np.cross(rays_a, along_b)
    square = np.einsum("ij,ij->i", across, across)
    square = np.where(square > 0, square, np.nan)
    to_b = -R.T @ t
    reach_a = np.einsum("ij,ij->i", np.cross(to_b, along_b), across) / square
    reach_b = np.einsum("ij,ij->i", np.cross(to_b, rays_a), across) / square
    on_a, on_b = rays_a * reach_a[:, None], to_b + along_b * reach_b[:, None]
    return SkewRays(points_a=(on_a + on_b) / 2, gaps_m=np.linalg.norm(on_b - on_a, axis=1))
