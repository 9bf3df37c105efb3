"""An old rig and a new one: what changed, in standard deviations and in millimetres at the working distance.

Both are asked about the same pixels: points that the old rig sees at the working distance are projected by it, then
found again by the new rig. How far their depth moves is what a robot would notice; how far the pixels lie from the
new rig's epipolar lines is what a matcher would.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import asdict, dataclass
from typing import Any

import cv2
import numpy as np
from scipy.stats import chi2

from .camera import Camera, FloatArray
from .depth_error import COEFFICIENTS, POSE_NAMES, common_view, depth_axis, points_from_disparity
from .epipolar import rig_epipolar_distances_px
from .errors import CalibrationError
from .result import Parameters
from .rig import Rig

_K_ENTRIES = (("fx", 0, 0), ("fy", 1, 1), ("cx", 0, 2), ("cy", 1, 2))
_UNLIKELY = 0.003
"""Chance below which a change of pose is called real: 3 standard deviations of one figure."""


_WORDS = {
    "fx": "focal length x",
    "fy": "focal length y",
    "cx": "principal point x",
    "cy": "principal point y",
    "pose.rx": "turn of B about its x axis",
    "pose.ry": "turn of B about its y axis",
    "pose.rz": "turn of B about its z axis",
    "pose.tx": "translation x",
    "pose.ty": "translation y",
    "pose.tz": "translation z",
}


@dataclass(frozen=True, kw_only=True)
class ParameterChange:
    """One parameter of both rigs.

    Attributes
    ----------
    name : str
        In plain words, with the camera.
    unit : str
    old, new, change : float
        In that unit. The turn of camera B is told from the old rig's, so its old value is 0.
    sigmas : float or None
        The change in standard deviations of the difference; None where one of the rigs does not know its own.
    """

    name: str
    unit: str
    old: float
    new: float
    change: float
    sigmas: float | None


@dataclass(frozen=True, kw_only=True)
class DepthShift:
    """What the change does at one distance.

    Attributes
    ----------
    distance_m : float
        Along the old rig's rectified axis.
    centre_mm : float
        Change of depth in the middle of the common view; positive where the new rig says farther.
    corners_mm : tuple of float
        The same top left, top right, bottom left and bottom right.
    epipolar_shift_px : float
        Largest distance of the same pixels from the new rig's epipolar lines.
    """

    distance_m: float
    centre_mm: float
    corners_mm: tuple[float, ...]
    epipolar_shift_px: float

    @property
    def largest_mm(self) -> float:
        """The largest change of depth of these, without sign."""
        return max(map(abs, (self.centre_mm, *self.corners_mm)))


@dataclass(frozen=True, kw_only=True)
class RigComparison:
    """What changed between two rigs.

    Attributes
    ----------
    parameters : tuple of ParameterChange
    at_distance : DepthShift
    over_volume : tuple of DepthShift
        At the near and far end of the working volume, where one was given.
    pose_chance : float or None
        How likely a change of pose as large as this is by chance alone; None where one covariance is missing.
    sentence : str
        All of it in plain words.
    """

    parameters: tuple[ParameterChange, ...]
    at_distance: DepthShift
    over_volume: tuple[DepthShift, ...]
    pose_chance: float | None
    sentence: str


def compare_rigs(
    old: Rig,
    new: Rig,
    *,
    distance_m: float,
    volume_m: tuple[float, float] | None = None,
    old_parameters: Parameters | None = None,
    new_parameters: Parameters | None = None,
) -> RigComparison:
    """Compare two calibrations of the same two cameras.

    Parameters
    ----------
    old, new : Rig
        Of the same cameras: image sizes and lens models agree.
    distance_m : float
        Working distance along the rectified axis, in metres.
    volume_m : (near, far), optional
        Distances at which to look as well.
    old_parameters, new_parameters : Parameters, optional
        What is known of the lenses' standard deviations; a rig file keeps those of the pose alone.

    Raises
    ------
    CalibrationError
        For rigs of other image sizes or lens models, of unknown scale, or a distance at which they see nothing in common.
    """
    _refuse_unlike(old, new)
    distances = [distance_m, *(volume_m or ())]
    shifts = [_depth_shift(old, new, distance) for distance in distances]
    changes = [
        *_pose_changes(old, new),
        *_lens_changes("a", old.a, new.a, old_parameters, new_parameters),
        *_lens_changes("b", old.b, new.b, old_parameters, new_parameters),
    ]
    chance = _pose_chance(old, new)
    return RigComparison(
        parameters=tuple(changes),
        at_distance=shifts[0],
        over_volume=tuple(shifts[1:]),
        pose_chance=chance,
        sentence=_sentence(shifts[0], chance),
    )


def _refuse_unlike(old: Rig, new: Rig) -> None:
    for name, before, after in (("A", old.a, new.a), ("B", old.b, new.b)):
        if before.size != after.size:
            raise CalibrationError(
                f"camera {name}'s images are {before.width}x{before.height} pixels in the old rig and "
                f"{after.width}x{after.height} in the new; expected one size: the same pixel means another direction"
            )
        lenses = [f"{camera.model} with {len(camera.distortion)} coefficients" for camera in (before, after)]
        if lenses[0] != lenses[1]:
            raise CalibrationError(
                f"camera {name}'s lens model is {lenses[0]} in the old rig and {lenses[1]} in the new; expected the same: "
                "their numbers cannot be set side by side; calibrate again with the old rig's model"
            )
    for which, rig in (("old", old), ("new", new)):
        if not rig.scale_known:
            raise CalibrationError(
                f"the scale of the {which} rig is not known, so its lengths are no millimetres; expected two rigs in metres: "
                "give it one measured length"
            )


def _depth_shift(old: Rig, new: Rig, distance_m: float) -> DepthShift:
    view = common_view(old, distance_m) if distance_m > 0 else None
    if view is None or not len(view.points_a):
        raise CalibrationError(
            f"the old rig's cameras see nothing in common at {distance_m:g} m; choose a distance within the "
            " working volume"
        )
    points = view.points_a
    pixels_a, pixels_b = old.a.project(points), old.b.project(points @ old.R.T + old.t)
    moved_mm = (points_from_disparity(new, pixels_a, pixels_b) - points) @ depth_axis(old) * 1e3
    return DepthShift(
        distance_m=float(distance_m),
        centre_mm=float(moved_mm[view.centre]),
        corners_mm=tuple(float(moved_mm[corner]) for corner in view.corners),
        epipolar_shift_px=float(rig_epipolar_distances_px(new, pixels_a, pixels_b).max()),
    )


def parameter_words(name: str) -> str:
    """Say in plain words what a parameter is: ``a.fx`` is camera A's focal length x."""
    owner, _, short = name.partition(".")
    if owner == "pose":
        return _WORDS.get(name, name)
    return f"camera {owner.upper()} {_WORDS.get(short, f'lens {short}')}"


def _lens_changes(
    key: str, old: Camera, new: Camera, old_parameters: Parameters | None, new_parameters: Parameters | None
) -> list[ParameterChange]:
    values = [(name, "px", float(old.K[row, column]), float(new.K[row, column])) for name, row, column in _K_ENTRIES]
    names = COEFFICIENTS[old.model][: len(old.distortion)]
    lens = zip(names, old.distortion.tolist(), new.distortion.tolist(), strict=True)
    values += [(name, "", before, after) for name, before, after in lens]
    return [
        ParameterChange(
            name=parameter_words(f"{key}.{name}"),
            unit=unit,
            old=before,
            new=after,
            change=after - before,
            sigmas=_in_sigmas(
                after - before, _variance(old_parameters, f"{key}.{name}"), _variance(new_parameters, f"{key}.{name}")
            ),
        )
        for name, unit, before, after in values
    ]


def _variance(parameters: Parameters | None, name: str) -> float | None:
    return None if parameters is None or name not in parameters.names else parameters.sigma(name) ** 2


def _in_sigmas(change: float, *variances: float | None) -> float | None:
    """Give the change over the standard deviation of a difference; None where that is not known or is zero."""
    known = [variance for variance in variances if variance is not None]
    total = sum(known)
    return change / float(np.sqrt(total)) if len(known) == len(variances) and total > 0 else None


def _pose_step(old: Rig, new: Rig) -> FloatArray:
    """Give the small turn after the old R that makes the new one, and the change of t: shape (6,), rad and m."""
    turn = np.asarray(cv2.Rodrigues(new.R @ old.R.T)[0], dtype=np.float64).ravel()
    return np.concatenate([turn, new.t - old.t])


def _pose_changes(old: Rig, new: Rig) -> list[ParameterChange]:
    step = _pose_step(old, new)
    befores = np.concatenate([np.zeros(3), old.t])
    scales = np.repeat([180 / np.pi, 1e3], 3)
    changes = []
    for index, (name, scale) in enumerate(zip(POSE_NAMES, scales, strict=True)):
        variances = [None if rig.covariance is None else float(rig.covariance[index, index]) for rig in (old, new)]
        changes.append(
            ParameterChange(
                name=parameter_words(name),
                unit="mm" if index > 2 else "degrees",
                old=float(befores[index] * scale),
                new=float((befores[index] + step[index]) * scale),
                change=float(step[index] * scale),
                sigmas=_in_sigmas(float(step[index]), *variances),
            )
        )
    longer = new.baseline_m - old.baseline_m
    baseline = ParameterChange(
        name="baseline",
        unit="mm",
        old=old.baseline_m * 1e3,
        new=new.baseline_m * 1e3,
        change=longer * 1e3,
        sigmas=_in_sigmas(longer, baseline_variance(old), baseline_variance(new)),
    )
    return [baseline, *changes]


def baseline_variance(rig: Rig) -> float | None:
    """Give the variance of the baseline's length in square metres; None for a rig without covariance."""
    if rig.covariance is None:
        return None
    along = rig.t / rig.baseline_m
    return float(along @ rig.covariance[3:, 3:] @ along)


def _pose_chance(old: Rig, new: Rig) -> float | None:
    """Give the chance of so large a step by the chi-squared law of six figures, correlations counted."""
    if old.covariance is None or new.covariance is None:
        return None
    scale = np.sqrt(np.diag(old.covariance + new.covariance))
    if not np.all(scale > 0):
        return None
    step = _pose_step(old, new) / scale
    shared = (old.covariance + new.covariance) / np.outer(scale, scale)
    if np.linalg.cond(shared) > 1e12:
        return None
    return float(chi2.sf(step @ np.linalg.solve(shared, step), df=6))


def _sentence(shift: DepthShift, chance: float | None) -> str:
    effect = (
        f"At {shift.distance_m:.2f} m the same pixels now give depths that differ by {shift.centre_mm:+.2f} mm in the middle "
        f"and by up to {shift.largest_mm:.2f} mm in the corners, and matches lie up to {shift.epipolar_shift_px:.2f} px off "
        "their lines."
    )
    if chance is None:
        cause = (
            "Whether that is more than chance cannot be told: one of the rigs does not say how well its pose is known."
        )
    elif chance < _UNLIKELY:
        cause = f"That is more than chance explains (it would happen {_odds(chance)}): something moved, or one was made badly."
    else:
        cause = f"The change of pose is within what chance explains (it would happen {_odds(chance)})."
    return f"{effect} {cause}"


def _odds(chance: float) -> str:
    if chance < 1e-6:
        return "less than once in a million calibrations"
    return f"in {chance:.0%} of calibrations" if chance > 0.02 else f"once in {1 / chance:,.0f} calibrations"


def comparison_text(comparison: RigComparison) -> str:
    """Write a comparison as lines of text for a terminal."""
    width = max(len(change.name) for change in comparison.parameters)
    lines = [comparison.sentence, "", f"{'':{width}} {'old':>12} {'new':>12} {'change':>12} {'sigmas':>8}"]
    lines += [
        " ".join([f"{row[0]:{width}}", *(f"{cell:>12}" for cell in row[1:4]), f"{row[4]:>8}", row[5]]).rstrip()
        for row in rows(comparison)
    ]
    lines += ["", "depth change of the same pixels, mm", f"{'distance':>10} {'middle':>9} {'worst':>9}  epipolar shift"]
    lines += [
        f"{shift.distance_m:8.2f} m {shift.centre_mm:+9.2f} {shift.largest_mm:9.2f}  {shift.epipolar_shift_px:.3f} px"
        for shift in (comparison.at_distance, *comparison.over_volume)
    ]
    return "\n".join(lines)


def rows(comparison: RigComparison) -> list[tuple[str, str, str, str, str, str]]:
    """Give name, old, new, change, sigmas and unit of every parameter as text."""
    return [
        (
            change.name,
            _figure(change.old, change.unit),
            _figure(change.new, change.unit),
            _figure(change.change, change.unit, sign="+"),
            "-" if change.sigmas is None else f"{change.sigmas:+.1f}",
            change.unit,
        )
        for change in comparison.parameters
    ]


def _figure(value: float, unit: str, sign: str = "") -> str:
    digits = {"px": 2, "mm": 3, "degrees": 4}.get(unit, 5)
    return f"{value:{sign}.{digits}f}"


def comparison_figures(comparison: RigComparison) -> dict[str, Any]:
    """Give a comparison as plain JSON values."""
    shifts: Sequence[DepthShift] = (comparison.at_distance, *comparison.over_volume)
    return {
        "sentence": comparison.sentence,
        "pose_chance": comparison.pose_chance,
        "parameters": [asdict(change) for change in comparison.parameters],
        "depth_shifts": [
            {**asdict(shift), "corners_mm": list(shift.corners_mm), "largest_mm": shift.largest_mm} for shift in shifts
        ],
    }
