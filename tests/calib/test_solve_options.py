"""What a calibration may be told, what it refuses, and what it warns of."""

from collections.abc import Sequence
from dataclasses import replace

import numpy as np
import pytest
from projected_views import BOARD, FISHEYE, OTHER, ZHANG, both, placings, rig_of, truth, views_of
from scipy.spatial.transform import Rotation
from skewline.calib import CalibrationError, Camera, Rig
from skewline.calib.from_target import View, calibrate_pair
from skewline.calib.lens_choice import choose_lens
from skewline.calib.one_camera import alone_in_order
from skewline.calib.set_aside import limit_px, most_aside, worst_over
from skewline.calib.targets import Target

TARGET = Target((BOARD,))
RIG = rig_of(ZHANG, OTHER)


def noisy_views(rig: Rig, poses: np.ndarray, seed: int, noise_px: float = 0.1) -> list[View]:
    rng = np.random.default_rng(seed)
    seen, _ = truth(rig, poses)
    return views_of([replace(s, pixels=s.pixels + rng.normal(0, noise_px, s.pixels.shape)) for s in seen])


@pytest.fixture(scope="module")
def views() -> list[View]:
    return noisy_views(RIG, placings(RIG, 12, seed=21), seed=22)


def spoiled(view: View, seed: int, noise_px: float = 3.0) -> View:
    assert view.seen_a is not None
    pixels = view.seen_a.pixels + np.random.default_rng(seed).normal(0, noise_px, (54, 2))
    return replace(view, seen_a=replace(view.seen_a, pixels=pixels))


def test_the_result_says_how_well_everything_is_known(views: Sequence[View]) -> None:
    result = calibrate_pair(TARGET, views, RIG.a.size, RIG.b.size)

    assert result.noise_px == pytest.approx(0.1, rel=0.1)
    assert result.parameters.names[:5] == ("a.fx", "a.fy", "a.cx", "a.cy", "a.k1")
    assert result.parameters.names[-6:] == ("pose.rx", "pose.ry", "pose.rz", "pose.tx", "pose.ty", "pose.tz")
    assert np.array_equal(result.rig.covariance, result.parameters.covariance[-6:, -6:])
    assert result.parameters.correlations == pytest.approx(result.parameters.correlations.T)
    assert np.abs(result.parameters.correlations).max() <= 1 + 1e-12
    assert abs(result.rig.t[0] - RIG.t[0]) < 4 * result.parameters.sigma("pose.tx")
    with pytest.raises(CalibrationError, match=r"no parameter is called 'a.f'; expected one of a.fx"):
        result.parameters.sigma("a.f")
    assert len(result.views) == 24
    assert all(view.used for view in result.views)
    squares = np.concatenate([view.residuals_px for view in result.views]) ** 2
    assert np.sqrt(squares.sum(axis=1).mean()) == pytest.approx(result.rms_px)
    first = result.views[0]
    points = BOARD.points[first.ids] @ first.T_camera_board[:3, :3].T + first.T_camera_board[:3, 3]
    assert first.pixels - result.rig.a.project(points) == pytest.approx(first.residuals_px, abs=1e-9)


def test_held_out_views_never_touch_the_solve_and_are_judged(views: Sequence[View]) -> None:
    names = {"a3", "b7"}
    others = [view for view in views if view.name_a not in ("a3", "a7")]
    wild = [spoiled(view, 1) if view.name_a == "a3" else view for view in views]

    result = calibrate_pair(TARGET, wild, RIG.a.size, RIG.b.size, held_out=names)
    without = calibrate_pair(TARGET, others, RIG.a.size, RIG.b.size)

    # The same but for the order in which OpenCV's threads add up what the solve starts from.
    apart = np.abs(result.parameters.values - without.parameters.values)
    assert np.all(apart <= 1e-3 * without.parameters.sigmas + 1e-9)
    assert result.held_out is not None
    assert result.held_out.pairs == 2
    assert result.held_out.rms_px > 1.0, "the spoiled view shows"
    assert {view.name for view in result.views if not view.used} == {"a3", "b3", "a7", "b7"}
    assert without.held_out is None


def test_a_share_is_held_out_evenly_and_fits_like_the_rest(views: Sequence[View]) -> None:
    result = calibrate_pair(TARGET, views, RIG.a.size, RIG.b.size, held_out=0.25)

    assert [view.name for view in result.views if not view.used and view.camera == "a"] == ["a2", "a6", "a10"]
    assert result.held_out is not None
    assert result.held_out.rms_px == pytest.approx(0.1 * np.sqrt(2), rel=0.15)
    assert result.pairs == 9


@pytest.mark.parametrize(
    ("held_out", "words"), [(0.6, r"share is 0.6; expected 0 to 0.5"), ({"a99"}, "no view is called 'a99'")]
)
def test_what_cannot_be_held_out_is_refused(views: Sequence[View], held_out: object, words: str) -> None:
    with pytest.raises(CalibrationError, match=words):
        calibrate_pair(TARGET, views, RIG.a.size, RIG.b.size, held_out=held_out)


def test_known_intrinsics_are_held_and_those_of_another_size_refused(views: Sequence[View]) -> None:
    result = calibrate_pair(TARGET, views, RIG.a.size, RIG.b.size, intrinsics_a=ZHANG)

    assert np.array_equal(result.rig.a.K, ZHANG.K)
    assert np.array_equal(result.rig.a.distortion, ZHANG.distortion)
    assert result.parameters.sigma("a.fx") == 0
    assert result.parameters.sigma("b.fx") > 0
    assert np.all(
        np.abs(result.rig.t - RIG.t) < 4 * np.array([result.parameters.sigma(f"pose.t{axis}") for axis in "xyz"])
    )
    with pytest.raises(CalibrationError, match=r"camera B are of 640x480 .* of 800x600; expected the same"):
        calibrate_pair(TARGET, views, RIG.a.size, RIG.b.size, intrinsics_b=ZHANG)


def test_a_fisheye_beside_a_pinhole_camera_comes_back() -> None:
    rig = rig_of(OTHER, FISHEYE)
    views = noisy_views(rig, placings(rig, 15, seed=31, near_m=0.35, far_m=0.8), seed=32)

    result = calibrate_pair(TARGET, views, rig.a.size, rig.b.size, model_b="fisheye")

    assert (result.rig.a.model, result.rig.b.model) == ("pinhole", "fisheye")
    sigma = result.parameters.sigma("b.fx")
    assert abs(result.rig.b.K[0, 0] - 420) < 4 * sigma
    assert sigma < 2
    assert Rotation.from_matrix(result.rig.R @ rig.R.T).magnitude() < 5e-3
    assert result.rig.t == pytest.approx(rig.t, abs=2e-3)


def test_a_bad_image_is_set_aside_with_its_figure_and_the_rest_solved_without_it(views: Sequence[View]) -> None:
    wild = [spoiled(view, 2) if view.name_a == "a4" else view for view in views]

    result = calibrate_pair(TARGET, wild, RIG.a.size, RIG.b.size)

    assert [aside.name for aside in result.set_aside] == ["a4"]
    assert "px against 0.1" in result.set_aside[0].reason
    assert any(warning.startswith("a4: set aside") for warning in result.warnings)
    assert ("b", "b4") in {(view.camera, view.name) for view in result.views}, "B's image still serves B"
    assert result.pairs == 11
    assert result.rms_px < 0.16


def test_a_board_of_which_too_little_was_seen_is_set_aside(views: Sequence[View]) -> None:
    few = list(views)
    assert few[0].seen_a is not None
    row = np.arange(9)
    few[0] = replace(few[0], seen_a=replace(few[0].seen_a, ids=row, pixels=few[0].seen_a.pixels[row]))

    result = calibrate_pair(TARGET, few, RIG.a.size, RIG.b.size)

    assert [(aside.name, aside.reason[:35]) for aside in result.set_aside] == [
        ("a0", "9 points found, or all in one line;")
    ]


def test_the_rule_of_setting_aside_takes_the_worst_and_leaves_enough() -> None:
    like = np.array([0.20, 0.21, 0.19, 0.22, 0.18, 0.20, 0.21, 0.19, 0.20, 0.20])
    mixed = np.array([*like[:6], 0.9, 0.8, 0.7, 0.6])
    bad = worst_over(mixed / limit_px(mixed), most=most_aside(10, fewest=3))

    assert (like < limit_px(like)).all()
    assert limit_px(mixed) >= 0.4
    assert np.flatnonzero(bad).tolist() == [6, 7, 8], "three of ten and no more"
    assert most_aside(3, fewest=3) == 0


def test_views_that_are_all_parallel_are_refused_since_they_leave_the_focal_length_open() -> None:
    poses = placings(RIG, 10, seed=41)
    facing = Rotation.from_euler("xyz", [4, -3, 0], degrees=True).as_matrix()
    centres = poses[:, :3, :3] @ BOARD.points.mean(axis=0) + poses[:, :3, 3]
    poses[:, :3, :3] = facing
    poses[:, :3, 3] = centres - facing @ BOARD.points.mean(axis=0)

    with pytest.raises(CalibrationError, match=r"focal length of camera [AB] open .* all parallel"):
        calibrate_pair(TARGET, noisy_views(RIG, poses, seed=42), RIG.a.size, RIG.b.size)


def test_a_target_of_another_size_than_its_name_shows_against_a_known_baseline(views: Sequence[View]) -> None:
    printed = Target((replace(BOARD, square_m=BOARD.square_m * 1.05),))

    wrong = calibrate_pair(printed, views, RIG.a.size, RIG.b.size, baseline_m=RIG.baseline_m)
    right = calibrate_pair(TARGET, views, RIG.a.size, RIG.b.size, baseline_m=RIG.baseline_m)

    (said,) = [warning for warning in wrong.warnings if "baseline comes out" in warning]
    assert "1.05" in said
    assert "0.95" in said
    assert not any("baseline comes out" in warning for warning in right.warnings)


def test_one_view_is_refused(views: Sequence[View]) -> None:
    with pytest.raises(CalibrationError, match=r"found in 1 view of 1 for camera A; expected 3 or more"):
        calibrate_pair(TARGET, views[:1], RIG.a.size, RIG.b.size)


SIMPLE = Camera(
    width=800,
    height=600,
    K=np.array([[500, 0, 405], [0, 500, 298], [0, 0, 1]]),
    distortion=np.array([-0.2, 0.05, 1e-3, -5e-4]),
)


@pytest.mark.parametrize(
    ("camera", "allowed"),
    [(SIMPLE, {"pinhole 4"}), (FISHEYE, {"fisheye"})],
    ids=["simple", "fisheye"],
)
def test_the_lens_model_is_chosen_by_held_out_views_and_no_richer_than_need_be(
    camera: Camera, allowed: set[str]
) -> None:
    rng = np.random.default_rng(61)
    rig = rig_of(camera, camera)
    poses = placings(rig, 10, seed=62, near_m=0.3, far_m=0.7)
    exact = [both(rig, BOARD.points @ T[:3, :3].T + T[:3, 3])[0] for T in poses]
    seen, _ = truth(rig, poses)
    noisy = [replace(s, pixels=p + rng.normal(0, 0.1, p.shape)) for s, p in zip(seen[::2], exact, strict=True)]

    lens, trials = choose_lens(alone_in_order(noisy), (BOARD.points,), camera.size)

    assert lens.name in allowed, trials
    assert len(trials) == 6
    assert [trial.name for trial in trials if trial.chosen] == [lens.name]
    assert all(trial.note for trial in trials)


def test_auto_records_what_it_tried_for_each_camera_and_takes_the_simplest_of_few_views(views: Sequence[View]) -> None:
    result = calibrate_pair(TARGET, views[:4], RIG.a.size, RIG.b.size, model="auto")

    assert [trial.name for trial in result.trials] == ["a: pinhole 4", "b: pinhole 4"]
    assert "4 views are too few to choose by" in result.trials[0].note
    assert result.rig.a.distortion.size == 4
