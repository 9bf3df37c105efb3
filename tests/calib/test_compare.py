"""Comparison of two rigs against knocks whose effect is known in closed form."""

import json
from dataclasses import replace

import numpy as np
import pytest
from made_up_result import bench_rig, make_result
from scipy.spatial.transform import Rotation
from skewline.calib import CalibrationError, Camera, Rig
from skewline.calib.compare import RigComparison, compare_rigs, comparison_figures, comparison_text
from skewline.calib.depth_error import common_view
from skewline.calib.result import Parameters

B, F, Z = 0.1, 700.0, 0.9
KNOCK = np.deg2rad(0.1)


def side_by_side() -> Rig:
    camera = Camera(width=801, height=601, K=np.array([[F, 0, 400], [0, F, 300], [0, 0, 1]]))
    return Rig(a=camera, b=camera, R=np.eye(3), t=np.array([-B, 0, 0]))


def knocked(rig: Rig, axis: int, angle: float = KNOCK) -> Rig:
    """Turn camera B about its own centre."""
    R = Rotation.from_rotvec(np.eye(3)[axis] * angle).as_matrix() @ rig.R
    return replace(rig, R=R, t=-R @ rig.centre_b)


def places() -> tuple[np.ndarray, np.ndarray]:
    view = common_view(side_by_side(), Z)
    return view.points_a[view.centre], view.points_a[list(view.corners)]


def turn_change(comparison: RigComparison, axis: str) -> float:
    name = f"turn of B about its {axis} axis"
    return next(change.change for change in comparison.parameters if change.name == name)


def test_a_rig_against_itself_has_changed_by_nothing() -> None:
    rig = replace(bench_rig(), covariance=np.diag([1e-8] * 3 + [1e-10] * 3))
    comparison = compare_rigs(rig, rig, distance_m=0.8, volume_m=(0.5, 1.1))

    assert all(change.change == pytest.approx(0, abs=1e-6) for change in comparison.parameters)
    for shift in (comparison.at_distance, *comparison.over_volume):
        assert [shift.centre_mm, *shift.corners_mm] == pytest.approx([0] * 5, abs=1e-6)
        assert shift.epipolar_shift_px == pytest.approx(0, abs=1e-6)
    assert comparison.pose_chance == pytest.approx(1)
    assert "within what chance explains" in comparison.sentence


def test_a_baseline_one_percent_longer_moves_every_depth_by_one_percent() -> None:
    # Z = f B / d.
    rig = bench_rig()
    comparison = compare_rigs(rig, replace(rig, t=rig.t * 1.01), distance_m=0.8)

    moved = [comparison.at_distance.centre_mm, *comparison.at_distance.corners_mm]
    assert moved == pytest.approx([8.0] * 5, rel=1e-6)
    assert comparison.at_distance.epipolar_shift_px == pytest.approx(0, abs=1e-6)
    baseline = next(change for change in comparison.parameters if change.name == "baseline")
    assert baseline.change == pytest.approx(0.01 * baseline.old)


def test_a_knock_about_y_moves_depth_as_crossing_rays_do() -> None:
    # Own derivation, exact in the plane y = 0: Z = B / (tan(alpha) - tan(beta)) with tan(alpha) = x / Z and
    # tan(beta) = (x - B) / Z; the turned camera holds the old ray for one turned back: beta + knock in A's frame
    # where y points down and a positive turn after R takes x_b toward -z.
    comparison = compare_rigs(side_by_side(), knocked(side_by_side(), 1), distance_m=Z)
    (x, y, _), _ = places()
    beta = np.arctan((x - B) / Z) - KNOCK

    assert y == pytest.approx(0, abs=1e-9)
    expected_mm = (B / (x / Z - np.tan(beta)) - Z) * 1e3
    assert comparison.at_distance.centre_mm == pytest.approx(expected_mm, rel=1e-6)
    # First order, for size: Z^2 / B dtheta = 0.81 / 0.1 * 0.001745 m = 14.1 mm.
    assert abs(expected_mm) == pytest.approx(14.1, rel=0.05)
    assert turn_change(comparison, "y") == pytest.approx(0.1)


def test_a_knock_about_x_moves_the_lines_and_not_the_depth() -> None:
    # v = f tan(gamma): a turn by dtheta shifts it by f (1 + (v / f)^2) dtheta, and half of that miss is counted in
    # each image; the depth of the middle moves only to second order.
    comparison = compare_rigs(side_by_side(), knocked(side_by_side(), 0), distance_m=Z)
    _, corners = places()
    steepest = np.abs(corners[:, 1]).max() / Z

    assert comparison.at_distance.centre_mm == pytest.approx(0, abs=0.05)
    assert comparison.at_distance.epipolar_shift_px == pytest.approx(F * KNOCK * (1 + steepest**2), rel=0.1)
    assert turn_change(comparison, "x") == pytest.approx(0.1)


def test_a_knock_about_z_moves_the_depth_of_the_corners_and_not_of_the_middle() -> None:
    # B's picture turns: u moves by v dtheta, so dZ = Z^2 / B (y / Z) dtheta, of opposite sign above and below.
    comparison = compare_rigs(side_by_side(), knocked(side_by_side(), 2), distance_m=Z)
    _, corners = places()
    shift = comparison.at_distance

    assert shift.centre_mm == pytest.approx(0, abs=0.05)
    expected = Z * corners[:, 1] / B * KNOCK * 1e3
    assert np.abs(shift.corners_mm) == pytest.approx(np.abs(expected), rel=0.05)
    assert np.sign(shift.corners_mm[0]) == -np.sign(shift.corners_mm[2])
    assert turn_change(comparison, "z") == pytest.approx(0.1)


def test_a_change_is_told_in_standard_deviations_of_the_difference() -> None:
    covariance = np.diag([1e-4**2] * 3 + [1e-5**2] * 3)
    old = replace(side_by_side(), covariance=covariance)
    new = replace(knocked(old, 1, 5e-4 * np.sqrt(2)), covariance=covariance)
    comparison = compare_rigs(old, new, distance_m=Z)

    by_name = {change.name: change for change in comparison.parameters}
    # Two rigs that each know the turn to 1e-4 rad know the difference to sqrt(2) times that.
    assert by_name["turn of B about its y axis"].sigmas == pytest.approx(5.0, rel=1e-6)
    assert comparison.pose_chance is not None
    assert comparison.pose_chance < 1e-4
    assert "more than chance explains" in comparison.sentence


def test_rigs_drawn_by_chance_from_one_covariance_are_seldom_called_changed() -> None:
    result = make_result()
    covariance = result.rig.covariance
    assert covariance is not None
    rng = np.random.default_rng(5)
    chances = []
    for draw in rng.multivariate_normal(np.zeros(6), 2 * covariance, size=200, method="eigh"):
        R = Rotation.from_rotvec(draw[:3]).as_matrix() @ result.rig.R
        new = replace(result.rig, R=R, t=result.rig.t + draw[3:])
        chances.append(compare_rigs(result.rig, new, distance_m=0.8).pose_chance)

    # A chance is itself spread evenly over 0 to 1 where nothing but chance is at work.
    assert np.mean(chances) == pytest.approx(0.5, abs=0.08)
    assert np.mean(np.array(chances) < 0.05) < 0.11


def test_without_covariances_no_standard_deviation_is_claimed() -> None:
    comparison = compare_rigs(side_by_side(), knocked(side_by_side(), 1), distance_m=Z)

    assert {change.sigmas for change in comparison.parameters} == {None}
    assert comparison.pose_chance is None
    assert "cannot be told" in comparison.sentence


def test_lens_changes_are_told_in_standard_deviations_where_both_are_known() -> None:
    result = make_result()
    K = np.array(result.rig.a.K)
    step = 3 * np.sqrt(2) * result.parameters.sigma("a.fx")
    K[0, 0] += step
    new = replace(result.rig, a=replace(result.rig.a, K=K))
    known: Parameters = result.parameters
    told = compare_rigs(result.rig, new, distance_m=0.8, old_parameters=known, new_parameters=known)
    half = compare_rigs(result.rig, new, distance_m=0.8, new_parameters=known)

    focal, unsure = (
        next(change for change in comparison.parameters if change.name == "camera A focal length x")
        for comparison in (told, half)
    )
    assert focal.change == pytest.approx(step)
    assert focal.sigmas == pytest.approx(3.0)
    assert unsure.sigmas is None


def test_rigs_of_other_images_or_lenses_or_no_scale_are_refused_with_the_reason() -> None:
    rig = side_by_side()
    wide = replace(rig, b=replace(rig.b, width=640))
    with pytest.raises(
        CalibrationError, match="camera B's images are 801x601 pixels in the old rig and 640x601 in the new"
    ):
        compare_rigs(rig, wide, distance_m=Z)
    fisheye = replace(rig, a=replace(rig.a, model="fisheye", distortion=np.zeros(4)))
    with pytest.raises(CalibrationError, match=r"camera A's lens model is pinhole with 0 .* and fisheye with 4 "):
        compare_rigs(rig, fisheye, distance_m=Z)
    with pytest.raises(CalibrationError, match="scale of the new rig is not known"):
        compare_rigs(rig, replace(rig, scale_known=False), distance_m=Z)


@pytest.mark.parametrize("distance", [0.0, -1.0, 0.03])
def test_a_distance_without_a_common_view_is_refused(distance: float) -> None:
    with pytest.raises(CalibrationError, match="see nothing in common at"):
        compare_rigs(side_by_side(), side_by_side(), distance_m=distance)


def test_the_text_and_the_json_carry_the_figures() -> None:
    comparison = compare_rigs(side_by_side(), knocked(side_by_side(), 1), distance_m=Z, volume_m=(0.5, 1.2))
    text, figures = comparison_text(comparison), comparison_figures(comparison)

    assert comparison.sentence in text
    assert f"{comparison.at_distance.centre_mm:+.2f}" in text
    assert "turn of B about its y axis" in text
    assert json.loads(json.dumps(figures, allow_nan=False)) == figures
    assert figures["depth_shifts"][0]["centre_mm"] == comparison.at_distance.centre_mm
    assert [shift["distance_m"] for shift in figures["depth_shifts"]] == [Z, 0.5, 1.2]
