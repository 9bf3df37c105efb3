"""The first pose of two cameras from matches of a scene, of which many may be wrong, and why there may be none."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from .camera import Camera, FloatArray
from .eight_points import LEAST_POINTS
from .errors import CalibrationError
from .matches import BoolArray, Matches
from .one_plane import PlaneFit, plane_of, poses_of_plane
from .pose_doubts import (
    bad_pairs,
    plane_remarks,
    refuse_same_images,
    refuse_too_close,
    refuse_turn_alone,
    second_motion_remarks,
)
from .robust_pose import RobustPose, least_inliers, robust_pose, share_by_chance
from .sight_pairs import SightPairs

_NEARLY_ONE_PLANE = 0.5
"""Share of the matches on one plane from which a sample of five may have hit on the plane's second pose."""


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
        Where the matches do not give a pose: too few; images that are one; no more agreeing than by chance; too close
        together; no parallax; on one plane that two poses explain alike; or two motions of about as many matches.
    """
    refuse_same_images(matches)
    pairs = SightPairs.of(a, b, matches)
    _refuse_few(pairs, len(matches))
    poses, fit = _possible(pairs, _beyond_chance(pairs))
    pose = poses[0]
    agreeing_pairs = pairs.chosen(pose.inliers)
    refuse_turn_alone(agreeing_pairs, pose)
    refuse_too_close(agreeing_pairs)
    remarks = plane_remarks(fit, poses) if fit else []
    bad = bad_pairs(pairs, pose)
    remarks += [*bad.values(), *second_motion_remarks(pairs, pose)]
    inliers = np.zeros(len(matches), dtype=np.bool_)
    inliers[pairs.rows[pose.inliers]] = True
    inliers &= ~np.isin(matches.pair, list(bad))
    other = (poses[1].R, poses[1].t) if len(poses) > 1 else None
    return FirstPose(R=pose.R, t=pose.t, inliers=inliers, other=other, remarks=tuple(remarks))


def _possible(pairs: SightPairs, pose: RobustPose) -> tuple[list[RobustPose], PlaneFit | None]:
    """Give the poses possible, the best first, and the plane where the matches lie (nearly) on one.

    Little parallax looks like a plane too, and its poses then serve as further places to start from.
    """
    fit = plane_of(pairs.chosen(pose.inliers))
    if fit is None or fit.share < _NEARLY_ONE_PLANE:
        return [pose], None
    return poses_of_plane(pairs, fit.H, pose), fit


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
