"""Poses of cameras from points that several of them see, refined robustly, with their covariance."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray
from scipy.optimize import least_squares

from .camera import Camera, FloatArray
from .errors import CalibrationError
from .sight_lines import Misses, Poses, Sightings, SightLines

BIWEIGHT_SIGMAS = 4.685
"""Beaton and Tukey, Technometrics 16(2), 1974: at this width the biweight keeps 95 % of the efficiency on normal errors."""

_MAD_TO_SIGMA = 1.4826
"""Standard deviation of a normal distribution over its median absolute deviation."""

_LEAST_NOISE_PX = 1e-4
"""Floor of the noise that errors are divided by: exact points have none."""

_ROUNDS = 12
_STEADY = 5e-3
"""Relative change of the noise at which the weights stand still."""

_OPEN = 1e-11
"""Smallest over largest eigenvalue of the scaled normal equations below which a direction of the poses is open."""


@dataclass(frozen=True, eq=False, kw_only=True)
class Settled:
    """Refined poses and what is left.

    Attributes
    ----------
    poses : Poses
    misses : tuple of Misses
        For each group of sightings.
    weights : tuple of ndarray of shape (N,)
        Biweight of each point: 0 where it was rejected.
    noise_px : mapping of str to float
        Estimated standard deviation of one coordinate for each source, in pixels of camera 0.
    covariance : ndarray of shape (6 (C - 1), 6 (C - 1))
        Of the step of :meth:`Poses.moved`: rad and the unit of the poses. The size of all shifts together has none.
    relatedness : float
        By how much variances were raised since errors within a cluster go together; 1 where they are independent.
    """

    poses: Poses
    misses: tuple[Misses, ...]
    weights: tuple[FloatArray, ...]
    noise_px: Mapping[str, float]
    covariance: FloatArray
    relatedness: float


def settle(cameras: Sequence[Camera], start: Poses, groups: Sequence[Sightings]) -> Settled:
    """Refine the poses of cameras on the reprojection errors of all points.

    Points are weighted by Tukey's biweight of their error over the noise of their source, found anew until it stands
    still: iteratively reweighted least squares (Holland and Welsch, Communications in Statistics A6(9), 1977).

    Parameters
    ----------
    cameras : sequence of Camera
    start : Poses
        Within the reach of Gauss-Newton steps: some degrees.
    groups : sequence of Sightings

    Returns
    -------
    Settled

    Raises
    ------
    CalibrationError
        Where there are too few points, or the points leave a direction of the poses open.
    """
    unknowns = 6 * (len(cameras) - 1) - 1
    excess = sum(len(group.pixels) * group.excess for group in groups)
    if excess <= unknowns:
        raise CalibrationError(
            f"{sum(len(group.pixels) for group in groups)} matched points; expected more than {unknowns} to refine the "
            f"{unknowns} unknowns of the pose: give more points"
        )
    lines = SightLines(cameras, groups)
    poses, misses = start, _all_misses(lines, start)
    noise = _noise(groups, misses, unknowns)
    for _ in range(_ROUNDS):
        poses = _solve(lines, poses, _weights(groups, misses, noise), noise)
        misses = _all_misses(lines, poses)
        before, noise = noise, _noise(groups, misses, unknowns)
        if all(abs(noise[source] - before[source]) <= _STEADY * noise[source] for source in noise):
            break
    return _account(groups, poses, misses, noise)


def _all_misses(lines: SightLines, poses: Poses) -> list[Misses]:
    return [lines.misses(poses, number) for number in range(len(lines.groups))]


def _noise(groups: Sequence[Sightings], misses: Sequence[Misses], unknowns: int) -> dict[str, float]:
    """Estimate the noise of one coordinate, for each source, from the middle of its errors."""
    excess = sum(len(group.pixels) * group.excess for group in groups)
    freedom = np.sqrt(excess / max(excess - unknowns, 1))
    found = {}
    for source in {group.source for group in groups}:
        sizes = [
            np.abs(miss.left).ravel() for group, miss in zip(groups, misses, strict=True) if group.source == source
        ]
        found[source] = max(_MAD_TO_SIGMA * float(np.median(np.concatenate(sizes))) * freedom, _LEAST_NOISE_PX)
    return found


def _shares(group: Sightings, miss: Misses, noise: Mapping[str, float]) -> FloatArray:
    """Give the squares of each point's error over the width of the biweight, shape (N,)."""
    return np.square(miss.sizes / (BIWEIGHT_SIGMAS * noise[group.source]))


def _weights(groups: Sequence[Sightings], misses: Sequence[Misses], noise: Mapping[str, float]) -> list[FloatArray]:
    return [np.clip(1 - _shares(g, miss, noise), 0, None) ** 2 for g, miss in zip(groups, misses, strict=True)]


def _solve(lines: SightLines, start: Poses, weights: Sequence[FloatArray], noise: Mapping[str, float]) -> Poses:
    """Minimise the weighted squares of what is left."""
    basis = start.free_steps()
    last: dict[bytes, tuple[FloatArray, FloatArray]] = {}

    def evaluated(y: FloatArray) -> tuple[FloatArray, FloatArray]:
        """Residuals and slopes together: the solver asks for them one after the other at the same place."""
        key = y.tobytes()
        if key not in last:
            last.clear()
            misses = _all_misses(lines, start.moved(basis @ y))
            last[key] = _stacked(lines.groups, misses, weights, noise, basis)
        return last[key]

    result = least_squares(
        lambda y: evaluated(y)[0],
        np.zeros(basis.shape[1]),
        jac=lambda y: evaluated(y)[1],
        x_scale="jac",
        xtol=1e-7,
        ftol=1e-6,
        gtol=1e-12,
        max_nfev=30,
    )
    return start.moved(basis @ result.x)


def _stacked(
    groups: Sequence[Sightings],
    misses: Sequence[Misses],
    weights: Sequence[FloatArray],
    noise: Mapping[str, float],
    basis: FloatArray,
) -> tuple[FloatArray, FloatArray]:
    """Give all groups' residuals (M,) over their noise, times the root of their weights, and their slopes (M, P)."""
    lefts, slopes = [], []
    for group, miss, weight in zip(groups, misses, weights, strict=True):
        root = np.sqrt(weight) / noise[group.source]
        lefts.append((miss.left * root[:, None]).ravel())
        slopes.append((miss.slopes * root[:, None, None]).reshape(-1, miss.slopes.shape[2]) @ basis)
    return np.concatenate(lefts), np.concatenate(slopes)


def _account(
    groups: Sequence[Sightings], poses: Poses, misses: Sequence[Misses], noise: Mapping[str, float]
) -> Settled:
    """Work out what is left, and the covariance.

    Of an M-estimate it is the mean square of the loss's slope over the square of its mean curvature, times the inverse of
    the normal equations, with a correction for few points (Huber, Robust Statistics, 1981, section 7.6). Where errors go
    together within clusters, the sums of the slopes over each vary more than that says (White, Econometrica 48(4), 1980;
    Liang and Zeger, Biometrika 73(1), 1986); by how much, in the mean over all directions, raises the whole.
    """
    basis = poses.free_steps()
    left, slopes = _stacked(groups, misses, [np.ones(len(g.pixels)) for g in groups], noise, basis)
    share = np.concatenate([np.repeat(_shares(g, m, noise), g.excess) for g, m in zip(groups, misses, strict=True)])
    clusters = np.concatenate([np.repeat(group.clusters, group.excess) for group in groups])
    kept = share < 1
    left, slopes, share = left[kept], slopes[kept], share[kept]
    pull = left * (1 - share) ** 2
    bends = (1 - share) * (1 - 5 * share)
    curvature = float(bends.mean())
    unknowns = slopes.shape[1]
    few = 1 + unknowns / len(pull) * float(bends.var()) / curvature**2
    variance = float((pull**2).sum()) / max(len(pull) - unknowns, 1)
    normal = slopes.T @ slopes
    _refuse_open(normal)
    relatedness = _relatedness(slopes * pull[:, None], clusters[kept], normal * variance)
    return Settled(
        poses=poses,
        misses=tuple(misses),
        weights=tuple(_weights(groups, misses, noise)),
        noise_px=dict(noise),
        covariance=basis @ np.linalg.inv(normal) @ basis.T * (variance * (few / curvature) ** 2 * relatedness),
        relatedness=relatedness,
    )


def _relatedness(pulls: FloatArray, clusters: NDArray[np.intp], expected: FloatArray) -> float:
    """Compare how much the clusters' sums of pulls vary with what independent errors would give; 1 at least."""
    _, index = np.unique(clusters, return_inverse=True)
    sums = np.zeros((int(index.max()) + 1, pulls.shape[1]))
    np.add.at(sums, index, pulls)
    count = len(sums)
    if count <= pulls.shape[1]:  # too few sums to tell anything of
        return 1.0
    variation = np.trace(np.linalg.solve(expected, sums.T @ sums)) / pulls.shape[1] * count / (count - 1)
    return max(1.0, float(variation))


def _refuse_open(normal: FloatArray) -> None:
    sharpness = np.sqrt(np.maximum(np.diag(normal), 1e-300))
    values = np.linalg.eigvalsh(normal / np.outer(sharpness, sharpness))
    if not values[0] > _OPEN * values[-1]:
        raise CalibrationError(
            f"the points leave a direction of the pose open (the smallest eigenvalue of the normal equations is "
            f"{values[0] / values[-1]:.1e} of the largest, limit {_OPEN:.0e}); expected points spread over both pictures and "
            "over distance, from cameras that stand apart: give more of them, or other pairs"
        )
