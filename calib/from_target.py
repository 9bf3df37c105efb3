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
from .targets import Board, Sighting, Target

FEWEST_VIEWS = 3
"""Zhang (2000), section 3.1: with three views or more, all intrinsic parameters have one solution."""

_ENOUGH_VIEWS = 10
_GOOD_RMS_PX = 0.5
_GOOD_COVERAGE = 0.6
_GOOD_TILT_DEG = 20.0
_OUTLYING_VIEW = 2.5
"""Limits of the warnings: common practice, no source."""

_FEWEST_POINTS = 6
"""Points that a view must share between both cameras to say anything of the pose."""

_NO_POSE = 5.0
"""How many times worse than each camera alone a pair may fit before it is no pair: far above a knock or a blur."""

_COVERAGE_GRID = (8, 6)
_COEFFICIENTS = (5, 8)
_STOP = (cv2.TERM_CRITERIA_EPS | cv2.TERM_CRITERIA_COUNT, 200, 1e-9)


@dataclass(frozen=True, eq=False, kw_only=True)
class View:
    """What both cameras saw of one board in one pair.

    Attributes
    ----------
    name_a, name_b : str
        File names, for messages.
    seen_a, seen_b : Sighting or None
        None where the board was not found.
    board : int
        Which of the target's boards.
    """

    name_a: str
    name_b: str
    seen_a: Sighting | None
    seen_b: Sighting | None
    board: int = 0


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
    target: Target,
    views: Sequence[View],
    size_a: tuple[int, int],
    size_b: tuple[int, int],
    *,
    coefficients: int = 5,
) -> CalibrationResult:
    """Calibrate two cameras and the pose between them.

    Parameters
    ----------
    target : Target
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
    fits = []
    for name, size in (("a", size_a), ("b", size_b)):
        seen = [_Seen.of(target, view, name) for view in views if getattr(view, f"seen_{name}") is not None]
        _require(len(seen), len(views), f"camera {name.upper()}", target)
        fits.append(_fit_camera(seen, size, coefficients))
    fit_a, fit_b = fits
    both = [view for view in views if view.seen_a is not None and view.seen_b is not None]
    pairs = _common(target, fit_a.camera, fit_b.camera, both)
    _require(len(pairs), len(views), "both cameras at once", target)
    lens = _lens_flags(coefficients)
    held, held_rms = _solve_pose(fit_a.camera, fit_b.camera, pairs, lens | cv2.CALIB_FIX_INTRINSIC)
    _refuse_unlike_pairs(max(fit_a.rms_px, fit_b.rms_px), held_rms, held)
    rig, rms = _solve_pose(fit_a.camera, fit_b.camera, pairs, lens | cv2.CALIB_USE_INTRINSIC_GUESS)
    refuse_folding_lens("A", rig.a, [pair.pixels_a for pair in pairs])
    refuse_folding_lens("B", rig.b, [pair.pixels_b for pair in pairs])
    distances = [rig_epipolar_distances_px(rig, pair.pixels_a, pair.pixels_b) for pair in pairs]
    whole = np.concatenate(distances)
    result = CalibrationResult(
        rig=rig,
        a=fit_a,
        b=fit_b,
        pairs=len(pairs),
        rms_px=rms,
        epipolar_median_px=float(np.median(whole)),
        epipolar_95_px=float(np.percentile(whole, 95)),
        warnings=(),
    )
    medians = {pair.name: float(np.median(d)) for pair, d in zip(pairs, distances, strict=True)}
    return _with_warnings(result, medians)


@dataclass(frozen=True, eq=False)
class _Seen:
    """Points of one board and where one camera saw them."""

    name: str
    points: FloatArray
    pixels: FloatArray

    @classmethod
    def of(cls, target: Target, view: View, camera: str) -> _Seen:
        seen: Sighting = getattr(view, f"seen_{camera}")
        return cls(getattr(view, f"name_{camera}"), target.boards[view.board].points[seen.ids], seen.pixels)


@dataclass(frozen=True, eq=False)
class _Pair:
    """Points of one board that both cameras saw."""

    name: str
    points: FloatArray
    pixels_a: FloatArray
    pixels_b: FloatArray


def _require(count: int, looked: int, who: str, target: Target) -> None:
    if count < FEWEST_VIEWS:
        found = "in no view" if count == 0 else f"in {count} view{'s' if count > 1 else ''}"
        raise CalibrationError(
            f"{target} was found {found} of {looked} for {who}; expected {FEWEST_VIEWS} or more: check the target's name "
            "(inner corners, not squares), show it whole, flat, sharp and evenly lit, and take more views"
        )


def _fit_camera(views: Sequence[_Seen], size: tuple[int, int], coefficients: int) -> CameraFit:
    points = [_single(view.points) for view in views]
    corners = [_single(view.pixels) for view in views]
    try:
        rms, K, distortion, turns, _, _, _, per_view = cv2.calibrateCameraExtended(
            points, corners, size, np.eye(3), np.zeros(coefficients), flags=_lens_flags(coefficients), criteria=_STOP
        )
    except cv2.error as exc:
        raise CalibrationError(
            f"the {len(views)} views do not settle the camera ({exc.err}); expected views from different sides and distances"
        ) from exc
    normals = np.array([cv2.Rodrigues(turn)[0][:, 2] for turn in turns])
    return CameraFit(
        camera=_camera(K, distortion, size, coefficients),
        rms_px=float(rms),
        view_rms_px=dict(zip([view.name for view in views], map(float, np.ravel(per_view)), strict=True)),
        coverage=_coverage([view.pixels for view in views], size),
        tilt_deg=float(np.rad2deg(np.arccos(np.clip(np.abs(normals[:, 2]), 0, 1)).max())),
    )


def _solve_pose(a: Camera, b: Camera, pairs: Sequence[_Pair], flags: int) -> tuple[Rig, float]:
    """Find the pose with both cameras held as they are, or refine all together from there, as the flags say."""
    lenses = [np.array(camera.distortion) for camera in (a, b)]
    try:
        rms, K_a, lens_a, K_b, lens_b, R, t, _, _ = cv2.stereoCalibrate(
            [_single(pair.points) for pair in pairs],
            [_single(pair.pixels_a) for pair in pairs],
            [_single(pair.pixels_b) for pair in pairs],
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
            f"the {len(pairs)} common views do not settle the pose ({exc.err}); expected views from different sides"
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


def _common(target: Target, a: Camera, b: Camera, views: Sequence[View]) -> list[_Pair]:
    """Pair the points that both cameras saw, with B's numbered as A's where a turned board looks the same."""
    pairs: list[_Pair] = []
    for number, board in enumerate(target.boards):
        seen = [(v, v.seen_a, v.seen_b) for v in views if v.board == number and v.seen_a and v.seen_b]
        orders = _orders(board, a, b, [(seen_a, seen_b) for _, seen_a, seen_b in seen])
        for (view, seen_a, seen_b), order in zip(seen, orders, strict=True):
            ids, from_a, from_b = np.intersect1d(seen_a.ids, order[seen_b.ids], return_indices=True)
            if len(ids) >= _FEWEST_POINTS:
                name = f"{view.name_a} with {view.name_b}"
                pairs.append(_Pair(name, board.points[ids], seen_a.pixels[from_a], seen_b.pixels[from_b]))
    return pairs


def _orders(board: Board, a: Camera, b: Camera, seen: Sequence[tuple[Sighting, Sighting]]) -> list[NDArray[np.intp]]:
    """Choose for each view how B's numbers become A's: the pose of B from A must agree in all views."""
    orders = [np.argsort(numbering) for numbering in board.numberings]
    if len(orders) == 1 or not seen:
        return [orders[0]] * len(seen)
    turns = np.array(
        [
            [
                _rotation(board.points[order[seen_b.ids]], seen_b, b) @ _rotation(board.points[seen_a.ids], seen_a, a).T
                for order in orders
            ]
            for seen_a, seen_b in seen
        ]
    )  # (views, orders, 3, 3): R from A to B as each numbering has it
    candidates = turns.reshape(-1, 3, 3)
    traces = np.einsum("cij,vnij->cvn", candidates, turns)
    angles = np.arccos(np.clip((traces - 1) / 2, -1, 1))  # between a candidate and each view's numberings
    chosen = int(np.argmin(angles.min(axis=2).sum(axis=1)))
    return [orders[best] for best in angles[chosen].argmin(axis=1)]


def _rotation(points: FloatArray, seen: Sighting, camera: Camera) -> FloatArray:
    """Rotation from the board's frame to the camera's."""
    found, turn, _ = cv2.solvePnP(points, seen.pixels, np.array(camera.K), np.array(camera.distortion))
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
