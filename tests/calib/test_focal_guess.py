"""Focal lengths without a target: against cameras that are known, and against one published intrinsic matrix."""

from __future__ import annotations

import leuven
import numpy as np
import pytest
from scipy.spatial.transform import Rotation
from skewline.calib import CalibrationError, Camera
from skewline.calib.epipolar import cross_matrix, sampson_distances
from skewline.calib.focal_guess import FocalGuess, focal_from_fundamental, guess_focal_lengths, sampson_slopes
from skewline.calib.matches import Matches

SIZE_A, SIZE_B = (1280, 960), (1000, 800)
FOCAL_A, FOCAL_B = 1000.0, 700.0
Pose = tuple[tuple[float, float, float], tuple[float, float, float]]
# Turns about y, x, z in degrees, and B's centre in A's frame, in metres.
SKEW: Pose = (-20, 15, 10), (0.9, 0.1, 0.2)
MEETING: Pose = (-20, 0, 10), (0.9, 0.0, 0.1)
PARALLEL: Pose = (0, 0, 0), (1.0, 0.0, 0.1)
MORE_SEEDS = [pytest.param(seed, marks=pytest.mark.long) for seed in (1, 2)]


def camera(size: tuple[int, int], focal: float, rng: np.random.Generator) -> Camera:
    """A camera whose principal point lies off the middle by 1 % of the longer side, as chance has it."""
    x, y = (np.array(size) - 1) / 2 + rng.normal(0, 0.01 * max(size), 2)
    return Camera(width=size[0], height=size[1], K=[[focal, 0, x], [0, focal, y], [0, 0, 1]])


def matched(pose: Pose, rng: np.random.Generator, focal_b: float = FOCAL_B, count: int = 250) -> Matches:
    """Points one to four metres away, with noise of 0.3 px; one in ten matches is wrong."""
    a, b = camera(SIZE_A, FOCAL_A, rng), camera(SIZE_B, focal_b, rng)
    R = Rotation.from_euler("yxz", pose[0], degrees=True).as_matrix()
    t = -R @ pose[1]
    rays = a.rays(rng.uniform([0, 0], SIZE_A, (8 * count, 2)))
    points = rays / rays[:, 2:] * rng.uniform(1, 4, (len(rays), 1))
    points = points[b.contains(b.project(points @ R.T + t))][:count]
    pixels_a, pixels_b = (
        pixels + rng.normal(0, 0.3, pixels.shape) for pixels in (a.project(points), b.project(points @ R.T + t))
    )
    pixels_b[::10] = rng.uniform([0, 0], SIZE_B, pixels_b[::10].shape)
    count = len(points)
    return Matches(
        pixels_a=pixels_a,
        pixels_b=pixels_b,
        pair=np.zeros(count, int),
        labels=("",) * count,
        picked=np.zeros(count, bool),
    )


def guessed(pose: Pose, seed: int, *, same: bool = False) -> FocalGuess:
    rng = np.random.default_rng(seed)
    matches = matched(pose, rng, FOCAL_A if same else FOCAL_B)
    return guess_focal_lengths(matches, SIZE_A, SIZE_B, rng, same=same, samples=20)


def test_the_closed_form_gives_both_focal_lengths_of_an_exact_fundamental_matrix() -> None:
    R = Rotation.from_euler("yxz", SKEW[0], degrees=True).as_matrix()
    E = cross_matrix(-R @ SKEW[1]) @ R
    F = np.diag([1 / FOCAL_B, 1 / FOCAL_B, 1]) @ E @ np.diag([1 / FOCAL_A, 1 / FOCAL_A, 1])

    assert focal_from_fundamental(F) == pytest.approx((FOCAL_A, FOCAL_B), rel=1e-9)
    assert focal_from_fundamental(-3 * F) == pytest.approx((FOCAL_A, FOCAL_B), rel=1e-9)


def test_slopes_of_sampson_distances_are_those_of_finite_differences() -> None:
    rng = np.random.default_rng(1)
    F, a, b = rng.normal(size=(3, 3)), rng.normal(size=(20, 2)), rng.normal(size=(20, 2))
    slopes = sampson_slopes(F, a, b)
    for column, step in enumerate(np.eye(9).reshape(9, 3, 3) * 1e-6):
        expected = (sampson_distances(F + step, a, b) - sampson_distances(F - step, a, b)) / 2e-6
        np.testing.assert_allclose(slopes[:, column], expected, rtol=1e-5, atol=1e-7)


def test_unlike_cameras_whose_axes_pass_one_another_are_found_within_their_spread_in_most_cases() -> None:
    found = [guessed(SKEW, seed) for seed in range(10)]

    off_a = [abs(guess.focal_a_px / FOCAL_A - 1) / guess.spread_a for guess in found]
    off_b = [abs(guess.focal_b_px / FOCAL_B - 1) / guess.spread_b for guess in found]
    for off in (off_a, off_b):
        assert np.median(off) < 1
        assert np.mean(np.array(off) < 2) >= 0.8
    assert max(max(guess.spread_a, guess.spread_b) for guess in found) < 0.1


def test_the_cameras_have_these_focal_lengths_and_their_principal_points_in_the_middle() -> None:
    guess = guessed(SKEW, 1)

    a, b = guess.cameras
    assert (a.size, b.size, guess.samples) == (SIZE_A, SIZE_B, 20)
    assert (a.focal_px, b.focal_px) == (guess.focal_a_px, guess.focal_b_px)
    assert a.K[:2, 2].tolist() == [639.5, 479.5]
    assert b.K[:2, 2].tolist() == [499.5, 399.5]


@pytest.mark.parametrize("seed", [0, *MORE_SEEDS])
def test_axes_that_meet_are_refused_with_how_near_they_pass_and_the_remedy(seed: int) -> None:
    with pytest.raises(
        CalibrationError,
        match=r"leave the focal lengths open: .*%.*; expected .*% or less\. Optical axes that meet leave them open, and these "
        r"pass \d+\.\d px apart in the pictures: calibrate with a target or, if the cameras are of one kind",
    ):
        guessed(MEETING, seed)


def test_one_focal_length_of_both_is_found_even_where_axes_meet() -> None:
    guess = guessed(MEETING, 1, same=True)

    assert guess.focal_a_px == guess.focal_b_px
    assert guess.spread_a == guess.spread_b < 0.1
    assert abs(guess.focal_a_px / FOCAL_A - 1) < 2 * guess.spread_a


@pytest.mark.parametrize("seed", [0, *MORE_SEEDS])
def test_parallel_axes_leave_even_one_focal_length_open(seed: int) -> None:
    with pytest.raises(CalibrationError, match=r"leave the focal lengths open: .* or less: calibrate with a target"):
        guessed(PARALLEL, seed, same=True)


def test_the_same_matches_and_seed_give_the_same_focal_lengths() -> None:
    first, second = guessed(SKEW, 3), guessed(SKEW, 3)

    assert (first.focal_a_px, first.spread_b) == (second.focal_a_px, second.spread_b)


def test_real_pictures_of_one_camera_give_its_published_focal_length_within_a_tenth() -> None:
    # OpenCV's matrix for these pictures has 651.4 and 653.7 px; found here: 620 px, with a spread of 2 %.
    pair = leuven.load()
    size = pair.image_a.shape[1], pair.image_a.shape[0]

    guess = guess_focal_lengths(leuven.matches(), size, size, np.random.default_rng(1), same=True, samples=20)

    assert guess.focal_a_px == pytest.approx(652.6, rel=0.1)


def test_too_few_matches_and_matches_without_common_geometry_are_refused() -> None:
    rng = np.random.default_rng(4)
    matches = matched(SKEW, rng)
    with pytest.raises(
        CalibrationError, match="29 matches; expected 30 or more to guess focal lengths from: match more"
    ):
        guess_focal_lengths(matches.chosen(np.arange(29)), SIZE_A, SIZE_B, rng)
    chance = Matches(
        pixels_a=matches.pixels_a[:40],
        pixels_b=rng.uniform([0, 0], SIZE_B, (40, 2)),
        pair=np.zeros(40, int),
        labels=("",) * 40,
        picked=np.zeros(40, bool),
    )
    with pytest.raises(CalibrationError, match=r"\d+ of 40 matches agree on one geometry; expected 30 or more"):
        guess_focal_lengths(chance, SIZE_A, SIZE_B, rng)
    with pytest.raises(CalibrationError, match="5 bootstrap samples; expected 10 or more"):
        guess_focal_lengths(matches, SIZE_A, SIZE_B, rng, samples=5)
