"""The engine on the Middlebury 2014 Motorcycle pair, as it stands and re-imaged by two unlike, turned, distorted cameras.

True disparity: Scharstein et al., "High-resolution stereo datasets with subpixel-accurate ground truth", GCPR 2014.
"""

import functools
from dataclasses import replace

import motorcycle
import numpy as np
import pytest
from skewline.node import DepthEngine
from skimage import data

YAWS_DEG = (0, 10, 16, 22, 30)
FLOORS = {"block": 0.72, "semiglobal": 0.76}


@functools.cache
def share_right(matcher: str, yaw_deg: int | None) -> float:
    scene = motorcycle.original() if yaw_deg is None else motorcycle.reimaged(yaw_deg)
    engine = DepthEngine(scene.rig, near=motorcycle.NEAR_M, far=motorcycle.FAR_M, matcher=matcher)
    return motorcycle.share_right(scene, engine.compute(scene.image_a, scene.image_b))


def test_the_truth_is_the_published_one_with_the_published_camera() -> None:
    # Numbers of skimage.data.stereo_motorcycle's docstring; Z = f B / (d + doffs) is the dataset's own relation.
    *_, disparity = data.stereo_motorcycle()
    known = np.isfinite(disparity)

    depth_mm = motorcycle.original().points_a[:, 2] * 1e3

    assert disparity.shape == (500, 741)
    assert np.isposinf(disparity).sum() == (~known).sum() == 27226
    assert disparity[known].min() == pytest.approx(7.1914, abs=1e-4)
    assert disparity[known].max() == pytest.approx(59.9090, abs=1e-4)
    assert depth_mm.min() == pytest.approx(2110.36, abs=0.01)
    assert depth_mm.max() == pytest.approx(5016.85, abs=0.01)


def test_true_points_fall_where_both_original_images_look_alike() -> None:
    # Right disparity sign and offset: the images agree at matched points, and do not when matched the other way.
    scene = motorcycle.original()
    rng = np.random.default_rng(3)
    points = scene.points_a[motorcycle.commonly_seen(scene)]
    points = points[rng.choice(len(points), 5000, replace=False)]

    def grey_difference(t: np.ndarray) -> float:
        u, v = np.rint(scene.rig.a.project(points)).astype(int).T
        u_b = np.clip(np.rint(scene.rig.b.project(points + t)[:, 0]).astype(int), 0, scene.rig.b.width - 1)
        return float(np.median(np.abs(scene.image_a[v, u].mean(axis=1) - scene.image_b[v, u_b].mean(axis=1))))

    assert grey_difference(scene.rig.t) < 5 < 15 < grey_difference(-scene.rig.t)


@pytest.mark.parametrize("yaw_deg", [None, *YAWS_DEG], ids=lambda yaw: "as-it-stands" if yaw is None else f"yaw-{yaw}")
@pytest.mark.parametrize("matcher", FLOORS)
def test_depth_is_right_within_a_pixel_at_most_commonly_seen_points(matcher: str, yaw_deg: int | None) -> None:
    assert share_right(matcher, yaw_deg) >= FLOORS[matcher]


@pytest.mark.parametrize("matcher", FLOORS)
def test_turning_the_cameras_apart_hardly_costs_any_depth(matcher: str) -> None:
    shares = [share_right(matcher, yaw) for yaw in YAWS_DEG]

    assert max(shares) - min(shares) < 0.08


def test_the_score_gives_nothing_to_no_depth_or_to_a_constant_offset_and_all_to_the_truth() -> None:
    scene = motorcycle.original()
    engine = DepthEngine(scene.rig, near=motorcycle.NEAR_M, far=motorcycle.FAR_M)
    blank = engine.compute(np.zeros_like(scene.image_a), np.zeros_like(scene.image_b))
    points = scene.points_a[motorcycle.commonly_seen(scene)] @ blank.T_a_view[:3, :3]
    u, v, _ = np.rint(points / points[:, 2:] @ blank.K.T).astype(int).T
    disparity = np.full(blank.depth.shape, np.nan)
    disparity[v, u] = engine.plan.focal_px * engine.plan.baseline_m / points[:, 2]

    def score(offset_px: float) -> float:
        depth = engine.plan.focal_px * engine.plan.baseline_m / (disparity + offset_px)
        return motorcycle.share_right(scene, replace(blank, depth=depth.astype(np.float32)))

    assert motorcycle.share_right(scene, blank) == 0
    assert score(0.0) > 0.99
    assert score(1.5) < 0.01
