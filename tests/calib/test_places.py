"""Matching at thousands of places by a rough pose: where the views put points, and how near the matches are."""

from __future__ import annotations

import numpy as np
import pytest
from motorcycle import Scene, commonly_seen, reimaged
from scipy.spatial import cKDTree
from skewline.calib import CalibrationError
from skewline.calib.aligned import Aligned, align, facing_rotation
from skewline.calib.epipolar import rig_epipolar_distances_px
from skewline.calib.places import Tracked, choose_places, normalised, track_places


@pytest.fixture(scope="module")
def scene() -> Scene:
    return reimaged(16.0)


def true_pixels(scene: Scene) -> tuple[np.ndarray, np.ndarray, np.ndarray]:
    """Pixels in both pictures and inverse depths along A's rays, in baselines, of every tenth common point."""
    points = scene.points_a[commonly_seen(scene)][::10]
    in_b = scene.rig.b.project(points @ scene.rig.R.T + scene.rig.t)
    return scene.rig.a.project(points), in_b, scene.rig.baseline_m / np.linalg.norm(points, axis=1)


@pytest.fixture(scope="module")
def aligned(scene: Scene) -> Aligned:
    in_a, in_b, inverse = true_pixels(scene)
    return align(scene.rig.a, scene.rig.b, scene.rig.R, scene.rig.t / scene.rig.baseline_m, (in_a, in_b), inverse)


def test_partners_lie_on_one_row_of_the_aligned_views_within_the_range_of_disparities(
    scene: Scene, aligned: Aligned
) -> None:
    in_a, in_b, _ = true_pixels(scene)
    at_a, at_b = aligned.a.from_camera(in_a), aligned.b.from_camera(in_b)
    np.testing.assert_allclose(at_a[:, 1], at_b[:, 1], atol=1e-6)
    first, count = aligned.disparities
    disparity = at_a[:, 0] - at_b[:, 0]
    assert ((disparity > first) & (disparity < first + count)).mean() > 0.99
    np.testing.assert_allclose(aligned.a.to_camera(at_a), in_a, atol=1e-6)


def test_views_of_cameras_that_look_along_their_baseline_are_refused() -> None:
    with pytest.raises(CalibrationError, match="look along the line that joins them"):
        facing_rotation(np.eye(3), np.array([0.05, 0.0, -1.0]))


def test_normalising_takes_away_gain_and_brightness(scene: Scene) -> None:
    grey = scene.image_a[..., 1].astype(np.float32)
    everywhere = np.ones(grey.shape, dtype=bool)
    one = normalised(grey, everywhere).astype(int)
    other = normalised(grey * np.float32(0.5) + np.float32(60), everywhere).astype(int)
    textured = normalised(grey, everywhere).std() > 10
    assert textured
    assert np.abs(one - other).mean() < 2


def errors_px(scene: Scene, tracked: Tracked) -> np.ndarray:
    """Distance of each tracked place from where it truly lies in B, by the depth of the nearest true point."""
    points = scene.points_a[commonly_seen(scene)]
    away, nearest = cKDTree(scene.rig.a.project(points)).query(tracked.pixels_a)
    near = away < 0.7
    rays = scene.rig.a.rays(tracked.pixels_a[near])
    places = rays / rays[:, 2:] * points[nearest[near], 2:]
    truly = scene.rig.b.project(places @ scene.rig.R.T + scene.rig.t)
    return np.linalg.norm(truly - tracked.pixels_b[near], axis=1)


def test_places_are_found_where_they_truly_are(scene: Scene, aligned: Aligned) -> None:
    """Truth: Scharstein et al., GCPR 2014; the pair's own rows are off by some hundredths of a pixel."""
    places = choose_places(scene.image_a)
    tracked = track_places(aligned, scene.image_a, scene.image_b, places)
    assert len(tracked.ids) > 900
    np.testing.assert_array_equal(tracked.pixels_a, places[tracked.ids])
    errors = errors_px(scene, tracked)
    assert len(errors) > 400
    assert np.median(errors) < 0.25
    assert (errors < 1).mean() > 0.85  # the others sit on the edges of things, before the one surface or the other
    across = rig_epipolar_distances_px(scene.rig, tracked.pixels_a, tracked.pixels_b)
    assert np.median(across) < 0.1
    assert np.percentile(across, 95) < 0.8


def test_sixteen_bit_pictures_give_the_same_places_as_eight_bit_ones(scene: Scene, aligned: Aligned) -> None:
    places = choose_places(scene.image_a)
    eight = track_places(aligned, scene.image_a, scene.image_b, places)
    deep_a, deep_b = (image.astype(np.uint16) * 16 for image in (scene.image_a, scene.image_b))
    deep = track_places(aligned, deep_a, deep_b, places)
    common, at_eight, at_deep = np.intersect1d(eight.ids, deep.ids, return_indices=True)
    assert len(common) > 0.85 * len(eight.ids)
    apart = np.linalg.norm(eight.pixels_b[at_eight] - deep.pixels_b[at_deep], axis=1)
    assert np.median(apart) < 0.03


def test_a_picture_without_texture_has_no_places() -> None:
    assert choose_places(np.full((200, 300), 128, np.uint8)).shape == (0, 2)
