"""Boards of known size in view, as lengths."""

from __future__ import annotations

from dataclasses import replace

import numpy as np
import pytest
from made_up_result import bench_rig
from scipy.spatial.transform import Rotation
from skewline.calib import CalibrationError, Rig
from skewline.calib.board import Board, Sighting
from skewline.calib.known_board import KnownBoard, board_noise_px, fit_similarity, known_board
from skewline.calib.lengths import KnownLength
from skewline.calib.scale import scale_pose
from skewline.calib.targets import parse_target
from skimage.transform import SimilarityTransform

TRUE = bench_rig()
CHESSBOARD = parse_target("chessboard 9x6 30mm").boards[0]
LIKE_WHEN_TURNED = parse_target("chessboard 8x6 30mm").boards[0]
EXTENT_M = float(np.hypot(8, 5) * 0.03)
ROTATION_SIGMA, SHIFT_SIGMA = 5e-4, 2e-3


def unscaled(rng: np.random.Generator | None = None) -> Rig:
    """The true pose with a baseline of 1; with an error, where ``rng`` is given."""
    t = TRUE.t / TRUE.baseline_m
    across = np.eye(3) - np.outer(t, t)
    covariance = np.zeros((6, 6))
    covariance[:3, :3], covariance[3:, 3:] = np.eye(3) * ROTATION_SIGMA**2, across * SHIFT_SIGMA**2
    R = TRUE.R
    if rng is not None:
        R = Rotation.from_rotvec(rng.normal(0, ROTATION_SIGMA, 3)).as_matrix() @ R
        t = t + across @ rng.normal(0, SHIFT_SIGMA, 3)
    return replace(TRUE, R=R, t=t / np.linalg.norm(t), scale_known=False, covariance=covariance)


def sightings(
    points: np.ndarray, noise_px: float = 0.0, rng: np.random.Generator | None = None, tilt_deg: float = 25.0
) -> tuple[Sighting, Sighting]:
    """A board half a metre before both cameras, tilted; A does not see the first two points."""
    rng = rng or np.random.default_rng(0)
    turn = Rotation.from_euler("yxz", [tilt_deg, -15, 8], degrees=True)
    places = turn.apply(points - points.mean(axis=0)) + np.array([0.08, 0.01, 0.6])
    seen = []
    for camera, local, ids in (
        (TRUE.a, places, np.arange(2, len(points))),
        (TRUE.b, places @ TRUE.R.T + TRUE.t, np.arange(len(points))),
    ):
        noise = rng.normal(0, noise_px, (len(points), 2)) * camera.focal_px / TRUE.a.focal_px
        pixels = camera.project(local) + noise
        assert camera.contains(pixels).all()
        seen.append(Sighting(ids=ids, pixels=pixels[ids]))
    return seen[0], seen[1]


def test_the_similarity_is_that_of_scikit_image() -> None:
    rng = np.random.default_rng(1)
    points = CHESSBOARD.points
    turned = Rotation.from_rotvec([0.4, -1.2, 0.7])
    onto = 3.7 * turned.apply(points) + [1.0, 2, 3] + rng.normal(0, 0.02, points.shape)
    by_scikit = SimilarityTransform.from_estimate(points, onto)

    found = fit_similarity(points, onto)

    assert found.scale == pytest.approx(by_scikit.scale, rel=1e-12)
    np.testing.assert_allclose(found.apply(points), by_scikit(points), atol=1e-12)
    assert np.linalg.det(found.R) == pytest.approx(1)


def test_the_derivative_of_the_scale_is_that_of_finite_differences() -> None:
    rng = np.random.default_rng(2)
    points, onto = CHESSBOARD.points[:7], rng.normal(size=(7, 3))
    by_points = fit_similarity(points, onto).by_points
    for index in np.ndindex(onto.shape):
        step = np.zeros(onto.shape)
        step[index] = 1e-6
        scales = [fit_similarity(points, onto + way * step).scale for way in (1, -1)]
        assert by_points[index] == pytest.approx((scales[0] - scales[1]) / 2e-6, rel=1e-5, abs=1e-6)


@pytest.mark.parametrize(("board", "ways"), [(CHESSBOARD, 1), (LIKE_WHEN_TURNED, 2)], ids=["9x6", "8x6"])
def test_an_exact_board_gives_the_exact_scale_whichever_way_b_numbered_it(board: Board, ways: int) -> None:
    seen_a, seen_b = sightings(board.points)
    assert len(board.numberings) == ways
    for order in board.numberings:
        known = known_board(unscaled(), board, seen_a, replace(seen_b, ids=order[seen_b.ids]))

        scaled = scale_pose(unscaled(), 0.1, None, [], [known])

        assert scaled.scale_m == pytest.approx(TRUE.baseline_m, rel=1e-9)
        assert len(known.points) == len(board.points) - 2


def test_a_board_is_as_long_as_its_diagonal_and_as_sure_as_a_length_measured_by_hand() -> None:
    seen_a, seen_b = sightings(CHESSBOARD.points)

    known = known_board(unscaled(), CHESSBOARD, seen_a, seen_b, name="board 1")

    assert known.name == "board 1"
    # Of the board's two diagonals, the one whose ends A sees both.
    assert known.length_m == pytest.approx(EXTENT_M)
    assert known.sigma_m == pytest.approx(max(0.002 * EXTENT_M, 0.5e-3))


def test_noise_of_the_corners_is_told_from_how_they_fit() -> None:
    found = []
    for seed in range(40):
        seen = sightings(CHESSBOARD.points, 0.2, np.random.default_rng(seed))
        found.append(board_noise_px(unscaled(), known_board(unscaled(), CHESSBOARD, *seen)))

    assert np.mean(found) == pytest.approx(0.2, rel=0.1)


def test_the_true_scale_lies_within_the_stated_95_percent_interval_in_90_to_99_percent_of_200_trials() -> None:
    rng = np.random.default_rng(3)
    off = []
    for _ in range(200):
        rig = unscaled(rng)
        print_share = rng.normal(0, 1e-3)
        seen = sightings(CHESSBOARD.points * (1 + print_share), 0.2, rng)
        known = known_board(rig, CHESSBOARD, *seen, sigma_m=1e-3 * EXTENT_M)
        scaled = scale_pose(rig, 0.1, None, [], [known])
        off.append((scaled.scale_m - TRUE.baseline_m) / scaled.sigma_m)

    assert 0.90 <= (np.abs(off) < 1.96).mean() <= 0.99


def test_more_pictures_of_one_print_do_not_make_its_size_better_known() -> None:
    exact = replace(unscaled(), covariance=np.zeros((6, 6)))
    boards = [
        known_board(exact, CHESSBOARD, *sightings(CHESSBOARD.points, tilt_deg=tilt), sigma_m=1e-3 * EXTENT_M)
        for tilt in (-20, 0, 20)
    ]
    apart = [replace(board, name=f"board {number}") for number, board in enumerate(boards)]

    by_one_print, by_three = (scale_pose(exact, 0.1, None, [], some) for some in (boards, apart))

    assert by_one_print.sigma_m / by_one_print.scale_m == pytest.approx(1e-3, rel=1e-3)
    assert by_three.sigma_m / by_three.scale_m == pytest.approx(1e-3 / np.sqrt(3), rel=1e-3)


def test_a_board_of_another_size_than_the_baseline_says_is_refused_by_both_names() -> None:
    known = known_board(
        unscaled(), CHESSBOARD, *sightings(CHESSBOARD.points * 25 / 30, 0.1), name="chessboard 9x6 30mm"
    )
    baseline = KnownLength(name="baseline", length_m=TRUE.baseline_m, sigma_m=5e-4)
    with pytest.raises(
        CalibrationError, match=r"baseline of .* mm and chessboard 9x6 30mm of .* contradict one another"
    ):
        scale_pose(unscaled(), 0.1, None, [baseline], [known])


def test_another_board_than_the_one_named_is_refused() -> None:
    seen_a, seen_b = sightings(CHESSBOARD.points)
    mirrored = np.arange(54).reshape(6, 9)[:, ::-1].ravel()
    with pytest.raises(
        CalibrationError, match=r"by the pose, the points of target lie .*; expected less than 5%: is it"
    ):
        known_board(unscaled(), CHESSBOARD, seen_a, replace(seen_b, ids=mirrored[seen_b.ids]))


def test_too_few_common_points_are_refused() -> None:
    seen_a, seen_b = sightings(CHESSBOARD.points)
    few = Sighting(ids=seen_b.ids[:7], pixels=seen_b.pixels[:7])
    with pytest.raises(
        CalibrationError, match="both cameras see 5 points of target in common; expected 6 or more: show it"
    ):
        known_board(unscaled(), CHESSBOARD, seen_a, few)
    with pytest.raises(CalibrationError, match="standard deviation of -1 m; expected 0 to a third"):
        KnownBoard(name="b", points=np.zeros((6, 3)), pixels=np.zeros((6, 2, 2)), length_m=1.0, sigma_m=-1)
