"""Two-view geometry against other libraries and against points that are known."""

import cv2
import numpy as np
import pytest
from scipy.spatial.transform import Rotation
from skewline.calib import Camera, Rig
from skewline.calib.epipolar import (
    cross_matrix,
    epipolar_distances,
    essential_matrix,
    meet_rays,
    nearest_to_rays,
    rig_epipolar_distances_px,
    sampson_distances,
    triangulate,
)
from skimage.transform import EssentialMatrixTransform


@pytest.fixture
def rig() -> Rig:
    a = Camera(width=640, height=480, K=[[600, 0, 310], [0, 602, 245], [0, 0, 1]], distortion=[-0.2, 0.08, 1e-3, 0, 0])
    b = Camera(width=800, height=600, K=[[700, 0, 402], [0, 698, 297], [0, 0, 1]], distortion=[-0.1, 0.02, 0, 5e-4, 0])
    R = Rotation.from_euler("yxz", [12, 3, -5], degrees=True).as_matrix()
    return Rig(a=a, b=b, R=R, t=-R @ [0.2, 0.01, 0.02])


@pytest.fixture
def points() -> np.ndarray:
    return np.random.default_rng(0).uniform([-0.2, -0.15, 0.7], [0.25, 0.15, 1.3], (200, 3))


def test_the_cross_matrix_multiplies_as_the_cross_product_does() -> None:
    v, w = np.random.default_rng(1).normal(size=(2, 3))

    assert cross_matrix(v) @ w == pytest.approx(np.cross(v, w), abs=1e-15)


def test_the_essential_matrix_is_that_of_scikit_image(rig: Rig) -> None:
    direction = rig.t / np.linalg.norm(rig.t)

    assert essential_matrix(rig.R, rig.t) == pytest.approx(
        EssentialMatrixTransform(rotation=rig.R, translation=direction).params, abs=1e-12
    )


def test_matched_points_lie_on_one_anothers_epipolar_lines(rig: Rig, points: np.ndarray) -> None:
    pixels_a, pixels_b = rig.a.project(points), rig.b.project(points @ rig.R.T + rig.t)

    assert rig_epipolar_distances_px(rig, pixels_a, pixels_b).max() < 1e-6


def test_a_known_epipolar_distance_is_measured() -> None:
    # With R = I and t along x, epipolar lines are the rows: the distance is the difference in y.
    E = essential_matrix(np.eye(3), np.array([1.0, 0.0, 0.0]))
    flat_a, flat_b = np.zeros((3, 2)), np.array([[2.0, 0.0], [2.0, 1.0], [2.0, 2.0]])

    for distances in epipolar_distances(E, flat_a, flat_b):
        assert distances == pytest.approx([0, 1, 2], abs=1e-15)
    # scikit-image, skimage/transform/tests/test_geometric.py: the squared Sampson residual of these is 0, 0.5, 2.
    assert sampson_distances(E, flat_a, flat_b) ** 2 == pytest.approx([0, 0.5, 2], abs=1e-15)


def test_sampson_distances_are_those_of_scikit_image_and_turn_with_the_matrix(rig: Rig) -> None:
    E = essential_matrix(rig.R, rig.t)
    flat_a, flat_b = np.random.default_rng(3).normal(size=(2, 50, 2))

    distances = sampson_distances(E, flat_a, flat_b)

    assert np.abs(distances) == pytest.approx(np.abs(EssentialMatrixTransform(matrix=E).residuals(flat_a, flat_b)))
    assert sampson_distances(-E, flat_a, flat_b) == pytest.approx(-distances)
    assert (distances > 0).any()
    assert (distances < 0).any()


def test_a_match_of_both_epipoles_has_no_sampson_distance() -> None:
    E = essential_matrix(np.eye(3), np.array([0.0, 0.0, 1.0]))

    assert np.isnan(sampson_distances(E, np.zeros((1, 2)), np.zeros((1, 2)))).all()


def test_rays_of_a_point_meet_in_it_without_a_gap(rig: Rig, points: np.ndarray) -> None:
    meeting = meet_rays(rig, rig.a.project(points), rig.b.project(points @ rig.R.T + rig.t))

    assert meeting.points_a == pytest.approx(points, abs=1e-8)
    assert meeting.gaps_m.max() < 1e-9


def test_noisy_rays_meet_where_opencv_triangulates_to_within_the_noise(rig: Rig, points: np.ndarray) -> None:
    rng = np.random.default_rng(2)
    pixels_a = rig.a.project(points) + rng.normal(0, 0.3, (len(points), 2))
    pixels_b = rig.b.project(points @ rig.R.T + rig.t) + rng.normal(0, 0.3, (len(points), 2))
    from_b = np.hstack([rig.R, rig.t[:, None]])
    flat_a, flat_b = rig.a.undistort(pixels_a), rig.b.undistort(pixels_b)
    reference = cv2.triangulatePoints(np.eye(3, 4), from_b, flat_a.T, flat_b.T)

    meeting = meet_rays(rig, pixels_a, pixels_b)

    assert meeting.points_a == pytest.approx((reference[:3] / reference[3]).T, abs=1e-3)
    # 0.3 px across at about 1 m and 650 px: half a millimetre in each camera.
    assert 1e-4 < np.median(meeting.gaps_m) < 1e-3


def test_the_gap_grows_with_an_error_of_the_pose(rig: Rig, points: np.ndarray) -> None:
    knocked = Rig(a=rig.a, b=rig.b, R=Rotation.from_euler("x", 0.1, degrees=True).as_matrix() @ rig.R, t=rig.t)
    pixels = rig.a.project(points), rig.b.project(points @ rig.R.T + rig.t)

    # 0.1 degree about the baseline lifts B's rays by 1.7 mm at 1 m.
    assert np.median(meet_rays(knocked, *pixels).gaps_m) == pytest.approx(np.deg2rad(0.1), rel=0.3)
    # and by f times the angle in B's picture.
    assert np.median(rig_epipolar_distances_px(knocked, *pixels)) == pytest.approx(np.deg2rad(0.1) * 650, rel=0.2)


def test_noisy_points_are_triangulated_as_opencv_does(rig: Rig, points: np.ndarray) -> None:
    rng = np.random.default_rng(4)
    flat_a = points[:, :2] / points[:, 2:] + rng.normal(0, 1e-3, (len(points), 2))
    in_b = points @ rig.R.T + rig.t
    flat_b = in_b[:, :2] / in_b[:, 2:] + rng.normal(0, 1e-3, (len(points), 2))
    reference = cv2.triangulatePoints(np.eye(3, 4), np.column_stack([rig.R, rig.t]), flat_a.T, flat_b.T)

    found = triangulate(flat_a, flat_b, rig.R, rig.t)

    assert found == pytest.approx((reference[:3] / reference[3]).T, abs=1e-9)
    # a thousandth of the image plane, at about 1 m with a baseline of 0.2 m: some 5 mm, mostly in depth
    assert 1e-3 < np.median(np.linalg.norm(found - points, axis=1)) < 1e-2


def test_parallel_rays_meet_nowhere_and_those_that_draw_apart_meet_behind() -> None:
    R, t = np.eye(3), np.array([-0.2, 0.0, 0.0])
    flat_a = np.array([[0.1, -0.05], [0.1, -0.05]])
    flat_b = np.array([[0.1, -0.05], [0.3, -0.05]])
    behind = np.array([-0.1, 0.05, -1.0])  # B's ray gains 0.2 on A's per metre, over a baseline of 0.2 m

    by_points = triangulate(flat_a, flat_b, R, t)
    by_rays = nearest_to_rays(*(np.column_stack([flat, np.ones(2)]) for flat in (flat_a, flat_b)), R, t)

    for found in (by_points, by_rays.points_a):
        assert np.isnan(found[0]).all()
        assert found[1] == pytest.approx(behind, abs=1e-12)
    assert np.isnan(by_rays.gaps_m[0])
    assert by_rays.gaps_m[1] == pytest.approx(0, abs=1e-12)
