"""The scale of a pose: against lengths that are true by construction, and its stated deviations against chance."""

from __future__ import annotations

from dataclasses import replace

import numpy as np
import pytest
from scipy.spatial.transform import Rotation
from scipy.stats import chi2
from skewline.calib import CalibrationError, Camera, Rig
from skewline.calib.depth_error import depth_axis, depth_sigma_from_calibration, points_from_disparity
from skewline.calib.lengths import KnownLength, parse_baseline, parse_length
from skewline.calib.matches import Matches
from skewline.calib.scale import Scaled, scale_pose
from skewline.calib.settle import settle
from skewline.calib.sight_lines import Poses, Sightings

A = Camera(
    width=1280, height=960, K=[[1000, 0, 640], [0, 1002, 480], [0, 0, 1]], distortion=[-0.2, 0.05, 1e-3, -5e-4, 0]
)
B = Camera(width=1000, height=800, K=[[700, 0, 500], [0, 701, 400], [0, 0, 1]], distortion=[-0.1, 0.02, 0, 0, 0])
R = Rotation.from_rotvec([0.05, -0.25, 0.1]).as_matrix()
T = -R @ [0.25, 0.02, 0.03]
TRUE = Rig(a=A, b=B, R=R, t=T)
NOISE_PX = 0.5
ENDS = {"P": [-0.10, -0.05, 0.9], "Q": [0.22, 0.08, 0.75], "S": [0.05, -0.12, 0.7]}
TRUE_M = {(p, q): float(np.linalg.norm(np.subtract(ENDS[p], ENDS[q]))) for p, q in (("P", "Q"), ("Q", "S"), ("P", "S"))}


def seen(points: np.ndarray, noise_px: float, rng: np.random.Generator) -> np.ndarray:
    """Give pixels (N, 2, 2) in A and B, with noise of one angle, given in A's pixels."""
    exact = np.stack([A.project(points), B.project(points @ R.T + T)], axis=1)
    assert np.isfinite(exact).all()
    return exact + rng.normal(0, noise_px, exact.shape) * np.array([[1.0], [B.focal_px / A.focal_px]])


def cloud(count: int, rng: np.random.Generator) -> np.ndarray:
    pixels = rng.uniform([20, 20], [1260, 940], (4 * count, 2))
    rays = A.rays(pixels)
    points = rays / rays[:, 2:] * rng.uniform(0.5, 1.25, (len(rays), 1))
    return points[B.contains(B.project(points @ R.T + T))][:count]


def picked(noise_px: float = 0.0, rng: np.random.Generator | None = None) -> Matches:
    pixels = seen(np.array(list(ENDS.values())), noise_px, rng or np.random.default_rng(0))
    count = len(pixels)
    return Matches(
        pixels_a=pixels[:, 0],
        pixels_b=pixels[:, 1],
        pair=np.zeros(count, int),
        labels=tuple(ENDS),
        picked=np.ones(count, bool),
    )


def known(p: str, q: str, sigma_m: float = 2e-4, times: float = 1.0) -> KnownLength:
    return KnownLength(name=f"{p}-{q}", length_m=TRUE_M[p, q] * times, sigma_m=sigma_m, between=(p, q))


def true_but_for_scale(covariance: np.ndarray | None = None) -> Rig:
    """The true pose with a baseline of 1; by default it counts as nearly exact."""
    if covariance is None:
        covariance = np.diag([1e-12] * 6)
    return replace(TRUE, t=T / np.linalg.norm(T), scale_known=False, covariance=covariance)


@pytest.fixture(scope="module")
def covariance() -> np.ndarray:
    """What 150 noisy matches leave open of the pose."""
    rng = np.random.default_rng(10)
    group = Sightings(cameras=(0, 1), pixels=seen(cloud(150, rng), NOISE_PX, rng), clusters=np.arange(150))
    found = settle([A, B], Poses.of_pair(R, T), [group])
    return found.covariance


def drawn_pose(covariance: np.ndarray, rng: np.random.Generator) -> Rig:
    """The true pose with an error of that covariance."""
    step = rng.multivariate_normal(np.zeros(6), covariance)
    t = T / np.linalg.norm(T) + step[3:]
    turned = Rotation.from_rotvec(step[:3]).as_matrix() @ R
    return Rig(a=A, b=B, R=turned, t=t / np.linalg.norm(t), scale_known=False, covariance=covariance)


def test_exact_points_give_the_exact_scale_from_any_of_the_lengths() -> None:
    for lengths in (
        [known("P", "Q")],
        [known("P", "Q"), known("Q", "S"), known("P", "S")],
        [KnownLength(name="baseline", length_m=TRUE.baseline_m, sigma_m=0.0)],
        [known("P", "Q"), KnownLength(name="baseline", length_m=TRUE.baseline_m, sigma_m=0.0)],
    ):
        scaled = scale_pose(true_but_for_scale(), 0.1, picked(), lengths)

        assert scaled.scale_m == pytest.approx(TRUE.baseline_m, rel=1e-9)
        assert scaled.rig.scale_known
        np.testing.assert_allclose(scaled.rig.t, T, rtol=1e-9)
        assert [one.measured_m for one in scaled.lengths] == pytest.approx([one.length_m for one in lengths], rel=1e-9)


def test_a_length_alone_is_as_sure_as_it_was_measured_where_pose_and_points_are_exact() -> None:
    scaled = scale_pose(true_but_for_scale(np.zeros((6, 6))), 0.0, picked(), [known("P", "Q", 1e-3)])

    assert scaled.sigma_m == pytest.approx(TRUE.baseline_m * 1e-3 / TRUE_M["P", "Q"], rel=1e-6)
    assert scaled.lengths[0].residual_sigmas is None


def test_two_lengths_without_common_errors_weigh_by_their_inverse_variances() -> None:
    # Textbook: the weighted mean, with the sum of the weights as the inverse of its variance.
    pair = [known("P", "Q", 1e-3, times=1.001), known("Q", "S", 2e-3)]
    shares = np.array([1e-3 / (1.001 * TRUE_M["P", "Q"]), 2e-3 / TRUE_M["Q", "S"]])
    weights = shares**-2

    scaled = scale_pose(true_but_for_scale(np.zeros((6, 6))), 0.0, picked(), pair)

    expected = np.exp(weights @ np.log([1.001, 1.0]) / weights.sum())
    assert scaled.scale_m / TRUE.baseline_m == pytest.approx(expected, rel=1e-9)
    assert scaled.sigma_m / scaled.scale_m == pytest.approx(weights.sum() ** -0.5, rel=1e-6)
    off = np.log(1.001) / np.hypot(*shares)
    assert [one.residual_sigmas for one in scaled.lengths] == pytest.approx([off, -off], rel=1e-6)
    assert scaled.chi_square == pytest.approx(off**2, rel=1e-6)


def test_an_exact_baseline_decides_and_is_kept_to() -> None:
    lengths = [known("P", "Q", 3e-3, times=1.004), KnownLength(name="kept", length_m=0.25, sigma_m=0.0)]

    scaled = scale_pose(true_but_for_scale(), 0.1, picked(), lengths)

    assert scaled.rig.baseline_m == pytest.approx(0.25, rel=1e-6)
    along = scaled.rig.t / scaled.rig.baseline_m
    assert along @ scaled.rig.covariance[3:, 3:] @ along < (1e-6) ** 2


@pytest.fixture(scope="module")
def trials(covariance: np.ndarray) -> list[tuple[Scaled, Scaled]]:
    """Two hundred times: pose, picks and lengths all with their noise; by one length, and by it and the baseline."""
    rng = np.random.default_rng(11)
    kept = []
    for _ in range(200):
        rig, picks = drawn_pose(covariance, rng), picked(NOISE_PX, rng)
        length = replace(known("P", "Q", 5e-4), length_m=TRUE_M["P", "Q"] + rng.normal(0, 5e-4))
        baseline = KnownLength(name="baseline", length_m=TRUE.baseline_m + rng.normal(0, 4e-4), sigma_m=4e-4)
        kept.append(tuple(scale_pose(rig, NOISE_PX, picks, some) for some in ([length], [length, baseline])))
    return kept


@pytest.mark.parametrize("which", [0, 1], ids=["one length", "length and baseline"])
def test_the_true_scale_lies_within_the_stated_95_percent_interval_in_90_to_99_percent(
    trials: list[tuple[Scaled, Scaled]], which: int
) -> None:
    off = np.array([(trial[which].scale_m - TRUE.baseline_m) / trial[which].sigma_m for trial in trials])

    assert 0.90 <= (np.abs(off) < 1.96).mean() <= 0.99


def test_the_true_depth_of_points_lies_within_the_stated_95_percent_interval_in_90_to_99_percent(
    trials: list[tuple[Scaled, Scaled]],
) -> None:
    points = np.array([[0.1, 0.0, 0.8], [-0.1, -0.2, 1.2], [0.25, 0.15, 0.6]])
    exact = seen(points, 0.0, np.random.default_rng(0))
    off = []
    for rig in (by_one_length.rig for by_one_length, _ in trials):
        depth = points_from_disparity(rig, exact[:, 0], exact[:, 1]) @ depth_axis(rig)
        off.append((depth - points @ depth_axis(rig)) / depth_sigma_from_calibration(rig, points))
    for share in (np.abs(off) < 1.96).mean(axis=0):
        assert 0.90 <= share <= 0.99


def test_the_true_pose_in_metres_lies_within_the_stated_95_percent_region_in_90_to_99_percent(
    trials: list[tuple[Scaled, Scaled]],
) -> None:
    inside = 0
    for scaled, _ in trials:
        turn = Rotation.from_matrix(R @ scaled.rig.R.T).as_rotvec()
        step = np.concatenate([turn, T - scaled.rig.t])
        inside += step @ np.linalg.solve(scaled.rig.covariance, step) < chi2.ppf(0.95, 6)
    assert 0.90 <= inside / len(trials) <= 0.99


def test_the_stated_residuals_of_a_length_and_a_baseline_are_as_large_as_chance_makes_them(
    trials: list[tuple[Scaled, Scaled]],
) -> None:
    residuals = np.array([both.lengths[0].residual_sigmas for _, both in trials])

    assert 0.85 < residuals.std() < 1.15
    assert abs(residuals.mean()) < 0.2


def test_a_length_that_is_off_by_some_deviations_is_named() -> None:
    lengths = [known("P", "Q"), known("Q", "S"), known("P", "S", 2e-4, times=1.004)]

    scaled = scale_pose(true_but_for_scale(), 0.02, picked(), lengths)

    assert [one.name for one in scaled.doubtful] == ["P-S"]


def test_lengths_that_contradict_one_another_are_refused_with_both_and_their_figures() -> None:
    lengths = [known("P", "Q"), known("Q", "S", times=1.1)]
    with pytest.raises(
        CalibrationError,
        match=r"P-Q of 376.563 mm and Q-S of .* mm contradict one another: they make the baseline 252.59 mm and 277.85 mm, "
        r"[\d.]+ standard deviations apart; expected 5 or fewer: measure both again",
    ):
        scale_pose(true_but_for_scale(), 0.1, picked(), lengths)


def test_labels_that_are_missing_or_there_twice_are_refused() -> None:
    picks = picked()
    with pytest.raises(
        CalibrationError, match="label 'X' is on no match; the labels are: P, Q, S; expected one of these"
    ):
        scale_pose(true_but_for_scale(), 0.1, picks, [parse_length("P X 250mm")])
    with pytest.raises(CalibrationError, match="label 'P' is on no match; the labels are: none"):
        scale_pose(true_but_for_scale(), 0.1, None, [parse_length("P Q 250mm")])
    with pytest.raises(CalibrationError, match="label 'P' is on 2 matches; expected one"):
        scale_pose(true_but_for_scale(), 0.1, Matches.join([picks, picks.chosen([0])]), [known("P", "Q")])


def test_a_length_between_two_pairs_of_images_is_refused() -> None:
    picks = replace(picked(), pair=np.array([0, 1, 0]))
    with pytest.raises(
        CalibrationError, match="length P-Q runs from pair 0 to pair 1 of images; expected both ends in"
    ):
        scale_pose(true_but_for_scale(), 0.1, picks, [known("P", "Q")])


def test_no_length_and_a_length_given_twice_are_refused() -> None:
    with pytest.raises(CalibrationError, match="no length is known, so the pose has no scale; expected one or more"):
        scale_pose(true_but_for_scale(), 0.1, picked(), [])
    with pytest.raises(CalibrationError, match="length Q-P is given twice; expected each once"):
        scale_pose(true_but_for_scale(), 0.1, picked(), [parse_length("P Q 300mm"), parse_length("Q P 301mm")])


def moved_pick(by_px: tuple[float, float]) -> Matches:
    picks = picked()
    pixels = picks.pixels_b.copy()
    pixels[1] += by_px
    return replace(picks, pixels_b=pixels)


def test_a_point_picked_off_its_epipolar_line_is_refused() -> None:
    with pytest.raises(
        CalibrationError, match=r"lines of sight of point 'Q' miss one another by 38\.1 px; expected 3\.0"
    ):
        scale_pose(true_but_for_scale(), 0.5, moved_pick((0, 40)), [known("P", "Q")])


def test_a_point_behind_the_cameras_is_refused() -> None:
    # Rays exactly on one epipolar plane that draw apart: a point behind both cameras, with its rays turned round.
    behind = np.array([[0.05, 0.03, -1.5]])
    pixels_a, pixels_b = A.project(-behind), B.project(-(behind @ R.T + T))
    picks = picked()
    given_a, given_b = picks.pixels_a.copy(), picks.pixels_b.copy()
    given_a[1], given_b[1] = pixels_a[0], pixels_b[0]
    with pytest.raises(
        CalibrationError, match="point 'Q' lies behind the cameras, where its lines of sight draw apart"
    ):
        scale_pose(true_but_for_scale(), 0.5, replace(picks, pixels_a=given_a, pixels_b=given_b), [known("P", "Q")])


def test_a_length_too_short_to_be_measured_is_refused() -> None:
    picks = picked().chosen([0, 0])
    pixels = picks.pixels_a.copy()
    pixels[1] += (1.5, 0)
    off = picks.pixels_b.copy()
    off[1] += (1.05, 0)
    close = replace(picks, pixels_a=pixels, pixels_b=off, labels=("P", "Q"))
    with pytest.raises(CalibrationError, match=r"length P-Q tells the scale to \d+% only; expected 30% or better"):
        scale_pose(true_but_for_scale(), 1.0, close, [parse_length("P Q 2mm")])


def test_a_pose_that_has_a_scale_or_no_covariance_is_refused() -> None:
    with pytest.raises(CalibrationError, match=r"the pose has a known scale, a baseline of 0\.25.* and no covariance"):
        scale_pose(TRUE, 0.1, None, [parse_baseline("193mm")])
    with pytest.raises(
        CalibrationError, match="no covariance; expected one of unknown scale, baseline 1, with covariance"
    ):
        scale_pose(replace(true_but_for_scale(), covariance=None), 0.1, None, [parse_baseline("193mm")])
