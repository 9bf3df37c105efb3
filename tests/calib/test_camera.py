"""The lens models against OpenCV's, and both ways against themselves over whole pictures."""

from typing import Any

import cv2
import numpy as np
import pytest
from skewline.calib import CalibrationError, Camera
from skewline.calib.camera import FloatArray

K = np.array([[820.0, 0, 651.3], [0, 806, 470.8], [0, 0, 1]])

PINHOLE_LENSES = {
    "none": (),
    "k1k2p1p2": (-0.28, 0.09, 1.2e-3, -8e-4),
    "k3": (-0.28, 0.11, 1.2e-3, -8e-4, -0.018),
    "pincushion": (0.17, -0.04, -9e-4, 1.1e-3, 0.02),
    "rational": (0.35, 0.06, 7e-4, -5e-4, 0.004, 0.66, 0.11, 0.006),
    "thin prism": (-0.15, 0.07, 1e-3, 6e-4, -0.01, 0.04, 0.02, 0.001, 1.5e-3, -3e-4, -1.1e-3, 2e-4),
    "tilted": (-0.15, 0.07, 1e-3, 6e-4, -0.01, 0.04, 0.02, 0.001, 1.5e-3, -3e-4, -1.1e-3, 2e-4, 0.03, -0.02),
}
FISHEYE_LENSES = {"equidistant": (), "fisheye": (-0.031, 0.0042, -0.0017, 0.0002)}
LENSES = {
    **{name: ("pinhole", lens) for name, lens in PINHOLE_LENSES.items()},
    **{name: ("fisheye", lens) for name, lens in FISHEYE_LENSES.items()},
}


def camera(name: str) -> Camera:
    model, distortion = LENSES[name]
    return Camera(width=1280, height=960, K=K, distortion=np.array(distortion), model=model)  # type: ignore[arg-type]


def points_ahead() -> FloatArray:
    """Points of a wide field: up to 42 degrees from the axis, 0.2 to 30 m away."""
    rng = np.random.default_rng(7)
    flat = rng.uniform(-0.63, 0.63, (2000, 2))
    return np.column_stack([flat, np.ones(len(flat))]) * rng.uniform(0.2, 30, (len(flat), 1))


@pytest.mark.parametrize("name", PINHOLE_LENSES)
def test_a_pinhole_camera_projects_as_opencv_does(name: str) -> None:
    points = points_ahead()
    distortion = np.array(PINHOLE_LENSES[name])
    expected, _ = cv2.projectPoints(points, np.zeros(3), np.zeros(3), K, distortion if distortion.size else None)
    np.testing.assert_allclose(camera(name).project(points), expected[:, 0], rtol=0, atol=1e-8)


@pytest.mark.parametrize("name", FISHEYE_LENSES)
def test_a_fisheye_camera_projects_as_opencv_does(name: str) -> None:
    rng = np.random.default_rng(8)
    flat = rng.uniform(-4, 4, (2000, 2))  # to 80 degrees from the axis
    points = np.column_stack([flat, np.ones(len(flat))]) * rng.uniform(0.2, 30, (len(flat), 1))
    coefficients = np.array(FISHEYE_LENSES[name] or (0.0, 0, 0, 0))
    expected, _ = cv2.fisheye.projectPoints(points[:, None], np.zeros(3), np.zeros(3), K, coefficients)
    np.testing.assert_allclose(camera(name).project(points), expected[:, 0], rtol=0, atol=1e-8)


@pytest.mark.parametrize("name", LENSES)
def test_the_ray_of_every_pixel_leads_back_to_it(name: str) -> None:
    lens = camera(name)
    x, y = np.meshgrid(np.arange(-0.5, 1280, 5.0), np.arange(-0.5, 960, 5.0))
    pixels = np.column_stack([x.ravel(), y.ravel()])
    rays = lens.rays(pixels)
    np.testing.assert_allclose(np.linalg.norm(rays, axis=1), 1, rtol=0, atol=1e-12)
    np.testing.assert_allclose(lens.project(rays * 1.7), pixels, rtol=0, atol=1e-6)


@pytest.mark.parametrize("name", LENSES)
def test_undistorted_coordinates_are_those_of_the_point_that_was_projected(name: str) -> None:
    lens, points = camera(name), points_ahead()
    flat = lens.undistort(lens.project(points))
    np.testing.assert_allclose(flat, points[:, :2] / points[:, 2:], rtol=0, atol=1e-6 / 820)


def opencv_undistorted(pixels: FloatArray, distortion: FloatArray) -> FloatArray:
    ending = (cv2.TERM_CRITERIA_COUNT | cv2.TERM_CRITERIA_EPS, 500, 1e-13)
    if hasattr(cv2, "undistortPointsIter"):  # OpenCV 4
        return cv2.undistortPointsIter(pixels, K, distortion, np.eye(3), np.eye(3), ending)
    return cv2.undistortPoints(pixels, K, distortion, criteria=ending)


@pytest.mark.parametrize("name", PINHOLE_LENSES)
def test_undistort_agrees_with_opencv_s_iteration_run_to_its_end(name: str) -> None:
    lens, distortion = camera(name), np.array(PINHOLE_LENSES[name])
    pixels = lens.grid_pixels(33, 25)
    expected = opencv_undistorted(pixels[:, None], distortion if distortion.size else np.zeros(4))[:, 0]
    np.testing.assert_allclose(lens.undistort(pixels), expected, rtol=0, atol=1e-6 / 820)


def test_fisheye_undistort_agrees_with_opencv_s() -> None:
    lens = camera("fisheye")
    pixels = lens.grid_pixels(33, 25)
    expected = cv2.fisheye.undistortPoints(pixels[:, None], K, lens.distortion)[:, 0]
    np.testing.assert_allclose(lens.undistort(pixels), expected, rtol=0, atol=1e-5 / 820)


def test_pixel_zero_zero_is_the_centre_of_the_top_left_pixel_and_y_points_down() -> None:
    # An image whose principal point is its middle: width 5 has its middle column at x = 2, not at 2.5.
    small = Camera(width=5, height=3, K=[[10, 0, 2], [0, 10, 1], [0, 0, 1]])  # type: ignore[arg-type]
    pixels = small.project([(0, 0, 1), (-0.2, -0.1, 1), (0.2, 0.1, 1), (0, 0.1, 1)])
    np.testing.assert_allclose(pixels, [(2, 1), (0, 0), (4, 2), (2, 2)], rtol=0, atol=1e-12)
    edges = np.array([(-0.5, -0.5), (4.5, 2.5), (-0.51, 0), (0, 2.51), (np.nan, 0)])
    assert small.contains(edges).tolist() == [True, True, False, False, False]
    for pixels in (small.border_pixels(), small.grid_pixels()):
        assert pixels.min(axis=0).tolist() == [-0.5, -0.5]
        assert pixels.max(axis=0).tolist() == [4.5, 2.5]


@pytest.mark.parametrize("name", PINHOLE_LENSES)
def test_points_behind_a_pinhole_camera_have_no_pixel(name: str) -> None:
    behind = [(0.1, 0.2, -1.0), (0, 0, 0), (0.1, 0, 0), (0, 0, -1), (np.nan, 0, 1), (0, 0, np.nan)]
    assert np.isnan(camera(name).project(behind)).all()


def test_a_fisheye_camera_sees_beside_and_behind_itself_but_not_straight_behind() -> None:
    lens = camera("equidistant")
    beside, back = lens.project([(1.0, 0, 0), (1.0, 0, -1.0)])
    # The equidistant model itself: f times the angle from the axis.
    np.testing.assert_allclose(beside, (651.3 + 820 * np.pi / 2, 470.8), rtol=0, atol=1e-9)
    np.testing.assert_allclose(back, (651.3 + 820 * np.pi * 3 / 4, 470.8), rtol=0, atol=1e-9)
    assert np.isnan(lens.project([(0, 0, -1), (0, 0, 0), (np.nan, 0, 1)])).all()
    assert np.isnan(lens.undistort([back])).all(), "a ray that does not lead forward has no x/z"
    np.testing.assert_allclose(lens.rays([beside]), [(1, 0, 0)], rtol=0, atol=1e-12)


def test_a_strong_barrel_lens_does_not_fold_far_off_points_back_into_the_picture() -> None:
    # r (1 + k1 r^2) with k1 = -0.4 turns back at r = 1 / sqrt(3 * 0.4) = 0.9129; r = 1.5 comes out at 0.15.
    lens = Camera(width=1280, height=960, K=K, distortion=np.array([-0.4, 0, 0, 0]))
    assert lens.field_limit == pytest.approx(1 / np.sqrt(1.2), abs=1e-12)
    folded, _ = cv2.projectPoints(np.array([(1.5, 0.0, 1.0)]), np.zeros(3), np.zeros(3), K, lens.distortion)
    np.testing.assert_allclose(folded[0, 0], (651.3 + 820 * 0.15, 470.8), rtol=0, atol=1e-9)  # well inside the picture
    inside, outside, far = lens.project([(0.91, 0, 1), (0.92, 0, 1), (1.5, 0, 1)])
    assert inside[0] == pytest.approx(651.3 + 820 * 0.91 * (1 - 0.4 * 0.91**2))
    assert np.isnan([outside, far]).all()


def test_pixels_that_no_ray_of_a_strong_barrel_lens_reaches_have_no_ray() -> None:
    # The same lens reaches 820 * 0.9129 * 2/3 = 499 px from its principal point, and the picture's corners lie further.
    lens = Camera(width=1280, height=960, K=K, distortion=np.array([-0.4, 0, 0, 0]))
    reach = 820 * 2 / 3 / np.sqrt(1.2)
    pixels = np.array([(651.3 + reach - 0.01, 470.8), (651.3 + reach + 0.01, 470.8), (0, 0)])
    rays = lens.rays(pixels)
    assert np.isfinite(rays[0]).all()
    assert np.isnan(rays[1:]).all()
    assert np.isnan(lens.undistort(pixels)[1:]).all()
    np.testing.assert_allclose(lens.project(rays[:1]), pixels[:1], rtol=0, atol=1e-6)


def test_a_fisheye_polynomial_is_used_only_while_it_grows() -> None:
    # theta (1 + k1 theta^2) with k1 = -0.2 turns back at theta = 1 / sqrt(0.6) = 1.291 rad.
    lens = Camera(width=1280, height=960, K=K, distortion=np.array([-0.2, 0, 0, 0]), model="fisheye")
    assert lens.field_limit == pytest.approx(1 / np.sqrt(0.6), abs=1e-12)
    angles = np.array([1.28, 1.30])
    near, beyond = lens.project(np.column_stack([np.sin(angles), np.zeros(2), np.cos(angles)]))
    assert near[0] == pytest.approx(651.3 + 820 * 1.28 * (1 - 0.2 * 1.28**2))
    assert np.isnan(beyond).all()
    reach = 820 * (1 / np.sqrt(0.6)) * 2 / 3
    rays = lens.rays([(651.3 + reach - 0.01, 470.8), (651.3 + reach + 0.01, 470.8)])
    assert np.isfinite(rays[0]).all()
    assert np.isnan(rays[1]).all()


def test_a_rational_lens_ends_where_its_denominator_does() -> None:
    # 1 / (1 - 0.5 r^2) has its pole at r = sqrt(2) and grows up to there.
    lens = Camera(width=1280, height=960, K=K, distortion=np.array([0, 0, 0, 0, 0, -0.5, 0, 0]))
    assert lens.field_limit == pytest.approx(np.sqrt(2), abs=1e-12)
    pixel = lens.project([(1.2, 0, 1)])
    assert pixel[0, 0] == pytest.approx(651.3 + 820 * 1.2 / (1 - 0.5 * 1.44))
    np.testing.assert_allclose(lens.undistort(pixel), [(1.2, 0)], rtol=0, atol=1e-9)
    assert np.isnan(lens.project([(1.5, 0, 1)])).all()


def test_every_ray_comes_from_within_the_one_to_one_cone_whatever_the_lens() -> None:
    # Lenses at random, many of them absurd: a ray is either right or NaN, and a point that has a pixel gets its ray back.
    rng = np.random.default_rng(21)
    scales = np.array([0.4, 0.2, 2e-3, 2e-3, 0.1, 0.3, 0.1, 0.05, 2e-3, 5e-4, 2e-3, 5e-4, 0.03, 0.03])
    for _ in range(40):
        lens = Camera(
            width=640, height=480, K=[[300, 0, 320], [0, 310, 240], [0, 0, 1]], distortion=rng.normal(0, scales)
        )  # type: ignore[arg-type]
        pixels = lens.grid_pixels()
        rays = lens.rays(pixels)
        found = np.isfinite(rays).all(axis=1)
        radius = np.hypot(rays[found, 0], rays[found, 1]) / rays[found, 2]
        assert (radius <= lens.field_limit * (1 + 1e-9)).all()
        np.testing.assert_allclose(lens.project(rays[found]), pixels[found], rtol=0, atol=1e-5)


def test_fields_are_read_only_copies_of_what_was_given() -> None:
    matrix, distortion = K.copy(), np.array([-0.2, 0.1, 0, 0])
    lens = Camera(width=1280, height=960, K=matrix, distortion=distortion)
    matrix[0, 0] = distortion[0] = 1
    assert lens.K[0, 0] == 820
    assert lens.distortion[0] == -0.2
    for array in (lens.K, lens.distortion):
        with pytest.raises(ValueError, match="read-only"):
            array[0] = 3
    with pytest.raises(AttributeError, match="cannot assign"):
        lens.width = 3  # type: ignore[misc]


def test_lists_columns_and_numpy_integers_are_taken_as_they_are_meant() -> None:
    lens = Camera(width=np.int64(4), height=np.int32(3), K=K.tolist(), distortion=np.zeros((5, 1)))  # type: ignore[arg-type]
    assert lens.size == (4, 3)
    assert type(lens.width) is int
    assert lens.distortion.shape == (5,)
    assert lens.focal_px == 813
    assert lens.project(np.ones((2, 4, 3))).shape == (8, 2)
    assert lens.rays((3, 4)).shape == (1, 3)


def with_entry(row: int, column: int, value: float) -> FloatArray:
    matrix = K.copy()
    matrix[row, column] = value
    return matrix


@pytest.mark.parametrize(
    ("field", "value", "match"),
    [
        ("width", 0, "camera width is 0; expected a whole number of pixels, 1 or more"),
        ("height", -4, "camera height is -4"),
        ("width", 640.0, r"camera width is 640\.0; expected a whole number"),
        ("width", "640", "camera width is '640'"),
        ("height", True, "camera height is True"),
        ("width", None, "camera width is None"),
        ("K", with_entry(2, 2, 2), "last row of 0 0 1"),
        ("K", with_entry(2, 0, 0.1), "last row of 0 0 1"),
        ("K", with_entry(0, 0, -820), "expected positive focal lengths"),
        ("K", with_entry(1, 1, 0), "expected positive focal lengths"),
        ("K", with_entry(0, 1, 0.2), r"skew 0\.2, 0\.0; expected 0, 0"),
        ("K", with_entry(0, 2, np.nan), "intrinsic matrix K holds nan; expected finite numbers"),
        ("K", with_entry(0, 2, np.inf), "intrinsic matrix K holds inf"),
        ("K", K[:2], r"intrinsic matrix K has shape \(2, 3\); expected \(3, 3\)"),
        ("K", None, "intrinsic matrix K is None; expected numbers"),
        ("K", [["820", "0", "1"]] * 3, "intrinsic matrix K is .*; expected numbers only"),
        ("K", [[1, 0, 0], [0, 1], [1]], "intrinsic matrix K is .*; expected rows of equal length"),
        ("K", K.astype(complex), "intrinsic matrix K is .*; expected numbers only"),
        ("distortion", [0.1, 0, 0], "3 distortion coefficients for the pinhole model; expected 0, 4, 5, 8, 12, 14"),
        ("distortion", np.zeros(6), "6 distortion coefficients"),
        ("distortion", 0.1, "1 distortion coefficients"),
        ("distortion", [0.1, np.nan, 0, 0], "distortion holds nan"),
        ("distortion", None, "distortion is None"),
        ("distortion", [0.1, None, 0, 0], "distortion is .*expected numbers only"),
        ("distortion", [[0.1], [0, 1]], "distortion is .*expected rows of equal length"),
        ("distortion", [10**400, 0, 0, 0], "distortion is .*expected numbers only"),
        ("model", "pin-hole", "lens model is 'pin-hole'; expected one of pinhole, fisheye"),
        ("model", None, "lens model is None"),
    ],
)
def test_values_out_of_range_are_refused_by_name(field: str, value: Any, match: str) -> None:
    good: dict[str, Any] = {"width": 1280, "height": 960, "K": K, "distortion": np.zeros(4), "model": "pinhole"}
    with pytest.raises(CalibrationError, match=match):
        Camera(**{**good, field: value})


def test_a_fisheye_camera_takes_four_coefficients_or_none() -> None:
    with pytest.raises(CalibrationError, match="5 distortion coefficients for the fisheye model; expected 0, 4"):
        Camera(width=4, height=3, K=K, distortion=np.zeros(5), model="fisheye")


def test_arrays_laid_out_the_other_way_are_refused_rather_than_cut_up() -> None:
    lens = camera("none")
    with pytest.raises(CalibrationError, match=r"points have shape \(3, 4\); expected \(N, 3\)"):
        lens.project(np.ones((3, 4)))
    with pytest.raises(CalibrationError, match=r"pixels have shape \(2, 3\); expected \(N, 2\)"):
        lens.rays(np.ones((2, 3)))
    assert lens.project(np.ones((0, 3))).shape == (0, 2)
    assert lens.rays(np.ones((0, 2))).shape == (0, 3)


@pytest.mark.parametrize("name", LENSES)
def test_far_out_and_missing_values_raise_no_warning(name: str) -> None:
    # Warnings are errors in these tests, so it is enough to ask.
    lens = camera(name)
    odd = [1e-300, 1e-12, 1.0, 1e6, 1e300, np.inf, np.nan, 0.0, -1.0]
    points = np.array(np.meshgrid(odd, odd, odd)).reshape(3, -1).T
    assert lens.project(points).shape == (len(points), 2)
    pixels = np.array(np.meshgrid(odd, odd)).reshape(2, -1).T
    assert lens.rays(pixels).shape == (len(pixels), 3)
    assert lens.undistort(pixels).shape == (len(pixels), 2)
