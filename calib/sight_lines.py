"""What is left of reprojection errors when every point has its own best place in space, and how that answers to poses.

Eliminating the points so is variable projection (Golub and Pereyra, SIAM Journal on Numerical Analysis 10(2), 1973): it
has the minimum of a bundle adjustment over poses and points together, in as many unknowns as the poses have.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray
from scipy.spatial.transform import Rotation

from .camera import Camera, FloatArray
from .errors import CalibrationError
from .projection import intrinsics_of, project_points

_INNER_STEPS = 2
"""Gauss-Newton steps of a point's place, from the linear one: after two the pose moves by less than 1e-4 of its sigma."""


@dataclass(frozen=True, eq=False, kw_only=True)
class Sightings:
    """Points seen by the same cameras.

    Attributes
    ----------
    cameras : tuple of int, length M
        Which cameras, two or more; the points are anchored on the first one's rays.
    pixels : ndarray of shape (N, M, 2)
        In each camera's own, distorted pixels.
    clusters : ndarray of shape (N,), int
        Points whose errors may go together (in one part of one picture) share a number.
    source : str
        How they were found: the noise is estimated for each source by itself.
    """

    cameras: tuple[int, ...]
    pixels: FloatArray
    clusters: NDArray[np.intp]
    source: str = "matches"

    @property
    def excess(self) -> int:
        """Residuals of each point beyond its three unknowns."""
        return 2 * len(self.cameras) - 3


@dataclass(frozen=True, eq=False, kw_only=True)
class Poses:
    """Where cameras stand: ``x_k = R[k] @ x_0 + t[k]``; camera 0's frame is that of all.

    Attributes
    ----------
    R : ndarray of shape (C, 3, 3)
    t : ndarray of shape (C, 3)
    """

    R: FloatArray
    t: FloatArray

    @classmethod
    def of_pair(cls, R: FloatArray, t: FloatArray) -> Poses:
        """Give the poses of two cameras, with a baseline of length 1."""
        return cls(R=np.stack([np.eye(3), R]), t=np.stack([np.zeros(3), t / np.linalg.norm(t)]))

    def between(self, first: int, other: int) -> tuple[FloatArray, FloatArray]:
        """Give R, shape (3, 3), and t, shape (3,), with ``x_other = R x_first + t``."""
        R = self.R[other] @ self.R[first].T
        return R, self.t[other] - R @ self.t[first]

    def steps_between(self, first: int, other: int) -> FloatArray:
        """Give how R and t of :meth:`between` answer to a step of :meth:`moved`, shape (6, 6 (C - 1)).

        Rows: rotation vector (rad) of a small turn applied after R, then the change of t.
        """
        R, t = self.between(first, other)
        slopes = np.zeros((6, 6 * len(self.t)))
        slopes[:, 6 * other : 6 * other + 6] += np.eye(6)
        slopes[:3, 6 * first : 6 * first + 3] -= R
        slopes[3:, 6 * first + 3 : 6 * first + 6] -= R
        # t = t_other - R t_first: the turn of R moves R t_first, which is t_other - t.
        slopes[3:] += np.cross(self.t[other] - t, slopes[:3], axisb=0, axisc=0)
        return slopes[:, 6:]

    def moved(self, step: FloatArray) -> Poses:
        """Turn each camera but the first by a small rotation vector after R and shift it; keep the size of all shifts.

        Parameters
        ----------
        step : ndarray of shape (6 (C - 1),)
            Rotation vector (rad), then shift, of camera 1, then of camera 2 and so on.
        """
        steps = step.reshape(-1, 6)
        R, t = self.R.copy(), self.t.copy()
        R[1:] = Rotation.from_rotvec(steps[:, :3]).as_matrix() @ R[1:]
        t[1:] += steps[:, 3:]
        return Poses(R=R, t=t * (np.linalg.norm(self.t) / np.linalg.norm(t)))

    def free_steps(self) -> FloatArray:
        """Give a basis, shape (6 (C - 1), 6 (C - 1) - 1), of the steps that keep the size of all shifts."""
        size = np.zeros((len(self.t) - 1, 6))
        size[:, 3:] = self.t[1:]
        whole, _ = np.linalg.qr(size.reshape(-1, 1), mode="complete")
        basis: FloatArray = whole[:, 1:]
        return basis


@dataclass(frozen=True, eq=False, kw_only=True)
class Misses:
    """How far the sight lines of each point of one group miss one another.

    Attributes
    ----------
    left : ndarray of shape (N, 2 M - 3)
        What is left of each point's reprojection errors at its best place, found minus predicted, in pixels of camera 0.
    slopes : ndarray of shape (N, 2 M - 3, 6 (C - 1))
        How that changes with a step of :meth:`Poses.moved`.
    directions : ndarray of shape (N, 3)
        Unit vectors from the group's first camera towards the points.
    inverse_depths : ndarray of shape (N,)
        One over the distance along them, in the unit of the poses.
    """

    left: FloatArray
    slopes: FloatArray
    directions: FloatArray
    inverse_depths: FloatArray

    @property
    def sizes(self) -> FloatArray:
        """Size of one coordinate's error, shape (N,), in pixels of camera 0."""
        sizes: FloatArray = np.linalg.norm(self.left, axis=1) / np.sqrt(self.left.shape[1])
        return sizes


class SightLines:
    """The sight lines of all groups of points, for trial poses.

    Each camera's errors are counted in pixels of camera 0 that span the same angle, so that an error of a given angle
    weighs the same in a fine camera and in a coarse one.

    Raises
    ------
    CalibrationError
        Where a point has no ray.
    """

    def __init__(self, cameras: Sequence[Camera], groups: Sequence[Sightings]) -> None:
        self.cameras, self.groups = tuple(cameras), tuple(groups)
        self._intrinsics = [intrinsics_of(camera) for camera in cameras]
        self._scales = [cameras[0].focal_px / camera.focal_px for camera in cameras]
        self._rays = [[cameras[k].rays(g.pixels[:, m]) for m, k in enumerate(g.cameras)] for g in groups]
        for group, rays in zip(groups, self._rays, strict=True):
            for camera, some in zip(group.cameras, rays, strict=True):
                _refuse_rayless(camera, some)

    def misses(self, poses: Poses, number: int) -> Misses:
        """Give what is left of one group's errors at trial poses."""
        directions, inverse_depths = self._best_places(poses, number)
        residuals, by_place, by_poses = self._linearised(poses, number, directions, inverse_depths)
        whole, _ = np.linalg.qr(by_place, mode="complete")
        across = whole[:, :, 3:].transpose(0, 2, 1)
        left = (across @ residuals[:, :, None])[:, :, 0]
        return Misses(left=left, slopes=-across @ by_poses, directions=directions, inverse_depths=inverse_depths)

    def _best_places(self, poses: Poses, number: int) -> tuple[FloatArray, FloatArray]:
        """Give each point's direction and inverse depth with the least reprojection error."""
        direction = self._rays[number][0]
        inverse = self._linear_inverse_depths(poses, number)
        for _ in range(_INNER_STEPS):
            residuals, by_place, _ = self._linearised(poses, number, direction, inverse, places_only=True)
            turned = by_place.transpose(0, 2, 1)
            normal = turned @ by_place
            normal[:, (0, 1, 2), (0, 1, 2)] *= 1 + 1e-12  # a point without parallax keeps its inverse depth
            step = np.linalg.solve(normal, turned @ residuals[:, :, None])
            direction = direction + (np.stack(_across(direction), axis=2) @ step[:, :2])[:, :, 0]
            length = np.linalg.norm(direction, axis=1)
            direction, inverse = direction / length[:, None], (inverse + step[:, 2, 0]) / length
        return direction, inverse

    def _linear_inverse_depths(self, poses: Poses, number: int) -> FloatArray:
        """Give the inverse depths, shape (N,), at which the first rays come nearest to the others, by least squares."""
        group, rays = self.groups[number], self._rays[number]
        top, bottom = np.zeros(len(rays[0])), np.full(len(rays[0]), 1e-300)
        for m in range(1, len(group.cameras)):
            R, t = poses.between(group.cameras[0], group.cameras[m])
            turned, shifted = np.cross(rays[m], rays[0] @ R.T), np.cross(rays[m], t)
            top, bottom = top - (turned * shifted).sum(axis=1), bottom + (shifted**2).sum(axis=1)
        inverse: FloatArray = top / bottom
        return inverse

    def _linearised(
        self,
        poses: Poses,
        number: int,
        direction: FloatArray,
        inverse: FloatArray,
        *,
        places_only: bool = False,
    ) -> tuple[FloatArray, FloatArray, FloatArray]:
        """Give residuals (N, 2 M) and the slopes of the prediction by place (N, 2 M, 3) and by poses (N, 2 M, 6 (C - 1)).

        A point at ``direction / inverse`` lies, times ``inverse``, at ``y = R direction + inverse t`` for another camera.
        """
        group = self.groups[number]
        first, shape = group.cameras[0], (len(direction), len(group.cameras), 2)
        residuals, by_place = np.empty(shape), np.empty((*shape, 3))
        by_poses = np.zeros((*shape, 0 if places_only else 6 * (len(self.cameras) - 1)))
        across = np.stack(_across(direction), axis=2)
        seen_by_0 = (direction - inverse[:, None] * poses.t[first]) @ poses.R[first]
        for m, k in enumerate(group.cameras):
            R, t = poses.between(first, k)
            seen = project_points(direction @ R.T + inverse[:, None] * t, self._intrinsics[k], self.cameras[k].model)
            slope = seen.by_point * self._scales[k]
            residuals[:, m] = (group.pixels[:, m] - seen.pixels) * self._scales[k]
            by_place[:, m, :, :2], by_place[:, m, :, 2] = slope @ (R @ across), slope @ t
            if places_only or k == first:
                continue
            for moving, onward, sign in ((k, slope, 1.0), (first, slope @ R, -1.0)):
                if moving:
                    block = by_poses[:, m, :, 6 * moving - 6 : 6 * moving]
                    block[:, :, :3] = sign * np.cross((seen_by_0 @ poses.R[moving].T)[:, None, :], onward)
                    block[:, :, 3:] = sign * onward * inverse[:, None, None]
        rows = 2 * len(group.cameras)
        return (
            residuals.reshape(-1, rows),
            by_place.reshape(-1, rows, 3),
            by_poses.reshape(-1, rows, by_poses.shape[3]) if by_poses.size else np.zeros((len(direction), rows, 0)),
        )


def _across(direction: FloatArray) -> tuple[FloatArray, FloatArray]:
    """Give two unit vectors across each direction, each of shape (N, 3)."""
    helper = np.where(np.abs(direction[:, :1]) < 0.8, [[1.0, 0.0, 0.0]], [[0.0, 1.0, 0.0]])
    e1 = np.cross(direction, helper)
    e1 /= np.linalg.norm(e1, axis=1, keepdims=True)
    return e1, np.cross(direction, e1)


def _refuse_rayless(camera: int, rays: FloatArray) -> None:
    lost = np.flatnonzero(~np.isfinite(rays).all(axis=1))
    if len(lost):
        raise CalibrationError(
            f"matched point {lost[0]} has no ray in camera {'ABCDEFGH'[camera]}; expected points where the lens model is one "
            "to one: leave it out"
        )
