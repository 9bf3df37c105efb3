"""Joining matches into tracks, and from which end the pairs of a graph are matched."""

from __future__ import annotations

import cv2
import numpy as np
import pytest
from camera_ring import CAMERAS, views
from skewline.calib.camera_graph import stars
from skewline.calib.matches import Matches, find_matches
from skewline.calib.tracks import join_matches, sightings_of

LENSES = tuple(CAMERAS.values())


def pair_matches(pixels_a: list[tuple[float, float]], pixels_b: list[tuple[float, float]], sets: list[int]) -> Matches:
    count = len(sets)
    return Matches(
        pixels_a=pixels_a, pixels_b=pixels_b, pair=sets, labels=("",) * count, picked=np.zeros(count, dtype=bool)
    )


def test_matches_of_pairs_join_to_the_points_that_they_were_made_of() -> None:
    seen = views(4, 300, np.random.default_rng(1))
    tracks = join_matches(LENSES, {pair: seen.matches(*pair) for pair in ((0, 1), (1, 2), (1, 3), (0, 3))})

    def rows(pixels: np.ndarray) -> np.ndarray:
        flat = pixels.reshape(len(pixels), -1)
        return flat[np.lexsort(flat.T)]

    by_two = np.isfinite(seen.pixels[:, :, 0])
    joined = by_two.copy()
    joined[:, 2] &= by_two[:, 1]  # the third camera is matched with the second alone
    expected = np.where(joined[:, :, None], seen.pixels, np.nan)[joined.sum(axis=1) > 1]
    np.testing.assert_array_equal(rows(tracks.pixels), rows(expected))
    groups = sightings_of(LENSES, tracks, "features")
    assert sum(len(group.pixels) for group in groups) == len(expected)
    assert {group.cameras for group in groups} >= {(0, 1, 2), (0, 1, 2, 3)}


def test_one_pixel_in_two_sets_is_two_points_and_a_point_in_two_places_of_one_camera_is_none() -> None:
    matches = {
        (0, 1): pair_matches([(100, 100), (100, 100), (300, 200)], [(110, 100), (120, 100), (310, 200)], [0, 1, 0]),
        (1, 2): pair_matches([(110, 100), (310, 200)], [(400, 410), (450, 460)], [0, 0]),
        (0, 2): pair_matches([(300, 200)], [(350, 460)], [0]),
    }
    tracks = join_matches(LENSES, matches)

    assert sorted(zip(tracks.sets.tolist(), tracks.seen.sum(axis=1).tolist(), strict=True)) == [(0, 3), (1, 2)]


def test_the_places_of_one_picture_are_the_same_in_every_pairing() -> None:
    rng = np.random.default_rng(2)
    scene = cv2.GaussianBlur(rng.uniform(0, 255, (360, 480)).astype(np.float32), (0, 0), 2.0)
    scene = cv2.normalize(scene, None, 0, 255, cv2.NORM_MINMAX).astype(np.uint8)
    first, middle, last = scene[:, :400], scene[10:350, 40:440], scene[:, 80:]

    one, other = find_matches(first, middle), find_matches(middle, last)

    of_one, of_other = ({tuple(pixel) for pixel in some.tolist()} for some in (one.pixels_b, other.pixels_a))
    assert len(of_one & of_other) > 0.5 * min(len(of_one), len(of_other)) > 100


@pytest.mark.parametrize(
    ("pairs", "expected"),
    [
        ([(0, 1), (0, 2), (1, 2)], {(0, 1), (0, 2), (1, 2)}),
        ([(0, 1), (1, 2)], {(1, 0), (1, 2)}),
        # In a chain of four the last pair shares one camera with the star before: it needs a pair matched both ways.
        ([(0, 1), (1, 2), (2, 3)], {(1, 0), (1, 2), (2, 3), (2, 1)}),
        ([(0, 1), (0, 2), (0, 3)], {(0, 1), (0, 2), (0, 3)}),
    ],
)
def test_the_hub_of_a_pair_is_the_camera_with_more_pairs_and_stars_overlap_by_two(
    pairs: list[tuple[int, int]], expected: set[tuple[int, int]]
) -> None:
    chosen = stars(1 + max(map(max, pairs)), dict.fromkeys(pairs, 100))
    assert len(chosen) == len(set(chosen))
    assert set(chosen) == expected
