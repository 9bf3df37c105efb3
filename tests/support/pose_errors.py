"""How far a pose is from the true one, in the figures that matter to a robot."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from scipy.spatial.transform import Rotation
from skewline.calib import Rig
from skewline.calib.epipolar import meet_rays
from skewline.calib.from_scene import ScenePose


@dataclass(frozen=True)
class PoseErrors:
    """Of a pose up to scale, put to the true baseline's length.

    Attributes
    ----------
    rotation_deg, direction_deg : float
        Of R, and of the direction of t.
    depth : float
        Median relative error of the depth of true points.
    chi_square : float
        Of the five free parameters by the stated covariance, divided by five: 1 for a true one; NaN without one.
    """

    rotation_deg: float
    direction_deg: float
    depth: float
    chi_square: float


def pose_errors(true: Rig, R: np.ndarray, t: np.ndarray, points_a: np.ndarray, covariance: np.ndarray) -> PoseErrors:
    direction, found = true.t / true.baseline_m, t / np.linalg.norm(t)
    turn = Rotation.from_matrix(true.R @ R.T).as_rotvec()
    rig = Rig(a=true.a, b=true.b, R=R, t=found * true.baseline_m)
    pixels = true.a.project(points_a), true.b.project(points_a @ true.R.T + true.t)
    depth = meet_rays(rig, *pixels).points_a[:, 2]
    step = np.concatenate([turn, direction - found])
    values, vectors = np.linalg.eigh(covariance)
    free = vectors[:, 1:]  # but for the length of t, which has none
    return PoseErrors(
        rotation_deg=float(np.rad2deg(np.linalg.norm(turn))),
        direction_deg=float(np.rad2deg(np.arctan2(np.linalg.norm(np.cross(direction, found)), direction @ found))),
        depth=float(np.nanmedian(np.abs(depth / points_a[:, 2] - 1))),
        chi_square=float((free.T @ step) ** 2 @ (1 / values[1:])) / 5,
    )


def errors_of(true: Rig, pose: ScenePose, points_a: np.ndarray) -> PoseErrors:
    return pose_errors(true, pose.rig.R, pose.rig.t, points_a, np.array(pose.rig.covariance))
