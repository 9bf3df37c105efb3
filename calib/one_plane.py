"""Matched points on one plane: which poses explain them, and how well these can be told apart.

A plane seen by two cameras of known intrinsics leaves two poses open, and no more, however many its points are; mostly
one of them has points behind a camera and drops out (Longuet-Higgins, "The reconstruction of a plane surface from two
perspective projections", Proceedings of the Royal Society B 227, 1986). Where both remain, depth off the plane tells.
"""

from __future__ import annotations

from collections.abc import Iterator
from dataclasses import dataclass

import cv2
import numpy as np

from .camera import FloatArray
from .robust_pose import INLIER_PX, RobustPose, agreeing, polished
from .sight_pairs import SightPairs, angles_between

_LEAST_AGREEING = 0.9
"""Matches that agree with a pose, over those that agree with the best, for it to be possible."""

_SAME_RAD = 5e-3
"""Poses whose turns and directions are nearer than this are one."""


@dataclass(frozen=True, eq=False, kw_only=True)
class PlaneFit:
    """The homography of normalised points that most matches agree with, shape (3, 3), and their share."""

    H: FloatArray
    share: float


def plane_of(pairs: SightPairs) -> PlaneFit | None:
    """Fit one plane to matches that agree on a pose; None where no homography can be fitted."""
    found, _ = cv2.findHomography(
        pairs.flat_a, pairs.flat_b, cv2.USAC_MAGSAC, INLIER_PX * pairs.rad_per_px, None, 2000, 0.999
    )
    if found is None or not np.isfinite(found).all():
        return None
    H = np.asarray(found, dtype=np.float64)
    # Both ends share the error, as they do in the misses of a pose.
    off = angles_between(_sign_of_first(pairs, H) * pairs.rays_a @ H.T, pairs.rays_b) / np.sqrt(2)
    return PlaneFit(H=H, share=float((off <= INLIER_PX * pairs.rad_per_px).mean()))


def _sign_of_first(pairs: SightPairs, H: FloatArray) -> float:
    """Give the sign of a homography with which it takes most points before camera B."""
    return float(np.sign(np.median(pairs.rays_a @ H[2])) or 1.0)


def poses_of_plane(pairs: SightPairs, H: FloatArray, first: RobustPose) -> list[RobustPose]:
    """Give the poses that a plane leaves possible, refined, the best first; ``first`` may be one of them.

    All matches have a say, not those alone that agree with ``first``: where that is the wrong one of two, those that it
    has behind a camera do not agree with it.

    References
    ----------
    Faugeras and Lustman, "Motion and structure from motion in a piecewise planar environment", IJPRAI 2(3), 1988; the
    decomposition in closed form as OpenCV has it (Malis and Vargas, INRIA report 6303, 2007).
    """
    found: list[RobustPose] = []
    for pose in (first, *(polished(pairs, agreeing(pairs, R, t)) for R, t in _decomposed(H))):
        if not any(_same(pose, other) for other in found):
            found.append(pose)
    found.sort(key=lambda pose: float(pose.costs.sum()))
    return [pose for pose in found if pose.count >= _LEAST_AGREEING * found[0].count]


def _decomposed(H: FloatArray) -> Iterator[tuple[FloatArray, FloatArray]]:
    _, turns, shifts, _ = cv2.decomposeHomographyMat(H, np.eye(3))
    for R, t in zip(turns, shifts, strict=True):
        size = float(np.linalg.norm(t))
        if size > 0:
            yield np.asarray(R, dtype=np.float64), np.asarray(t.ravel() / size, dtype=np.float64)


def _same(first: RobustPose, second: RobustPose) -> bool:
    turn = np.arccos(np.clip((np.trace(first.R @ second.R.T) - 1) / 2, -1, 1))
    return bool(turn < _SAME_RAD and angles_between(first.t[None], second.t[None])[0] < 4 * _SAME_RAD)


def deviations_worse(best: RobustPose, other: RobustPose) -> float:
    """Tell by how many standard deviations one pose fits worse than another.

    Two right poses of a plane take each its own part of every point's noise, so that the sums of squares differ by chance
    as the root of the number of points grows: only their difference over its own scatter tells them apart.

    References
    ----------
    Vuong, "Likelihood ratio tests for model selection and non-nested hypotheses", Econometrica 57(2), 1989.
    """
    worse = (other.costs - best.costs)[best.inliers | other.inliers]
    scatter = float(worse.std())
    return float(worse.mean()) / scatter * float(np.sqrt(len(worse))) if scatter > 0 else 0.0
