"""Intrinsics of both cameras and the pose between them from views of a target.

OpenCV's solvers (Zhang, "A Flexible New Technique for Camera Calibration", 2000) find each camera's intrinsics, then one
joint refinement of both cameras and the pose settles everything together. Chosen by measurement: on the chessboard
pairs of the tests the joint solution lies within 0.4 of the published uncertainties, with held intrinsics within 0.9.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from typing import Any

import cv2
import numpy as np
from numpy.typing import NDArray

from .camera import Camera, FloatArray
from .epipolar import rig_epipolar_distances_px
from .errors import CalibrationError
from .rig import Rig
from .targets import Chessboard

FEWEST_VIEWS = 3
"""Zhang (2000), section 3.1: with three views or more, all intrinsic parameters have one solution."""

_ENOUGH_VIEWS = 10
_GOOD_RMS_PX = 0.5
_GOOD_COVERAGE = 0.6
_GOOD_TILT_DEG = 20.0
_OUTLYING_VIEW = 2.5
"""Limits of the warnings: common practice, no source."""

_NO_POSE = 5.0
"""How many times worse than each camera alone a pair may fit before it is no pair: far above a knock or a blur."""

_COVERAGE_GRID = (8, 6)
_COEFFICIENTS = (5, 8)
_STOP = (cv2.TERM_CRITERIA_EPS | cv2.TERM_CRITERIA_COUNT, 200, 1e-9)


@dataclass(frozen=True, eq=False, kw_only=True)
class View:
    """What both cameras saw of the target in one pair.

    Attributes
    ----------
    name_a, name_b : str
        File names, for messages.
    corners_a, corners_b : ndarray of shape (N, 2) or None
        Pixels in the order of the target's points; None where the target was not found.
    """

    name_a: str
    name_b: str
    corners_a: FloatArray | None
    corners_b: FloatArray | None


@dataclass(frozen=True, eq=False, kw_only=True)
class CameraFit:
    """One camera's share of the result.

    Attributes
    ----------
    camera : Camera
    rms_px : float
        Root mean square reprojection error over all its views, in pixels, of the camera on its own.
    view_rms_px : mapping of str to float
        The same for each view by its name.
    coverage : float
        Share of an 8x6 grid over the image in which a corner was seen.
    tilt_deg : float
        Largest angle between the target's normal and the optical axis, over all views.
    """

    camera: Camera
    rms_px: float
    view_rms_px: dict[str, float]
    coverage: float
    tilt_deg: float


@dataclass(frozen=True, eq=False, kw_only=True)
class CalibrationResult:
    """A rig and how good it is.

    Attributes
    ----------
    rig : Rig
    a, b : CameraFit
    pairs : int
        Views in which both cameras saw the target.
    rms_px : float
        Root mean square reprojection error of the joint solution, in pixels.
    epipolar_median_px, epipolar_95_px : float
        Median and 95th percentile of the epipolar distances of all corners, in pixels.
    warnings : tuple of str
        What a careful person would look at before trusting this.
    """

    rig: Rig
    a: CameraFit
    b: CameraFit
    pairs: int
    rms_px: float
    epipolar_median_px: float
    epipolar_95_px: float
    warnings: tuple[str, ...]


def calibrate_pair(
    target: Chessboard,
    views: Sequence[View],
    size_a: tuple[int, int],
    size_b: tuple[int, int],
    *,
    coefficients: int = 5,
) -> CalibrationResult:
    """Calibrate two cameras and the pose between them.

    Parameters
    ----------
    target : Chessboard
    views : sequence of View
        Views that only one camera sees still serve its intrinsics.
    size_a, size_b : (width, height)
        Image sizes in pixels.
    coefficients : {5, 8}
        Lens coefficients of the pinhole model.

    Raises
    ------
    CalibrationError
        Where too few views show the target, or the views do not settle the parameters.
    """
    if coefficients not in _COEFFICIENTS:
        raise CalibrationError(f"{coefficients} lens coefficients; expected {' or '.join(map(str, _COEFFICIENTS))}")
    seen_a = {v.name_a: v.corners_a for v in views if v.corners_a is not None}
    seen_b = {v.name_b: v.corners_b for v in views if v.corners_b is not None}
    _require(len(seen_a), len(views), "camera A", target)
    _require(len(seen_b), len(views), "camera B", target)
    both = [(v, v.corners_a, v.corners_b) for v in views if v.corners_a is not None and v.corners_b is not None]
    _require(len(both), len(views), "both cameras at once", target)
    fit_a = _fit_camera(target, seen_a, size_a, coefficients)
    fit_b = _fit_camera(target, seen_b, size_b, coefficients)
    corners_a = [a for _, a, _ in both]
    corners_b = _same_numbering(target, fit_a.camera, fit_b.camera, corners_a, [b for _, _, b in both])
    views_of_both = corners_a, corners_b
    lens = _lens_flags(coefficients)
    held, held_rms = _solve_pose(target, fit_a.camera, fit_b.camera, *views_of_both, lens | cv2.CALIB_FIX_INTRINSIC)
    _refuse_unlike_pairs(max(fit_a.rms_px, fit_b.rms_px), held_rms, held)
    together = lens | cv2.CALIB_USE_INTRINSIC_GUESS
    rig, rms = _solve_pose(target, fit_a.camera, fit_b.camera, *views_of_both, together)
    refuse_folding_lens("A", rig.a, corners_a)
    refuse_folding_lens("B", rig.b, corners_b)
    distances = [rig_epipolar_distances_px(rig, a, b) for a, b in zip(corners_a, corners_b, strict=True)]
    whole = np.concatenate(distances)
    result = CalibrationResult(
        rig=rig,
        a=fit_a,
        b=fit_b,
        pairs=len(both),
        rms_px=rms,
        epipolar_median_px=float(np.median(whole)),
        epipolar_95_px=float(np.percentile(whole, 95)),
        warnings=(),
    )
    worst = {f"{v.name_a} with {v.name_b}": float(np.median(d)) for (v, _, _), d in zip(both, distances, strict=True)}
    return _with_warnings(result, worst)


def _require(count: int, looked: int, who: str, target: Chessboard) -> None:
    if count < FEWEST_VIEWS:
        found = "in no view" if count == 0 else f"in {count} view{'s' if count > 1 else ''}"
        raise CalibrationError(
            f"{target} was found {found} of {looked} for {who}; expected {FEWEST_VIEWS} or more: check the target's name "
            "(inner corners, not squares), show it whole, flat, sharp and evenly lit, and take more views"
        )


def _fit_camera(target: Chessboard, seen: dict[str, FloatArray], size: tuple[int, int], coefficients: int) -> CameraFit:
    points = [_single(target.points)] * len(seen)
    corners = [_single(view) for view in seen.values()]
    try:
        rms, K, distortion, turns, _, _, _, per_view = cv2.calibrateCameraExtended(
            points, corners, size, np.eye(3), np.zeros(coefficients), flags=_lens_flags(coefficients), criteria=_STOP
        )
    except cv2.error as exc:
        raise CalibrationError(
            f"the {len(seen)} views do not settle the camera ({exc.err}); expected views from different sides and distances"
        ) from exc
    normals = np.array([cv2.Rodrigues(turn)[0][:, 2] for turn in turns])
    return CameraFit(
        camera=_camera(K, distortion, size, coefficients),
        rms_px=float(rms),
        view_rms_px=dict(zip(seen, map(float, np.ravel(per_view)), strict=True)),
        coverage=_coverage(list(seen.values()), size),
        tilt_deg=float(np.rad2deg(np.arccos(np.clip(np.abs(normals[:, 2]), 0, 1)).max())),
    )


def _solve_pose(
    target: Chessboard,
    a: Camera,
    b: Camera,
    corners_a: Sequence[FloatArray],
    corners_b: Sequence[FloatArray],
    flags: int,
) -> tuple[Rig, float]:
    """Find the pose with both cameras held as they are, or refine all together from there, as the flags say."""
    lenses = [np.array(camera.distortion) for camera in (a, b)]
    try:
        rms, K_a, lens_a, K_b, lens_b, R, t, _, _ = cv2.stereoCalibrate(
            [_single(target.points)] * len(corners_a),
            [_single(view) for view in corners_a],
            [_single(view) for view in corners_b],
            np.array(a.K),
            lenses[0],
            np.array(b.K),
            lenses[1],
            a.size,  # with a start for the intrinsics the size is not looked at: the two may differ
            flags=flags,
            criteria=_STOP,
        )
    except cv2.error as exc:
        raise CalibrationError(
            f"the {len(corners_a)} common views do not settle the pose ({exc.err}); expected views from different sides"
        ) from exc
    found_a = _camera(K_a, lens_a, a.size, a.distortion.size)
    found_b = _camera(K_b, lens_b, b.size, b.distortion.size)
    return Rig(a=found_a, b=found_b, R=np.asarray(R, dtype=np.float64), t=np.ravel(t)), float(rms)


def _refuse_unlike_pairs(alone_rms_px: float, rms_px: float, rig: Rig) -> None:
    """Refuse pairs that no one pose can explain."""
    if rms_px > max(_NO_POSE * alone_rms_px, _NO_POSE * _GOOD_RMS_PX):
        raise CalibrationError(
            f"each camera fits on its own (RMS {alone_rms_px:.2f} px) but no one pose fits the pairs (RMS {rms_px:.1f} px, "
            f"baseline {rig.baseline_m * 1e3:.0f} mm); expected pairs of one instant, in the same order for A and B, from "
            "cameras that stayed where they were: check the two lists of images"
        )


def refuse_folding_lens(name: str, camera: Camera, corners: Sequence[FloatArray]) -> None:
    """Refuse a lens that fits its corners but has no ray for some of them: too many coefficients for the views.

    Parameters
    ----------
    name : str
        The camera's, for the message.
    camera : Camera
    corners : sequence of ndarray of shape (N, 2)
        Pixels.

    Raises
    ------
    CalibrationError
        Where a corner has no ray.
    """
    rays = camera.rays(np.concatenate(list(corners)))
    lost = 1 - float(np.isfinite(rays).all(axis=1).mean())
    if lost:
        raise CalibrationError(
            f"the lens of camera {name} with {camera.distortion.size} coefficients is not one to one where "
            f"{lost:.1%} of its corners were seen; expected a lens that is: use {min(_COEFFICIENTS)} coefficients, or more "
            "views that reach its edges"
        )


def _same_numbering(
    target: Chessboard, a: Camera, b: Camera, corners_a: Sequence[FloatArray], corners_b: Sequence[FloatArray]
) -> list[FloatArray]:
    """Give B's corners A's numbering where a turned board looks the same: B's pose must agree in all views."""
    if len(target.numberings) == 1:
        return list(corners_b)
    turns = np.array(
        [
            [
                _target_rotation(target, b, view_b[order]) @ _target_rotation(target, a, view_a).T
                for order in target.numberings
            ]
            for view_a, view_b in zip(corners_a, corners_b, strict=True)
        ]
    )  # (views, numberings, 3, 3): R from A to B as each numbering has it
    candidates = turns.reshape(-1, 3, 3)
    traces = np.einsum("cij,vnij->cvn", candidates, turns)
    angles = np.arccos(np.clip((traces - 1) / 2, -1, 1))  # between a candidate and each view's numberings
    chosen = int(np.argmin(angles.min(axis=2).sum(axis=1)))
    orders = angles[chosen].argmin(axis=1)
    return [view[target.numberings[order]] for view, order in zip(corners_b, orders, strict=True)]


def _target_rotation(target: Chessboard, camera: Camera, corners: FloatArray) -> FloatArray:
    found, turn, _ = cv2.solvePnP(target.points, corners, np.array(camera.K), np.array(camera.distortion))
    if not found:
        raise CalibrationError(
            "the target's pose in one view cannot be solved; leave out views seen at a grazing angle"
        )
    return np.asarray(cv2.Rodrigues(turn)[0], dtype=np.float64)


def _single(points: FloatArray) -> NDArray[np.float32]:
    return np.ascontiguousarray(points, dtype=np.float32)


def _lens_flags(coefficients: int) -> int:
    return int(cv2.CALIB_RATIONAL_MODEL) if coefficients == 8 else 0


def _camera(K: NDArray[Any], distortion: NDArray[Any], size: tuple[int, int], coefficients: int) -> Camera:
    # OpenCV may pad the coefficients it was given with zeros.
    return Camera(width=size[0], height=size[1], K=K, distortion=np.ravel(distortion)[:coefficients])


def _coverage(corners: Sequence[FloatArray], size: tuple[int, int]) -> float:
    columns, rows = _COVERAGE_GRID
    edges = np.linspace(0, size[0], columns + 1), np.linspace(0, size[1], rows + 1)
    points = np.concatenate(list(corners))
    return float((np.histogram2d(points[:, 0], points[:, 1], bins=edges)[0] > 0).mean())


def _with_warnings(result: CalibrationResult, pair_medians_px: dict[str, float]) -> CalibrationResult:
    """Add what a careful person would look at."""
    warnings = [*_camera_warnings("A", result.a), *_camera_warnings("B", result.b)]
    if result.pairs < _ENOUGH_VIEWS:
        warnings.append(f"{result.pairs} views show the target to both cameras; take {_ENOUGH_VIEWS} or more")
    alone = max(result.a.rms_px, result.b.rms_px)
    if result.rms_px > max(2 * alone, _GOOD_RMS_PX):
        warnings.append(
            f"each camera fits on its own (RMS {alone:.2f} px), both together less well ({result.rms_px:.2f} px): was the "
            "target still in every pair, and was no camera moved between pairs?"
        )
    typical = float(np.median(list(pair_medians_px.values())))
    for name, distance in pair_medians_px.items():
        if distance > max(_OUTLYING_VIEW * typical, _GOOD_RMS_PX):
            warnings.append(
                f"{name}: epipolar distance {distance:.2f} px against {typical:.2f} px elsewhere; leave it out"
            )
    return CalibrationResult(**{**vars(result), "warnings": tuple(warnings)})


def _camera_warnings(name: str, fit: CameraFit) -> list[str]:
    warnings = []
    if fit.rms_px > _GOOD_RMS_PX:
        warnings.append(
            f"camera {name}: RMS {fit.rms_px:.2f} px, above {_GOOD_RMS_PX} px: blur, a bent target, a wrong lens model?"
        )
    if fit.coverage < _GOOD_COVERAGE:
        warnings.append(
            f"camera {name}: corners reach {fit.coverage:.0%} of the picture; below {_GOOD_COVERAGE:.0%} the lens is a guess "
            "where none were: hold the target into the corners too"
        )
    if fit.tilt_deg < _GOOD_TILT_DEG:
        warnings.append(
            f"camera {name}: the target was tilted by {fit.tilt_deg:.0f} degrees at most; below {_GOOD_TILT_DEG:.0f} the focal "
            "length is poorly known: tilt it more"
        )
    typical = float(np.median(list(fit.view_rms_px.values())))
    for view, rms in fit.view_rms_px.items():
        if rms > max(_OUTLYING_VIEW * typical, _GOOD_RMS_PX):
            warnings.append(
                f"{view}: RMS {rms:.2f} px against {typical:.2f} px elsewhere; leave it out and calibrate again"
            )
    return warnings
