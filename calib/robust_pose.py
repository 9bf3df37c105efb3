"""A pose from matches of which many may be wrong: five points at a time, and what chance alone would give."""

from __future__ import annotations

from dataclasses import dataclass

import cv2
import numpy as np
from scipy.special import gammaln

from .camera import FloatArray
from .eight_points import decompose_essential
from .errors import CalibrationError
from .matches import BoolArray
from .sight_pairs import SightPairs

INLIER_PX = 3.0
"""How far a match may miss the pose to count for it, in pixels of the coarser camera: three deviations of a careful pick."""

_SAMPLE = 5
_POSES_OF_SAMPLE = 10
"""Nister's: five points give up to ten essential matrices."""

_TRIED_PX = (0.75, INLIER_PX)
"""Where most of a scene is one plane, a pose that is wrong by degrees agrees with it within 3 px; features are ten times
better than that, picked points are not."""

_JUDGED_PX = (0.5, 1.0, 2.0, INLIER_PX)

_CONFIDENCE = 0.9999
_MOST_SAMPLES = 5000
_SHIFTS = 32
_POLISHES = 5


@dataclass(frozen=True, eq=False, kw_only=True)
class RobustPose:
    """A pose and the matches that agree with it.

    Attributes
    ----------
    R : ndarray of shape (3, 3)
    t : ndarray of shape (3,)
        The pose ``x_b = R x_a + t``; the length of t is 1.
    costs : ndarray of shape (N,)
        Squares of the misses in square pixels; what does not agree counts as if it only just did.
    """

    R: FloatArray
    t: FloatArray
    costs: FloatArray

    @property
    def inliers(self) -> BoolArray:
        """Which matches agree, shape (N,)."""
        inliers: BoolArray = self.costs < INLIER_PX**2
        return inliers

    @property
    def count(self) -> int:
        """How many matches agree."""
        return int(self.inliers.sum())


def robust_pose(pairs: SightPairs) -> RobustPose | None:
    """Find the pose that chance explains least; None where no sample of five gave any.

    Poses are looked for with narrow and with wide limits, refined, and judged by :func:`log_by_chance`. The same matches
    always give the same pose.
    """
    found = [pose for limit_px in _TRIED_PX if (pose := _sampled(pairs, limit_px)) is not None]
    if not found:
        return None
    refined = [polished(pairs, pose) for pose in found]
    return min(refined, key=lambda pose: log_by_chance(pairs, pose))


def log_by_chance(pairs: SightPairs, pose: RobustPose) -> float:
    """Give the logarithm of how many poses so good wrong matches would give: the least over several limits.

    References
    ----------
    Moisan and Stival, "A probabilistic criterion to detect rigid point matches between two images and estimate the
    fundamental matrix", IJCV 57(3), 2004, eq. 14, with ten poses for each sample of five.
    """
    by_chance = share_by_chance(pairs, pose.R, pose.t)
    count = len(pairs)
    agree = np.array([(pose.costs < limit_px**2).sum() for limit_px in _JUDGED_PX], dtype=np.float64)
    shares = by_chance * np.array(_JUDGED_PX) / INLIER_PX
    enough = agree > _SAMPLE
    return float(np.min(_log_expected(count, agree[enough], shares[enough]), initial=np.inf))


def _sampled(pairs: SightPairs, limit_px: float) -> RobustPose | None:
    """Find the pose that most matches agree with within a limit; None where no sample gave any.

    References
    ----------
    Nister, "An efficient solution to the five-point relative pose problem", IEEE TPAMI 26(6), 2004; Barath et al.,
    "MAGSAC++, a fast, reliable and accurate robust estimator", CVPR 2020; both as OpenCV has them.
    """
    try:
        E, _ = cv2.findEssentialMat(
            pairs.flat_a,
            pairs.flat_b,
            np.eye(3),
            cv2.USAC_MAGSAC,
            _CONFIDENCE,
            limit_px * pairs.rad_per_px,
            _MOST_SAMPLES,
        )
    except cv2.error:  # all points of a sample may be one
        return None
    if E is None or not np.isfinite(E).all() or not E.any():
        return None
    four = [agreeing(pairs, *pose) for pose in decompose_essential(np.asarray(E[:3], dtype=np.float64))]
    return min(four, key=lambda pose: float(pose.costs.sum()))


def agreeing(pairs: SightPairs, R: FloatArray, t: FloatArray) -> RobustPose:
    """Give a pose with the matches that agree with it."""
    return RobustPose(R=R, t=t, costs=np.square(np.minimum(pairs.misses_px(R, t), INLIER_PX)))


def polished(pairs: SightPairs, pose: RobustPose) -> RobustPose:
    """Refine a pose on the matches that agree with it, and see anew which do; as it was where they leave it open."""
    for _ in range(_POLISHES):
        try:
            settled = pairs.chosen(pose.inliers).settled(pose.R, pose.t)
        except CalibrationError:
            return pose
        better = agreeing(pairs, *settled.poses.between(0, 1))
        if better.costs.sum() >= pose.costs.sum():
            return pose
        pose = better
    return pose


def share_by_chance(pairs: SightPairs, R: FloatArray, t: FloatArray) -> float:
    """Tell which share of wrong matches agrees with a pose: of A's points put together with other matches' points in B."""
    count = len(pairs)
    shifts = np.unique(np.linspace(1, count - 1, min(_SHIFTS, count - 1)).astype(int))
    agree = [
        agreeing(_with_rays_b(pairs, np.roll(pairs.rays_b, shift, axis=0)), R, t).count / count for shift in shifts
    ]
    return max(float(np.mean(agree)), 1 / (count * len(shifts) + 1))


def _with_rays_b(pairs: SightPairs, rays_b: FloatArray) -> SightPairs:
    return SightPairs(a=pairs.a, b=pairs.b, matches=pairs.matches, rows=pairs.rows, rays_a=pairs.rays_a, rays_b=rays_b)


def least_inliers(count: int, by_chance: float) -> int:
    """Give how many of so many matches must agree with a pose for chance not to explain it.

    The least number that, among that many wrong matches, less than one pose of all that five of them give would reach.

    Parameters
    ----------
    count : int
        Matches, more than five.
    by_chance : float
        Share of wrong matches that agrees with a pose, above 0 and below 1.

    References
    ----------
    Moisan and Stival, "A probabilistic criterion to detect rigid point matches between two images and estimate the
    fundamental matrix", IJCV 57(3), 2004, eq. 14, here with ten poses for each sample of five.
    """
    k = np.arange(_SAMPLE + 1, count + 1, dtype=np.float64)
    explained = k[_log_expected(count, k, by_chance) >= 0]
    return int(explained.max(initial=_SAMPLE)) + 1


def _log_expected(count: int, agree: FloatArray, by_chance: FloatArray | float) -> FloatArray:
    """Give the logarithm of how many poses that so many of ``count`` wrong matches agree with there would be."""
    logs: FloatArray = (
        np.log(_POSES_OF_SAMPLE * (count - _SAMPLE))
        + _log_choices(float(count), agree)
        + _log_choices(agree, float(_SAMPLE))
        + (agree - _SAMPLE) * np.log(by_chance)
    )
    return logs


def _log_choices(of: FloatArray | float, taken: FloatArray | float) -> FloatArray:
    """Give the logarithm of the binomial coefficient."""
    logs: FloatArray = gammaln(of + 1) - gammaln(taken + 1) - gammaln(of - taken + 1)
    return logs
