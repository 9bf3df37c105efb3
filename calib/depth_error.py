"""What the uncertainty of a calibration, and of a match, comes to in depth.

Depth is Z along the rectified axis (see :func:`depth_axis`), as the node gives it. Two parts that do not know of each
other add in squares: the parameters' covariance, the same for every frame, and the noise of each match,
``sigma_Z = Z^2 / (f B) sigma_d`` (Gallup, Frahm, Mordohai and Pollefeys, "Variable Baseline/Resolution Stereo", CVPR
2008, eq. 1).
"""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass, replace

import cv2
import numpy as np

from .camera import Camera, FloatArray
from .errors import CalibrationError
from .result import CalibrationResult
from .rig import Rig

MATCHING_SIGMA_PX = 0.1
"""Disparity's standard deviation where nothing better is known: block matching on good texture."""

POSE_NAMES = ("pose.rx", "pose.ry", "pose.rz", "pose.tx", "pose.ty", "pose.tz")
"""The order of ``Rig.covariance``."""

_K_ENTRIES = {"fx": (0, 0), "fy": (1, 1), "cx": (0, 2), "cy": (1, 2)}
COEFFICIENTS = {
    "pinhole": ("k1", "k2", "p1", "p2", "k3", "k4", "k5", "k6", "s1", "s2", "s3", "s4", "tx", "ty"),
    "fisheye": ("k1", "k2", "k3", "k4"),
}
"""Names of the lens coefficients, in the order in which a camera keeps them."""

_STEP = 0.1
"""Share of a standard deviation by which the numerical derivative moves: far from rounding, near enough to straight."""

_VIEW_GRID = (17, 13)
_UNSEEN = (np.nan, np.nan)


@dataclass(frozen=True, eq=False, kw_only=True)
class CommonView:
    """Points at one distance that both cameras see.

    Attributes
    ----------
    points_a : ndarray of shape (N, 3)
        In camera A's frame, in metres; N may be 0.
    centre : int
        The one nearest the middle of them.
    corners : tuple of int
        The outermost to the top left, top right, bottom left and bottom right of A's image.
    """

    points_a: FloatArray
    centre: int
    corners: tuple[int, ...]


@dataclass(frozen=True, eq=False, kw_only=True)
class DepthErrorCurve:
    """Expected standard deviation of depth against distance, all of shape (N,), in metres; NaN where no view is common.

    Attributes
    ----------
    distances_m : ndarray
    calibration_centre_m, calibration_worst_m : ndarray
        From the parameters' covariance, in the middle of the common view and at its worst place.
    matching_m : ndarray
        From a disparity's standard deviation of ``matching_sigma_px``.
    matching_sigma_px : float
    """

    distances_m: FloatArray
    calibration_centre_m: FloatArray
    calibration_worst_m: FloatArray
    matching_m: FloatArray
    matching_sigma_px: float

    @property
    def centre_m(self) -> FloatArray:
        """Both parts together, in the middle of the common view."""
        return np.hypot(self.calibration_centre_m, self.matching_m)

    @property
    def worst_m(self) -> FloatArray:
        """Both parts together, at the worst place of the common view."""
        return np.hypot(self.calibration_worst_m, self.matching_m)


def depth_axis(rig: Rig) -> FloatArray:
    """Give the unit vector in A's frame along which depth is counted.

    It stands square to the baseline, as near as may be to the mean of both optical axes.

    Raises
    ------
    CalibrationError
        Where both cameras look along the baseline or opposite ways, so that there is no such axis.
    """
    along = rig.centre_b / rig.baseline_m
    mean = np.array([0.0, 0.0, 1.0]) + rig.R[2]
    axis = mean - along * (along @ mean)
    length = float(np.linalg.norm(axis))
    if length < 1e-6:
        raise CalibrationError(
            "both cameras look along the line that joins them, or away from one another; expected cameras that stand side by "
            "side and look the same way"
        )
    unit: FloatArray = axis / length
    return unit


def points_from_disparity(rig: Rig, pixels_a: FloatArray, pixels_b: FloatArray) -> FloatArray:
    """Find the points on A's rays whose disparity, in the rectified views, is that of the matched pixels.

    As the node does it: what lies across the epipolar line is not looked at.

    Parameters
    ----------
    rig : Rig
    pixels_a, pixels_b : ndarray of shape (N, 2)

    Returns
    -------
    ndarray of shape (N, 3)
        In camera A's frame, in metres; NaN where a pixel has no ray.
    """
    along, axis = rig.centre_b / rig.baseline_m, depth_axis(rig)
    rays_a, rays_b = rig.a.rays(pixels_a), rig.b.rays(pixels_b) @ rig.R
    flat_a = rays_a / (rays_a @ axis)[:, None]
    disparity = flat_a @ along - (rays_b @ along) / (rays_b @ axis)
    points: FloatArray = flat_a * (rig.baseline_m / disparity)[:, None]
    return points


def moved_rig(rig: Rig, changes: Mapping[str, float]) -> Rig:
    """Give the rig with parameters moved by small amounts.

    Parameters
    ----------
    rig : Rig
    changes : mapping of str to float
        What to add to each parameter, by the names of :class:`.result.Parameters`: pixels, radians, metres.

    Raises
    ------
    CalibrationError
        For a name that is no parameter of this rig.
    """
    turn = np.array([changes.get(name, 0.0) for name in POSE_NAMES[:3]])
    shift = np.array([changes.get(name, 0.0) for name in POSE_NAMES[3:]])
    lenses: dict[str, dict[str, float]] = {"a": {}, "b": {}}
    for name, change in changes.items():
        owner, _, short = name.partition(".")
        if owner in lenses:
            lenses[owner][short] = change
        elif name not in POSE_NAMES:
            raise CalibrationError(
                f"{name!r} is no parameter of a rig; expected a.fx ..., b.fx ..., pose.rx ... pose.tz"
            )
    return replace(
        rig,
        a=_moved_camera(rig.a, lenses["a"]),
        b=_moved_camera(rig.b, lenses["b"]),
        R=np.asarray(cv2.Rodrigues(turn)[0], dtype=np.float64) @ rig.R,
        t=rig.t + shift,
        covariance=None,
    )


def _moved_camera(camera: Camera, changes: Mapping[str, float]) -> Camera:
    if not changes:
        return camera
    K, distortion = np.array(camera.K), np.array(camera.distortion)
    coefficients = COEFFICIENTS[camera.model][: len(distortion)]
    for name, change in changes.items():
        if name in _K_ENTRIES:
            K[_K_ENTRIES[name]] += change
        elif name in coefficients:
            distortion[coefficients.index(name)] += change
        else:
            raise CalibrationError(
                f"{name!r} is no parameter of a {camera.model} camera with {len(distortion)} coefficients; expected one of "
                f"{', '.join((*_K_ENTRIES, *coefficients))}"
            )
    return replace(camera, K=K, distortion=distortion)


def depth_sigma_from_calibration(source: Rig | CalibrationResult, points_a: FloatArray) -> FloatArray:
    """Propagate the parameters' covariance to the depth of points.

    Each point is projected by the rig as it is and found again by rigs whose parameters were moved: the linear
    propagation ``J C J^T``, taken along the eigenvectors of the correlation matrix so that parameters that trade against
    each other move together.

    Parameters
    ----------
    source : Rig or CalibrationResult
        A rig alone knows the covariance of its pose only; a result that of the lenses as well.
    points_a : ndarray of shape (N, 3)
        In camera A's frame, in metres, where both cameras see.

    Returns
    -------
    ndarray of shape (N,)
        Standard deviation of depth in metres; NaN for a point that a camera does not see.

    Raises
    ------
    CalibrationError
        For a rig without covariance, or a covariance that is none.
    """
    rig, names, covariance = _uncertainty(source)
    pixels_a, pixels_b = rig.a.project(points_a), rig.b.project(points_a @ rig.R.T + rig.t)
    axis = depth_axis(rig)
    variance = np.zeros(len(points_a))
    for direction in principal_steps(covariance):
        step = dict(zip(names, direction * _STEP, strict=True))
        back = {name: -value for name, value in step.items()}
        depths = [points_from_disparity(moved_rig(rig, by), pixels_a, pixels_b) @ axis for by in (step, back)]
        variance += ((depths[0] - depths[1]) / (2 * _STEP)) ** 2
    sigma: FloatArray = np.sqrt(np.where(np.isfinite(pixels_a + pixels_b).all(axis=1), variance, np.nan))
    return sigma


def _uncertainty(source: Rig | CalibrationResult) -> tuple[Rig, tuple[str, ...], FloatArray]:
    if isinstance(source, CalibrationResult):
        return source.rig, source.parameters.names, source.parameters.covariance
    if source.covariance is None:
        raise CalibrationError(
            "this rig carries no covariance, so how well its depth is known cannot be told; calibrate it from a target"
        )
    return source, POSE_NAMES, source.covariance


def principal_steps(covariance: FloatArray) -> FloatArray:
    """Give vectors, one a row, whose outer products add up to the covariance; all 0 for what does not vary.

    Raises
    ------
    CalibrationError
        Where the covariance is none: not finite, or with a negative variance in some direction.
    """
    sigmas = np.sqrt(np.clip(np.diag(covariance), 0, None))
    moving = np.flatnonzero(sigmas > 0)
    if not np.isfinite(covariance).all():
        raise CalibrationError("the covariance holds values that are not finite; calibrate again")
    scale = sigmas[moving]
    # Scaled to correlations first: pixels, radians and metres differ by many powers of ten.
    shares, directions = np.linalg.eigh(covariance[np.ix_(moving, moving)] / np.outer(scale, scale))
    if len(shares) and shares[0] < -1e-6:
        raise CalibrationError(
            "the covariance has a negative variance in some direction, so it is none; calibrate again"
        )
    steps = np.zeros((len(moving), len(covariance)))
    steps[:, moving] = (directions * np.sqrt(np.clip(shares, 0, None))).T * scale
    return steps


def depth_sigma_from_matching(
    rig: Rig, depths_m: FloatArray, disparity_sigma_px: float = MATCHING_SIGMA_PX
) -> FloatArray:
    """Give the standard deviation of depth, in metres, that noise of the disparity causes (Gallup et al. 2008, eq. 1).

    Parameters
    ----------
    rig : Rig
    depths_m : ndarray of shape (N,)
        Along the rectified axis.
    disparity_sigma_px : float
        In pixels of the rectified view, taken to be as fine as the finer camera.
    """
    focal = max(rig.a.focal_px, rig.b.focal_px)
    sigma: FloatArray = np.square(depths_m) / (focal * rig.baseline_m) * disparity_sigma_px
    return sigma


def common_view(rig: Rig, distance_m: float) -> CommonView:
    """Find where both cameras look at one distance along the rectified axis, on a grid over A's image."""
    pixels = rig.a.grid_pixels(*_VIEW_GRID)
    rays = rig.a.rays(pixels)
    reach = rays @ depth_axis(rig)
    ahead = reach > 0
    points = rays[ahead] * (distance_m / reach[ahead])[:, None]
    seen = rig.b.contains(rig.b.project(points @ rig.R.T + rig.t))
    points, pixels = points[seen], pixels[ahead][seen]
    if not len(points):
        return CommonView(points_a=points, centre=0, corners=())
    off = np.linalg.norm(pixels - (pixels.min(axis=0) + pixels.max(axis=0)) / 2, axis=1)
    outward = ((-1, -1), (1, -1), (-1, 1), (1, 1))
    corners = tuple(int(np.argmax(pixels @ np.array(way))) for way in outward)
    return CommonView(points_a=points, centre=int(np.argmin(off)), corners=corners)


def depth_error_curve(
    source: Rig | CalibrationResult,
    near_m: float,
    far_m: float,
    *,
    disparity_sigma_px: float = MATCHING_SIGMA_PX,
    count: int = 17,
) -> DepthErrorCurve:
    """Work out the expected depth error over a working volume.

    Parameters
    ----------
    source : Rig or CalibrationResult
        A rig alone knows the covariance of its pose only. Where its scale is not known, metres are baselines.
    near_m, far_m : float
        Along the rectified axis, in metres.
    disparity_sigma_px : float
        Standard deviation of a match.
    count : int
        How many distances, evenly spaced, ends included.

    Raises
    ------
    CalibrationError
        Where the distances are no working volume, or a rig has no covariance.
    """
    if not (np.isfinite([near_m, far_m]).all() and 0 < near_m < far_m):
        raise CalibrationError(f"working volume from {near_m} m to {far_m} m; expected 0 < near < far")
    distances = np.linspace(near_m, far_m, count)
    rig = source if isinstance(source, Rig) else source.rig
    views = [common_view(rig, float(distance)) for distance in distances]
    sigmas = depth_sigma_from_calibration(source, np.concatenate([view.points_a for view in views]))
    shares = np.split(sigmas, np.cumsum([len(view.points_a) for view in views])[:-1])
    both = [
        (share[view.centre], share.max()) if len(share) else _UNSEEN for view, share in zip(views, shares, strict=True)
    ]
    centre, worst = np.array(both).T
    return DepthErrorCurve(
        distances_m=distances,
        calibration_centre_m=centre,
        calibration_worst_m=worst,
        matching_m=depth_sigma_from_matching(rig, distances, disparity_sigma_px),
        matching_sigma_px=disparity_sigma_px,
    )
