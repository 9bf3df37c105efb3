"""Depth error against closed forms and against chance itself."""

from dataclasses import replace

import numpy as np
import pytest
from made_up_result import bench_rig, make_result, rig_from
from skewline.calib import CalibrationError, Camera, Rig
from skewline.calib.depth_error import (
    common_view,
    depth_axis,
    depth_error_curve,
    depth_sigma_from_calibration,
    depth_sigma_from_matching,
    moved_rig,
)
from skewline.calib.result import CalibrationResult

B = 0.1


def side_by_side(covariance: np.ndarray | None = None) -> Rig:
    camera = Camera(width=800, height=600, K=np.array([[700.0, 0, 399.5], [0, 700, 299.5], [0, 0, 1]]))
    return Rig(a=camera, b=camera, R=np.eye(3), t=np.array([-B, 0, 0]), covariance=covariance)


def only(index: int, sigma: float) -> np.ndarray:
    covariance = np.zeros((6, 6))
    covariance[index, index] = sigma**2
    return covariance


def turned_in_place(axis: int, sigma: float) -> np.ndarray:
    """Covariance of B turning about its own centre c: t = -R c, so a small turn w after R brings w x t along."""
    w = np.eye(3)[axis]
    way = np.concatenate([w, np.cross(w, [-B, 0, 0])]) * sigma
    return np.outer(way, way)


POINTS = np.array([[0.0, 0, 1.0], [0.2, 0.1, 0.8], [-0.1, -0.15, 0.5], [0.4, 0.0, 1.4]])
X, Y, Z = POINTS.T


@pytest.fixture(scope="module")
def result() -> CalibrationResult:
    return make_result()


def test_an_error_of_the_baseline_alone_gives_the_same_share_of_depth() -> None:
    # Similar triangles: Z = f B / d, so dZ / Z = dB / B.
    sigma = depth_sigma_from_calibration(side_by_side(only(3, 0.001)), POINTS)

    assert sigma / Z == pytest.approx(np.full(4, 0.001 / B), rel=1e-4)


def test_a_turn_about_y_gives_the_error_of_two_rays_that_cross() -> None:
    # Own derivation: B at (B, 0) sees the point under tan(beta) = (x - B) / Z, A under tan(alpha) = x / Z, and
    # Z = B / (tan(alpha) - tan(beta)). A turn moves beta alone, so dZ = Z^2 / B (1 + tan(beta)^2) dtheta in the plane
    # of the baseline and the axis (y = 0).
    flat = POINTS * [1, 0, 1]
    dtheta = 1e-4
    sigma = depth_sigma_from_calibration(side_by_side(turned_in_place(1, dtheta)), flat)

    assert sigma == pytest.approx(Z**2 / B * (1 + ((X - B) / Z) ** 2) * dtheta, rel=1e-4)


def test_a_turn_about_z_gives_no_error_in_the_plane_of_the_baseline_and_the_known_one_above_it() -> None:
    # Own derivation: the turn moves the point in B's image by y / Z dtheta along the baseline: dZ = Z^2 / B y / Z dtheta.
    dtheta = 1e-4
    sigma = depth_sigma_from_calibration(side_by_side(turned_in_place(2, dtheta)), POINTS)

    assert sigma == pytest.approx(Z * np.abs(Y) / B * dtheta, rel=1e-3, abs=1e-9)
    assert sigma[[0, 3]] == pytest.approx(0, abs=1e-9)


def test_sigma_is_what_chance_gives_when_all_parameters_are_drawn_from_their_covariance(
    result: CalibrationResult,
) -> None:
    view = common_view(result.rig, 0.9)
    points = view.points_a[[view.centre, *view.corners]]
    pixels_a = result.rig.a.project(points)
    pixels_b = result.rig.b.project(points @ result.rig.R.T + result.rig.t)
    rng = np.random.default_rng(3)
    draws = rng.multivariate_normal(result.parameters.values, result.parameters.covariance, size=600, method="eigh")
    axis = depth_axis(result.rig)
    depths = np.array([crossing(rig_from(draw, result.rig), pixels_a, pixels_b) @ axis for draw in draws])

    # 600 draws know a standard deviation to 1 / sqrt(2 * 600) = 2.9 %: a tenth is 3.5 times that.
    assert depth_sigma_from_calibration(result, points) == pytest.approx(depths.std(axis=0), rel=0.1)


def crossing(rig: Rig, pixels_a: np.ndarray, pixels_b: np.ndarray) -> np.ndarray:
    """Cut A's rays with the planes that hold B's rays and stand square to the epipolar plane."""
    rays_a, rays_b = rig.a.rays(pixels_a), rig.b.rays(pixels_b) @ rig.R
    upright = np.cross(depth_axis(rig), rig.centre_b)
    pairs = zip(rays_a, rays_b, strict=True)
    return np.array([a * np.linalg.solve(np.column_stack([a, -b, upright]), rig.centre_b)[0] for a, b in pairs])


def test_matching_noise_follows_the_law_of_gallup_et_al() -> None:
    # Gallup et al., CVPR 2008, eq. 1: eps_z = z^2 / (b f) eps_d. f = 700 px, B = 0.1 m: 0.1 px at 1 m is 1.43 mm.
    sigma = depth_sigma_from_matching(side_by_side(), np.array([0.5, 1.0, 2.0]), 0.1)

    assert sigma == pytest.approx([0.25 * 0.1 / 70, 0.1 / 70, 4 * 0.1 / 70])


def test_the_law_is_what_a_moved_pixel_does_to_the_crossing_of_two_rays() -> None:
    rig, step = side_by_side(), 1e-3
    pixels_a, pixels_b = rig.a.project(POINTS), rig.b.project(POINTS + rig.t)
    moved = crossing(rig, pixels_a, pixels_b + np.array([step, 0]))[:, 2] - Z

    assert np.abs(moved) / step == pytest.approx(depth_sigma_from_matching(rig, Z, 1.0), rel=1e-3)


def test_both_parts_of_the_curve_add_in_squares_and_grow_with_distance(result: CalibrationResult) -> None:
    curve = depth_error_curve(result, 0.5, 1.2, disparity_sigma_px=0.2)

    assert curve.centre_m**2 == pytest.approx(curve.calibration_centre_m**2 + curve.matching_m**2)
    assert curve.worst_m**2 == pytest.approx(curve.calibration_worst_m**2 + curve.matching_m**2)
    assert np.all(np.diff(curve.centre_m) > 0)
    assert curve.distances_m[[0, -1]] == pytest.approx([0.5, 1.2])


def test_where_the_cameras_see_nothing_in_common_there_is_no_figure(result: CalibrationResult) -> None:
    # A metre of baseline at 20 cm: the two views pass each other by.
    apart = replace(bench_rig(), t=np.array([-1.0, 0, 0]))
    assert len(common_view(apart, 0.2).points_a) == 0
    curve = depth_error_curve(replace(result, rig=apart), 0.2, 0.3)

    assert np.isnan(curve.centre_m).all()


def test_depth_is_counted_square_to_the_baseline_and_nearest_to_both_optical_axes() -> None:
    rig = bench_rig()
    axis = depth_axis(rig)

    assert axis @ rig.centre_b == pytest.approx(0, abs=1e-12)
    assert np.linalg.norm(axis) == pytest.approx(1)
    assert depth_axis(side_by_side()) == pytest.approx([0, 0, 1])


def test_cameras_that_look_along_the_baseline_have_no_depth_axis() -> None:
    camera = side_by_side().a
    with pytest.raises(CalibrationError, match="stand side by side"):
        depth_axis(Rig(a=camera, b=camera, R=np.eye(3), t=np.array([0, 0, -0.1])))


def test_a_moved_rig_moves_what_its_names_say() -> None:
    rig = bench_rig()
    moved = moved_rig(rig, {"a.fx": 2.0, "b.k3": 0.01, "pose.tz": 0.003, "pose.rx": 0.02})

    assert moved.a.K[0, 0] - rig.a.K[0, 0] == pytest.approx(2.0)
    assert moved.b.distortion[4] - rig.b.distortion[4] == pytest.approx(0.01)
    assert moved.t - rig.t == pytest.approx([0, 0, 0.003])
    turn = moved.R @ rig.R.T
    assert turn == pytest.approx(
        np.array([[1, 0, 0], [0, np.cos(0.02), -np.sin(0.02)], [0, np.sin(0.02), np.cos(0.02)]]), abs=1e-9
    )


@pytest.mark.parametrize("name", ["c.fx", "a.k6", "a.zoom", "pose.roll"])
def test_a_name_that_is_no_parameter_is_refused(name: str) -> None:
    with pytest.raises(CalibrationError, match="is no parameter of"):
        moved_rig(bench_rig(), {name: 1.0})


def test_a_rig_without_covariance_is_refused_with_the_remedy() -> None:
    with pytest.raises(CalibrationError, match=r"carries no covariance.*calibrate it from a target"):
        depth_sigma_from_calibration(side_by_side(), POINTS)


def test_a_matrix_that_is_no_covariance_is_refused() -> None:
    wrong = np.eye(6)
    wrong[0, 1] = wrong[1, 0] = 2.0
    with pytest.raises(CalibrationError, match="negative variance"):
        depth_sigma_from_calibration(side_by_side(wrong), POINTS)


@pytest.mark.parametrize(("near", "far"), [(0.0, 1.0), (1.0, 0.5), (0.5, float("nan"))])
def test_distances_that_are_no_working_volume_are_refused(near: float, far: float) -> None:
    with pytest.raises(CalibrationError, match="expected 0 < near < far"):
        depth_error_curve(make_result(views=4), near, far)


def test_parameters_held_fixed_add_nothing(result: CalibrationResult) -> None:
    held = np.zeros_like(result.parameters.covariance)
    held[18:, 18:] = result.parameters.covariance[18:, 18:]
    fixed = replace(result, parameters=replace(result.parameters, covariance=held))

    alone = replace(bench_rig(), covariance=held[18:, 18:])
    points = common_view(alone, 0.8).points_a
    assert depth_sigma_from_calibration(fixed, points) == pytest.approx(depth_sigma_from_calibration(alone, points))
