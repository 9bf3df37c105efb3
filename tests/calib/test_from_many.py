"""Chains and graphs of cameras solved from projected points, held to the truth that the points were projected by."""

from __future__ import annotations

import cv2
import numpy as np
import pytest
from camera_ring import CAMERAS, FoundPose, find_pose, true_poses, views
from scipy.spatial.transform import Rotation
from scipy.stats import chi2
from skewline.calib import CalibrationError, Camera, shared_views
from skewline.calib.camera_poses import CameraPoses
from skewline.calib.from_many import poses_from_many, poses_from_matches
from skewline.calib.matches import Features, Matches, find_features, find_matches

THREE = dict(list(CAMERAS.items())[:3])
CHAIN = [(0, 1), (1, 2)]
TRIANGLE = [(0, 1), (0, 2), (1, 2)]
KNOWN = {("front", "side"): float(np.linalg.norm(true_poses(2).t[1]))}
EXACT = {("front", "side"): 1e-9}


def error(found: CameraPoses) -> np.ndarray:
    """The small turns after R and changes of t from the found poses to the true ones."""
    true = true_poses(len(found.names))
    turns = Rotation.from_matrix(true.R[1:] @ found.R[1:].transpose(0, 2, 1)).as_rotvec()
    return np.concatenate([turns, true.t[1:] - found.t[1:]], axis=1).ravel()


def test_a_chain_of_three_cameras_comes_out_exactly_with_one_known_baseline() -> None:
    seen = views(3, 400, np.random.default_rng(1))

    found = poses_from_matches(THREE, seen.all_matches(CHAIN), find_pose=find_pose, known=KNOWN, known_sigma_m=EXACT)

    assert found.scale_known
    np.testing.assert_allclose(error(found), 0, atol=1e-7)
    assert [(edge.first, edge.other) for edge in found.edges] == [("front", "side"), ("side", "far")]


def test_a_graph_of_four_cameras_comes_out_exactly_up_to_its_size_where_no_baseline_is_known() -> None:
    seen = views(4, 500, np.random.default_rng(2))

    found = poses_from_matches(CAMERAS, seen.all_matches([(0, 1), (2, 1), (1, 3), (0, 3)]), find_pose=find_pose)

    assert not found.scale_known
    assert np.linalg.norm(found.t) == pytest.approx(1.0)
    true = true_poses(4)
    np.testing.assert_allclose(found.R, true.R, atol=1e-7)
    np.testing.assert_allclose(found.t, true.t / np.linalg.norm(true.t), atol=1e-7)


def test_the_true_poses_lie_within_the_stated_95_percent_region_in_nearly_95_percent_of_60_trials() -> None:
    rng = np.random.default_rng(3)
    inside = 0
    for _ in range(60):
        sigma_m = 0.002
        measured = {pair: length + rng.normal(0, sigma_m) for pair, length in KNOWN.items()}
        found = poses_from_matches(
            THREE,
            views(3, 100, rng, noise_px=0.5).all_matches(CHAIN),
            find_pose=find_pose,
            known=measured,
            known_sigma_m=dict.fromkeys(KNOWN, sigma_m),
        )
        step = error(found)
        inside += step @ np.linalg.solve(found.covariance, step) < chi2.ppf(0.95, 12)
    # Of a binomial of 60 trials of 0.95, fewer than 51 are seen once in a thousand times.
    assert 51 <= inside <= 60


def test_the_noise_of_every_edge_is_told() -> None:
    seen = views(3, 600, np.random.default_rng(4), noise_px=0.4)

    found = poses_from_matches(THREE, seen.all_matches(TRIANGLE), find_pose=find_pose)

    assert len(found.edges) == 3
    for edge in found.edges:
        assert edge.noise_px == pytest.approx(0.4, rel=0.2)


def test_wrong_matches_of_one_pair_that_agree_with_one_another_are_left_out_with_a_remark() -> None:
    rng = np.random.default_rng(5)
    matches = views(3, 400, rng).all_matches(TRIANGLE)
    wrong = matches["front", "far"].chosen(np.arange(100))
    # Turned half about the principal point, the picture of the other camera gives a pose, and a wrong one.
    turned = THREE["far"].K[:2, 2] * 2 - wrong.pixels_b
    matches["front", "far"] = Matches(
        pixels_a=wrong.pixels_a, pixels_b=turned, pair=wrong.pair, labels=wrong.labels, picked=wrong.picked
    )

    found = poses_from_matches(THREE, matches, find_pose=find_pose, known=KNOWN, known_sigma_m=EXACT)

    np.testing.assert_allclose(error(found), 0, atol=1e-7)
    assert any("'front' and 'far' contradict the poses" in remark for remark in found.remarks)


def test_right_matches_of_a_pair_whose_own_pose_is_wrong_still_count() -> None:
    matches = views(3, 400, np.random.default_rng(10)).all_matches(TRIANGLE)
    matches["front", "far"] = matches["front", "far"].chosen(np.arange(100))

    def mistaken(a: Camera, b: Camera, some: Matches) -> FoundPose:
        found = find_pose(a, b, some)
        return found if len(some) > 100 else FoundPose(R=found.R.T, t=found.t, inliers=found.inliers)

    found = poses_from_matches(THREE, matches, find_pose=mistaken, known=KNOWN, known_sigma_m=EXACT)

    np.testing.assert_allclose(error(found), 0, atol=1e-7)
    assert len(found.edges) == 3
    assert found.remarks == ()


def test_cameras_that_are_not_connected_are_refused_naming_the_parts() -> None:
    matches = views(4, 400, np.random.default_rng(6)).all_matches([(0, 1), (2, 3)])
    with pytest.raises(CalibrationError, match=r"fall into 2 parts .*: 'front', 'side' / 'far', 'top'; expected"):
        poses_from_matches(CAMERAS, matches, find_pose=find_pose)


def test_a_chain_without_points_that_all_three_see_is_refused_with_the_count() -> None:
    seen = views(3, 600, np.random.default_rng(7))
    matches = {
        ("front", "side"): seen.matches(0, 1, slice(0, 310)),
        ("side", "far"): seen.matches(1, 2, slice(300, 600)),
    }
    with pytest.raises(
        CalibrationError, match=r"^\d points seen by three cameras tell the baseline .*expected 20 or more"
    ):
        poses_from_matches(THREE, matches, find_pose=find_pose)


def test_points_that_disagree_on_the_ratio_of_two_baselines_are_refused_with_the_spread() -> None:
    rng = np.random.default_rng(8)
    seen = views(3, 600, rng)
    chain = seen.all_matches(CHAIN)
    # Each pair by itself is right; what they share is shuffled along the pixels of the camera in the middle.
    second = chain["side", "far"]
    other = views(3, 600, rng).matches(1, 2)
    count = min(len(second), len(other), 200)
    both = np.random.default_rng(0)

    def lying(a: Camera, b: Camera, matches: Matches) -> FoundPose:
        found = find_pose(a, b, matches)
        found.inliers[:] = True
        return found

    mixed = Matches(
        pixels_a=np.concatenate([second.pixels_a[:count], other.pixels_a]),
        pixels_b=np.concatenate([both.permutation(second.pixels_b[:count]), other.pixels_b]),
        pair=np.zeros(count + len(other), dtype=int),
        labels=("",) * (count + len(other)),
        picked=np.zeros(count + len(other), dtype=bool),
    )
    with pytest.raises(CalibrationError, match=r"points seen by three cameras disagree on .* spread by \d+ %"):
        poses_from_matches(THREE, {("front", "side"): chain["front", "side"], ("side", "far"): mixed}, find_pose=lying)


def test_baselines_that_contradict_are_refused_with_both_lengths() -> None:
    seen = views(3, 300, np.random.default_rng(9), noise_px=0.3)
    true = true_poses(3)
    known = {**KNOWN, ("front", "far"): 1.1 * float(np.linalg.norm(true.t[2]))}
    with pytest.raises(
        CalibrationError, match=r"contradict .*'front' to 'side' 252\.6 mm .*'front' to 'far' 563\.6 mm"
    ):
        poses_from_matches(THREE, seen.all_matches(TRIANGLE), find_pose=find_pose, known=known)


@pytest.mark.parametrize(
    ("known", "words"),
    [
        (
            {("front", "front"): 0.2},
            r"a known baseline is of \('front', 'front'\); expected the names of two different",
        ),
        ({("front", "back"): 0.2}, r"a known baseline is of \('front', 'back'\)"),
        ({("front", "side"): -0.2}, r"length of a known baseline is -0\.2 m; expected a positive"),
        ({("front", "side"): float("nan")}, r"length of a known baseline is nan"),
    ],
)
def test_impossible_known_baselines_are_refused(known: dict[tuple[str, str], float], words: str) -> None:
    with pytest.raises(CalibrationError, match=words):
        poses_from_matches(THREE, {}, find_pose=find_pose, known=known)


def test_pictures_of_unknown_cameras_of_other_sizes_or_none_are_refused() -> None:
    pictures = {name: np.zeros((camera.height, camera.width), np.uint8) for name, camera in THREE.items()}
    for sets, words in (
        ([{**pictures, "back": pictures["side"]}], "set 0 holds a picture of camera 'back'"),
        ([pictures, {"side": pictures["front"]}], "camera 'side' in set 1 is 1280x960; expected 1000x800"),
        ([{"front": pictures["front"], "side": pictures["side"]}], "no set holds a picture of camera 'far'"),
    ):
        with pytest.raises(CalibrationError, match=words):
            poses_from_many(THREE, sets, find_pose=find_pose)
    with pytest.raises(CalibrationError, match="2 cameras; expected 3 to 8"):
        poses_from_many(dict(list(CAMERAS.items())[:2]), [], find_pose=find_pose)


def test_cameras_whose_pictures_show_nothing_are_refused_with_the_reason() -> None:
    pictures = {name: np.zeros((camera.height, camera.width), np.uint8) for name, camera in THREE.items()}
    with pytest.raises(
        CalibrationError,
        match=r"fall into 3 parts .*share no view that gives a pose: set 0: image of camera 'front' shows 0 features",
    ):
        poses_from_many(THREE, [pictures], find_pose=find_pose)


def test_the_features_of_a_picture_are_found_once_for_all_its_partners_and_match_as_two_pictures_alone(
    monkeypatch: pytest.MonkeyPatch,
) -> None:
    rng = np.random.default_rng(12)
    image = cv2.GaussianBlur(rng.integers(0, 255, (240, 320), dtype=np.uint8), (0, 0), 2)
    pictures = {0: image, 1: image[:, 20:].copy(), 2: image[15:].copy()}
    looked_at: list[str] = []

    def counted(picture: np.ndarray, camera: str) -> Features:
        looked_at.append(camera)
        return find_features(picture, camera)

    monkeypatch.setattr(shared_views, "find_features", counted)

    matches, reasons = shared_views.match_pairs("abc", [pictures, {0: image}], lambda *_: None)

    assert looked_at == ["'a'", "'b'", "'c'", "'a'"]
    assert reasons == {}
    for (a, b), found in matches.items():
        alone = find_matches(pictures[a], pictures[b])
        assert len(found) > 100
        np.testing.assert_array_equal(found.pixels_a, alone.pixels_a)
        np.testing.assert_array_equal(found.pixels_b, alone.pixels_b)
