"""Where matched pixels put points by the pose of a rig, and how the places answer to the pixels and to the pose."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from .camera import FloatArray
from .matches import BoolArray
from .projection import intrinsics_of, project_points
from .rig import Rig
from .sight_lines import Poses, Sightings, SightLines


@dataclass(frozen=True, eq=False, kw_only=True)
class Placed:
    """Points with the least reprojection error of matched pixels.

    Derivatives leave out how much the pictures' own curvature changes them, as a Gauss-Newton step does: errors of a
    pixel or so are small beside the focal length.

    Attributes
    ----------
    points : ndarray of shape (N, 3)
        In A's frame, in the unit of t.
    before : ndarray of shape (N,), bool
        Whether the lines of sight meet before both cameras; where not, the point means nothing.
    by_pixels : ndarray of shape (N, 3, 4)
        Derivative by the pixels in A and in B: ax, ay, bx, by. What moves them off the epipolar line alone has none.
    by_pose : ndarray of shape (N, 3, 6)
        Derivative by a small turn after R (rad), then t, as ``Rig.covariance`` orders them.
    miss_px : ndarray of shape (N,)
        How far the lines of sight miss one another, signed, in A's pixels: of noise of one coordinate's deviation.
    miss_by_pose : ndarray of shape (N, 6)
    """

    points: FloatArray
    before: BoolArray
    by_pixels: FloatArray
    by_pose: FloatArray
    miss_px: FloatArray
    miss_by_pose: FloatArray


def place_pixels(rig: Rig, pixels: FloatArray) -> Placed:
    """Find the points that matched pixels show.

    An error of a given angle weighs the same in both cameras.

    Parameters
    ----------
    rig : Rig
        The pose, of any scale.
    pixels : ndarray of shape (N, 2, 2)
        In A's and in B's own, distorted pixels.

    Raises
    ------
    CalibrationError
        Where a pixel has no ray.
    """
    seen = Sightings(cameras=(0, 1), pixels=pixels, clusters=np.arange(len(pixels)))
    poses = Poses(R=np.stack([np.eye(3), rig.R]), t=np.stack([np.zeros(3), rig.t]))
    misses = SightLines((rig.a, rig.b), [seen]).misses(poses, 0)
    with np.errstate(divide="ignore", invalid="ignore"):
        points = misses.directions / misses.inverse_depths[:, None]
    towards_b = misses.directions @ rig.R.T + misses.inverse_depths[:, None] * rig.t
    ahead = np.einsum("ni,ni->n", towards_b, rig.b.rays(pixels[:, 1]))
    before = (misses.inverse_depths > 0) & (ahead > 0)
    by_pixels, by_pose = _derivatives(rig, np.where(before[:, None], points, [0.0, 0.0, 1.0]))
    return Placed(
        points=points,
        before=before,
        by_pixels=by_pixels,
        by_pose=by_pose,
        miss_px=misses.left[:, 0],
        miss_by_pose=misses.slopes[:, 0].reshape(-1, 6),
    )


def _derivatives(rig: Rig, points: FloatArray) -> tuple[FloatArray, FloatArray]:
    """Solve the normal equations of each point for changes of the pixels and of the pose."""
    to_a = rig.a.focal_px / rig.b.focal_px
    turned = points @ rig.R.T
    slope_a = project_points(points, intrinsics_of(rig.a), rig.a.model).by_point
    slope_b = project_points(turned + rig.t, intrinsics_of(rig.b), rig.b.model).by_point * to_a
    slopes = np.concatenate([slope_a, slope_b @ rig.R], axis=1)
    by_scaled = np.linalg.pinv(slopes)
    # A turn w after R moves a point by w x R p, and slope . (w x R p) = w . (R p x slope).
    moved_b = np.concatenate([np.cross(turned[:, None], slope_b), slope_b], axis=2)
    return by_scaled * [1.0, 1.0, to_a, to_a], -by_scaled[:, :, 2:] @ moved_b
