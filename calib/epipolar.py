"""Two-view geometry: pure functions of arrays.

Notation after Hartley and Zisserman, "Multiple View Geometry in Computer Vision", 2nd ed. 2003: for normalised image
points, ``x_b^T E x_a = 0``.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from .camera import FloatArray
from .rig import Rig


def cross_matrix(v: FloatArray) -> FloatArray:
    """Give the matrix, shape (3, 3), with ``cross_matrix(v) @ w == cross(v, w)``."""
    x, y, z = v
    return np.array([[0.0, -z, y], [z, 0.0, -x], [-y, x, 0.0]])


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
    a = np.column_stack([flat_a, np.ones(len(flat_a))])
    b = np.column_stack([flat_b, np.ones(len(flat_b))])
    line_b, line_a = a @ E.T, b @ E
    gap = np.abs(np.einsum("ij,ij->i", b, line_b))
    return gap / np.hypot(line_a[:, 0], line_a[:, 1]), gap / np.hypot(line_b[:, 0], line_b[:, 1])


def rig_epipolar_distances_px(rig: Rig, pixels_a: FloatArray, pixels_b: FloatArray) -> FloatArray:
    """Give the mean of both images' epipolar distances of matched pixels, in pixels, shape (N,)."""
    E = essential_matrix(rig.R, rig.t)
    distance_a, distance_b = epipolar_distances(E, rig.a.undistort(pixels_a), rig.b.undistort(pixels_b))
    return (distance_a * rig.a.focal_px + distance_b * rig.b.focal_px) / 2


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
    rays_a, rays_b = rig.a.rays(pixels_a), rig.b.rays(pixels_b) @ rig.R
    across = np.cross(rays_a, rays_b)
    square = np.einsum("ij,ij->i", across, across)
    to_b = rig.centre_b
    reach_a = np.einsum("ij,ij->i", np.cross(to_b, rays_b), across) / square
    reach_b = np.einsum("ij,ij->i", np.cross(to_b, rays_a), across) / square
    on_a, on_b = rays_a * reach_a[:, None], to_b + rays_b * reach_b[:, None]
    return SkewRays(points_a=(on_a + on_b) / 2, gaps_m=np.linalg.norm(on_b - on_a, axis=1))
