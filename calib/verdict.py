"""May this rig be used, for what, and what would make it better: worked out from the figures of a calibration.

The rule, in full: the rig is **not usable** where any limit of ``BAD`` is broken, the scale is unknown, or the two
cameras see nothing in common somewhere in the working volume; else **doubtful** where any limit of ``CARE`` is broken, no
view was held out, or a warning of the calibration stands; else **good**. A figure that is missing or not finite breaks
its limit. The limits are practice, without a published source: each is written beside the figure it judges.
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import Literal

import numpy as np

from .depth_error import MATCHING_SIGMA_PX, DepthErrorCurve, depth_error_curve
from .errors import CalibrationError
from .result import CalibrationResult

Grade = Literal["good", "doubtful", "not usable"]

OVERFIT_RATIO = 1.5
"""Held-out views may fit this many times worse than those of the solve: their noise is the same, the rest is over-fit."""


@dataclass(frozen=True, kw_only=True)
class Limits:
    """What a figure may be at most, or at least where its name says so."""

    epipolar_median_px: float
    epipolar_95_px: float
    rms_px: float
    depth_share: float
    least_pairs: int
    least_coverage: float
    least_tilt_deg: float


CARE = Limits(
    epipolar_median_px=0.3,
    epipolar_95_px=1.0,
    rms_px=0.5,
    depth_share=0.01,
    least_pairs=10,
    least_coverage=0.6,
    least_tilt_deg=20.0,
)
"""Within these a rig is good. A matcher looks along one row: a line that is half a pixel off costs matches."""

BAD = Limits(
    epipolar_median_px=1.0,
    epipolar_95_px=3.0,
    rms_px=2.0,
    depth_share=0.05,
    least_pairs=3,
    least_coverage=0.1,
    least_tilt_deg=5.0,
)
"""Outside these a rig is not usable."""


@dataclass(frozen=True, kw_only=True)
class Finding:
    """One limit that was broken.

    Attributes
    ----------
    grade : {"doubtful", "not usable"}
    what : str
        The figure and its limit.
    remedy : str
        Empty where it is a warning of the calibration, which names its own.
    """

    grade: Grade
    what: str
    remedy: str


@dataclass(frozen=True, eq=False, kw_only=True)
class Verdict:
    """The answer, and what it rests on.

    Attributes
    ----------
    grade : {"good", "doubtful", "not usable"}
    headline : str
        The answer in a few words.
    sentence : str
        What for, how good, and under which condition.
    findings : tuple of Finding
        The worst first; empty for a good rig.
    curve : DepthErrorCurve
    """

    grade: Grade
    headline: str
    sentence: str
    findings: tuple[Finding, ...]
    curve: DepthErrorCurve


_HEADLINES: dict[Grade, str] = {
    "good": "Yes, this rig may be used.",
    "doubtful": "With care: this rig works, but something speaks against trusting it yet.",
    "not usable": "No, do not use this rig.",
}


def judge(
    result: CalibrationResult, near_m: float, far_m: float, *, disparity_sigma_px: float = MATCHING_SIGMA_PX
) -> Verdict:
    """Judge a calibration for a working volume by the rule at the top of this module.

    Parameters
    ----------
    result : CalibrationResult
    near_m, far_m : float
        The working volume along the rectified axis, in metres.
    disparity_sigma_px : float
        Standard deviation of a match, for the depth error that is stated.

    Raises
    ------
    CalibrationError
        Where the distances are no working volume.
    """
    curve = depth_error_curve(result, near_m, far_m, disparity_sigma_px=disparity_sigma_px)
    found = [*_scale_findings(result), *_depth_findings(curve), *_fit_findings(result), *_view_findings(result)]
    findings = tuple(sorted(found, key=lambda finding: finding.grade != "not usable"))
    grade: Grade = "good" if not findings else findings[0].grade
    return Verdict(
        grade=grade,
        headline=_HEADLINES[grade],
        sentence=_sentence(curve, grade, findings),
        findings=findings,
        curve=curve,
    )


def _at_most(name: str, value: float, care: float, bad: float, unit: str, remedy: str) -> list[Finding]:
    """Hold a figure to its two limits; what is not a number breaks the worse one."""
    if value <= care:
        return []
    grade: Grade = "doubtful" if value <= bad else "not usable"
    limit = care if grade == "doubtful" else bad
    return [
        Finding(
            grade=grade,
            what=f"{name} is {_plain(value, unit)}; it should be {_plain(limit, unit)} or less",
            remedy=remedy,
        )
    ]


def _at_least(name: str, value: float, care: float, bad: float, unit: str, remedy: str) -> list[Finding]:
    if value >= care:
        return []
    grade: Grade = "doubtful" if value >= bad else "not usable"
    limit = care if grade == "doubtful" else bad
    return [
        Finding(
            grade=grade,
            what=f"{name} is {_plain(value, unit)}; it should be {_plain(limit, unit)} or more",
            remedy=remedy,
        )
    ]


def _plain(value: float, unit: str) -> str:
    if not np.isfinite(value):
        return "not known"
    return f"{value * 100:.3g} %" if unit == "%" else f"{value:.3g}{unit and ' ' + unit}"


def _scale_findings(result: CalibrationResult) -> list[Finding]:
    if result.rig.scale_known:
        return []
    return [
        Finding(
            grade="not usable",
            what="the scale is not known, so no depth of this rig is in metres",
            remedy="Give one measured length: calibrate with a target whose squares were measured.",
        )
    ]


def _depth_findings(curve: DepthErrorCurve) -> list[Finding]:
    blind = ~np.isfinite(curve.calibration_centre_m)
    if blind.any():
        first = curve.distances_m[blind]
        return [
            Finding(
                grade="not usable",
                what=f"both cameras see nothing in common, or its error is not known, at {first[0]:.2f} to {first[-1]:.2f} m",
                remedy="Name the distances where both cameras look at one place, or turn the cameras and calibrate anew.",
            )
        ]
    share = float(np.max(curve.calibration_worst_m / curve.distances_m))
    return _at_most(
        "the depth error that the calibration causes, at its worst in the working volume,",
        share,
        CARE.depth_share,
        BAD.depth_share,
        "%",
        "Take more views, tilted 20 to 40 degrees both ways, at the near and far end of the working volume and into the "
        "corners of both pictures; a wider baseline helps if that does not.",
    )


def _fit_findings(result: CalibrationResult) -> list[Finding]:
    still = "Check that the target is flat and stood still, and that neither camera nor lens moved while pictures were taken."
    found = _at_most("the reprojection error (RMS)", result.rms_px, CARE.rms_px, BAD.rms_px, "px", still)
    for where, source in (("in the views used", result), ("in the held-out views", result.held_out)):
        if source is None:
            continue
        for name, value, key in (
            (f"the typical (median) epipolar distance {where}", source.epipolar_median_px, "epipolar_median_px"),
            (f"the largest (95 %) epipolar distance {where}", source.epipolar_95_px, "epipolar_95_px"),
        ):
            found += _at_most(name, value, getattr(CARE, key), getattr(BAD, key), "px", still)
    return [*found, *_held_out_findings(result)]


def _held_out_findings(result: CalibrationResult) -> list[Finding]:
    if result.held_out is None or result.held_out.pairs < 1:
        return [
            Finding(
                grade="doubtful",
                what="no view was held out, so nothing outside the solve has tested it",
                remedy="Take a few views more and calibrate again with some of them held out.",
            )
        ]
    if result.held_out.rms_px <= OVERFIT_RATIO * result.rms_px:
        return []
    return [
        Finding(
            grade="doubtful",
            what=(
                f"views that took no part fit worse ({result.held_out.rms_px:.3f} px) than those that did "
                f"({result.rms_px:.3f} px), by more than {OVERFIT_RATIO:g} times"
            ),
            remedy="Take more views, or a lens model with fewer coefficients: the solve has fitted noise.",
        )
    ]


def _view_findings(result: CalibrationResult) -> list[Finding]:
    found = _at_least(
        "the number of views that both cameras saw",
        result.pairs,
        CARE.least_pairs,
        BAD.least_pairs,
        "",
        f"Take {CARE.least_pairs} views or more that show the target to both cameras.",
    )
    for name, fit in (("A", result.a), ("B", result.b)):
        found += _at_least(
            f"the share of camera {name}'s picture that the target's corners reached",
            fit.coverage,
            CARE.least_coverage,
            BAD.least_coverage,
            "%",
            f"Hold the target into the empty parts of camera {name}'s picture, corners first.",
        )
        found += _at_least(
            f"the largest tilt of the target before camera {name}",
            fit.tilt_deg,
            CARE.least_tilt_deg,
            BAD.least_tilt_deg,
            "degrees",
            "Tilt the target by 20 to 40 degrees, to either side, up and down.",
        )
    found += [Finding(grade="doubtful", what=warning, remedy="") for warning in result.warnings]
    return found


def _sentence(curve: DepthErrorCurve, grade: Grade, findings: tuple[Finding, ...]) -> str:
    near, far = curve.distances_m[0], curve.distances_m[-1]
    if grade == "not usable":
        return f"Between {near:.2f} m and {far:.2f} m its depth cannot be relied on: {findings[0].what}."
    first = f"Expect depth to be off by {_mm(curve.centre_m[0])} at {near:.2f} m and {_mm(curve.centre_m[-1])} at {far:.2f} m"
    second = (
        f"(one standard deviation, middle of the picture; at its worst place {_mm(curve.worst_m[0])} and "
        f"{_mm(curve.worst_m[-1])}) where the surface has texture enough to be matched to {curve.matching_sigma_px:g} px."
    )
    doubt = "" if grade == "good" else f" Take these figures as a best case: {findings[0].what}."
    return f"{first} {second}{doubt}"


def _mm(metres: float) -> str:
    if not np.isfinite(metres):
        raise CalibrationError("a depth error is not known; expected a common view there")
    return f"{metres * 1e3:.2g} mm" if metres < 0.01 else f"{metres * 1e3:.0f} mm"
