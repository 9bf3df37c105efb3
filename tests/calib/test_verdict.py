"""The verdict's rule, both ways: what is good stays good, and each broken limit shows."""

from collections.abc import Iterator
from dataclasses import replace
from typing import Any

import numpy as np
import pytest
from made_up_result import make_result
from skewline.calib import verdict as verdict_module
from skewline.calib.depth_error import DepthErrorCurve, depth_error_curve
from skewline.calib.result import CalibrationResult
from skewline.calib.verdict import BAD, CARE, judge

NEAR, FAR = 0.5, 1.1


@pytest.fixture(scope="module")
def good() -> CalibrationResult:
    return make_result()


@pytest.fixture(autouse=True, scope="module")
def curves_worked_out_once() -> Iterator[None]:
    """Most results here differ in a figure and not in rig or parameters, which alone make the curve."""
    kept: dict[tuple[object, ...], tuple[CalibrationResult, DepthErrorCurve]] = {}

    def curve(source: CalibrationResult, *volume: float, **more: float) -> DepthErrorCurve:
        key = (id(source.rig), id(source.parameters), volume, *more.items())
        if key not in kept:
            kept[key] = source, depth_error_curve(source, *volume, **more)  # the source too: ids stay taken
        return kept[key][1]

    with pytest.MonkeyPatch.context() as patch:
        patch.setattr(verdict_module, "depth_error_curve", curve)
        yield


def test_a_careful_calibration_is_good_and_its_depth_errors_are_those_of_the_curve(good: CalibrationResult) -> None:
    verdict = judge(good, NEAR, FAR)

    assert (verdict.grade, verdict.findings) == ("good", ())
    assert verdict.headline.startswith("Yes")
    for metres in (verdict.curve.centre_m[0], verdict.curve.centre_m[-1], verdict.curve.worst_m[-1]):
        assert f"{metres * 1e3:.2g} mm" in verdict.sentence
    assert "0.1 px" in verdict.sentence


def held_out(good: CalibrationResult, **changes: float) -> dict[str, Any]:
    assert good.held_out is not None
    return {"held_out": replace(good.held_out, **changes)}


# One figure at a time, a little over the limit of care and a little over that of use.
FIGURES = [
    ("rms_px", "reprojection error"),
    ("epipolar_median_px", "median"),
    ("epipolar_95_px", "95 %"),
]


@pytest.mark.parametrize(("name", "words"), FIGURES)
@pytest.mark.parametrize(("limits", "grade"), [(CARE, "doubtful"), (BAD, "not usable")])
def test_one_figure_over_its_limit_lowers_the_grade(
    good: CalibrationResult, name: str, words: str, limits: Any, grade: str
) -> None:
    at, over = (replace(good, **{name: factor * getattr(limits, name)}) for factor in (1.0, 1.01))

    assert judge(at, NEAR, FAR).grade == ("good" if limits is CARE else "doubtful")
    verdict = judge(over, NEAR, FAR)
    assert verdict.grade == grade
    assert [finding.grade for finding in verdict.findings] == [grade]
    assert words in verdict.findings[0].what
    assert verdict.findings[0].what in verdict.sentence


@pytest.mark.parametrize(
    ("changes", "grade", "words"),
    [
        ({"pairs": 9}, "doubtful", "number of views that both cameras saw is 9; it should be 10 or more"),
        ({"pairs": 2}, "not usable", "it should be 3 or more"),
        ({"held_out": None}, "doubtful", "no view was held out"),
        ({"warnings": ("a01.png: blurred",)}, "doubtful", "a01.png: blurred"),
        ({"rms_px": float("nan")}, "not usable", "is not known"),
    ],
)
def test_what_is_missing_or_too_little_lowers_the_grade(
    good: CalibrationResult, changes: dict[str, Any], grade: str, words: str
) -> None:
    verdict = judge(replace(good, **changes), NEAR, FAR)

    assert verdict.grade == grade
    assert any(words in finding.what for finding in verdict.findings)
    assert all(finding.remedy or finding.what in changes["warnings"] for finding in verdict.findings)


@pytest.mark.parametrize("camera", ["a", "b"])
@pytest.mark.parametrize(("name", "value", "words"), [("coverage", 0.4, "40 %"), ("tilt_deg", 12.0, "12 degrees")])
def test_views_that_leave_a_camera_unsettled_make_it_doubtful(
    good: CalibrationResult, camera: str, name: str, value: float, words: str
) -> None:
    fit = replace(getattr(good, camera), **{name: value})
    verdict = judge(replace(good, **{camera: fit}), NEAR, FAR)

    assert verdict.grade == "doubtful"
    assert words in verdict.findings[0].what
    assert f"camera {camera.upper()}" in verdict.findings[0].what


def test_held_out_views_that_fit_far_worse_than_the_others_speak_of_over_fitting(good: CalibrationResult) -> None:
    fine = judge(replace(good, **held_out(good, rms_px=1.49 * good.rms_px)), NEAR, FAR)
    worse = judge(replace(good, **held_out(good, rms_px=1.51 * good.rms_px)), NEAR, FAR)

    assert fine.grade == "good"
    assert worse.grade == "doubtful"
    assert "took no part fit worse" in worse.findings[0].what


def test_held_out_epipolar_distances_are_held_to_the_same_limits(good: CalibrationResult) -> None:
    verdict = judge(replace(good, **held_out(good, epipolar_median_px=1.2)), NEAR, FAR)

    assert verdict.grade == "not usable"
    assert "held-out" in verdict.findings[0].what


def test_parameters_known_too_poorly_for_the_distance_lower_the_grade_however_well_the_corners_fit(
    good: CalibrationResult,
) -> None:
    worst = float(np.max(judge(good, NEAR, FAR).curve.calibration_worst_m / np.linspace(NEAR, FAR, 17)))
    grades = []
    for share in (0.9 * CARE.depth_share, 2 * CARE.depth_share, 2 * BAD.depth_share):
        grown = good.parameters.covariance * (share / worst) ** 2
        grades.append(judge(replace(good, parameters=replace(good.parameters, covariance=grown)), NEAR, FAR).grade)

    assert grades == ["good", "doubtful", "not usable"]


def test_a_rig_of_unknown_scale_is_never_usable_in_metres(good: CalibrationResult) -> None:
    verdict = judge(replace(good, rig=replace(good.rig, scale_known=False)), NEAR, FAR)

    assert verdict.grade == "not usable"
    assert "scale is not known" in verdict.sentence


def test_a_volume_that_no_pair_of_pixels_reaches_is_not_usable(good: CalibrationResult) -> None:
    verdict = judge(good, 0.05, 1.1)

    assert verdict.grade == "not usable"
    assert "nothing in common" in verdict.sentence
    assert verdict.headline.startswith("No")
