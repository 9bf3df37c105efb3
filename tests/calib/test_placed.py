"""Points that matched pixels show: against a search for the least reprojection error, and against finite differences."""

import numpy as np
import pytest
from made_up_result import bench_rig
from scipy.optimize import least_squares
from scipy.spatial.transform import Rotation
from skewline.calib import Camera, Rig
from skewline.calib.placed import place_pixels

PINHOLE = bench_rig()
FISHEYE = Rig(
    a=PINHOLE.a,
    b=Camera(
        width=900, height=900, K=[[400, 0, 450], [0, 402, 450], [0, 0, 1]], distortion=[0.01, 0, 0, 0], model="fisheye"
    ),
    R=PINHOLE.R,
    t=PINHOLE.t,
)
POINTS = np.array([[0.05, 0.02, 0.6], [-0.1, -0.12, 0.9], [0.2, 0.1, 1.4]])
RIGS = pytest.mark.parametrize("rig", [PINHOLE, FISHEYE], ids=["pinhole", "fisheye"])


def pixels_of(rig: Rig, points: np.ndarray = POINTS) -> np.ndarray:
    return np.stack([rig.a.project(points), rig.b.project(points @ rig.R.T + rig.t)], axis=1)


def moved(rig: Rig, step: np.ndarray) -> Rig:
    R = Rotation.from_rotvec(step[:3]).as_matrix() @ rig.R
    return Rig(a=rig.a, b=rig.b, R=R, t=rig.t + step[3:])


@RIGS
def test_exact_pixels_give_the_exact_points(rig: Rig) -> None:
    placed = place_pixels(rig, pixels_of(rig))

    np.testing.assert_allclose(placed.points, POINTS, atol=1e-9)
    np.testing.assert_allclose(placed.miss_px, 0, atol=1e-7)
    assert placed.before.all()


@RIGS
def test_noisy_pixels_give_the_points_that_a_search_for_the_least_error_finds(rig: Rig) -> None:
    """Reference: scipy's least squares over each point, errors of B in A's pixels."""
    pixels = pixels_of(rig) + np.random.default_rng(1).normal(0, 1.0, (3, 2, 2))
    scale = np.array([[1.0], [rig.a.focal_px / rig.b.focal_px]])

    placed = place_pixels(rig, pixels)

    for row, start in enumerate(POINTS):
        found = least_squares(
            lambda x, row=row: ((pixels_of(rig, x[None])[0] - pixels[row]) * scale).ravel(),
            start,
            xtol=1e-14,
            x_scale="jac",
        )
        np.testing.assert_allclose(placed.points[row], found.x, rtol=1e-5)
        assert abs(placed.miss_px[row]) == pytest.approx(np.sqrt(2 * found.cost), rel=1e-4)


@RIGS
def test_derivatives_by_pixels_and_by_pose_are_those_of_finite_differences(rig: Rig) -> None:
    pixels = pixels_of(rig)
    placed = place_pixels(rig, pixels)
    for column, step in enumerate(np.eye(4) * 1e-3):
        ahead, behind = (place_pixels(rig, pixels + way * step.reshape(2, 2)).points for way in (1, -1))
        np.testing.assert_allclose(placed.by_pixels[:, :, column], (ahead - behind) / 2e-3, rtol=1e-3, atol=1e-7)
    for column, step in enumerate(np.eye(6) * 1e-6):
        ahead, behind = (place_pixels(moved(rig, way * step), pixels) for way in (1, -1))
        expected = (ahead.points - behind.points) / 2e-6
        np.testing.assert_allclose(placed.by_pose[:, :, column], expected, rtol=1e-3, atol=1e-4)
        # Which way across counts as positive is each point's own and may differ from one call to the next.
        miss = (np.abs(ahead.miss_px) + np.abs(behind.miss_px)) / 2e-6
        np.testing.assert_allclose(np.abs(placed.miss_by_pose[:, column]), miss, rtol=1e-3, atol=1e-2)


def test_lines_of_sight_that_draw_apart_are_told() -> None:
    behind = -POINTS[:1]
    pixels = np.stack([PINHOLE.a.project(-behind), PINHOLE.b.project(-(behind @ PINHOLE.R.T + PINHOLE.t))], axis=1)

    placed = place_pixels(PINHOLE, np.concatenate([pixels, pixels_of(PINHOLE)]))

    assert placed.before.tolist() == [False, True, True, True]
