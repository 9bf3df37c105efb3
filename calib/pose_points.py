"""The points that a pose from the scene rests on, as a report shows them."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from .camera import FloatArray
from .depth_error import depth_axis
from .from_scene import ScenePose
from .matches import BoolArray, Matches
from .rig import Rig
from .settle import BIWEIGHT_SIGMAS
from .sight_lines import Sightings, SightLines

_MAD_TO_SIGMA = 1.4826
_LEAST_NOISE_PX = 1e-3


@dataclass(frozen=True, eq=False, kw_only=True)
class PosePoints:
    """Points of one source, and how the pose explains them.

    Attributes
    ----------
    source : str
    noise_px : float
        Estimated error of one coordinate, in pixels of camera A.
    pixels_a, pixels_b : ndarray of shape (N, 2)
    residuals_a, residuals_b : ndarray of shape (N, 2)
        Found minus predicted from the point's best place, in each camera's own pixels.
    off_px : ndarray of shape (N,)
        How far the two sight lines miss one another, in pixels of camera A; the sign tells on which side.
    distances : ndarray of shape (N,)
        Along the rectified axis, in metres, or in baselines where the scale is not known; infinite where the sight
        lines do not draw together.
    kept : ndarray of shape (N,), bool
        Which have a say in the pose.
    """

    source: str
    noise_px: float
    pixels_a: FloatArray
    pixels_b: FloatArray
    residuals_a: FloatArray
    residuals_b: FloatArray
    off_px: FloatArray
    distances: FloatArray
    kept: BoolArray


def pose_points(rig: Rig, pose: ScenePose) -> tuple[PosePoints, ...]:
    """Tell of all points that the last stage of a pose used or rejected, one value for each source.

    Parameters
    ----------
    rig : Rig
        The pose's, with its scale where that is known.
    pose : ScenePose
    """
    return tuple(_of_group(rig, pose, number) for number in range(len(pose.sightings)))


def _of_group(rig: Rig, pose: ScenePose, number: int) -> PosePoints:
    group, misses = pose.sightings[number], pose.settled.misses[number]
    pixels_a, pixels_b = group.pixels[:, 0], group.pixels[:, 1]
    R, t = pose.settled.poses.between(0, 1)
    directions, inverse = misses.directions, misses.inverse_depths
    in_b = directions @ R.T + inverse[:, None] * t
    side = np.einsum("ij,ij->i", rig.b.rays(pixels_b), np.cross(t, rig.a.rays(pixels_a) @ R.T))
    with np.errstate(divide="ignore"):
        distances = np.where(inverse > 0, directions @ depth_axis(rig) / inverse * rig.baseline_m, np.inf)
    return PosePoints(
        source=group.source,
        noise_px=float(pose.settled.noise_px[group.source]),
        pixels_a=pixels_a,
        pixels_b=pixels_b,
        residuals_a=pixels_a - rig.a.project(directions),
        residuals_b=pixels_b - rig.b.project(in_b),
        off_px=np.copysign(misses.sizes, side),
        distances=distances,
        kept=pose.kept(number),
    )


def distances_of(points: tuple[PosePoints, ...]) -> FloatArray:
    """Give the finite distances of all points that count, nearest first."""
    found = np.concatenate([part.distances[part.kept] for part in points])
    return np.sort(found[np.isfinite(found) & (found > 0)])


def agreeing_matches(rig: Rig, pose: ScenePose) -> Matches:
    """Give the features and picked points that the last pose agrees with.

    By the limit beyond which the biweight rejects, each kind by its own noise.
    """
    matches = pose.matches.chosen(pose.inliers)
    if not len(matches):
        return matches
    pixels = np.stack([matches.pixels_a, matches.pixels_b], axis=1)
    sightings = Sightings(cameras=(0, 1), pixels=pixels, clusters=np.zeros(len(matches), dtype=np.intp))
    sizes = SightLines([rig.a, rig.b], [sightings]).misses(pose.settled.poses, 0).sizes
    agree = np.zeros(len(matches), dtype=np.bool_)
    for kind in (matches.picked, ~matches.picked):
        if kind.any():
            noise = max(_MAD_TO_SIGMA * float(np.median(sizes[kind])), _LEAST_NOISE_PX)
            agree |= kind & (sizes < BIWEIGHT_SIGMAS * noise)
    return matches.chosen(agree)
