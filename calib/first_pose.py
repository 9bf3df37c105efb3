"""The first pose of two cameras from matches of a scene, of which many may be wrong, and why there may be none."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from .camera import Camera, FloatArray
from .eight_points import LEAST_POINTS
from .errors import CalibrationError
from .matches import BoolArray, Matches
from .robust_pose import RobustPose, least_inliers, polished, robust_pose, share_by_chance
from .sight_pairs import SightPairs


@dataclass(frozen=True, eq=False, kw_only=True)
class FirstPose:
    """A pose to refine from.

    Attributes
    ----------
    R : ndarray of shape (3, 3)
    t : ndarray of shape (3,)
        The pose ``x_b = R x_a + t``; the length of t is 1.
    inliers : ndarray of shape (N,), bool
        Which matches agree with it.
    other : (ndarray of shape (3, 3), ndarray of shape (3,)) or None
        A second pose that points on one plane leave possible; it fits worse.
    remarks : tuple of str
        Warnings: what was found, the limit, what to do.
    """

    R: FloatArray
    t: FloatArray
    inliers: BoolArray
    other: tuple[FloatArray, FloatArray] | None
    remarks: tuple[str, ...]


def first_pose(a: Camera, b: Camera, matches: Matches) -> FirstPose:
    """Find the pose that matches of a scene agree on.

    Parameters
    ----------
    a, b : Camera
        Of any sizes, focal lengths and lenses.
    matches : Matches
        Of one pair of images or of several from the same two cameras in the same places.

    Raises
    ------
    CalibrationError
        Where the matches do not give a pose: too few, or agreeing no better than chance.
    """
    pairs = SightPairs.of(a, b, matches)
    _refuse_few(pairs, len(matches))
    pose = polished(pairs, _beyond_chance(pairs))
    inliers = np.zeros(len(matches), dtype=np.bool_)
    inliers[pairs.rows[pose.inliers]] = True
    return FirstPose(R=pose.R, t=pose.t, inliers=inliers, other=None, remarks=())


def _refuse_few(pairs: SightPairs, given: int) -> None:
    if len(pairs) < LEAST_POINTS:
        lost = f", {given - len(pairs)} more where no ray of the lens leads forward" if given > len(pairs) else ""
        raise CalibrationError(
            f"{len(pairs)} matches{lost}; expected {LEAST_POINTS} or more, better hundreds: match more pairs of images, or "
            "pick points by hand"
        )


def _beyond_chance(pairs: SightPairs) -> RobustPose:
    """Give the pose that most matches agree with; refuse where no more do than could by chance."""
    pose = robust_pose(pairs)
    count, agree = len(pairs), pose.count if pose else 0
    by_chance = share_by_chance(pairs, pose.R, pose.t) if pose else 1 / count
    least = least_inliers(count, by_chance)
    if pose is None or agree < least:
        raise CalibrationError(
            f"{agree} of {count} matches agree on a pose; expected {least} or more, since {by_chance:.1%} of wrong ones do "
            "by chance: do the images show the same scene at one instant, does each belong to its camera, and are its "
            "intrinsics right?"
        )
    return pose
