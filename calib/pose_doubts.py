"""What keeps matches of a scene from giving a pose, or speaks against the one they give: each as an error or a remark."""

from __future__ import annotations

import numpy as np
from scipy.spatial.transform import Rotation
from scipy.stats import binom

from .camera import FloatArray
from .errors import CalibrationError
from .matches import Matches
from .one_plane import PlaneFit, deviations_worse
from .robust_pose import INLIER_PX, RobustPose, agreeing, least_inliers, robust_pose, share_by_chance
from .sight_pairs import SightPairs
from .turn_alone import motion_after_turn_px

_SAME_PLACE_PX = 0.01
_LEAST_TO_JUDGE = 8
"""Matches of a pair under which it may be by chance that most have not moved."""

_LEAST_SPAN_DEG = 8.0
"""Angle over which nine in ten points must be spread. Tried on 300 points in a square window of both views, noise 0.5 px,
distances 2 to 5 baselines: at 10 degrees and more (9 as counted here) the pose came out within 1.2 degrees in all trials,
at 8 and fewer (7.2) in one trial or more turned inside out, by 20 degrees in R and 165 and more in t.
"""

_LEAST_MOTION_PX = 2.0
_LEAST_MOTION_SIGMAS = 5.0
"""Motion after the best turn that nine in ten matches stay under: noise alone makes it three deviations of a coordinate."""

_MAD_TO_SIGMA = 1.4826
_PAIR_BY_CHANCE = 0.01
_LEAST_SECOND = 30
_SECOND_REMARKED, _SECOND_REFUSED = 0.2, 0.7
_FAR_OFF = 3.0
"""A match that misses the pose by less than so many limits is a poor one, rather than one of a second motion."""

_TOLD_APART = 3.0
"""Standard deviations by which the second pose of a plane must fit worse."""

_ONE_PLANE = 0.95


def refuse_same_images(matches: Matches) -> None:
    """Refuse matches of a pair whose images are one: most points have not moved at all."""
    still = np.abs(matches.pixels_a - matches.pixels_b).max(axis=1, initial=0) < _SAME_PLACE_PX
    for number in np.unique(matches.pair):
        of_pair = matches.pair == number
        if of_pair.sum() >= _LEAST_TO_JUDGE and still[of_pair].mean() > 0.5:
            raise CalibrationError(
                f"{still[of_pair].sum()} of {of_pair.sum()} matches of pair {number} lie at the same pixel in both images "
                f"(within {_SAME_PLACE_PX} px): the two images are one and the same; give the image of camera A and that of "
                "camera B, taken at one instant"
            )


def refuse_too_close(pairs: SightPairs) -> None:
    """Refuse points that one of the cameras sees under a small angle."""
    for camera, rays in (("A", pairs.rays_a), ("B", pairs.rays_b)):
        span = np.degrees(_span_rad(rays))
        if span < _LEAST_SPAN_DEG:
            raise CalibrationError(
                f"the {len(pairs)} matches that agree lie too close together: nine in ten span {span:.1f} degrees of camera "
                f"{camera}'s view; expected {_LEAST_SPAN_DEG:g} or more, for a turn and a shift look alike in a small part: "
                "give matches from all over both images, or pick points by hand where there are none"
            )


def _span_rad(rays: FloatArray) -> float:
    """Give the angle that nine in ten rays span along the direction in which they are spread most."""
    middle = rays.mean(axis=0)
    middle /= np.linalg.norm(middle)
    off = rays - (rays @ middle)[:, None] * middle
    along = np.linalg.svd(off - off.mean(axis=0), full_matrices=False)[2][0]
    low, high = np.quantile(np.arctan2(rays @ along, rays @ middle), (0.05, 0.95))
    return float(high - low)


def refuse_turn_alone(pairs: SightPairs, pose: RobustPose) -> None:
    """Refuse matches, all of which agree on a pose, that a turn explains as well: no parallax, no direction."""
    motion = float(np.quantile(motion_after_turn_px(pairs), 0.9))
    noise = _MAD_TO_SIGMA * float(np.median(pairs.misses_px(pose.R, pose.t)))
    least = max(_LEAST_MOTION_PX, _LEAST_MOTION_SIGMAS * noise)
    if motion < least:
        raise CalibrationError(
            f"the cameras hardly differ in place, or only turned: after the best turn nine in ten of {len(pairs)} matches "
            f"move by less than {motion:.1f} px; expected {least:.1f} px or more (their noise is {noise:.1f} px): set the "
            "cameras further apart, show things that are nearer and at different distances, and check that the images are "
            "of two cameras"
        )


def plane_remarks(fit: PlaneFit, poses: list[RobustPose]) -> list[str]:
    """Say what a plane does to the pose; refuse where two poses, the best first, explain it alike."""
    if len(poses) == 1:
        return [_on_plane(fit)] if fit.share >= _ONE_PLANE else []
    worse = deviations_worse(*poses[:2])
    apart = np.degrees(Rotation.from_matrix(poses[0].R @ poses[1].R.T).magnitude())
    miss = [float(np.sqrt(pose.costs[pose.inliers].mean())) for pose in poses[:2]]
    two = (
        f"{fit.share:.0%} of the matches lie within {INLIER_PX:g} px of one plane, which two poses, {apart:.1f} degrees of "
        f"turn from one another, explain: the second fits worse by {worse:.1f} standard deviations (misses of "
        f"{miss[1]:.2f} px, not {miss[0]:.2f} px)"
    )
    if worse < _TOLD_APART:
        raise CalibrationError(
            f"{two}; expected {_TOLD_APART:g} or more to tell them apart: put things before or behind the plane into view, "
            "or move the plane, and match another pair, or pick points off it by hand"
        )
    return [f"{two}; limit {_TOLD_APART:g}: put things off the plane into view to be sure of it"]


def _on_plane(fit: PlaneFit) -> str:
    return (
        f"{fit.share:.0%} of the matches lie on one plane (limit {_ONE_PLANE:.0%}), and only one of the poses that explain it "
        "has them before both cameras: the pose is right if the intrinsics are, but put things at other distances into view "
        "for a better one"
    )


def bad_pairs(pairs: SightPairs, pose: RobustPose) -> dict[int, str]:
    """Name the pairs of images, of several, of whose matches no more agree with the pose than by chance."""
    numbers = np.unique(pairs.matches.pair)
    if len(numbers) < 2:
        return {}
    by_chance = share_by_chance(pairs, pose.R, pose.t)
    found = {}
    for number in numbers:
        of_pair = pairs.matches.pair == number
        count, agree = int(of_pair.sum()), int(pose.inliers[of_pair].sum())
        if binom.sf(agree - 1, count, by_chance) > _PAIR_BY_CHANCE:
            least = int(binom.isf(_PAIR_BY_CHANCE, count, by_chance)) + 1
            found[int(number)] = (
                f"pair {number}: {agree} of {count} matches agree with the pose that the other pairs give; expected {least} or "
                "more, which chance does not give: do its images belong together? It is left out"
            )
    return found


def second_motion_remarks(pairs: SightPairs, pose: RobustPose) -> list[str]:
    """Say where matches that disagree with the pose agree on another; refuse where they are nearly as many."""
    rest = pairs.chosen(pairs.misses_px(pose.R, pose.t) > _FAR_OFF * INLIER_PX)
    if len(rest) < _LEAST_SECOND:
        return []
    second = robust_pose(rest)
    if second is None or second.count < max(
        _LEAST_SECOND, least_inliers(len(rest), share_by_chance(rest, second.R, second.t))
    ):
        return []
    agree, agree_other = pose.inliers, agreeing(pairs, second.R, second.t).inliers
    first_alone, second_alone = int((agree & ~agree_other).sum()), int((agree_other & ~agree).sum())
    if second_alone < _SECOND_REMARKED * first_alone:
        return []
    found = f"{second_alone} matches agree on another motion than the {first_alone} that agree on the pose alone"
    advice = (
        "did a large part of the scene move between the images of a pair, or the cameras between pairs? Take both images of "
        "a pair at one instant, of a scene at rest, and look for a pattern that repeats"
    )
    if second_alone >= _SECOND_REFUSED * first_alone:
        raise CalibrationError(
            f"{found}, {second_alone / first_alone:.0%} as many; expected less than {_SECOND_REFUSED:.0%} to know which is the "
            f"cameras': {advice}"
        )
    return [f"{found}, {second_alone / first_alone:.0%} as many (limit {_SECOND_REMARKED:.0%}): {advice}"]
