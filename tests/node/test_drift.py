"""Drift from one pair: the geometry against true projections, the fit against made-up matches, all of it on real pictures."""

from __future__ import annotations

from dataclasses import dataclass
from functools import cache

import motorcycle
import numpy as np
import pytest
from scipy.spatial.transform import Rotation
from skewline.calib import Camera, Rig
from skewline.calib.epipolar import meet_rays
from skewline.node import DepthEngine
from skewline.node.drift import LENS_PX, Drift, NoDrift, estimate_drift, fit_drift
from skewline.node.drift_field import (
    UNKNOWNS,
    column_field,
    depth_effect,
    drifted,
    rays,
    row_effect,
    row_field,
    row_misses,
    step_to,
)
from skewline.node.drift_matches import ViewMatches
from skewline.node.rectify import ViewPlan, plan_views

NEAR_M, FAR_M = 0.6, 1.2
STEPS = [
    np.deg2rad([0.9, -0.4, 0.2, 0.3, -0.5]),
    np.deg2rad([-0.2, 1.0, -0.6, -0.8, 0.7]),
]


def make_rig() -> Rig:
    a = Camera(width=1280, height=720, K=[[1100, 0, 640], [0, 1102, 350], [0, 0, 1]], distortion=[-0.1, 0.04, 0, 0, 0])
    b = Camera(width=1024, height=576, K=[[800, 0, 520], [0, 801, 290], [0, 0, 1]], distortion=[-0.15, 0.06, 0, 0, 0])
    R = Rotation.from_euler("yxz", [-14, 2, 3], degrees=True).as_matrix()
    return Rig(a=a, b=b, R=R, t=-R @ np.array([0.19, 0.01, -0.02]))


RIG = make_rig()
PLAN = plan_views(RIG, NEAR_M, FAR_M)


@dataclass(frozen=True)
class Seen:
    """Points of the working volume, in A's frame, and where the believed rig's views show them."""

    points_a: np.ndarray
    a: np.ndarray
    b: np.ndarray


def view_pixels(points: np.ndarray, turn: np.ndarray, principal: tuple[float, float], plan: ViewPlan) -> np.ndarray:
    directions = points @ turn.T
    return directions[:, :2] / directions[:, 2:] * plan.focal_px + principal


def seen_points(true: Rig, count: int = 400, seed: int = 0, plan: ViewPlan = PLAN) -> Seen:
    """Look at points with the true cameras and rectify their pixels with the believed ones, lenses and all."""
    rng = np.random.default_rng(seed)
    pixels = rng.uniform((0, 0), (true.a.width - 1, true.a.height - 1), (8 * count, 2))
    points = true.a.rays(pixels)
    points *= (rng.uniform(plan.near_m, plan.far_m, len(points)) / points[:, 2])[:, None]
    in_b = points @ true.R.T + true.t
    points, in_b = (part[true.b.contains(true.b.project(in_b))][:count] for part in (points, in_b))
    assert len(points) == count
    a = view_pixels(true.a.rays(true.a.project(points)), plan.R_view_a, plan.principal_a, plan)
    b = view_pixels(true.b.rays(true.b.project(in_b)), plan.R_view_b, plan.principal_b, plan)
    return Seen(points, a, b)


def made_up(seen: Seen, noise_px: float = 0.0, seed: int = 1) -> ViewMatches:
    b = seen.b + np.random.default_rng(seed).normal(0, noise_px, seen.b.shape)
    return ViewMatches(a=seen.a, b=b, sigma_px=np.full(len(b), 0.1), sought=len(b))


def fitted(matches: ViewMatches) -> Drift:
    found = fit_drift(matches, PLAN)
    assert isinstance(found, Drift)
    return found


# The geometry


def test_the_motion_field_is_what_finite_differences_of_the_true_projection_give() -> None:
    still = seen_points(RIG)
    ray = rays(still.b, PLAN.principal_b, PLAN.focal_px)
    delta = (rays(still.a, PLAN.principal_a, PLAN.focal_px) - ray)[:, 0]
    slopes = np.stack([column_field(ray[:, 0], ray[:, 1], delta), row_field(ray[:, 0], ray[:, 1], delta)], axis=1)

    for number, step in enumerate(np.eye(UNKNOWNS) * 1e-5):
        there, back = (drifted(RIG, PLAN, sign * step) for sign in (1, -1))
        moved = [
            view_pixels(still.points_a @ rig.R.T + rig.t, PLAN.R_view_b, PLAN.principal_b, PLAN)
            for rig in (there, back)
        ]
        # One baseline of length stays along the old one, so the rise and the advance alone move the centre.
        difference = (moved[0] - moved[1]) / 2e-5 / PLAN.focal_px
        np.testing.assert_allclose(slopes[:, :, number], difference, atol=1e-6)


@pytest.mark.parametrize("step", STEPS)
def test_after_the_true_step_no_match_misses_its_line_whatever_its_depth(step: np.ndarray) -> None:
    seen = seen_points(drifted(RIG, PLAN, step))
    ray_a, ray_b = rays(seen.a, PLAN.principal_a, PLAN.focal_px), rays(seen.b, PLAN.principal_b, PLAN.focal_px)

    assert np.abs(row_misses(np.zeros(UNKNOWNS), ray_a, ray_b)[0]).max() * PLAN.focal_px > 5
    assert np.abs(row_misses(step, ray_a, ray_b)[0]).max() * PLAN.focal_px < 1e-6


@pytest.mark.parametrize("step", STEPS)
def test_a_drifted_rig_gives_its_step_back(step: np.ndarray) -> None:
    np.testing.assert_allclose(step_to(drifted(RIG, PLAN, step), PLAN), step, atol=1e-12)


@pytest.mark.parametrize("step", [0.1 * STEPS[0], 0.1 * STEPS[1]])
def test_the_foretold_depth_error_is_what_the_old_rig_s_triangulation_makes_of_true_pixels(step: np.ndarray) -> None:
    # Seen by the drifted cameras, met by the believed rig's rays as the calibration's own geometry meets them.
    true = drifted(RIG, PLAN, step)
    x, y, width, height = PLAN.window
    columns, rows = np.meshgrid(np.linspace(x, x + width - 1, 9), np.linspace(y, y + height - 1, 7))
    flat = (np.column_stack([columns.ravel(), rows.ravel()]) - PLAN.principal_a) / PLAN.focal_px
    points = np.column_stack([flat, np.ones(len(flat))]) @ PLAN.R_view_a * FAR_M
    met = meet_rays(RIG, RIG.a.project(points), RIG.b.project(points @ true.R.T + true.t)).points_a @ PLAN.R_view_a.T
    inside = np.isfinite(met[:, 2])
    assert inside.mean() > 0.9

    foretold = depth_effect(PLAN, step, np.zeros((UNKNOWNS, UNKNOWNS)), FAR_M)

    assert foretold.value == pytest.approx(np.sqrt(np.mean((met[inside, 2] - FAR_M) ** 2)), rel=0.05)
    assert foretold.sigma == 0


def test_a_yaw_is_worth_the_square_of_distance_over_baseline() -> None:
    step = np.deg2rad([0, 0.01, 0, 0, 0])

    error = depth_effect(PLAN, step, np.zeros((UNKNOWNS, UNKNOWNS)), FAR_M).value

    assert error == pytest.approx(FAR_M**2 / RIG.baseline_m * step[1], rel=0.15)  # 1 + x'^2 over the view


def test_a_longer_baseline_changes_depth_and_no_row_at_all() -> None:
    longer = Rig(a=RIG.a, b=RIG.b, R=RIG.R, t=RIG.t * (1 + 0.5e-3 / RIG.baseline_m))
    before = seen_points(RIG)
    in_b = before.points_a @ longer.R.T + longer.t
    after = view_pixels(longer.b.rays(longer.b.project(in_b)), PLAN.R_view_b, PLAN.principal_b, PLAN)

    assert np.abs(after[:, 0] - before.b[:, 0]).max() > 0.3
    assert np.abs(after[:, 1] - before.b[:, 1]).max() < 1e-6
    np.testing.assert_allclose(step_to(longer, PLAN), 0, atol=1e-12)


# The fit


@pytest.mark.parametrize("step", STEPS)
def test_exact_matches_give_the_step_exactly(step: np.ndarray) -> None:
    found = fitted(made_up(seen_points(drifted(RIG, PLAN, step))))

    np.testing.assert_allclose(found.step, step, atol=2e-6)
    assert found.inliers == 400


def test_errors_are_as_large_as_the_covariance_says() -> None:
    seen = seen_points(drifted(RIG, PLAN, STEPS[0]))
    fits = [fitted(made_up(seen, 0.15, seed)) for seed in range(60)]

    off = [(fit.step - STEPS[0]) @ np.linalg.solve(fit.covariance, fit.step - STEPS[0]) / UNKNOWNS for fit in fits]

    assert (
        0.6 < np.mean(off) < 1.3
    )  # chi-square over its 300 degrees of freedom: 1 +- 0.08, and relatedness of 1 or more


def test_a_third_of_the_view_that_moved_alike_on_one_side_pulls_the_step_nowhere() -> None:
    seen = seen_points(RIG)
    matches = made_up(seen, 0.1)
    x, _, width, _ = PLAN.window
    matches.b[matches.a[:, 0] > x + 2 / 3 * width] += (3.0, 6.0)

    found = fitted(matches)

    assert 0.55 < found.inliers / found.matches < 0.75
    assert np.abs(found.step / np.sqrt(np.diag(found.covariance))).max() < 4
    assert row_effect(PLAN, found.step, found.total).value < 0.1


def test_matches_that_are_all_wrong_are_no_opinion() -> None:
    seen = seen_points(RIG)
    wrong = made_up(seen)
    wrong.b[:, 1] += np.random.default_rng(0).uniform(-48, 48, len(seen.b))

    found = fit_drift(wrong, PLAN)

    assert isinstance(found, NoDrift)
    assert "matches agree to" in found.reason


def test_places_in_one_corner_leave_wide_sigmas_where_they_see_nothing() -> None:
    seen = seen_points(RIG, count=1600)
    corner = (seen.a < np.percentile(seen.a, 25, axis=0)).all(axis=1)
    few = made_up(Seen(seen.points_a[corner], seen.a[corner], seen.b[corner]), 0.1)
    all_over = made_up(seen, 0.1)

    narrow, wide = (fitted(matches).total for matches in (few, all_over))

    assert len(few) > 50
    assert depth_effect(PLAN, np.zeros(5), narrow, FAR_M).sigma > 3 * depth_effect(PLAN, np.zeros(5), wide, FAR_M).sigma


def test_what_lens_models_leave_lies_within_the_lasting_errors() -> None:
    # Rows off by smooth fields of 0.1 px, of another make than the polynomials that the lasting errors stand on.
    seen = seen_points(RIG)
    x, y, width, height = PLAN.window
    place = (seen.a - (x, y)) / (width, height)
    rng = np.random.default_rng(4)
    off = []
    for _ in range(40):
        field = np.sin(place @ rng.uniform(-2 * np.pi, 2 * np.pi, 2) + rng.uniform(0, 2 * np.pi))
        field -= field.mean()  # the pose of a calibration takes the mean away
        matches = made_up(seen)
        matches.b[:, 1] += LENS_PX * field / field.std()
        found = fitted(matches)
        off.append(found.step @ np.linalg.solve(found.total, found.step) / UNKNOWNS)

    assert 0.3 < np.median(off) < 1.5
    assert np.mean(np.array(off) < 16 / UNKNOWNS) > 0.9


# Real pictures


@cache
def in_order(yaw_deg: float) -> motorcycle.Scene:
    return motorcycle.reimaged(yaw_deg)


@cache
def engine(yaw_deg: float) -> DepthEngine:
    return DepthEngine(in_order(yaw_deg).rig, motorcycle.NEAR_M, motorcycle.FAR_M)


def estimated(yaw_deg: float, image_a: np.ndarray, image_b: np.ndarray) -> Drift | NoDrift:
    node = engine(yaw_deg)
    return estimate_drift(*node.rectify(image_a, image_b), node.seen, node.plan)


@pytest.mark.parametrize("yaw_deg", [10.0, 20.0])
def test_a_real_pair_in_order_is_told_to_be_so_within_what_lens_models_leave(yaw_deg: float) -> None:
    scene = in_order(yaw_deg)

    found = estimated(yaw_deg, scene.image_a, scene.image_b)

    assert isinstance(found, Drift)
    assert abs(found.offset_px) < 0.15
    assert found.step @ np.linalg.solve(found.total, found.step) / UNKNOWNS < 1.5


@pytest.mark.parametrize(
    ("camera", "axis", "degrees"),
    [("a", 0, 1.0), ("a", 1, 0.3), ("b", 1, 1.0), ("b", 2, 0.3)],
)
def test_a_real_pair_whose_camera_was_turned_tells_by_how_much(camera: str, axis: int, degrees: float) -> None:
    turn = np.deg2rad(degrees) * np.eye(3)[axis]
    scene = motorcycle.knocked(10.0, camera, Rotation.from_rotvec(turn).as_matrix())
    true = step_to(scene.rig, engine(10.0).plan)

    found = estimated(10.0, scene.image_a, scene.image_b)

    assert isinstance(found, Drift)
    off = found.step - true
    assert off @ np.linalg.solve(found.total, off) / UNKNOWNS < 2
    size = np.linalg.norm(true[:3])
    assert found.step[:3] @ true[:3] / size == pytest.approx(size, rel=0.1, abs=np.deg2rad(0.08))


@pytest.mark.parametrize("kind", ["blank", "dark", "noise", "unlike"])
def test_pictures_that_show_nothing_in_common_are_no_opinion(kind: str) -> None:
    scene = in_order(10.0)
    rng = np.random.default_rng(0)
    shapes = scene.image_a.shape, scene.image_b.shape
    a, b = {
        "blank": [np.full(shape, 128, np.uint8) for shape in shapes],
        "dark": [np.clip(rng.normal(2, 1, shape), 0, 255).astype(np.uint8) for shape in shapes],
        "noise": [rng.integers(0, 256, shape, dtype=np.uint8) for shape in shapes],
        "unlike": [scene.image_a, np.ascontiguousarray(scene.image_b[::-1, ::-1])],
    }[kind]

    found = estimated(10.0, a, b)

    assert isinstance(found, NoDrift)
    assert found.reason


def test_one_pair_gives_one_answer() -> None:
    scene = in_order(10.0)

    one, other = (estimated(10.0, scene.image_a, scene.image_b) for _ in range(2))

    assert isinstance(one, Drift)
    assert isinstance(other, Drift)
    np.testing.assert_array_equal(one.step, other.step)
