"""Projection and its derivatives against OpenCV's own."""

import cv2
import numpy as np
import pytest
from skewline.calib import Camera
from skewline.calib.projection import camera_from, intrinsic_names, intrinsics_of, project_points

K = np.array([[812.0, 0, 633.5], [0, 790.0, 371.25], [0, 0, 1]])
LENS = np.array([-0.21, 0.09, 1.3e-3, -8e-4, -0.02, 0.11, 0.03, -0.01, 1e-3, -5e-4, 7e-4, 3e-4, 0.02, -0.03])
FISHEYE = np.array([0.03, -0.012, 0.006, -0.001])
TURN, SHIFT = np.array([0.2, -0.3, 0.1]), np.array([0.05, -0.04, 1.1])


def board_points() -> np.ndarray:
    return np.random.default_rng(1).uniform([-0.5, -0.4, -0.2], [0.5, 0.4, 0.2], (60, 3))


def in_camera(points: np.ndarray) -> np.ndarray:
    return points @ cv2.Rodrigues(TURN)[0].T + SHIFT


@pytest.mark.parametrize("count", [4, 5, 8, 12, 14])
def test_pinhole_projection_and_derivatives_are_those_of_opencv(count: int) -> None:
    points, lens = board_points(), LENS[:count]
    pixels, jacobian = cv2.projectPoints(points, TURN, SHIFT, K, lens)
    camera = Camera(width=1280, height=720, K=K, distortion=lens)

    ours = project_points(in_camera(points), intrinsics_of(camera), "pinhole")

    assert ours.pixels == pytest.approx(pixels.reshape(-1, 2), abs=1e-9)
    # OpenCV's columns: rotation vector, translation, focal lengths, principal point, coefficients.
    expected = jacobian.reshape(-1, 2, jacobian.shape[1])
    assert ours.by_point == pytest.approx(expected[:, :, 3:6], abs=1e-9)
    assert ours.by_intrinsics == pytest.approx(expected[:, :, 6 : 10 + count], abs=1e-9)


def test_fisheye_projection_and_derivatives_are_those_of_opencv() -> None:
    points = board_points()
    pixels, jacobian = cv2.fisheye.projectPoints(points[None], TURN, SHIFT, K, FISHEYE)
    camera = Camera(width=1280, height=720, K=K, distortion=FISHEYE, model="fisheye")

    ours = project_points(in_camera(points), intrinsics_of(camera), "fisheye")

    assert ours.pixels == pytest.approx(pixels.reshape(-1, 2), abs=1e-9)
    # OpenCV's columns: focal lengths, principal point, coefficients, rotation vector, translation, skew.
    expected = jacobian.reshape(-1, 2, jacobian.shape[1])
    assert ours.by_intrinsics == pytest.approx(expected[:, :, :8], abs=1e-9)
    assert ours.by_point == pytest.approx(expected[:, :, 11:14], abs=1e-8)


@pytest.mark.parametrize("offset", [0.0, 1e-7, 9.9e-5, 1.01e-4, 1e-3])
def test_the_fisheye_is_smooth_on_its_axis(offset: float) -> None:
    intrinsics = np.array([812.0, 790.0, 633.5, 371.25, *FISHEYE])
    point = np.array([[offset * 0.6, offset * 0.8, 1.0]])

    ours = project_points(point, intrinsics, "fisheye")

    for axis in range(3):
        step = np.eye(3)[axis] * 1e-6
        ends = [project_points(point + sign * step, intrinsics, "fisheye").pixels for sign in (1, -1)]
        assert ours.by_point[:, :, axis] == pytest.approx((ends[0] - ends[1]) / 2e-6, abs=1e-4)


@pytest.mark.parametrize(("model", "lens"), [("pinhole", LENS), ("pinhole", LENS[:0]), ("fisheye", FISHEYE)])
def test_projection_agrees_with_the_camera_and_intrinsics_come_back(model: str, lens: np.ndarray) -> None:
    camera = Camera(width=1280, height=720, K=K, distortion=lens, model=model)
    points = in_camera(board_points())

    again = camera_from(intrinsics_of(camera), camera.size, camera.model)

    projected = project_points(points, intrinsics_of(camera), camera.model)
    assert projected.pixels == pytest.approx(camera.project(points), abs=1e-9)
    assert projected.by_intrinsics.shape == (60, 2, len(intrinsic_names(len(lens), camera.model)))
    assert np.array_equal(again.K, camera.K)
    assert np.array_equal(again.distortion, camera.distortion)
