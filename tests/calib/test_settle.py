"""Refining poses on matched points, held to a bundle adjustment over poses and points and to what noise really does."""

from __future__ import annotations

import numpy as np
import pytest
from scipy.optimize import least_squares
from scipy.spatial.transform import Rotation
from scipy.stats import chi2
from skewline.calib import CalibrationError, Camera
from skewline.calib.settle import settle
from skewline.calib.sight_lines import Poses, Sightings, SightLines

CAMERA_A = Camera(
    width=1280, height=960, K=[[1000, 0, 640], [0, 1002, 480], [0, 0, 1]], distortion=[-0.2, 0.05, 1e-3, -5e-4, 0]
)
CAMERA_B = Camera(width=1000, height=800, K=[[700, 0, 500], [0, 701, 400], [0, 0, 1]], distortion=[-0.1, 0.02, 0, 0, 0])
FISHEYE_C = Camera(
    width=900, height=900, K=[[400, 0, 450], [0, 400, 450], [0, 0, 1]], distortion=[0.01, 0, 0, 0], model="fisheye"
)
CAMERAS = (CAMERA_A, CAMERA_B, FISHEYE_C)


def three_poses() -> Poses:
    R = [np.eye(3)] + [Rotation.from_rotvec(v).as_matrix() for v in ([0.05, -0.25, 0.1], [-0.1, 0.2, -0.05])]
    centres = np.array([[0, 0, 0], [0.25, 0.02, 0.03], [-0.2, 0.1, 0.05]])
    t = np.array([-turn @ centre for turn, centre in zip(R, centres, strict=True)])
    return Poses(R=np.array(R), t=t / np.linalg.norm(t))


def pair_poses() -> Poses:
    poses = three_poses()
    return Poses.of_pair(poses.R[1], poses.t[1])


def points_before(cameras: tuple[Camera, ...], poses: Poses, count: int, rng: np.random.Generator) -> np.ndarray:
    """Points that all cameras see, between two and five baselines away, in camera 0's frame."""
    kept: list[np.ndarray] = []
    reach = float(np.linalg.norm(poses.t[1]))
    while sum(map(len, kept)) < count:
        pixels = rng.uniform([20, 20], [cameras[0].width - 20, cameras[0].height - 20], (4 * count, 2))
        rays = cameras[0].rays(pixels)
        points = rays / rays[:, 2:] * rng.uniform(2, 5, (len(rays), 1)) * reach
        seen = np.all(
            [c.contains(c.project(points @ R.T + t)) for c, R, t in zip(cameras, poses.R, poses.t, strict=True)], axis=0
        )
        kept.append(points[seen])
    return np.concatenate(kept)[:count]


def sighted(cameras: tuple[Camera, ...], poses: Poses, which: tuple[int, ...], points: np.ndarray) -> Sightings:
    pixels = [cameras[k].project(points @ poses.R[k].T + poses.t[k]) for k in which]
    return Sightings(cameras=which, pixels=np.stack(pixels, axis=1), clusters=np.arange(len(points)))


def noisy(sightings: Sightings, cameras: tuple[Camera, ...], noise_px: float, rng: np.random.Generator) -> Sightings:
    """Noise of one angle for all cameras, given in pixels of camera 0."""
    scale = np.array([cameras[k].focal_px / cameras[0].focal_px for k in sightings.cameras])
    noise = rng.normal(0, noise_px, sightings.pixels.shape) * scale[:, None]
    return Sightings(cameras=sightings.cameras, pixels=sightings.pixels + noise, clusters=sightings.clusters)


def pose_step(found: Poses, true: Poses) -> np.ndarray:
    """The step of ``Poses.moved`` from the found poses to the true ones."""
    turns = Rotation.from_matrix(true.R[1:] @ found.R[1:].transpose(0, 2, 1)).as_rotvec()
    return np.concatenate([turns, true.t[1:] - found.t[1:]], axis=1).ravel()


@pytest.mark.parametrize("which", [(0, 1), (1, 2), (0, 1, 2), (2, 0)])
def test_slopes_by_pose_are_those_of_finite_differences(which: tuple[int, ...]) -> None:
    poses = three_poses()
    group = sighted(CAMERAS, poses, which, points_before(CAMERAS, poses, 20, np.random.default_rng(1)))
    off = poses.moved(np.full(12, 2e-3))
    lines = SightLines(CAMERAS, [group])
    here = lines.misses(off, 0)
    step = 1e-6
    for index, direction in enumerate(off.free_steps().T):
        ahead, behind = (lines.misses(off.moved(sign * step * direction), 0).left for sign in (1, -1))
        # What is left is given in a basis of each point's own, which may flip its sign between two places.
        square = ((ahead**2).sum(axis=1) - (behind**2).sum(axis=1)) / (2 * step)
        expected = 2 * (here.left * (here.slopes @ direction)).sum(axis=1)
        np.testing.assert_allclose(
            square, expected, rtol=2e-4, atol=2e-3 * np.abs(expected).max() + 1e-6, err_msg=str(index)
        )


def test_exact_points_give_the_exact_poses_of_three_cameras_of_two_kinds() -> None:
    rng = np.random.default_rng(2)
    poses = three_poses()
    points = points_before(CAMERAS, poses, 120, rng)
    groups = [
        sighted(CAMERAS, poses, (0, 1), points[:40]),
        sighted(CAMERAS, poses, (1, 2), points[40:80]),
        sighted(CAMERAS, poses, (0, 1, 2), points[80:]),
    ]
    start = poses.moved(rng.normal(0, 0.01, 12))
    found = settle(CAMERAS, start, groups)
    np.testing.assert_allclose(pose_step(found.poses, poses), 0, atol=1e-9)


def test_the_minimum_is_that_of_a_bundle_adjustment_over_pose_and_points() -> None:
    """Reference: scipy.optimize.least_squares over pose and points at once, with no elimination and no weights."""
    rng = np.random.default_rng(3)
    cameras, poses = (CAMERA_A, CAMERA_B), pair_poses()
    points = points_before(cameras, poses, 40, rng)
    group = noisy(sighted(cameras, poses, (0, 1), points), cameras, 0.05, rng)
    scale = CAMERA_A.focal_px / CAMERA_B.focal_px

    def residuals(unknowns: np.ndarray) -> np.ndarray:
        at = poses.moved(poses.free_steps() @ unknowns[:5])
        places = unknowns[5:].reshape(-1, 3)
        in_b = CAMERA_B.project(places @ at.R[1].T + at.t[1])
        return np.concatenate(
            [(CAMERA_A.project(places) - group.pixels[:, 0]).ravel(), scale * (in_b - group.pixels[:, 1]).ravel()]
        )

    bundle = least_squares(residuals, np.concatenate([np.zeros(5), points.ravel()]), xtol=1e-14, ftol=1e-14, gtol=1e-14)
    reference = poses.moved(poses.free_steps() @ bundle.x[:5])
    # So wide a biweight (the noise is told from the middle, the errors are normal) still weights: hence a share of sigma.
    found = settle(cameras, poses, [group])
    sigma = np.sqrt(np.diag(found.covariance))
    assert (np.abs(pose_step(found.poses, reference)) < 0.5 * sigma).all()
    left = np.concatenate([miss.left.ravel() for miss in found.misses])
    np.testing.assert_allclose((left**2).sum(), 2 * bundle.cost, rtol=0.02)


@pytest.mark.timeout(400)
def test_the_true_pose_lies_within_the_stated_95_percent_region_in_90_to_99_percent_of_200_trials() -> None:
    rng = np.random.default_rng(4)
    cameras, poses = (CAMERA_A, CAMERA_B), pair_poses()
    inside = 0
    for _ in range(200):
        exact = sighted(cameras, poses, (0, 1), points_before(cameras, poses, 150, rng))
        found = settle(cameras, poses.moved(rng.normal(0, 0.005, 6)), [noisy(exact, cameras, 0.5, rng)])
        step = found.poses.free_steps().T @ pose_step(found.poses, poses)
        covariance = found.poses.free_steps().T @ found.covariance @ found.poses.free_steps()
        inside += step @ np.linalg.solve(covariance, step) < chi2.ppf(0.95, 5)
    assert 0.90 <= inside / 200 <= 0.99


def test_errors_that_go_together_within_a_part_of_the_picture_raise_the_stated_deviations() -> None:
    rng = np.random.default_rng(5)
    cameras, poses = (CAMERA_A, CAMERA_B), pair_poses()
    distances, plain = [], []
    for _ in range(12):
        points = points_before(cameras, poses, 600, rng)
        exact = sighted(cameras, poses, (0, 1), points)
        part = (exact.pixels[:, 0, 0] // 160).astype(int) + 8 * (exact.pixels[:, 0, 1] // 160).astype(int)
        common = rng.normal(0, 0.3, (48, 2))[part]
        pixels = noisy(exact, cameras, 0.3, rng).pixels
        pixels[:, 1] += common
        for clusters, kept in ((part, distances), (np.arange(600), plain)):
            found = settle(cameras, poses, [Sightings(cameras=(0, 1), pixels=pixels, clusters=clusters)])
            basis = found.poses.free_steps()
            step = basis.T @ pose_step(found.poses, poses)
            kept.append(step @ np.linalg.solve(basis.T @ found.covariance @ basis, step) / 5)
    # By chi-square of 5 degrees, a mean of 12 true ones has a deviation of sqrt(2 / 5 / 12) = 0.18: 1.6 is 3.3 of them.
    assert np.mean(distances) < 1.6
    assert np.mean(plain) > 3


def test_a_quarter_of_wrong_matches_moves_the_pose_by_less_than_a_deviation() -> None:
    rng = np.random.default_rng(6)
    cameras, poses = (CAMERA_A, CAMERA_B), pair_poses()
    exact = sighted(cameras, poses, (0, 1), points_before(cameras, poses, 400, rng))
    good = noisy(exact, cameras, 0.3, rng)
    pixels = good.pixels.copy()
    pixels[:100, 1] += rng.normal(0, 30, (100, 2))
    inside = CAMERA_B.contains(pixels[:, 1])
    clean = settle(cameras, poses, [Sightings(cameras=(0, 1), pixels=good.pixels[100:], clusters=np.arange(300))])
    found = settle(
        cameras, poses, [Sightings(cameras=(0, 1), pixels=pixels[inside], clusters=np.arange(int(inside.sum())))]
    )
    assert (np.abs(pose_step(found.poses, clean.poses)) < np.sqrt(np.diag(clean.covariance))).all()
    rejected = found.weights[0][: int(inside[:100].sum())] == 0
    assert rejected.mean() > 0.8


def test_a_source_that_is_noisier_counts_less() -> None:
    rng = np.random.default_rng(7)
    cameras, poses = (CAMERA_A, CAMERA_B), pair_poses()
    groups = []
    for source, noise in (("fine", 0.1), ("coarse", 2.0)):
        exact = sighted(cameras, poses, (0, 1), points_before(cameras, poses, 300, rng))
        some = noisy(exact, cameras, noise, rng)
        groups.append(Sightings(cameras=(0, 1), pixels=some.pixels, clusters=some.clusters, source=source))
    both, fine = settle(cameras, poses, groups), settle(cameras, poses, groups[:1])
    assert both.noise_px["fine"] == pytest.approx(0.1, rel=0.15)
    assert both.noise_px["coarse"] == pytest.approx(2.0, rel=0.15)
    assert (np.abs(pose_step(both.poses, fine.poses)) < 0.3 * np.sqrt(np.diag(fine.covariance))).all()


def test_too_few_points_are_refused_with_the_count() -> None:
    cameras, poses = (CAMERA_A, CAMERA_B), pair_poses()
    group = sighted(cameras, poses, (0, 1), points_before(cameras, poses, 5, np.random.default_rng(8)))
    with pytest.raises(CalibrationError, match="5 matched points; expected more than 5"):
        settle(cameras, poses, [group])


def test_points_that_leave_a_direction_open_are_refused() -> None:
    cameras, poses = (CAMERA_A, CAMERA_B), pair_poses()
    one = points_before(cameras, poses, 1, np.random.default_rng(9))
    group = sighted(cameras, poses, (0, 1), np.repeat(one, 20, axis=0))
    with pytest.raises(CalibrationError, match="leave a direction of the pose open"):
        settle(cameras, poses, [group])
