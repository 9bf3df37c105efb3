"""What a careful person would refuse, or look at before trusting a calibration."""

from __future__ import annotations

from collections.abc import Iterator, Mapping, Sequence
from dataclasses import dataclass

import numpy as np

from .bundle import Seen
from .camera import Camera, FloatArray
from .errors import CalibrationError
from .focal_drift import FocalJump
from .folds import fold_among, fold_in_picture
from .printed_size import name_at
from .refine import Refined
from .result import CalibrationResult, CameraFit
from .rig import Rig
from .targets import Target

_ENOUGH_VIEWS = 10
_GOOD_RMS_PX = 0.5
_GOOD_COVERAGE = 0.6
_GOOD_TILT_DEG = 20.0
_OUTLYING_VIEW = 2.5
"""Limits of the warnings: common practice, no source."""

_NO_POSE = 5.0
"""How many times worse than each camera alone a pair may fit before it is no pair: far above a knock or a blur."""

_ORDINARY_NOISE_PX = 0.1
"""Corner noise by which to ask whether views settle a focal length: exact corners would settle it from any."""

_UNSETTLED_FOCAL = 0.05
_POOR_FOCAL = 0.01
"""Relative standard deviations of a focal length at which to refuse and to warn."""

_SAME_BASELINE = 0.02
"""Relative difference from a known baseline above which the size of the target is in doubt."""


@dataclass(frozen=True, eq=False, kw_only=True)
class Account:
    """A result, and what else the warnings look at.

    Attributes
    ----------
    result : CalibrationResult
    epipolar_px : mapping of str to float
        Median epipolar distance of each pair by its name.
    alone : tuple of (sequence of Seen, Refined)
        Each camera on its own.
    jump : FocalJump or None
        A change of a focal length, if there was one.
    target : Target
    baseline_m : float or None
        As measured otherwise.
    """

    result: CalibrationResult
    epipolar_px: Mapping[str, float]
    alone: tuple[tuple[Sequence[Seen], Refined], ...]
    jump: FocalJump | None
    target: Target
    baseline_m: float | None


def refuse_unlike_pairs(alone_rms_px: float, rms_px: float, rig: Rig) -> None:
    """Refuse pairs that no one pose can explain.

    Raises
    ------
    CalibrationError
        Where both cameras together fit far worse than each alone.
    """
    if rms_px > max(_NO_POSE * alone_rms_px, _NO_POSE * _GOOD_RMS_PX):
        raise CalibrationError(
            f"each camera fits on its own (RMS {alone_rms_px:.2f} px) but no one pose fits the pairs (RMS {rms_px:.1f} px, "
            f"baseline {rig.baseline_m * 1e3:.0f} mm); expected pairs of one instant, in the same order for A and B, from "
            "cameras that stayed where they were: check the two lists of images"
        )


def refuse_folding_lens(name: str, camera: Camera, corners: Sequence[FloatArray]) -> None:
    """Refuse a lens that fits its corners but has no ray there or between them: too many coefficients for the views.

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
        Where a corner, or a pixel between corners, has no ray.
    """
    lost = fold_among(camera, corners)
    if lost:
        raise CalibrationError(
            f"the lens of camera {name} ({camera.model} with {camera.distortion.size} coefficients) is not one to one in "
            f"{lost:.1%} of where its corners were seen; expected a lens that is: take a model of fewer coefficients, or "
            "more views that reach its edges"
        )


def focal_uncertainty(fit: Refined, camera: int) -> float:
    """Give the relative standard deviation of a camera's focal length, with corner noise of at least 0.1 px."""
    letter = "ab"[camera]
    index = fit.names.index(f"{letter}.fx")
    noise = fit.noise_px[camera]
    return fit.sigma(f"{letter}.fx") / abs(float(fit.values[index])) * max(noise, _ORDINARY_NOISE_PX) / noise


def refuse_unsettled(name: str, fit: Refined, camera: int, *, limit: float = _UNSETTLED_FOCAL) -> None:
    """Refuse views that leave the focal length open: those of a target held parallel to itself, above all.

    Raises
    ------
    CalibrationError
        Where the focal length's relative standard deviation is above the limit.
    """
    share = focal_uncertainty(fit, camera)
    if share > limit:
        known = f"{share:.0%}" if share < 1 else "a factor"
        raise CalibrationError(
            f"the views leave the focal length of camera {name} open (standard deviation {known}): from views that are all "
            f"parallel, focal length and distance cannot be told apart; expected {limit:.0%} or less: tilt the "
            "target by 20 to 40 degrees, about both ways, between views"
        )


def careful_warnings(account: Account) -> tuple[str, ...]:
    """Collect what a careful person would look at."""
    result = account.result
    return (
        *_camera_warnings("A", result.a),
        *_camera_warnings("B", result.b),
        *_alone_warnings(account),
        *_pair_warnings(account),
        *(f"{aside.name}: set aside: {aside.reason}" for aside in result.set_aside),
        *_scale_warnings(account),
    )


def _camera_warnings(name: str, fit: CameraFit) -> Iterator[str]:
    if fit.rms_px > _GOOD_RMS_PX:
        yield f"camera {name}: RMS {fit.rms_px:.2f} px, above {_GOOD_RMS_PX} px: blur, a bent target, a wrong lens model?"
    if fit.coverage < _GOOD_COVERAGE:
        yield (
            f"camera {name}: corners reach {fit.coverage:.0%} of the picture; below {_GOOD_COVERAGE:.0%} the lens is a guess "
            "where none were: hold the target into the corners too"
        )
    if fit.tilt_deg < _GOOD_TILT_DEG:
        yield (
            f"camera {name}: the target was tilted by {fit.tilt_deg:.0f} degrees at most; below {_GOOD_TILT_DEG:.0f} the focal "
            "length is poorly known: tilt it more"
        )
    if lost := fold_in_picture(fit.camera):
        yield (
            f"camera {name}: its lens has no ray for {lost:.2%} of the picture, beyond where corners were seen: there is no "
            "depth there; a fisheye's dark rim is so, else hold the target there too or take a model of fewer coefficients"
        )
    typical = float(np.median(list(fit.view_rms_px.values())))
    for view, rms in fit.view_rms_px.items():
        if rms > max(_OUTLYING_VIEW * typical, _GOOD_RMS_PX):
            yield f"{view}: RMS {rms:.2f} px against {typical:.2f} px elsewhere; leave it out and calibrate again"


def _alone_warnings(account: Account) -> Iterator[str]:
    for name, (_, fit) in zip("AB", account.alone, strict=True):
        share = focal_uncertainty(fit, 0)
        if share > _POOR_FOCAL:
            yield (
                f"camera {name}: its own views give the focal length to {share:.1%} only (standard deviation); above "
                f"{_POOR_FOCAL:.0%} distances are in doubt: tilt the target more, about both ways"
            )
    if jump := account.jump:
        yield (
            f"camera {'AB'[jump.camera]}: the focal length changes by {jump.share:+.2%} from {jump.name} on "
            f"({jump.sigmas:.0f} standard deviations): did autofocus or zoom move? Fix the focus and take all views again"
        )


def _pair_warnings(account: Account) -> Iterator[str]:
    result = account.result
    if result.pairs < _ENOUGH_VIEWS:
        yield f"{result.pairs} views show the target to both cameras; take {_ENOUGH_VIEWS} or more"
    alone = max(result.a.rms_px, result.b.rms_px)
    if result.rms_px > max(2 * alone, _GOOD_RMS_PX):
        yield (
            f"each camera fits on its own (RMS {alone:.2f} px), both together less well ({result.rms_px:.2f} px): was the "
            "target still in every pair, and was no camera moved between pairs?"
        )
    typical = float(np.median(list(account.epipolar_px.values())))
    for name, distance in account.epipolar_px.items():
        if distance > max(_OUTLYING_VIEW * typical, _GOOD_RMS_PX):
            yield f"{name}: epipolar distance {distance:.2f} px against {typical:.2f} px elsewhere; leave it out"


def _scale_warnings(account: Account) -> Iterator[str]:
    if account.baseline_m is None:
        return
    ratio = account.result.rig.baseline_m / account.baseline_m
    if abs(ratio - 1) > _SAME_BASELINE:
        name = name_at(account.target, 1 / ratio)
        agreeing = f"{1 / ratio:.3f} times what its name says would agree" + (f', "{name}"' if name else "")
        yield (
            f"the baseline comes out as {account.result.rig.baseline_m * 1e3:.1f} mm, {ratio:.3f} times the "
            f"{account.baseline_m * 1e3:.1f} mm given: is the target's size right ({agreeing}: measure the print), and was "
            "the baseline taken between the two lenses?"
        )
