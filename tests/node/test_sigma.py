"""Depth errors follow the law Z^2 / (f B) sigma_d, and the sigma published with each depth is an honest one.

The law: Gallup, "Efficient 3D Reconstruction of Large-Scale Urban Environments from Street-Level Video", PhD
dissertation, University of North Carolina, 2011, eq. 2.11 and 5.1. Truth is that of the virtual cell's geometry.
"""

import functools
from dataclasses import dataclass

import numpy as np
import pytest
from scipy import ndimage, stats
from skewline.calib import Camera, Rig
from skewline.node import DepthEngine, DepthFrame
from skewline.node.match import Match
from skewline.tools.cell import Cell, Photometry, make_cell, plane_cell, render_pair, true_depth, visible_from

MATCHERS = ("block", "semiglobal")
DISTANCES_M = (0.6, 0.8, 1.0)
HALF = {"size_a": (640, 480), "size_b": (512, 384)}
NOISY = Photometry(read_noise=4.0, shot_noise=4.0)

STRIDE = 3
"""Truth is cast for every third pixel of the large views: tens of thousands are enough to count."""


@dataclass(frozen=True)
class Measured:
    """Depth, sigma and truth at the pixels whose surface both cameras see, each of shape (N,); and one pixel's depth."""

    depth: np.ndarray
    sigma: np.ndarray
    truth: np.ndarray
    from_break_px: np.ndarray
    focal_baseline: float

    @property
    def error_px(self) -> np.ndarray:
        return (self.depth - self.truth) / self.truth**2 * self.focal_baseline

    @property
    def sigma_px(self) -> np.ndarray:
        return self.sigma / self.truth**2 * self.focal_baseline

    def share_within(self, sigmas: float) -> float:
        return float((np.abs(self.depth - self.truth) <= sigmas * self.sigma).mean())


@functools.cache
def images_of(name: str) -> tuple[Cell, tuple[np.ndarray, np.ndarray]]:
    kind, _, value = name.partition(" ")
    cell = {
        "workshop": make_cell,
        "half-workshop": lambda: make_cell(**HALF),
        "plane": lambda: plane_cell(float(value)),
        "half-plane": lambda: plane_cell(float(value), cell=make_cell(**HALF)),
        "contrast": lambda: plane_cell(0.8, contrast=float(value), cell=make_cell(**HALF)),
        "noisy-plane": lambda: plane_cell(float(value), cell=make_cell(**HALF, photometry_a=NOISY, photometry_b=NOISY)),
    }[kind]()
    return cell, render_pair(cell, np.random.default_rng(5))


@functools.cache
def measured(name: str, matcher: str) -> Measured:
    cell, images = images_of(name)
    engine = DepthEngine(cell.rig, cell.near_m, cell.far_m, matcher=matcher)
    frame = engine.compute(*images)
    stride = STRIDE if cell.rig.a.width > 1000 else 2
    truth = truth_of(cell, frame, stride)
    depth, sigma = (image[::stride, ::stride] for image in (frame.depth, frame.sigma))
    known = np.isfinite(depth) & seen_by_both(cell, frame, truth, stride)
    known &= (truth >= cell.near_m) & (truth <= cell.far_m)
    from_break = ndimage.distance_transform_cdt(~breaks(truth), "taxicab") * stride
    focal_baseline = frame.K[0, 0] * cell.rig.baseline_m
    return Measured(depth[known], sigma[known], truth[known], from_break[known], focal_baseline)


def truth_of(cell: Cell, frame: DepthFrame, stride: int) -> np.ndarray:
    height, width = frame.depth[::stride, ::stride].shape
    coarser = np.diag([1 / stride, 1 / stride, 1.0]) @ frame.K
    return true_depth(cell.scene, coarser, width, height, cell.T_world_a @ frame.T_a_view)


def seen_by_both(cell: Cell, frame: DepthFrame, truth: np.ndarray, stride: int) -> np.ndarray:
    """Tell which true surface points lie in both pictures with nothing between them and camera B."""
    v, u = np.mgrid[: truth.shape[0], : truth.shape[1]] * stride
    rays = np.stack([u, v, np.ones_like(u)], axis=-1).reshape(-1, 3) @ np.linalg.inv(frame.K).T
    points_a = (rays * truth.reshape(-1, 1)) @ frame.T_a_view[:3, :3].T
    points_world = points_a @ cell.T_world_a[:3, :3].T + cell.T_world_a[:3, 3]
    seen = visible_from(cell.scene, points_world, cell.T_world_b[:3, 3])
    seen &= cell.rig.a.contains(cell.rig.a.project(points_a))
    seen &= cell.rig.b.contains(cell.rig.b.project(points_a @ cell.rig.R.T + cell.rig.t))
    return seen.reshape(truth.shape)


def breaks(truth: np.ndarray) -> np.ndarray:
    jump = ndimage.maximum_filter(truth, 3) - ndimage.minimum_filter(truth, 3)
    return ~(jump < 0.02)


def robust_std(errors: np.ndarray) -> float:
    return float(stats.median_abs_deviation(errors, scale="normal"))


# The law


def test_the_published_worked_example_comes_out_exactly() -> None:
    # f = 700 px, B = 0.12 m, d = 84 px: Z = 1 m; a quarter of a pixel is then 0.25 / 84 m = 2.976 mm.
    camera = Camera(width=320, height=240, K=np.array([[700.0, 0, 159.5], [0, 700, 119.5], [0, 0, 1]]))
    rig = Rig(a=camera, b=camera, R=np.eye(3), t=np.array([-0.12, 0, 0]))
    engine = DepthEngine(rig, near=0.8, far=1.5)
    plan = engine.plan
    full = np.ones((plan.height, plan.width))
    match = Match(
        disparity=np.float32(84 - plan.far_disparity_px) * full.astype(np.float32), sigma=np.float32(0.25 * full)
    )

    depth, sigma = engine._metric(match)

    assert plan.focal_px * plan.baseline_m / 84 == pytest.approx(1.0, abs=1e-9)
    np.testing.assert_allclose(depth, 1.0, rtol=1e-6)
    np.testing.assert_allclose(sigma * 1e3, 2.976, atol=5e-4)


@pytest.mark.parametrize("matcher", MATCHERS)
def test_measured_depth_error_is_one_disparity_error_times_the_law_at_every_distance(matcher: str) -> None:
    # Planes square to camera A, with the same surface: what varies is the distance alone.
    disparity_std = [robust_std(measured(f"plane {distance}", matcher).error_px) for distance in DISTANCES_M]

    assert max(disparity_std) < 1.15 * min(disparity_std)


@pytest.mark.parametrize("matcher", MATCHERS)
def test_measured_depth_error_in_metres_grows_with_the_square_of_the_distance(matcher: str) -> None:
    def std_m(distance: float) -> float:
        m = measured(f"plane {distance}", matcher)
        middle = np.abs(m.truth / np.median(m.truth) - 1) < 0.02
        return robust_std((m.depth - m.truth)[middle])

    exponent = np.polyfit(np.log(DISTANCES_M), np.log([std_m(distance) for distance in DISTANCES_M]), 1)[0]

    assert exponent == pytest.approx(2.0, abs=0.3)


@pytest.mark.parametrize("matcher", MATCHERS)
@pytest.mark.parametrize("distance", DISTANCES_M)
def test_depth_of_a_plane_has_next_to_no_bias(matcher: str, distance: float) -> None:
    m = measured(f"plane {distance}", matcher)

    assert abs(np.median(m.error_px)) < 0.02


# Honest sigma


HONEST = ["workshop", "half-workshop", *(f"plane {d}" for d in DISTANCES_M), "half-plane 0.8"]


@pytest.mark.parametrize("name", HONEST)
@pytest.mark.parametrize("matcher", MATCHERS)
def test_errors_fall_within_sigma_as_often_as_a_standard_deviation_promises(matcher: str, name: str) -> None:
    m = measured(name, matcher)

    assert len(m.depth) > 10_000
    assert 0.60 <= m.share_within(1) <= 0.76
    assert m.share_within(2) >= 0.93


@pytest.mark.parametrize("matcher", MATCHERS)
def test_sigma_and_error_both_grow_where_contrast_falls(matcher: str) -> None:
    rich, poor = measured("contrast 0.8", matcher), measured("contrast 0.2", matcher)

    assert np.median(poor.sigma_px) > 1.3 * np.median(rich.sigma_px)
    assert robust_std(poor.error_px) > 1.3 * robust_std(rich.error_px)


@pytest.mark.parametrize("matcher", MATCHERS)
def test_sigma_and_error_both_grow_with_the_cameras_noise(matcher: str) -> None:
    quiet, noisy = measured("half-plane 0.8", matcher), measured("noisy-plane 0.8", matcher)

    assert np.median(noisy.sigma_px) > 1.1 * np.median(quiet.sigma_px)
    assert robust_std(noisy.error_px) > 1.1 * robust_std(quiet.error_px)


@pytest.mark.parametrize("matcher", MATCHERS)
def test_sigma_grows_toward_edges_of_depth_and_so_does_the_error(matcher: str) -> None:
    m = measured("half-workshop", matcher)
    beside, far_off = m.from_break_px <= 6, m.from_break_px >= 40

    assert min(beside.sum(), far_off.sum()) > 1000
    assert np.median(m.sigma_px[beside]) > 1.5 * np.median(m.sigma_px[far_off])
    assert np.median(np.abs(m.error_px[beside])) > 1.5 * np.median(np.abs(m.error_px[far_off]))


@pytest.mark.parametrize("matcher", MATCHERS)
def test_pixels_with_more_sigma_have_more_error_quarter_by_quarter(matcher: str) -> None:
    m = measured("half-workshop", matcher)

    quarters = np.array_split(np.argsort(m.sigma_px), 4)
    errors = [np.median(np.abs(m.error_px[quarter])) for quarter in quarters]

    assert errors == sorted(errors)
    assert errors[3] > 2 * errors[0]
